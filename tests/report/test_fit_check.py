"""What the page says about whether the fitted model reproduces the survey."""

from __future__ import annotations

import numpy as np
import pytest

from geoclust.curves.curve import Curve
from geoclust.fitting.assessment import Assessment
from geoclust.models.thomas import Thomas
from geoclust.report import fit_check
from geoclust.report.method import references


def found(p_value: float, function: str = "G", two_stage: bool = True) -> Assessment:
    """A curve that leaves its envelope below from 2 m on up to 3 m."""
    radii = np.arange(1.0, 6.0)
    curve = Curve(
        function, radii, np.array([0.1, 0.2, 0.3, 0.7, np.nan]), np.full(5, 0.5), "1", "kaplan-meier",
        lower=np.array([0.0, 0.3, 0.5, 0.6, np.nan]), upper=np.array([0.2, 0.5, 0.7, 0.8, np.nan]),
    )  # fmt: skip
    return Assessment(
        p_value, {function: curve}, "extreme-rank-length", two_stage, 99, 39, np.full(100, p_value),
        Thomas(1e-4, 10.0, 5.0), "minimum contrast on g, 1 to 50 m",
    )  # fmt: skip


def test_sentences_for_managers():
    assert found(0.34).sentence() == (
        "The fitted model reproduces the distances from points to the next point (p = 0.34)."
    )
    assert found(0.02).sentence() == (
        "The fitted model does not reproduce the distances from points to the next point (p = 0.02): "
        "there are fewer points with a neighbour within 2 to 3 m than expected."
    )
    assert "fewer places with a point within 2 to 3 m" in found(0.02, "F").sentence()
    assert "fewer isolated points than expected at 2 to 3 m" in found(0.02, "J").sentence()
    assert "on the safe side for the model" in found(0.3, two_stage=False).sentence()


@pytest.mark.parametrize("function", ["G", "F", "J"])
def test_figure_shows_the_survey_in_its_envelope(function):
    drawn = fit_check.figure(found(0.02, function))
    (axes,) = drawn.axes
    labels = axes.get_legend_handles_labels()[1]
    assert labels == ["range of the fitted model", "expected at random", "survey"]
    # where nothing is known, the picture ends; shares in per cent, J as it is
    assert axes.get_xlim() == (0, 4)
    survey = axes.lines[-1].get_ydata()
    np.testing.assert_allclose(survey[:2], np.array([0.1, 0.2]) * (1 if function == "J" else 100))


def test_texts_tell_the_finding():
    alt, below = fit_check.texts(found(0.02))
    assert "p = 0.02" in alt
    assert "where it leaves the band" in below
    assert "as it does here everywhere" in fit_check.texts(found(0.5))[1]
    ((name, how),) = fit_check.rows(found(0.5))
    assert name == "fit reproduces G"
    assert "two stages, 99 refits, 39 patterns about each" in how
    assert "conservative" in fit_check.rows(found(0.5, two_stage=False))[0][1]


def test_the_step_has_its_references():
    cited = " ".join(references([fit_check.STEP]))
    assert "two-stage Monte Carlo tests" in cited
    assert "Global envelope tests" in cited
