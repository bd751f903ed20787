"""The Cauchy cluster process against its published forms and simulations, without edge effects."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
import shapely
from known_areas import sample_reserve
from scipy import stats
from scipy.integrate import quad
from scipy.special import j0

from geoclust.area.study_area import StudyArea
from geoclust.curves.second_order import SecondOrder
from geoclust.fitting.contrast import Contrast
from geoclust.models.cauchy import Cauchy
from geoclust.models.patterns import Pattern, draw_pattern, simple_surroundings
from geoclust.workers import in_order

MODEL = Cauchy(parent_intensity=1e-4, omega=8.0, mean_offspring=6.0)
PATTERNS = 400
PLOT = StudyArea(shapely.box(0, 0, 300, 200))
DENSE = Cauchy(parent_intensity=5e-4, omega=20.0, mean_offspring=8.0)


@pytest.fixture(scope="module")
def reserve() -> StudyArea:
    return StudyArea(sample_reserve())


@pytest.fixture(scope="module")
def patterns(reserve) -> list[Pattern]:
    return [draw_pattern(MODEL, reserve, seed) for seed in np.random.default_rng(2013).spawn(PATTERNS)]


@pytest.fixture(scope="module")
def in_plot() -> list[Pattern]:
    return [draw_pattern(DENSE, PLOT, seed) for seed in np.random.default_rng(7).spawn(1000)]


def over_the_plane(values_of) -> float:
    """Integral over the plane of a function of the share of the plot, by midpoints in ever larger rings."""
    u = (np.arange(1500) + 0.5) / 1500
    r = 150.0 * u / (1 - u)
    weight = 150.0 / (1 - u) ** 2 / 1500 * r
    turn = 2 * np.pi * (np.arange(240) + 0.5) / 240
    at = np.stack([r[:, None] * np.cos(turn), r[:, None] * np.sin(turn)], axis=-1).reshape(-1, 2)
    share = Cauchy.area_shares(PLOT, at, DENSE.omega).reshape(len(r), len(turn))
    return float(weight @ values_of(share).mean(axis=1) * 2 * np.pi)


def test_published_forms():
    """Jalilian, Guan & Waagepetersen 2013: g and K of the Cauchy cluster process, at r = 2 omega sqrt(3)."""
    r = 2 * 8.0 * np.sqrt(3.0)
    assert MODEL.pair_correlation(0.0) == pytest.approx(1 + 1 / (8 * np.pi * 64 * 1e-4), rel=1e-14)
    assert MODEL.pair_correlation(r) == pytest.approx(1 + 1 / (64 * np.pi * 64 * 1e-4), rel=1e-14)
    assert MODEL.k_function(r) == pytest.approx(np.pi * r * r + 0.5e4, rel=1e-14)
    assert MODEL.sibling_distribution(1e-6) == pytest.approx(1e-12 / 512, rel=1e-12)
    # half of a cluster within omega sqrt(3); beyond 10 omega a tenth
    assert MODEL.reach(0.5) == pytest.approx(8.0 * np.sqrt(3.0))
    assert MODEL.reach(1 / np.sqrt(101)) == pytest.approx(80.0)


def test_siblings_from_the_characteristic_function():
    """The kernel has characteristic function exp(-omega t), so that of siblings is exp(-2 omega t)."""
    for r in (0.0, 5.0, 30.0):
        for omega, density in ((8.0, MODEL.offspring_density), (16.0, MODEL.sibling_density)):
            value = quad(lambda t, w=omega, r=r: t * np.exp(-w * t) * j0(t * r), 0, 8, limit=400)[0]
            assert density(r) == pytest.approx(value / (2 * np.pi), rel=1e-7)


def test_mean_curves_of_simulations_in_the_ragged_reserve(reserve, patterns):
    """Mean of 400 estimates of g and K with the true intensity, which have no bias at any radius.

    The limit is the quantile of Student's t that keeps the false alarm of three
    standard errors, 0.27 %, over all 14 comparisons (Bonferroni).
    """
    radii = np.array([4.0, 8.0, 12.0, 20.0, 30.0, 45.0, 75.0])
    width = 4.0
    drawn = np.empty((PATTERNS, 2, len(radii)))

    def one(pattern):
        found = SecondOrder.of_points(pattern.points, reserve, radii, width, workers=1)
        n = len(pattern.points)
        # the curves divide by n(n-1)/|W|²; put the true squared intensity there
        back = n * (n - 1) / (reserve.area * MODEL.intensity) ** 2
        return found.g_values(), found.k_values(), back

    for k, (g, big_k, back) in enumerate(in_order(one, patterns)):
        drawn[k] = np.array([g, big_k]) * back
    expected = np.array(
        [Contrast("g", radii, radii, 1.0, bandwidth=width).curve_of(MODEL), MODEL.k_function(radii)]
    )
    error = drawn.std(axis=0, ddof=1) / np.sqrt(PATTERNS)
    limit = stats.t.isf(0.0027 / 2 / drawn[0].size, PATTERNS - 1)
    assert np.max(np.abs(drawn.mean(axis=0) - expected) / error) < limit
    # a scale that is 15 % off would fail
    wrong = Cauchy(1e-4, 9.2, 6.0).k_function(radii)
    assert np.max(np.abs(drawn[:, 1].mean(axis=0) - wrong) / error[1]) > limit


def test_number_of_points_has_the_exact_mean_and_variance(in_plot):
    """Mean lambda |W|; variance that plus rho mu² times the integral of the squared share.

    Without the centres outside the widened plot, the mean would be short by
    more than ten standard errors: the tail matters, and all of it is there.
    """
    n = np.array([len(p.points) for p in in_plot])
    mean = DENSE.intensity * PLOT.area
    assert over_the_plane(lambda p: p) == pytest.approx(PLOT.area, rel=1e-4)
    variance = mean + DENSE.parent_intensity * DENSE.mean_offspring**2 * over_the_plane(lambda p: p * p)
    assert n.mean() == pytest.approx(mean, abs=3 * np.sqrt(variance / len(n)))
    # standard error of a variance from the fourth moment
    centred = (n - n.mean()) ** 2
    assert centred.mean() == pytest.approx(variance, abs=3 * centred.std() / np.sqrt(len(n)))
    wide = simple_surroundings(DENSE, PLOT)
    far = np.mean([np.sum(~wide.local_contains(p.centres[p.cluster])) for p in in_plot])
    assert far > 10 * np.sqrt(variance / len(n))


def test_number_of_centres_with_points(in_plot):
    """Poisson, with mean rho times the integral of 1 - exp(-mu share) over the plane; dispersion likewise."""
    seen = np.array([len(np.unique(p.cluster)) for p in in_plot])
    mean = DENSE.parent_intensity * over_the_plane(lambda p: -np.expm1(-DENSE.mean_offspring * p))
    assert seen.mean() == pytest.approx(mean, abs=3 * np.sqrt(mean / len(seen)))
    tails = stats.chi2(len(seen) - 1)
    index = (len(seen) - 1) * seen.var(ddof=1) / mean
    assert min(tails.cdf(index), tails.sf(index)) > 5e-4


def test_far_centres_have_the_law_of_their_radius(in_plot):
    """Numbers of centres with points, in rings far outside, against the integral over each ring."""
    cuts = np.array([400.0, 600.0, 1000.0, 2000.0, 1e4, 1e7])
    found = np.zeros(len(cuts) - 1)
    for p in in_plot:
        found += np.histogram(np.hypot(*p.centres[np.unique(p.cluster)].T), cuts)[0]
    turn = 2 * np.pi * (np.arange(32) + 0.5) / 32

    def ring(log_r: float) -> float:
        r = np.exp(log_r)
        at = r * np.column_stack([np.cos(turn), np.sin(turn)])
        share = Cauchy.area_shares(PLOT, at, DENSE.omega)
        return 2 * np.pi * r * r * float(-np.expm1(-DENSE.mean_offspring * share).mean())

    expected = len(in_plot) * DENSE.parent_intensity * np.array(
        [quad(ring, np.log(a), np.log(b), epsrel=1e-6)[0] for a, b in itertools.pairwise(cuts)]
    )  # fmt: skip
    assert np.all(expected[:4] > 50)
    # chi-square of independent Poisson numbers
    assert stats.chi2(len(expected)).sf(np.sum((found - expected) ** 2 / expected)) > 1e-3


def test_centres_inside_are_all_there(in_plot):
    """Those without a point too: Poisson at the parent intensity."""
    inside = np.array([PLOT.local_contains(p.centres).sum() for p in in_plot])
    mean = DENSE.parent_intensity * PLOT.area
    assert inside.mean() == pytest.approx(mean, abs=3 * np.sqrt(mean / len(inside)))
    for p in in_plot[:20]:
        assert len(p.cluster) == len(p.points)
        assert PLOT.local_contains(p.points).all()
        assert p.cluster.max() < len(p.centres)


def test_scattered_parts_and_strips():
    """The widening that costs least is another one, and the mean number of points stays right."""
    plots = shapely.MultiPolygon([shapely.box(x, y, x + 60, y + 60) for x in (0, 5000) for y in (0, 4000)])
    strip = shapely.box(0, 0, 2500, 12)
    for polygon in (plots, strip):
        area = StudyArea(polygon)
        model = Cauchy(2e-3, 10.0, 5.0)
        n = np.array([len(draw_pattern(model, area, s).points) for s in np.random.default_rng(3).spawn(60)])
        error = n.std(ddof=1) / np.sqrt(len(n))
        assert error < 0.1 * n.mean()
        assert n.mean() == pytest.approx(model.intensity * area.area, abs=3 * error)
