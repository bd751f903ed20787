"""The part of the page on whether the fitted model reproduces the survey."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.figure import Figure

from geoclust.report import canvas, words
from geoclust.report.method import Step

if TYPE_CHECKING:
    from geoclust.fitting.assessment import Assessment

QUESTION = "Does the model fit?"
_AXIS = {
    "G": "points with a neighbour within r (%)",
    "F": "places with a point within r (%)",
    "J": "J(r)",
}
STEP = Step(
    "Assessment of the fit",
    "The survey's nearest-neighbour function, which the fit has not seen, is ranked among those of patterns "
    "drawn from the fit, by extreme rank length. As a fitted model resembles its own survey too much, other "
    "patterns of the fit are fitted again by minimum contrast, and each is ranked among patterns of its own "
    "fit: the p-value is the rank of the survey's result among theirs. The envelope is widened or narrowed "
    "to agree with it.",
    (),
    "Baddeley et al. 2017; Myllymäki et al. 2017",
)


def figure(found: Assessment) -> Figure:
    """The first function that was tested, in its envelope."""
    curve = found.curve
    factor = 1.0 if curve.function == "J" else 100.0
    with canvas.look():
        drawn = Figure(figsize=(5.2, 3.6), layout="constrained", facecolor="white")
        ax = drawn.add_subplot()
        if curve.lower is not None and curve.upper is not None:
            ax.fill_between(
                curve.radii, factor * curve.lower, factor * curve.upper, color=canvas.BAND, lw=0,
                label="range of the fitted model",
            )  # fmt: skip
        ax.plot(
            curve.radii, factor * curve.theory, color=canvas.INK, lw=0.9, ls=(0, (4, 3)),
            label="expected at random",
        )  # fmt: skip
        ax.plot(curve.radii, factor * curve.values, color=canvas.CLUSTER, lw=1.6, label="survey")
        ax.set_xlabel("distance r (m)")
        ax.set_ylabel(_AXIS[curve.function])
        known = np.isfinite(curve.values)
        ax.set_xlim(0, float(curve.radii[known][-1]) if known.any() else float(curve.radii[-1]))
        ax.legend(loc="lower right", handlelength=1.6)
        return drawn


def texts(found: Assessment) -> tuple[str, str]:
    """Text in place of the figure, and what stands below it."""
    function = found.curve.function
    alt = f"Curve {function} of the survey in the envelope of the fitted model, p = {found.p_value:.3g}."
    inside = (
        "as it does here everywhere"
        if found.reproduced
        else "where it leaves the band, the survey differs from the model"
    )
    return alt, (
        "Does the model fit: the line should stay in the grey band of patterns drawn from the fitted model, "
        f"{inside}. The model was not fitted on this curve."
    )


def rows(found: Assessment) -> list[tuple[str, str]]:
    """Lines for the specialist."""
    how = (
        f"two stages, {found.simulations:,} refits, {found.first_stage} patterns about each"
        if found.two_stage
        else f"one stage of {found.simulations:,} patterns, conservative"
    )
    return [
        (
            f"fit reproduces {', '.join(found.curves)}",
            f"p = {words.probability(found.p_value)}; {how}; fitted for this by {found.fitted_by}",
        )
    ]
