"""Groups of plots compared, as text and as a record."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from geoclust.area.plots import pool_surveys
from geoclust.report.record import SCHEMA_VERSION, fit_record, plain
from geoclust.report.tables import text_lines

if TYPE_CHECKING:
    from geoclust.area.survey import Survey
    from geoclust.fitting.groups import GroupComparison


def group_record(found: GroupComparison, seed: int, choices: Mapping[str, object]) -> dict[str, Any]:
    """Fits and differences in types that JSON knows: each group as in fit.json, then the differences."""
    return {
        "schema": SCHEMA_VERSION,
        "groups": {
            name: fit_record(
                status=fit.status, reason=fit.reason, fit=fit, envelopes=None, centres=None, audit=None,
                choices=choices, seed=seed,
            )
            for name, fit in found.fits.items()
        },
        "differences": plain(found.differences.to_dict("records")),
    }  # fmt: skip


def group_lines(found: GroupComparison, groups: Mapping[str, Sequence[Survey]]) -> list[str]:
    """The parameters of each group, then their ratios."""
    out: list[str] = []
    for name, fit in found.fits.items():
        pooled = pool_surveys(groups[name])
        plots = len(groups[name])
        out.append(f"{name}: {plots} plot{'s' if plots > 1 else ''}, {pooled.n:,} points")
        if fit.ok:
            out += [f"  {line}" for line in text_lines(fit, pooled)]
        else:
            out.append(f"  cannot tell ({fit.status}): {fit.reason}")
    return [*out, *found.lines()]
