"""Minimum contrast: exact curves give back exact parameters, and the deepest valley is found."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
import shapely
from example_models import example
from scipy.integrate import quad
from scipy.optimize import differential_evolution, minimize

from geoclust.area.study_area import StudyArea
from geoclust.errors import UsageError
from geoclust.fitting.contrast import Contrast, _valleys
from geoclust.fitting.moments import ContrastChoices, fit_points
from geoclust.fitting.search import fit_contrast
from geoclust.models.catalogue import MODELS
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

AREA = 1e6
CONTRASTS = {
    "g": ("g", None, 0.5),
    "g through its kernel": ("g", 6.0, 0.5),
    "K": ("K", None, 0.25),
    "L": ("L", None, 1.0),
    # rho enters linearly here, and is left out of the search
    "g itself": ("g", None, 1.0),
    "K itself": ("K", None, 1.0),
    "squared L": ("L", None, 2.0),
}


def contrast_of(model, name: str, radii) -> Contrast:
    function, bandwidth, exponent = CONTRASTS[name]
    values = Contrast(function, radii, radii, exponent, bandwidth).curve_of(model)
    return Contrast(function, radii, values, exponent, bandwidth)


@pytest.mark.parametrize("name", CONTRASTS)
@pytest.mark.parametrize("kind", MODELS.values(), ids=MODELS)
@pytest.mark.parametrize(
    ("rho", "scales", "mu"), [(1e-4, (50.0, 15.0), 6.0), (4e-5, (90.0, 40.0), 3.0), (1e-3, (20.0, 4.0), 1.2)]
)
def test_exact_curve_in_exact_parameters_out(kind, name, rho, scales, mu):
    model = example(kind, 1e4 * rho, scales, mu)
    contrast = contrast_of(model, name, np.linspace(2.0, 200.0, 128))
    found = fit_contrast(kind, contrast, model.intensity, AREA)
    assert found.value == pytest.approx(
        0.0, abs=1e-10 * float(np.sum(contrast.residuals(0.0 * contrast.radii) ** 2))
    )
    assert found.on_bound == ()
    for parameter, value in model.parameters.items():
        assert found.model.parameters[parameter] == pytest.approx(value, rel=1e-4), parameter


@pytest.mark.parametrize("sigma", [0.13, 0.5, 2.0, 6.0, 30.0])
def test_the_model_is_seen_through_the_kernel(sigma):
    """Smoothing by 40 nodes against adaptive quadrature, from a fiftieth of the bandwidth upwards.

    The kernel is cut at distance zero and its remaining weight is one again,
    as the estimate is.
    """
    width, model = 6.0, Thomas(1e-4, sigma, 6.0)
    radii = np.array([3.0, 4.5, 6.0, 9.0, 25.0])
    found = Contrast("g", radii, radii, 1.0, width).curve_of(model)

    def kernel(u: float, r: float) -> float:
        return 0.75 / width * (1 - ((u - r) / width) ** 2)

    for r, got in zip(radii, found, strict=True):
        low, high = max(r - width, 0.0), r + width
        cuts = sorted({low, *(c for c in (sigma, 3 * sigma, 8 * sigma) if low < c < high), high})
        top = bottom = 0.0
        for a, b in itertools.pairwise(cuts):
            top += quad(lambda u, r=r: kernel(u, r) * float(model.pair_correlation(u)), a, b)[0]
            bottom += quad(kernel, a, b, args=(r,))[0]
        assert got - 1 == pytest.approx(top / bottom - 1, rel=2e-3, abs=1e-9)


def two_clusterings(radii) -> Contrast:
    """g of small clusters in large ones (Stoyan & Stoyan 1996): one Thomas process fits either."""

    def normal(v: float):
        return np.exp(-(radii**2) / (2 * v)) / (2 * np.pi * v)

    g = 1 + normal(2 * 1.0**2) / 4e-3 + normal(2 * (1.0**2 + 40.0**2)) / 1e-4
    return Contrast("g", radii, g, 0.5)


def test_several_starts_find_the_deeper_of_two_valleys():
    """Two valleys on the surface; the fit is at the global minimum that differential evolution finds."""
    contrast = two_clusterings(np.linspace(2.0, 250.0, 128))
    intensity = 0.05
    found = fit_contrast(Thomas, contrast, intensity, AREA)
    assert found.model.sigma == pytest.approx(1.18, rel=0.01)

    def value(theta) -> float:
        model = Thomas(np.exp(theta[0]), np.exp(theta[1]), intensity / np.exp(theta[0]))
        return float(np.sum(contrast.residuals(contrast.curve_of(model)) ** 2))

    limits = [tuple(np.log(found.bounds[n])) for n in ("parent_intensity", "sigma")]
    best = differential_evolution(value, limits, seed=1, tol=1e-10, popsize=40, maxiter=300)
    assert found.value == pytest.approx(best.fun, rel=1e-6)
    # negative control: a single start in the shallower valley stays there
    valleys = _valleys(found.surface.contrast)
    shallow = next(v for v in valleys if found.surface.scales[v[1]] > 10.0)
    assert valleys.index(shallow) > 0
    start = np.log([found.surface.parent_intensities[shallow[0]], found.surface.scales[shallow[1]]])
    stuck = minimize(value, start, method="Nelder-Mead")
    assert np.exp(stuck.x[1]) == pytest.approx(32.5, rel=0.05)
    assert stuck.fun > 1.2 * best.fun


def test_the_fit_lies_in_the_lowest_cell_of_the_surface():
    area = StudyArea(shapely.box(0, 0, 1000, 1000))
    points = draw_pattern(Thomas(1e-4, 12.0, 6.0), area, np.random.default_rng(11)).points
    for function in ("g", "K"):
        found = fit_points(Thomas, points, area, ContrastChoices(function)).fit
        surface = found.surface
        a, b = np.unravel_index(np.argmin(surface.contrast), surface.contrast.shape)
        for axis, k, value in (
            (surface.parent_intensities, a, found.model.parent_intensity),
            (surface.scales, b, found.model.scale),
        ):
            assert axis[max(k - 1, 0)] <= value <= axis[min(k + 1, len(axis) - 1)]
        assert found.value <= surface.contrast.min() * (1 + 1e-9)
        # the deepest place of each scale, the profile, has its minimum there too
        profile = surface.contrast.min(axis=0)
        assert np.argmin(profile) == b
        # and the surface is what the contrast says, recomputed at a node
        contrast = fit_points(Thomas, points, area, ContrastChoices(function)).contrast
        rho, scale = surface.parent_intensities[20], surface.scales[30]
        model = Thomas(rho, scale, len(points) / area.area / rho)
        again = np.sum(contrast.residuals(contrast.curve_of(model)) ** 2)
        assert surface.contrast[20, 30] == pytest.approx(again, rel=1e-9)


def test_residuals_by_hand():
    """Three radii one metre apart: trapezoid weights ½, 1, ½; a radius without a value has none."""
    radii = np.array([1.0, 2.0, 3.0])
    contrast = Contrast("K", radii, np.array([16.0, 81.0, 256.0]), 0.25)
    # fourth roots 2, 3, 4 against 1, 1, 1
    assert np.sum(contrast.residuals(np.ones(3)) ** 2) == pytest.approx(0.5 * 1 + 1 * 4 + 0.5 * 9)
    contrast = Contrast("K", radii, np.array([16.0, np.nan, 256.0]), 0.25)
    assert np.sum(contrast.residuals(np.ones(3)) ** 2) == pytest.approx(0.5 * 1 + 0.5 * 9)


def test_range_follows_the_clusters_unless_it_is_set():
    area = StudyArea(shapely.box(0, 0, 1000, 1000))
    points = draw_pattern(Thomas(3e-4, 6.0, 6.0), area, np.random.default_rng(12)).points
    for function, scales in (("g", 12.0), ("K", 4.0), ("L", 3.0)):
        chosen = fit_points(Thomas, points, area, ContrastChoices(function))
        assert chosen.r_max < 0.8 * 250.0
        # so many scales of the first fit, whose scale differs a little from the second's
        assert chosen.r_max == pytest.approx(scales * chosen.fit.model.scale, rel=0.2)
        assert chosen.contrast.radii[-1] == chosen.r_max
        given = fit_points(Thomas, points, area, ContrastChoices(function, r_max=70.0, r_min=2.0))
        assert (given.contrast.radii[0], given.contrast.radii[-1]) == (2.0, 70.0)
    wide = fit_points(Thomas, points, area, ContrastChoices("g", bandwidth=9.0))
    assert (wide.bandwidth, wide.contrast.radii[0]) == (9.0, 4.5)
    far = fit_points(Thomas, points, area, ContrastChoices("g", r_min=80.0))
    assert far.contrast.radii[0] == 80.0
    assert 160.0 <= far.r_max <= 250.0


@pytest.mark.parametrize("sigma", [0.5, 3.0])
@pytest.mark.parametrize("function", ["g", "K"])
def test_clusters_narrower_than_the_bandwidth_are_measured(sigma, function):
    """Twelve surveys each: the median is within 10 % of the truth although the kernel is 6 m wide.

    The root mean square of log(estimate / truth) is about 0.05 here, so the
    median of twelve has a standard error of 0.02.
    """
    area = StudyArea(shapely.box(0, 0, 1400, 1400))
    model = Thomas(1e-4, sigma, 6.0)
    found = []
    for seed in np.random.default_rng(13).spawn(12):
        fit = fit_points(Thomas, draw_pattern(model, area, seed).points, area, ContrastChoices(function)).fit
        assert fit.on_bound == ()
        found.append((fit.model.parent_intensity, fit.model.sigma))
    np.testing.assert_allclose(np.median(found, axis=0), (1e-4, sigma), rtol=0.1)


@pytest.mark.parametrize(
    ("choices", "said"),
    [
        ({"function": "F"}, "g, K, L"),
        ({"r_max": 0.0}, "r_max"),
        ({"r_max": np.nan}, "r_max"),
        ({"r_min": -1.0}, "r_min"),
        ({"r_min": 50.0, "r_max": 50.0}, "r_min"),
        ({"exponent": 0.0}, "exponent"),
        ({"bandwidth": -2.0}, "bandwidth"),
        ({"r_max": 150.0}, "r_max"),
        ({"r_min": 20.0}, "r_min"),
    ],
)
def test_choices_are_checked(choices, said):
    """The last two do not fit a study area of 100 m by 100 m."""
    area = StudyArea(shapely.box(0, 0, 100, 100))
    points = area.local_uniform_points(30, np.random.default_rng(1))
    with pytest.raises(UsageError, match=said):
        fit_points(Thomas, points, area, ContrastChoices(**choices))
