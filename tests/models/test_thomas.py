"""The Thomas process against its published forms and against simulations in a ragged study area.

Published forms: K(t) = pi t² + (1 - exp(-t²/4 sigma²))/rho (Diggle 1983,
Statistical Analysis of Spatial Point Patterns, section 4.3) and g(r) = 1 +
exp(-r²/4 sigma²)/(4 pi sigma² rho) (Stoyan & Stoyan 1994, Fractals, Random
Shapes and Point Fields, section 16.4).
"""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from known_areas import sample_reserve
from scipy import stats
from scipy.special import erf

from geoclust.area.study_area import StudyArea
from geoclust.curves.second_order import SecondOrder
from geoclust.fitting.contrast import Contrast
from geoclust.models.patterns import draw_pattern, draw_random_points
from geoclust.models.thomas import Thomas
from geoclust.workers import in_order

MODEL = Thomas(parent_intensity=1e-4, sigma=15.0, mean_offspring=6.0)
PATTERNS = 400


@pytest.fixture(scope="module")
def reserve() -> StudyArea:
    return StudyArea(sample_reserve())


@pytest.fixture(scope="module")
def patterns(reserve):
    return [draw_pattern(MODEL, reserve, seed) for seed in np.random.default_rng(400).spawn(PATTERNS)]


def test_published_forms():
    """At r = 2 sigma both exponents are one, so the excess is 1/(4 pi e sigma² rho) and (1 - 1/e)/rho."""
    r = 30.0
    assert MODEL.pair_correlation(0.0) == pytest.approx(1 + 1 / (4 * np.pi * 225 * 1e-4), rel=1e-14)
    assert MODEL.pair_correlation(r) == pytest.approx(1 + 1 / (4 * np.pi * np.e * 225e-4), rel=1e-14)
    assert MODEL.k_function(r) == pytest.approx(np.pi * 900 + (1 - 1 / np.e) * 1e4, rel=1e-14)
    assert MODEL.l_function(r) == pytest.approx(np.sqrt(900 + (1 - 1 / np.e) * 1e4 / np.pi), rel=1e-14)
    # small distances: no digits lost in 1 - exp
    assert MODEL.sibling_distribution(1e-6) == pytest.approx(1e-12 / 900, rel=1e-12)


def test_mean_curves_of_simulations_in_the_ragged_reserve(reserve, patterns):
    """Mean of 400 estimates of g and K with the true intensity, which have no bias at any radius.

    A single comparison at three standard errors has a false alarm in 0.27 % of
    all cases; over the 16 comparisons made here, that chance is kept by the
    quantile at 0.27 %/16 of Student's t (Bonferroni), 3.8 standard errors.
    """
    radii = np.array([5.0, 10.0, 15.0, 22.0, 30.0, 40.0, 55.0, 75.0])
    width = 5.0
    drawn = np.empty((PATTERNS, 2, len(radii)))

    def one(pattern):
        found = SecondOrder.of_points(pattern.points, reserve, radii, width, workers=1)
        n = len(pattern.points)
        # the curves divide by n(n-1)/|W|²; put the true squared intensity there
        back = n * (n - 1) / (reserve.area * MODEL.intensity) ** 2
        return found.g_values(), found.k_values(), back

    for k, (g, big_k, back) in enumerate(in_order(one, patterns)):
        drawn[k] = np.array([g, big_k]) * back
    # g is estimated with a kernel, so it is compared with g seen through that kernel
    expected = np.array(
        [Contrast("g", radii, radii, 1.0, bandwidth=width).curve_of(MODEL), MODEL.k_function(radii)]
    )
    error = drawn.std(axis=0, ddof=1) / np.sqrt(PATTERNS)
    limit = stats.t.isf(0.0027 / 2 / drawn[0].size, PATTERNS - 1)
    assert np.max(np.abs(drawn.mean(axis=0) - expected) / error) < limit
    # the check has teeth: standard errors below 4 % of the excess up to three sigma
    assert np.all((error / (expected - [np.ones(len(radii)), np.pi * radii**2]))[:, :5] < 0.04)
    # and a scale that is 10 % off would fail it
    wrong = Thomas(1e-4, 16.5, 6.0).k_function(radii)
    assert np.max(np.abs(drawn[:, 1].mean(axis=0) - wrong) / error[1]) > limit


def test_spread_of_offspring(reserve, patterns):
    """Half of a cluster within 1.1774 sigma, 95 % within 2.4477 sigma (common practice).

    Only centres so deep inside that no offspring can have been cut off (six
    sigma leave 1.5e-8 outside); within three binomial standard errors.
    """
    distances = []
    for pattern in patterns:
        deep = reserve.local_contains(pattern.centres)
        deep &= reserve.distance_to_boundary(pattern.centres + reserve.origin, 91.0) > 90.0
        held = deep[pattern.cluster]
        distances.append(np.hypot(*(pattern.points - pattern.centres[pattern.cluster])[held].T))
    z = np.concatenate(distances) / MODEL.sigma
    assert len(z) > 50_000
    for reach, share in ((1.1774, 0.5), (2.4477, 0.95)):
        assert np.mean(z <= reach) == pytest.approx(share, abs=3 * np.sqrt(share * (1 - share) / len(z)))


