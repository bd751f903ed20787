"""Palm and composite likelihood: the formulas, the search, and recovery of known parameters."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from itertools import pairwise

import numpy as np
import numpy.typing as npt
import pytest
import shapely
from scipy.integrate import quad
from scipy.optimize import differential_evolution
from scipy.special import iv

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import CannotTell, UsageError
from geoclust.fitting.fit import fit_clusters
from geoclust.fitting.likelihood_fits import FORMS, fit_pairs
from geoclust.fitting.likelihood_search import Search, peaks
from geoclust.fitting.moments import ContrastChoices
from geoclust.fitting.pair_likelihoods import COMPOSITE, PALM, PairLikelihood
from geoclust.fitting.weighed_areas import mean_of_products, mean_round_points
from geoclust.models.catalogue import MODELS
from geoclust.models.matern_cluster import MaternCluster
from geoclust.models.nested_thomas import NestedThomas
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas
from geoclust.models.variance_gamma import VarianceGamma

RAGGED = shapely.Polygon(
    [(0, 0), (60, -8), (110, 5), (150, 40), (120, 60), (150, 95), (90, 120), (70, 80), (40, 118), (-5, 60)],
    [[(60, 30), (90, 25), (85, 50), (62, 48)]],
)
PLOT = StudyArea(shapely.box(0, 0, 600, 600))
SMALL = StudyArea(shapely.box(0, 0, 300, 300))
TRUTH = Thomas(parent_intensity=2e-4, sigma=10.0, mean_offspring=5.0)


def share_of_circle(polygon: shapely.Polygon, x: float, y: float, r: float) -> float:
    """Arcs between the crossings of a circle with every edge, kept if shapely finds their middle inside."""
    turns = []
    for ring in (polygon.exterior, *polygon.interiors):
        at = shapely.get_coordinates(ring) - [x, y]
        step = np.diff(at, axis=0)
        a, b, c = (step**2).sum(1), 2 * (at[:-1] * step).sum(1), (at[:-1] ** 2).sum(1) - r * r
        root = np.sqrt(np.maximum(b * b - 4 * a * c, 0.0))
        for t in ((-b - root) / (2 * a), (-b + root) / (2 * a)):
            hit = (t >= 0) & (t < 1) & (root > 0)
            turns.append(np.arctan2(*(at[:-1] + t[:, None] * step)[hit].T[::-1]))
    cuts = np.unique(np.concatenate(turns))
    if not len(cuts):
        return float(shapely.contains_xy(polygon, x + r, y))
    ends = np.append(cuts[1:], cuts[0] + 2 * np.pi)
    middle = 0.5 * (cuts + ends)
    inside = shapely.contains_xy(polygon, x + r * np.cos(middle), y + r * np.sin(middle))
    return float(np.sum((ends - cuts)[inside]) / (2 * np.pi))


def kinks(polygon: shapely.Polygon, x: float, y: float, r_max: float) -> list[float]:
    """Radii at which a circle meets a vertex or touches an edge: its share has a root there."""
    here = shapely.Point(x, y)
    out = set()
    for ring in (polygon.exterior, *polygon.interiors):
        at = shapely.get_coordinates(ring)
        out |= set(np.hypot(*(at - [x, y]).T))
        out |= {here.distance(shapely.LineString(edge)) for edge in pairwise(at)}
    return sorted(k for k in out if 0 < k < r_max)


def integral(f, cuts: list[float], r_max: float) -> float:
    """Adaptive quadrature from kink to kink, with a substitution that takes the roots at both ends."""
    ends = [0.0, *cuts, r_max]
    total = 0.0
    for a, b in pairwise(ends):
        if b - a > 1e-9:
            half = 0.5 * (b - a)
            total += quad(
                lambda u, a=a, half=half: f(a + half * (1 - np.cos(u))) * half * np.sin(u), 0, np.pi,
                epsabs=1e-9, epsrel=1e-9,
            )[0]  # fmt: skip
    return total


def by_double_loop(model, xy: np.ndarray, r_max: float, level: float) -> tuple[float, int]:
    """Sum of ln(level g) over ordered pairs, with g = 1 without a model, and their number."""
    total, count = 0.0, 0
    for i in range(len(xy)):
        for j in range(len(xy)):
            d = float(np.hypot(*(xy[i] - xy[j])))
            if i != j and d < r_max:
                total += np.log(level * (1.0 if model is None else float(model.pair_correlation(d))))
                count += 1
    return total, count


@pytest.mark.parametrize("kind", [Thomas, MaternCluster])
def test_palm_likelihood_is_its_formula(kind):
    """Tanaka, Ogata & Stoyan 2008, with circle shares by shapely and integrals by QUADPACK.

    To 1e-6 of the sums, which nearly cancel.
    """
    area, r_max = StudyArea(RAGGED), 40.0
    xy = area.uniform_points(12, 4)
    model = kind.of(4e-4, 12.0, 5.0)
    level = len(xy) / RAGGED.area

    def excess(r: float, x: float, y: float) -> float:
        return (float(model.pair_correlation(r)) - 1) * 2 * np.pi * r * share_of_circle(RAGGED, x, y, r)

    logs = by_double_loop(model, xy, r_max, level)[0] - by_double_loop(None, xy, r_max, level)[0]
    more = sum(
        integral(lambda r, x=x, y=y: excess(r, x, y), kinks(RAGGED, x, y, r_max), r_max) for x, y in xy
    )
    found = PairLikelihood.of_points(PALM, area.local(xy), area, 0.0, r_max, r_max)
    round_them = [
        shapely.Point(x, y).buffer(r_max, quad_segs=20_000).intersection(RAGGED).area for x, y in xy
    ]
    assert found.expected.sum() == pytest.approx(level * sum(round_them), rel=1e-6)
    assert found.of_model(model) == pytest.approx(logs - level * more, abs=1e-6 * abs(logs))


@pytest.mark.parametrize("kind", [Thomas, MaternCluster])
def test_composite_likelihood_is_its_formula(kind):
    """Guan 2006, with the set covariance of a rectangle in closed form (Stoyan & Stoyan 1994).

    To 1e-6 of the sums, which nearly cancel.
    """
    a, b, r_max = 90.0, 60.0, 40.0
    area = StudyArea(shapely.box(0, 0, a, b))
    xy = area.uniform_points(25, 5)
    model = kind.of(4e-4, 10.0, 5.0)

    def covariance(r: float) -> float:
        return a * b - 2 * r * (a + b) / np.pi + r * r / np.pi

    def inside(g) -> float:
        return quad(
            lambda r: float(g(r)) * 2 * np.pi * r * covariance(r), 0, r_max, points=[20.0], epsrel=1e-11
        )[0]

    logs, count = by_double_loop(model, xy, r_max, 1.0)
    found = PairLikelihood.of_points(COMPOSITE, area.local(xy), area, 0.0, r_max, r_max)
    assert found.counts.sum() == count
    ratio = inside(model.pair_correlation) / inside(lambda r: 1.0)
    assert found.of_model(model) == pytest.approx(logs - count * np.log(ratio), abs=1e-6 * abs(logs))


def test_palm_likelihood_far_from_the_edge_in_closed_form():
    """Without edges the integral is pi R² + (1 - exp(-R²/4 sigma²))/rho (Tanaka, Ogata & Stoyan 2008)."""
    area = StudyArea(shapely.box(-500, -500, 500, 500))
    xy = np.random.default_rng(2).normal(0, 30, (40, 2))
    r_max, level = 60.0, 40 / 1e6
    found = PairLikelihood.of_points(PALM, area.local(xy), area, 0.0, r_max, r_max)
    logs, _ = by_double_loop(TRUTH, xy, r_max, 1.0)
    excess = -np.expm1(-(r_max**2) / (4 * TRUTH.sigma**2)) / TRUTH.parent_intensity
    assert found.expected.sum() == pytest.approx(level * 40 * np.pi * r_max**2, rel=1e-12)
    assert found.of_model(TRUTH) == pytest.approx(logs - level * 40 * excess, rel=1e-6)


def test_coincident_and_near_points_are_left_out():
    area = StudyArea(shapely.box(0, 0, 100, 100))
    xy = area.local(np.array([[50.0, 50.0], [50.0, 50.0], [53.0, 50.0], [50.0, 60.0]]))
    # ordered pairs: 4 of 3 m, 4 of 10 m, 2 of √109 m, 2 of nothing
    assert PairLikelihood.of_points(PALM, xy, area, 0.0, 20.0, 20.0).counts.sum() == 10
    beyond = PairLikelihood.of_points(PALM, xy, area, 5.0, 20.0, 20.0)
    assert beyond.counts.sum() == 6
    # and no pairs are expected there either: rings of 5 to 20 m round points deep inside
    assert beyond.expected.sum() == pytest.approx(4 / 1e4 * 4 * np.pi * (400 - 25), rel=1e-9)


def test_shorter_range_of_the_same_pairs():
    points = surveys()[0]
    for form in FORMS:
        whole = PairLikelihood.of_points(form, points, PLOT, 0.0, 150.0, 150.0)
        part = whole.up_to(60.0)
        assert 59.0 < part.r_max <= 60.0
        again = PairLikelihood.of_points(form, points, PLOT, 0.0, part.r_max, 150.0)
        assert part.of_model(TRUTH) == pytest.approx(again.of_model(TRUTH), rel=1e-4)
        # eight classes as one: good enough to search with
        assert part.coarser().of_model(TRUTH) == pytest.approx(part.of_model(TRUTH), rel=1e-3)


@cache
def surveys() -> list[np.ndarray]:
    """Forty surveys of the same process, local coordinates."""
    return [draw_pattern(TRUTH, PLOT, seed).points for seed in np.random.default_rng(2008).spawn(40)]


@pytest.mark.parametrize("form", FORMS)
def test_score_is_nothing_on_average(form):
    """At the truth the slope of the likelihood in rho and sigma has mean zero (both papers).

    The mean over forty surveys within four of its own standard errors; 30 % beside the truth it is not.
    """
    slopes = []
    for points in surveys():
        pairs = PairLikelihood.of_points(form, points, PLOT, 0.0, 40.0, 40.0)

        def at(rho: float, sigma: float, pairs=pairs) -> float:
            return pairs.of_model(Thomas(2e-4 * rho, 10.0 * sigma, 5.0))

        slopes.append(
            [at(1.01, 1) - at(0.99, 1), at(1, 1.01) - at(1, 0.99), at(1.31, 1) - at(1.29, 1),
             at(1, 1.31) - at(1, 1.29)]
        )  # fmt: skip
    mean = np.mean(slopes, axis=0)
    error = np.std(slopes, axis=0, ddof=1) / np.sqrt(len(slopes))
    assert np.all(np.abs(mean[:2]) < 4 * error[:2])
    assert np.all(np.abs(mean[2:]) > 4 * error[2:])


@pytest.mark.parametrize("form", FORMS)
def test_recovery(form):
    """Medians over forty surveys within three standard errors of the truth.

    The standard error of a median is 1.2533 standard deviations over the root of their number; here
    of the logarithms, as ratios are what the errors are.
    """
    fits = [fit_pairs(Thomas, form, points, PLOT, ContrastChoices()) for points in surveys()]
    assert not any(f.on_bound for f in fits)
    for name, truth in TRUTH.parameters.items():
        logs = np.log([f.model.parameters[name] / truth for f in fits])
        assert abs(np.median(logs)) < 3 * 1.2533 * logs.std(ddof=1) / np.sqrt(len(logs)), name


@pytest.mark.parametrize("form", FORMS)
def test_the_search_ends_at_the_global_maximum(form):
    pairs = PairLikelihood.of_points(form, surveys()[1], PLOT, 0.0, 60.0, 60.0)
    intensity = len(surveys()[1]) / PLOT.area
    search = Search.over(Thomas, intensity, PLOT.area, 0.1, 60.0)
    axes, grid = search.grid(pairs.coarser())
    starts = [np.array([axis[k] for axis, k in zip(axes, at, strict=True)]) for at in peaks(grid)[:6]]
    theta, value = search.best(pairs, starts)
    best = differential_evolution(
        lambda t: -pairs.of_model(search.model_at(t)), list(zip(search.low, search.high, strict=True)),
        seed=1, tol=1e-10, popsize=20, maxiter=100,
    )  # fmt: skip
    assert value == pytest.approx(-best.fun, rel=1e-8)
    np.testing.assert_allclose(theta, best.x, atol=1e-4)
    # a node of the grid is what the likelihood says there
    a, b = 30, 40
    node = search.model_at(np.array([axes[0][a], axes[1][b]]))
    assert grid[a, b] == pytest.approx(pairs.coarser().of_model(node), rel=1e-9)


@dataclass(frozen=True)
class _Case:
    model: object
    names: tuple[str, ...]


@pytest.mark.parametrize(
    "case",
    [
        *(_Case(kind.of(2e-4, 12.0, 6.0), ("parent_intensity", kind.scale_name)) for kind in MODELS.values()
          if len(kind.described) == 3),
        _Case(VarianceGamma(2e-4, 9.0, 0.5, 6.0), ("parent_intensity", "scale", "shape")),
        _Case(NestedThomas(5e-5, 40.0, 4e-4, 5.0, 6.0),
              ("outer_intensity", "inner_intensity", "outer_sigma", "inner_sigma")),
    ],
    ids=lambda case: case.model.name,
)  # fmt: skip
def test_expected_pairs_give_back_the_parameters(case):
    """Where the pairs are just those that a model lets expect, the likelihood is highest at that model."""
    pairs = PairLikelihood.of_points(PALM, surveys()[0], PLOT, 0.0, 150.0, 150.0)
    intensity = case.model.intensity
    search = Search.over(type(case.model), intensity, PLOT.area, 0.5, 150.0)
    assert search.names == case.names
    scaled = intensity * PLOT.area / len(surveys()[0])
    expected = pairs.expected * scaled**2
    exact = PairLikelihood(
        PALM,
        pairs.nodes,
        expected * case.model.pair_correlation(pairs.nodes),
        pairs.nodes,
        expected,
        pairs.limits,
    )
    axes, grid = search.grid(exact.coarser())
    starts = [np.array([axis[k] for axis, k in zip(axes, at, strict=True)]) for at in peaks(grid)[:6]]
    theta, value = search.best(exact, starts)
    assert value == pytest.approx(exact.of_model(case.model), rel=1e-6)
    assert search.on_bound(theta) == ()
    for name, truth in case.model.parameters.items():
        assert search.model_at(theta).parameters[name] == pytest.approx(truth, rel=0.02), name


class _Exponential:
    """Intensity that grows exponentially eastwards."""

    def __init__(self, area: StudyArea) -> None:
        self.area = area

    def at(self, xy: npt.ArrayLike) -> np.ndarray:
        return 1e-3 * np.exp(np.asarray(xy)[:, 0] / 150.0)


def test_means_of_a_varying_intensity():
    """Round points far from the edge a Bessel function, of pairs in a rectangle an integral in closed form.

    The mean of exp(x/s) over a disc of radius r is 2 I₁(r/s) s/r (Abramowitz & Stegun 1964, 9.6). Of exp(x/s)
    at both ends of a shift h in a rectangle a by b, the integral is (b - |h₂|) exp(h₁/s) (s/2)
    (exp(2 (a - h₁)/s) - 1) for h₁ >= 0, summed over directions and distances.
    """
    a, b, s = 500.0, 400.0, 150.0
    area = StudyArea(shapely.box(0, 0, a, b))
    intensity = _Exponential(area)
    radii = np.array([3.0, 10.0, 30.0, 60.0])
    xy = np.random.default_rng(3).uniform([70, 70], [430, 330], (200, 2))
    z = radii / s
    exact = np.mean(intensity.at(xy)) * 2 * iv(1, z) / z
    np.testing.assert_allclose(mean_round_points(intensity, area.local(xy), radii), exact, rtol=2e-3)

    def both(h: np.ndarray, phi: np.ndarray) -> np.ndarray:
        across, up = abs(h * np.cos(phi)), abs(h * np.sin(phi))
        return 1e-6 * (b - up) * np.exp(across / s) * s / 2 * np.expm1(2 * (a - across) / s)

    node, weight = np.polynomial.legendre.leggauss(30)
    # the cells are 2.24 m wide
    for r, tolerance in zip(radii, (3e-3, 2e-3, 5e-4, 5e-4), strict=True):
        turn = np.pi / 4 * (node + 1)
        h, phi = np.meshgrid(r * (node + 1) / 2, turn, indexing="ij")
        each = weight[:, None] * weight * h
        covariance = (a - h * np.cos(phi)) * (b - h * np.sin(phi))
        exact = np.sum(each * both(h, phi)) / np.sum(each * covariance)
        assert mean_of_products(intensity, np.array([r, 61.0]))[0] == pytest.approx(exact, rel=tolerance)


@pytest.fixture(scope="module")
def survey() -> Survey:
    return Survey(surveys()[2] + PLOT.origin, PLOT)


@pytest.mark.parametrize("form", FORMS)
def test_whole_fit(form):
    """Intervals, verdict, curve and surface, whatever the number of workers."""
    points = draw_pattern(TRUTH, SMALL, np.random.default_rng(9)).points
    survey = Survey(points + SMALL.origin, SMALL)
    fit, other = (fit_clusters(survey, method=form, bootstrap=39, rng=3, workers=w) for w in (1, 3))
    assert fit.parameters == other.parameters
    assert fit.intervals == other.intervals
    assert fit.choices == other.choices
    assert np.array_equal(fit.surface.loss, other.surface.loss)
    assert fit.ok, fit.reason
    assert fit.method == form
    assert fit.seed == 3
    for name, value in fit.parameters.items():
        low, high = fit.intervals[name]
        assert low < value < high
    # mean offspring follows from rho and the number of points
    assert fit.model.intensity == pytest.approx(survey.intensity, rel=1e-12)
    assert fit.choices["range_chosen_by"] == "first fit"
    assert fit.curve.function == "g"
    assert fit.curve.radii[-1] == fit.choices["r_max_m"]
    assert fit.fitted.shape == fit.curve.values.shape
    # the lowest place of the surface is next to the estimate; the level holds 95 % of the draws
    surface = fit.surface
    a, b = np.unravel_index(np.argmin(surface.loss), surface.loss.shape)
    for axis, k, name in (
        (surface.parent_intensities, a, "parent_intensity"), (surface.scales, b, "sigma")
    ):  # fmt: skip
        assert axis[max(k - 1, 0)] <= fit.parameters[name] <= axis[min(k + 1, len(axis) - 1)]
    assert 0 < surface.level < np.quantile(surface.loss, 0.5)


def test_range_is_settable_and_reported(survey):
    for form in FORMS:
        fit = fit_clusters(survey, method=form, bootstrap=0, rng=3, r_max=70.0, r_min=1.0)
        assert (fit.choices["r_min_m"], fit.choices["r_max_m"]) == (1.0, 70.0)
        assert fit.choices["range_chosen_by"] == "user"
        assert fit.surface.level is None
        assert fit.intervals == {}


def test_one_level_of_clusters_is_not_taken_for_two(survey):
    fit = fit_clusters(survey, "nested-thomas", method=PALM, bootstrap=39, level_simulations=39, rng=1)
    assert fit.status == "one-level"
    assert fit.choices["second_level_p_value"] > 0.05
    assert fit.intervals == {}
    assert fit.surface is None


def test_random_points_are_no_clusters():
    survey = Survey(PLOT.uniform_points(150, 1), PLOT)
    for form in FORMS:
        fit = fit_clusters(survey, method=form, bootstrap=0, rng=1)
        assert fit.status == "no-clustering"
        assert "chance alone" in fit.reason


@pytest.mark.parametrize(
    ("choices", "said"),
    [
        ({"function": "K"}, "function must be left out for palm"),
        ({"exponent": 0.5}, "exponent must be left out for palm"),
        ({"distance_weight": 1.0}, "distance_weight must be left out for palm"),
        ({"background": True}, "background must be false for palm"),
        ({"bootstrap": 5}, "39"),
        ({"r_max": 0.0}, "r_max"),
        ({"r_max": 2000.0}, "width of the study area"),
        ({"r_min": 120.0}, "r_min"),
        ({"r_min": 80.0, "r_max": 70.0}, "r_min"),
        ({"method": "pairs"}, "palm, composite-likelihood"),
    ],
)
def test_bad_arguments(survey, choices, said):
    with pytest.raises(UsageError, match=said):
        fit_clusters(survey, **{"method": PALM, "rng": 1, **choices})


def test_too_few_points():
    with pytest.raises(CannotTell, match="12 points"):
        fit_clusters(Survey(PLOT.uniform_points(12, 1), PLOT), method=COMPOSITE, rng=1)
