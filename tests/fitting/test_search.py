"""The search for the least contrast beyond one parent intensity and one scale."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from scipy.optimize import differential_evolution, lsq_linear, minimize

from geoclust.area.study_area import StudyArea
from geoclust.fitting.contrast import Contrast, LevelSurface
from geoclust.fitting.moments import ContrastChoices, fit_points, second_level_of
from geoclust.fitting.search import CurvesByScale, Limits, best_reciprocals, best_single_level, fit_contrast
from geoclust.models.nested_thomas import NestedThomas
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas
from geoclust.models.variance_gamma import VarianceGamma

PLOT = StudyArea(shapely.box(0, 0, 800, 800))
NESTED = NestedThomas(1.2e-4, 32.0, 8e-4, 8.0, 3.0)


@pytest.fixture(scope="module")
def nested_points():
    return draw_pattern(NESTED, PLOT, np.random.default_rng(31)).points


@pytest.fixture(scope="module")
def single_points():
    return draw_pattern(Thomas(4e-4, 12.0, 4.0), PLOT, np.random.default_rng(32)).points


def noisy(function: str, exponent: float, bandwidth: float | None = None) -> Contrast:
    """The curve of a nested process with some noise, so that no model fits it exactly."""
    radii = np.linspace(2.0, 200.0, 100)
    exact = Contrast(function, radii, radii, exponent, bandwidth).curve_of(NESTED)
    wobble = 1 + 0.02 * np.random.default_rng(5).standard_normal(100)
    return Contrast(function, radii, exact * wobble, exponent, bandwidth)


@pytest.mark.parametrize(("function", "exponent"), [("g", 1.0), ("K", 1.0), ("L", 2.0)])
def test_intensities_in_closed_form(function, exponent):
    """Where the curve enters linearly: bounded linear least squares by scipy."""
    contrast = noisy(function, exponent)
    limits = Limits.of(contrast, NESTED.intensity, 1e6)
    pairs = [(40.0, 9.0), (20.0, 3.0), (150.0, 40.0), (12.0, 8.0)]
    curves = np.array([[contrast.excess_of(Thomas(1.0, s, 1.0)) for s in pair] for pair in pairs])
    found, values = best_reciprocals(contrast, curves, limits)
    weights, seen = contrast.root_weights, contrast.values
    if function == "L":
        seen = np.pi * seen**2
        weights = weights / np.pi
    for row, value, excess in zip(found, values, curves, strict=True):
        best = lsq_linear(
            (excess * weights).T, weights * (seen - contrast.base), limits.reciprocals, tol=1e-14
        )
        assert value == pytest.approx(2 * best.cost, rel=1e-6)
        np.testing.assert_allclose(row, best.x, rtol=2e-3, atol=1e-3 * row.max())


@pytest.mark.parametrize(("function", "exponent"), [("g", 0.5), ("K", 0.25), ("L", 1.0)])
def test_intensities_where_the_power_bends_the_curve(function, exponent):
    """Against a general minimiser in logarithms; a single level too."""
    contrast = noisy(function, exponent)
    limits = Limits.of(contrast, NESTED.intensity, 1e6)
    for scales in ((38.0, 8.5), (25.0, 5.0), (20.0,)):
        curves = np.array([[contrast.excess_of(Thomas(1.0, s, 1.0)) for s in scales]])
        found, value = best_reciprocals(contrast, curves, limits)

        def at(logs, curves=curves) -> float:
            linear = contrast.base + np.exp(-logs) @ curves[0]
            return float(np.sum(contrast.residuals_of(linear) ** 2))

        bounds = [tuple(np.log(limits.intensity))] * len(scales)
        start = np.full(len(scales), np.log(2e-4))
        best = minimize(at, start, bounds=bounds, method="L-BFGS-B", options={"ftol": 1e-15, "gtol": 1e-12})
        assert value[0] <= best.fun * (1 + 1e-6)
        assert at(-np.log(found[0])) == pytest.approx(value[0])


def test_both_levels_at_the_global_minimum():
    """Differential evolution over both sigmas, the intensities by scipy's bounded linear least squares."""
    contrast = noisy("g", 1.0)
    found = fit_contrast(NestedThomas, contrast, NESTED.intensity, 1e6)
    limits = Limits.of(contrast, NESTED.intensity, 1e6)
    weights = contrast.root_weights

    def value(theta) -> float:
        inner, outer = np.exp(theta[0]), np.exp(theta[0] + theta[1])
        excess = [contrast.excess_of(Thomas(1.0, s, 1.0)) for s in (np.hypot(inner, outer), inner)]
        wanted = weights * (contrast.values - 1.0)
        return 2 * lsq_linear((np.array(excess) * weights).T, wanted, limits.reciprocals).cost

    best = differential_evolution(
        value, [tuple(np.log(limits.scale)), (0.01, 6.0)], seed=2, popsize=12, maxiter=40, tol=1e-8
    )
    assert found.value <= best.fun * (1 + 1e-6)
    assert found.value == pytest.approx(best.fun, rel=1e-3)
    assert found.model.inner_sigma == pytest.approx(np.exp(best.x[0]), rel=0.02)
    assert found.model.outer_sigma == pytest.approx(np.exp(best.x.sum()), rel=0.02)