def test_points_per_cluster_are_poisson(reserve, patterns):
    """Chi-square of all counts of clusters deep inside against Poisson(lambda/rho), and their dispersion."""
    counts = []
    for pattern in patterns:
        deep = reserve.local_contains(pattern.centres)
        deep &= reserve.distance_to_boundary(pattern.centres + reserve.origin, 91.0) > 90.0
        counts.append(np.bincount(pattern.cluster, minlength=len(pattern.centres))[deep])
    n = np.concatenate(counts)
    mean = MODEL.intensity / MODEL.parent_intensity
    law = stats.poisson(mean)
    # classes 0, 1, ..., 14 and the rest: at least five expected in each
    seen = np.bincount(np.minimum(n, 15), minlength=16)
    expected = np.append(law.pmf(np.arange(15)), law.sf(14)) * len(n)
    assert expected.min() > 5
    assert stats.chisquare(seen, expected).pvalue > 1e-3
    assert n.mean() == pytest.approx(mean, abs=3 * np.sqrt(mean / len(n)))
    dispersion = (len(n) - 1) * n.var(ddof=1) / n.mean()
    tails = stats.chi2(len(n) - 1)
    assert min(tails.cdf(dispersion), tails.sf(dispersion)) > 5e-4


def test_number_of_centres_and_points(reserve, patterns):
    """Poisson centres at the parent intensity; the mean number of points is intensity times area.

    Centres outside the boundary are included: without them, the mean number of
    points would be short by the share of offspring that cross the boundary.
    """
    inside = np.array([reserve.local_contains(p.centres).sum() for p in patterns])
    expected = MODEL.parent_intensity * reserve.area
    assert inside.mean() == pytest.approx(expected, abs=3 * np.sqrt(expected / PATTERNS))
    index = (PATTERNS - 1) * inside.var(ddof=1) / inside.mean()
    assert stats.chi2(PATTERNS - 1).interval(0.998)[0] < index < stats.chi2(PATTERNS - 1).interval(0.998)[1]
    points = np.array([len(p.points) for p in patterns])
    error = points.std(ddof=1) / np.sqrt(PATTERNS)
    assert points.mean() == pytest.approx(MODEL.intensity * reserve.area, abs=3 * error)
    of_inner = np.array([reserve.local_contains(p.centres)[p.cluster].sum() for p in patterns])
    assert of_inner.mean() < MODEL.intensity * reserve.area - 5 * error


def test_counts_in_large_quadrats_vary_as_published():
    """Variance over mean of quadrat counts tends to 1 + mu (Neyman & Scott 1958).

    For a square of side b the exact value is 1 + mu f², f the chance along one
    axis that a sibling of a point of the square lies in it as well; at b = 30
    sigma it is 1 + 0.926 mu. Twenty plots of 20 x 20 quadrats; three standard
    errors from the spread between plots.
    """
    model = Thomas(parent_intensity=2e-3, sigma=1.0, mean_offspring=4.0)
    b, side = 30.0, 20
    s = np.sqrt(2.0) * model.sigma
    f = erf(b / (s * np.sqrt(2))) - s / b * np.sqrt(2 / np.pi) * (1 - np.exp(-(b**2) / (2 * s * s)))
    exact = 1 + model.mean_offspring * f * f
    assert exact == pytest.approx(1 + model.mean_offspring, rel=0.07)
    area = StudyArea(shapely.box(0, 0, b * side, b * side))
    ratios = []
    for seed in np.random.default_rng(58).spawn(20):
        at = draw_pattern(model, area, seed).points + area.origin
        counts = np.histogram2d(*at.T, bins=side, range=[[0, b * side]] * 2)[0]
        ratios.append(counts.var(ddof=1) / counts.mean())
    error = np.std(ratios, ddof=1) / np.sqrt(len(ratios))
    assert error < 0.15
    assert np.mean(ratios) == pytest.approx(exact, abs=3 * error)


def test_random_points_have_no_clusters(reserve):
    """A Poisson number of uniform points: dispersion of the number within its 99.8 % limits."""
    intensity = 2e-5
    n = np.array(
        [len(draw_random_points(intensity, reserve, s)) for s in np.random.default_rng(3).spawn(300)]
    )
    expected = intensity * reserve.area
    assert n.mean() == pytest.approx(expected, abs=3 * np.sqrt(expected / 300))
    low, high = stats.chi2(299).interval(0.998)
    assert low < 299 * n.var(ddof=1) / n.mean() < high
