"""What must hold for every cluster model, whatever its formulas."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
import shapely
from example_models import example
from scipy.integrate import quad
from scipy.stats import kstest

from geoclust.area.study_area import StudyArea
from geoclust.errors import UsageError
from geoclust.models.base import ClusterModel
from geoclust.models.catalogue import MODELS, model_by_name

# chance of a false alarm of each randomised check; the seeds are fixed, so it is met or not for good
RARE = 1e-3


@pytest.fixture(params=sorted(MODELS), name="model")
def every_model(request: pytest.FixtureRequest) -> ClusterModel:
    return example(MODELS[request.param])


def ring_integral(density, low: float, high: float) -> float:
    """Integral of 2 pi r density(r), pieces of growing length so that no peak is missed."""
    cuts = [low, *(c for c in np.geomspace(1e-3, 1e6, 28) if low < c < high)]
    if np.isfinite(high):
        cuts.append(high)
    total = sum(
        quad(lambda r: 2 * np.pi * r * float(density(r)), a, b, epsabs=1e-13, epsrel=1e-11, limit=200)[0]
        for a, b in itertools.pairwise(cuts)
    )
    return total


def test_parameters_come_back_and_are_described(model):
    assert list(model.parameters) == [p.name for p in type(model).described]
    assert all(p.meaning and p.unit for p in type(model).described)
    assert set(type(model).intensity_names) == {p.name for p in type(model).described if p.per_area}
    assert type(model)(**model.parameters) == model
    assert model_by_name(model.name) is type(model)
    centres = model.parameters[type(model).intensity_names[-1]]
    assert model.intensity == centres * model.mean_offspring
    assert model.centre_intensity == centres
    values = {name: value for name, value in model.parameters.items() if name != "mean_offspring"}
    again = type(model).with_intensity(values, model.intensity)
    assert again.mean_offspring == pytest.approx(model.mean_offspring, rel=1e-12)


@pytest.mark.parametrize("below", [0.0, 1.0, np.nan, np.inf])
def test_bad_parameters_are_refused_by_name(model, below):
    """At its lower limit and below; not a number; infinite."""
    for p in type(model).described:
        bad = below if below == np.inf else p.above - below
        with pytest.raises(UsageError, match=p.name):
            type(model)(**{**model.parameters, p.name: bad})


def test_density_of_offspring_and_of_siblings_are_densities(model):
    """Both integrate to one over the plane; heavy tails to what the last 1e6 m leave out."""
    assert ring_integral(model.offspring_density, 0.0, np.inf) == pytest.approx(1.0, abs=1e-4)
    assert ring_integral(model.sibling_density, 0.0, np.inf) == pytest.approx(1.0, abs=1e-4)


def test_sibling_distribution_is_the_integral_of_the_density(model):
    """H' = 2 pi r h, by quadrature between radii from far below to far above the scale."""
    radii = np.array([0.0, 0.5, 3.0, 10.0, 25.0, 60.0, 150.0, 400.0])
    grown = np.diff(model.sibling_distribution(radii))
    assert model.sibling_distribution(0.0) == pytest.approx(0.0, abs=1e-12)
    for low, high, got in zip(radii, radii[1:], grown, strict=False):
        assert got == pytest.approx(ring_integral(model.sibling_density, low, high), abs=1e-8)


@pytest.mark.parametrize("r", [4.0, 20.0, 45.0])
def test_siblings_differ_by_two_independent_offsets(model, r):
    """h is the density of the offspring folded with itself, by midpoint sums in polar coordinates.

    1,500 distances crowded towards the centre, 400 directions: good to some
    thousandths also where a density ends in a step.
    """
    t = (np.arange(1500) + 0.5) / 1500
    at = 25.0 * t / (1 - t)
    width = 25.0 / (1 - t) ** 2 / 1500
    angles = np.pi * (np.arange(400) + 0.5) / 400
    other = np.sqrt(at[:, None] ** 2 + r * r - 2 * r * at[:, None] * np.cos(angles))
    mean = model.offspring_density(other).mean(axis=1)
    folded = np.sum(2 * np.pi * at * width * model.offspring_density(at) * mean)
    assert folded == pytest.approx(float(model.sibling_density(r)), rel=5e-3, abs=1e-8)