def test_surface_over_both_scales(nested_points):
    """The fit lies in the lowest cell; a node is what the contrast says with the best intensities there."""
    found = fit_points(NestedThomas, nested_points, PLOT, ContrastChoices())
    surface = found.fit.surface
    assert isinstance(surface, LevelSurface)
    outer, inner = np.meshgrid(surface.outer_scales, surface.inner_scales, indexing="ij")
    assert np.array_equal(np.isfinite(surface.contrast), outer > inner)
    a, b = np.unravel_index(np.argmin(surface.contrast), surface.contrast.shape)
    model = found.fit.model
    step = surface.outer_scales[1] / surface.outer_scales[0]
    assert abs(np.log(model.outer_sigma / surface.outer_scales[a])) < 1.5 * np.log(step)
    assert abs(np.log(model.inner_sigma / surface.inner_scales[b])) < np.log(step)
    assert found.fit.value <= surface.contrast.min()
    scales = (float(np.hypot(surface.outer_scales[a], surface.inner_scales[b])), surface.inner_scales[b])
    curves = np.array([[found.contrast.excess_of(Thomas(1.0, s, 1.0)) for s in scales]])
    limits = Limits.of(found.contrast, len(nested_points) / PLOT.area, PLOT.area)
    _, value = best_reciprocals(found.contrast, curves, limits)
    # the curves of the surface are interpolated
    assert surface.contrast[a, b] == pytest.approx(value[0], rel=1e-2)


def test_the_quick_single_level_is_the_full_one(single_points):
    """By interpolated curves and with the intensity profiled out: as the search over both, to 0.1 %."""
    for function in ("g", "K", "L"):
        found = fit_points(Thomas, single_points, PLOT, ContrastChoices(function))
        limits = Limits.of(found.contrast, len(single_points) / PLOT.area, PLOT.area)
        quick = best_single_level(found.contrast, limits, CurvesByScale(found.contrast, limits))
        assert quick.scale == pytest.approx(found.fit.model.sigma, rel=1e-3)
        assert quick.parent_intensity == pytest.approx(found.fit.model.parent_intensity, rel=2e-3)


def test_l_is_k_in_other_units(single_points):
    """L to the power q is K to the power q/2 but for a constant, so the fits are the same."""
    k = fit_points(Thomas, single_points, PLOT, ContrastChoices("K", r_max=90.0, exponent=0.25)).fit
    l_fit = fit_points(Thomas, single_points, PLOT, ContrastChoices("L", r_max=90.0, exponent=0.5)).fit
    assert l_fit.model.sigma == pytest.approx(k.model.sigma, rel=1e-5)
    assert l_fit.model.parent_intensity == pytest.approx(k.model.parent_intensity, rel=1e-5)
    assert l_fit.value == pytest.approx(k.value / np.sqrt(np.pi), rel=1e-6)
    # and with its own power it is near the truth
    own = fit_points(Thomas, single_points, PLOT, ContrastChoices("L"))
    assert own.contrast.exponent == 1.0
    assert own.contrast.function == "L"
    assert own.fit.model.sigma == pytest.approx(12.0, rel=0.3)


