"""The nested Thomas process: published forms, simulation against g and K, counts in large quadrats."""

from __future__ import annotations

import doctest

import numpy as np
import pytest
import shapely
from known_areas import sample_reserve
from scipy import stats
from scipy.special import erf

from geoclust.area.study_area import StudyArea
from geoclust.curves.second_order import SecondOrder
from geoclust.errors import UsageError
from geoclust.fitting.contrast import Contrast
from geoclust.models import nested_thomas
from geoclust.models.nested_thomas import NestedThomas
from geoclust.models.patterns import draw_pattern
from geoclust.workers import in_order

MODEL = NestedThomas(
    outer_intensity=1.5e-4, outer_sigma=32.0, inner_intensity=6e-4, inner_sigma=8.0, mean_offspring=3.0
)
PATTERNS = 300


@pytest.fixture(scope="module")
def reserve() -> StudyArea:
    """The sample reserve at half its size, so that boundary and clusters are alike in scale."""
    whole = StudyArea(sample_reserve())
    return StudyArea(shapely.transform(whole.polygon, lambda at: 0.5 * (at - whole.origin)))


@pytest.fixture(scope="module")
def patterns(reserve):
    return [draw_pattern(MODEL, reserve, seed) for seed in np.random.default_rng(1996).spawn(PATTERNS)]


def test_published_forms():
    """g = 1 + N(r; 2 s2²)/rho2 + N(r; 2 s1² + 2 s2²)/rho1 (Stoyan & Stoyan 1996).

    N(r; v) = exp(-r²/2v)/2 pi v. K by adding the two Gaussian integrals, each 1 - exp(-r²/2v).
    """
    for r in (0.0, 5.0, 16.0, 70.0):
        variances = (2 * 8.0**2, 2 * 32.0**2 + 2 * 8.0**2)
        g, k = 1.0, np.pi * r**2
        for v, rho in zip(variances, (6e-4, 1.5e-4), strict=True):
            g += np.exp(-(r**2) / (2 * v)) / (2 * np.pi * v) / rho
            k += (1 - np.exp(-(r**2) / (2 * v))) / rho
        assert MODEL.pair_correlation(r) == pytest.approx(g, rel=1e-12)
        assert MODEL.k_function(r) == pytest.approx(k, rel=1e-12)
    assert MODEL.inner_per_outer == 4.0
    assert MODEL.intensity == pytest.approx(18e-4)
    assert doctest.testmod(nested_thomas).failed == 0


@pytest.mark.parametrize("outer", [8.0, 3.0])
def test_the_outer_sigma_is_the_larger_one(outer):
    with pytest.raises(UsageError, match="outer_sigma must be above inner_sigma"):
        NestedThomas(1e-4, outer, 4e-4, 8.0, 3.0)


def test_mean_curves_of_simulations_in_the_ragged_reserve(reserve, patterns):
    """Mean of 300 estimates of g and K with the true intensity, which have no bias at any radius.

    Student's t at 0.27 % over all comparisons together (Bonferroni), as for the Thomas process.
    """
    radii = np.array([3.0, 8.0, 14.0, 22.0, 35.0, 50.0, 75.0])
    width = 3.0
    drawn = np.empty((PATTERNS, 2, len(radii)))

    def one(pattern):
        found = SecondOrder.of_points(pattern.points, reserve, radii, width, workers=1)
        n = len(pattern.points)
        back = n * (n - 1) / (reserve.area * MODEL.intensity) ** 2
        return np.array([found.g_values(), found.k_values()]) * back

    for k, curves in enumerate(in_order(one, patterns)):
        drawn[k] = curves
    expected = np.array(
        [Contrast("g", radii, radii, 1.0, bandwidth=width).curve_of(MODEL), MODEL.k_function(radii)]
    )
    error = drawn.std(axis=0, ddof=1) / np.sqrt(PATTERNS)
    limit = stats.t.isf(0.0027 / 2 / drawn[0].size, PATTERNS - 1)
    assert np.max(np.abs(drawn.mean(axis=0) - expected) / error) < limit
    # the check has teeth: either sigma 15 % off fails, and so does another number of inner centres
    for wrong in (
        NestedThomas(1.5e-4, 36.8, 6e-4, 8.0, 3.0),
        NestedThomas(1.5e-4, 32.0, 6e-4, 9.2, 3.0),
        NestedThomas(1.5e-4, 32.0, 4e-4, 8.0, 4.5),
    ):
        curve = Contrast("g", radii, radii, 1.0, bandwidth=width).curve_of(wrong)
        assert np.max(np.abs(drawn[:, 0].mean(axis=0) - curve) / error[0]) > limit


def test_numbers_of_points_and_centres(reserve, patterns):
    """Means are intensity times area, within three standard errors; nothing is missed from outside."""
    points = np.array([len(p.points) for p in patterns])
    inside = np.array([reserve.local_contains(p.centres).sum() for p in patterns])
    for counts, intensity in ((points, MODEL.intensity), (inside, MODEL.inner_intensity)):
        error = counts.std(ddof=1) / np.sqrt(PATTERNS)
        assert counts.mean() == pytest.approx(intensity * reserve.area, abs=3 * error)
        # far more variable than a Poisson process
        assert counts.var(ddof=1) > 2 * counts.mean()
    for pattern in patterns[:20]:
        apart = np.hypot(*(pattern.points - pattern.centres[pattern.cluster]).T)
        assert apart.max() < 6 * MODEL.inner_sigma


def test_counts_in_large_quadrats():
    """Variance over mean of counts tends to 1 + mu + mu n, with n inner centres round each outer one.

    By Campbell's theorem it is 1 + lambda times the integral of g - 1 (Neyman & Scott 1958 for one
    level); in a square of side b each level counts f², f the chance along one axis that a
    sibling of a point of the square lies in it as well. Sixteen plots of 16 x 16 quadrats; three
    standard errors from the spread between plots.
    """
    model = NestedThomas(
        outer_intensity=1e-3, outer_sigma=2.0, inner_intensity=3e-3, inner_sigma=0.5, mean_offspring=2.0
    )
    b, side = 60.0, 16
    exact = 1.0
    for sigma, rho in ((0.5, 3e-3), (np.hypot(2.0, 0.5), 1e-3)):
        s = np.sqrt(2.0) * sigma
        f = erf(b / (s * np.sqrt(2))) - s / b * np.sqrt(2 / np.pi) * (1 - np.exp(-(b**2) / (2 * s * s)))
        exact += model.intensity * f * f / rho
    assert exact == pytest.approx(1 + 2.0 + 2.0 * 3.0, rel=0.07)
    area = StudyArea(shapely.box(0, 0, b * side, b * side))
    ratios = []
    for seed in np.random.default_rng(59).spawn(16):
        at = draw_pattern(model, area, seed).points + area.origin
        counts = np.histogram2d(*at.T, bins=side, range=[[0, b * side]] * 2)[0]
        ratios.append(counts.var(ddof=1) / counts.mean())
    error = np.std(ratios, ddof=1) / np.sqrt(len(ratios))
    assert error < 0.4
    assert np.mean(ratios) == pytest.approx(exact, abs=3 * error)
