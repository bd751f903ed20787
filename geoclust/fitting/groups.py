"""Groups of plots compared: a fit of each, and the differences of their parameters."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations
from typing import Any

import numpy as np
import pandas as pd

from geoclust.area.plots import pool_surveys
from geoclust.area.survey import Survey
from geoclust.errors import UsageError, not_allowed
from geoclust.fitting.fit import fit_clusters
from geoclust.fitting.result import ClusterFit

# pairs of draws that the interval of a difference is taken from
PAIRS = 20_000


@dataclass(frozen=True, eq=False)
class GroupComparison:
    """Fits of several groups of plots, and how they differ.

    Attributes
    ----------
    fits
        A fit by name of the group.
    differences
        One row a pair of groups and parameter: `parameter`, `unit`, `group`, `other`, `ratio` of the
        first to the second and its 95 % interval (`ratio_low`, `ratio_high`), `difference` (first
        minus second, SI units) and its interval (`difference_low`, `difference_high`).
    """

    fits: dict[str, ClusterFit]
    differences: pd.DataFrame

    def lines(self) -> list[str]:
        """The comparison in a few lines of text."""
        out = []
        for row in self.differences.to_dict("records"):
            apart = row["ratio_low"] > 1 or row["ratio_high"] < 1
            out.append(
                f"{row['parameter'].replace('_', ' ')}, {row['group']} over {row['other']}: "
                f"{row['ratio']:.3g} (95 %: {row['ratio_low']:.3g} to {row['ratio_high']:.3g})"
                + ("" if apart else ", no difference that the data can tell")
            )
        return out


def compare_groups(
    groups: Mapping[str, Sequence[Survey]],
    model: str = "thomas",
    *,
    rng: np.random.Generator | int,
    **choices: Any,
) -> GroupComparison:
    """Fit each group of plots by itself, and compare their parameters.

    Plots of a group are pooled with common parameters (`pool_surveys`). The groups are independent of
    each other, so draws of one paired at random with draws of the other, from the posterior or the
    bootstrap, give the distribution of ratio and difference.

    Parameters
    ----------
    groups
        Surveys by name of the group; at least two groups.
    model
        Name of the cluster model, the same for all.
    rng
        Generator or seed.
    choices
        Further arguments of `fit_clusters`.

    Returns
    -------
    GroupComparison
        Without differences for a group whose data cannot tell.

    Raises
    ------
    UsageError
        If there are fewer than two groups, or an argument is not allowed.
    CannotTell
        If a group has too few points for any fit.
    """
    if len(groups) < 2:
        raise UsageError("There is only one group, and nothing to compare it with; pool its plots instead.")
    if choices.get("intensity") is not None:
        raise not_allowed("intensity", "left out: plots side by side have no place for it", "one")
    fit_seed, pair_seed = np.random.default_rng(rng).spawn(2)
    fits = {
        name: fit_clusters(pool_surveys(surveys), model, rng=seed, **choices)
        for (name, surveys), seed in zip(groups.items(), fit_seed.spawn(len(groups)), strict=True)
    }
    rows = []
    for first, second in combinations(fits, 2):
        a, b = fits[first], fits[second]
        if not (a.ok and b.ok and a.draws and b.draws):
            continue
        for p in a.model.described:
            x, y = pair_seed.choice(a.draws[p.name], PAIRS), pair_seed.choice(b.draws[p.name], PAIRS)
            ratio, apart = np.quantile(x / y, [0.025, 0.5, 0.975]), np.quantile(x - y, [0.025, 0.5, 0.975])
            rows.append(
                {
                    "parameter": p.name, "unit": p.unit, "group": first, "other": second,
                    "ratio": ratio[1], "ratio_low": ratio[0], "ratio_high": ratio[2],
                    "difference": apart[1], "difference_low": apart[0], "difference_high": apart[2],
                }
            )  # fmt: skip
    columns = ["parameter", "unit", "group", "other", "ratio", "ratio_low", "ratio_high", "difference",
               "difference_low", "difference_high"]  # fmt: skip
    return GroupComparison(fits, pd.DataFrame(rows, columns=columns))