def test_weights_of_distances_by_hand():
    """Trapezoid weights 1/2, 1, 1/2 times the distance; the same as a residual that is larger by its root."""
    radii = np.array([1.0, 2.0, 3.0])
    contrast = Contrast("L", radii, np.array([2.0, 4.0, 6.0]), 1.0, distance_weight=1.0)
    assert np.sum(contrast.residuals(np.ones(3)) ** 2) == pytest.approx(0.5 * 1 * 1 + 2 * 9 + 0.5 * 3 * 25)
    assert np.sum(contrast.residuals_of(np.full(3, np.pi)) ** 2) == pytest.approx(0.5 + 18 + 37.5)


def test_weights_of_distances_change_the_fit(single_points):
    plain = fit_points(Thomas, single_points, PLOT, ContrastChoices("g")).fit.model
    near = fit_points(Thomas, single_points, PLOT, ContrastChoices("g", distance_weight=-1.0)).fit.model
    assert near.sigma != pytest.approx(plain.sigma, rel=1e-4)
    assert near.sigma == pytest.approx(plain.sigma, rel=0.3)


def test_shape_is_found_with_the_other_parameters():
    """Four surveys of a variance-gamma process with a dense core; medians of size and number.

    Scale and shape hang together: what is told well is the spread of a cluster.
    """
    truth = VarianceGamma(2e-4, 10.0, -0.2, 8.0)
    found = [
        fit_points(VarianceGamma, draw_pattern(truth, PLOT, s).points, PLOT, ContrastChoices()).fit.model
        for s in np.random.default_rng(33).spawn(4)
    ]
    assert np.median([m.spread for m in found]) == pytest.approx(truth.spread, rel=0.3)
    assert np.median([m.parent_intensity for m in found]) == pytest.approx(2e-4, rel=0.3)
    assert np.median([m.shape for m in found]) < 1.0


def test_both_levels_come_back():
    """Four surveys in 64 ha: medians within 15 % for the inner and 35 % for the outer sigma.

    `tests/studies/nested.py` gives root mean squares of log(estimate / truth) of about 0.1 and 0.3
    for single surveys; the median of four has about 0.6 times that as its standard error.
    """
    found = [
        fit_points(NestedThomas, draw_pattern(NESTED, PLOT, s).points, PLOT, ContrastChoices()).fit.model
        for s in np.random.default_rng(34).spawn(4)
    ]
    assert np.median([m.inner_sigma for m in found]) == pytest.approx(8.0, rel=0.15)
    assert np.median([m.outer_sigma for m in found]) == pytest.approx(32.0, rel=0.35)
    assert np.median([m.inner_intensity for m in found]) == pytest.approx(8e-4, rel=0.35)
    assert np.median([m.outer_intensity for m in found]) == pytest.approx(1.2e-4, rel=0.5)


def test_the_range_follows_the_larger_clusters():
    """Small nested clusters in a large plot: the range is cut to twelve outer spreads of the same curve."""
    area = StudyArea(shapely.box(0, 0, 1500, 1500))
    points = draw_pattern(NestedThomas(1e-4, 12.0, 3e-4, 3.0, 3.0), area, np.random.default_rng(35)).points
    found = fit_points(NestedThomas, points, area, ContrastChoices())
    assert found.r_max < 300.0
    assert found.contrast.radii[-1] == found.r_max
    assert found.fit.model.inner_sigma == pytest.approx(3.0, rel=0.3)


def test_a_single_level_is_enough_for_a_simple_survey(single_points):
    """The test of the second level stops once ten patterns have reached both drops; any number of workers."""
    choices = ContrastChoices()
    found = fit_points(NestedThomas, single_points, PLOT, choices)

    def tested(workers: int):
        seed = np.random.default_rng(4)
        return second_level_of(NestedThomas, found.contrast, single_points, PLOT, choices, 39, seed, workers)

    single = tested(1)
    assert single == tested(3)
    assert single.p_value > 0.2
    assert single.simulations < 39
    assert 0 < single.ranges[0] < single.ranges[1] <= 200.0
    assert single.single.scale == pytest.approx(12.0, rel=0.3)