def test_pair_correlation_and_k_follow_from_the_siblings(model):
    """With several levels the excesses add up; the innermost level is that of the siblings."""
    radii = np.linspace(0.5, 200.0, 60)
    g, k = np.ones(60), np.pi * radii**2
    for level in model.levels:
        g = g + level.sibling_density(radii) / level.parent_intensity
        k = k + level.sibling_distribution(radii) / level.parent_intensity
        assert level.intensity == pytest.approx(model.intensity, rel=1e-12)
    np.testing.assert_allclose(model.pair_correlation(radii), g)
    np.testing.assert_allclose(model.k_function(radii), k)
    inner = model.levels[-1]
    assert inner.parent_intensity == model.centre_intensity
    np.testing.assert_allclose(inner.sibling_density(radii), model.sibling_density(radii))
    for low, high in ((0.5, 30.0), (30.0, 200.0)):
        grown = float(model.k_function(high) - model.k_function(low))
        assert grown == pytest.approx(ring_integral(model.pair_correlation, low, high), rel=1e-9)
    np.testing.assert_allclose(np.pi * model.l_function(radii) ** 2, model.k_function(radii))
    assert np.all(model.pair_correlation(radii) >= 1)


def test_offsets_are_drawn_from_the_density(model):
    """Kolmogorov–Smirnov of 2,000 distances and angles, and of the distances of siblings."""
    rng = np.random.default_rng(61)
    offsets = model.draw_offsets(2000, rng)
    distances = np.hypot(*offsets.T)
    grid = np.concatenate([[0.0], np.geomspace(1e-2, 1.01 * distances.max(), 400)])
    steps = [ring_integral(model.offspring_density, a, b) for a, b in itertools.pairwise(grid)]
    cumulative = np.concatenate([[0.0], np.cumsum(steps)])
    assert kstest(distances, lambda d: np.interp(d, grid, cumulative)).pvalue > RARE
    angles = np.arctan2(offsets[:, 1], offsets[:, 0])
    assert kstest(angles, "uniform", (-np.pi, 2 * np.pi)).pvalue > RARE
    apart = np.hypot(*(offsets - model.draw_offsets(2000, rng)).T)
    assert kstest(apart, model.sibling_distribution).pvalue > RARE


@pytest.mark.parametrize("share", [0.5, 0.05, 1e-3])
def test_beyond_the_reach_lie_no_more_than_said(model, share):
    reach = model.reach(share)
    beyond = 1.0 - ring_integral(model.offspring_density, 0.0, reach)
    assert beyond <= share * (1 + 1e-6) + 1e-9
    # the radius that holds half of a cluster, or 95 %, is told to people: it must not be too wide either
    if share >= 0.05:
        assert beyond == pytest.approx(share, rel=0.01)


def test_share_of_the_study_area_is_that_of_the_offspring(model):
    """Against 20,000 drawn offsets each, within four binomial standard errors; half a plane exactly."""
    area = StudyArea(shapely.Polygon([(0, 0), (90, 0), (60, 80), (10, 50)]))
    rng = np.random.default_rng(62)
    centres = np.array([[40.0, 30.0], [0.0, 0.0], [75.0, 60.0], [-20.0, 30.0]])
    shares = model.shares_inside(area, centres - area.origin)
    for centre, share in zip(centres, shares, strict=True):
        drawn = area.contains(centre + model.draw_offsets(20_000, rng)).mean()
        assert drawn == pytest.approx(share, abs=4 * np.sqrt(share * (1 - share) / 20_000) + 1e-6)
    side = 2e5
    half_plane = StudyArea(shapely.box(-side, -side, side, 0.0))
    on_the_edge = model.shares_inside(half_plane, np.zeros((1, 2)) - half_plane.origin)
    assert on_the_edge[0] == pytest.approx(0.5, abs=1e-4)


def test_scale_by_any_name(model):
    kind = type(model)
    assert model.scale == model.parameters[kind.scale_name]
    assert model.spread >= model.scale
    if len(kind.intensity_names) == 1:
        again = kind.of(model.parent_intensity, model.scale, model.mean_offspring)
        assert again.scale == model.scale
        assert again.parent_intensity == model.parent_intensity
        area = StudyArea(shapely.box(0, 0, 50, 50))
        at = np.array([[3.0, 4.0], [-30.0, 10.0]])
        shares = kind.area_shares(area, at, model.scale)
        np.testing.assert_allclose(shares, again.shares_inside(area, at), rtol=1e-12)


def test_unknown_model_is_answered_with_the_legal_ones():
    with pytest.raises(UsageError, match="thomas"):
        model_by_name("toms")
