"""The part of the page on covariates: what they explain, and what is left."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from geoclust.report import words
from geoclust.report.tables import Table

if TYPE_CHECKING:
    from collections.abc import Mapping

    from geoclust.curves.envelopes import EnvelopeTest
    from geoclust.intensity.loglinear import LogLinearIntensity


def effect_table(intensity: LogLinearIntensity) -> Table:
    """Effect of each covariate, with both kinds of intervals."""
    rows: list[tuple[str, ...]] = []
    clustered, naive = intensity.intervals(errors="clustered"), intensity.intervals(errors="naive")
    for name, value in intensity.coefficients.items():
        if name == "intercept":
            continue
        rows.append(
            (
                name,
                words.number(float(np.exp(value))),
                _between(clustered[name]),
                _between(naive[name]),
                f"{value:.4g}",
                f"{intensity.standard_errors['clustered'][name]:.3g}",
            )
        )
    header = (
        "covariate", "one unit more multiplies the points per hectare by", "95 %, clusters allowed for",
        "95 %, if points were independent", "coefficient", "standard error",
    )  # fmt: skip
    return Table(header, rows, frozenset(range(1, 6)))


def reading(envelopes: Mapping[str, EnvelopeTest]) -> str:
    """What the test beyond the covariates says, in a sentence."""
    test = envelopes["L"]
    level = f"p = **{words.probability(test.p_value)}**, {test.simulations:,} patterns of the intensity alone"
    if test.p_value > 1 - test.level:
        return (
            "The covariates explain the pattern: beyond them the points are neither more clustered nor more "
            f"regular than chance makes them ({level})."
        )
    sides = {side for _, _, side in test.departures()}
    what = "clustered" if sides == {"above"} else "regular" if sides == {"below"} else "structured"
    return f"Beyond the covariates the points are still more {what} than chance makes them ({level})."


def _between(limits: tuple[float, float]) -> str:
    low, high = np.exp(limits)
    return f"{words.number(float(low))} to {words.number(float(high))}"
