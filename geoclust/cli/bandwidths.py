"""The bandwidth of g: as given, by rule, or by cross-validation."""

from __future__ import annotations

from typing import TYPE_CHECKING

from geoclust.cli.talk import Talk

if TYPE_CHECKING:
    from geoclust.area.survey import Survey


def chosen_bandwidth(
    given: float | str | None, survey: Survey, r_max: float, workers: int | None, talk: Talk
) -> float | None:
    """Metres, or None for the rule; what cross-validation chose is told."""
    if not isinstance(given, str):
        return given
    from geoclust.curves.bandwidth import BY_CROSS_VALIDATION, cross_validated_bandwidth

    found = cross_validated_bandwidth(survey, r_max, workers=workers)
    edge = ", the end of the range that was tried" if found.on_the_edge else ""
    talk.say(f"bandwidth of g: {found.bandwidth:.4g} m by {BY_CROSS_VALIDATION}{edge}")
    return found.bandwidth
