"""Every edge weight against astropy, direct evaluation, and what complete randomness must give."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from astropy.stats import RipleysKEstimator
from known_areas import NAMED, comb

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.pair_sums import EDGE_WEIGHTS, pair_sums
from geoclust.curves.second_order import SecondOrder, k_function, l_function, pair_correlation
from geoclust.errors import UsageError

WIDE = StudyArea(shapely.box(0, 0, 200, 100))
RADII = np.linspace(3, 60, 20)


def clumps(area: StudyArea = WIDE, seed: int = 1, n: int = 150) -> Survey:
    rng = np.random.default_rng(seed)
    middle = area.uniform_points(1, rng)
    at = np.vstack([area.uniform_points(n, rng), rng.normal(middle, 0.04 * np.sqrt(area.area), (n // 2, 2))])
    return Survey(at[area.contains(at)], area)


@pytest.mark.parametrize(
    ("ours", "theirs"),
    [
        ("unweighted", "none"),
        ("translation", "translation"),
        ("rigid-motion", "ohser"),
        ("minus-sampling", "var-width"),
    ],
)
def test_rectangle_as_astropy_says(ours: str, theirs: str):
    # few enough points for the set covariance of every pair to be exact
    survey = clumps(n=80)
    # astropy compares with <, and with these points no pair lies on a radius
    estimator = RipleysKEstimator(area=20_000, x_min=0, x_max=200, y_min=0, y_max=100)
    radii = RADII[RADII < 49] if ours == "minus-sampling" else RADII
    expected = estimator(survey.xy, radii=radii, mode=theirs)
    if theirs == "var-width":
        # it divides by the number of centres deeper than r, not by what is expected of it, and
        # by n/|W|, where (n - 1)/|W| is unbiased
        deep = survey.area.distance_to_boundary(survey.xy)
        counted = np.array([np.sum(deep > r) for r in radii])
        eroded = (200 - 2 * radii) * (100 - 2 * radii)
        expected = expected * counted / (survey.n - 1) * 20_000 / eroded
    assert np.allclose(k_function(survey, radii, ours).values, expected, rtol=1e-7)


def by_hand(survey: Survey, edge_weight: str, v: np.ndarray) -> tuple[np.ndarray, np.ndarray, float]:
    """Ordered pairs of a survey: distances, weights that make K a plain sum, and its scale."""
    i, j = np.nonzero(~np.eye(survey.n, dtype=bool))
    shift = survey.xy[j] - survey.xy[i]
    d = np.hypot(*shift.T)
    area = survey.area
    w = v[i] * v[j]
    if edge_weight == "translation":
        w = w * area.area / area.set_covariance(shift)
    elif edge_weight == "rigid-motion":
        # a table of 400 exact values, read where a test needs it
        r = np.linspace(0, 45, 400)
        w = w * np.interp(d, r, area.area / area.isotropic_set_covariance(r))
    elif edge_weight == "isotropic":
        w = w / area.circle_shares(survey.xy[i], d)
    elif edge_weight == "minus-sampling":
        deep = area.distance_to_boundary(survey.xy)
        w = np.where(deep[i] >= d, w, 0.0)
        r = np.linspace(0, 45, 200)
        eroded = [area.polygon.buffer(-x, quad_segs=64).area for x in r]
        near = (w > 0) & (d < 45)
        w[near] *= area.area / np.interp(d[near], r, eroded)
    return d, w, area.area / (v.sum() ** 2 - (v * v).sum())


@pytest.mark.parametrize("edge_weight", EDGE_WEIGHTS)
@pytest.mark.parametrize("varying", [False, True])
def test_g_and_k_by_direct_evaluation(edge_weight: str, varying: bool):
    area = StudyArea(shapely.transform(NAMED["sample reserve"](), lambda at: at * 0.2))
    survey = clumps(area, n=120)
    v = np.exp(np.random.default_rng(3).normal(0, 0.5, survey.n)) * 5e-4 if varying else np.ones(survey.n)
    intensity = 1 / v if varying else None
    d, w, scale = by_hand(survey, edge_weight, v)
    radii, b = np.linspace(2, 40, 15), 3.0
    g = [
        scale * np.sum(w * np.where(np.abs(r - d) < b, 0.75 / b * (1 - ((r - d) / b) ** 2), 0) / d)
        / (2 * np.pi * (0.5 + 0.75 * (min(r / b, 1) - min(r / b, 1) ** 3 / 3)))
        for r in radii
    ]  # fmt: skip
    found = pair_correlation(survey, radii, b, edge_weight, intensity_at_points=intensity)
    assert np.allclose(found.values, g, rtol=3e-4)
    k = np.array([scale * w[d <= r].sum() for r in radii])
    if edge_weight == "minus-sampling":
        deep = area.distance_to_boundary(survey.xy)
        i, j = np.nonzero(~np.eye(survey.n, dtype=bool))
        k = [scale * np.sum((v[i] * v[j])[(d <= r) & (deep[i] >= r)]) for r in radii]
        k = np.array(k) * [area.area / area.polygon.buffer(-r, quad_segs=64).area for r in radii]
    curve = k_function(survey, radii, edge_weight, intensity_at_points=intensity)
    assert np.allclose(curve.values, k, rtol=3e-4)
    assert curve.edge_weight == edge_weight
    root = l_function(survey, radii, edge_weight, intensity_at_points=intensity)
    assert np.allclose(root.values, np.sqrt(curve.values / np.pi))


def test_translation_from_a_table_or_pair_by_pair():
    area = StudyArea(NAMED["ragged reserve"]())
    xy = area.local(area.uniform_points(1_500, 1))
    limits = np.linspace(10, 150, 15)
    found = pair_sums(xy, area, limits, edge_weight="translation").moments
    d = np.hypot(*(xy[:, None] - xy[None]).transpose(2, 0, 1))
    i, j = np.nonzero(np.triu(d <= limits[-1], 1))
    assert len(i) > 20_000
    weight = 2 * area.area / area.set_covariance(xy[j] - xy[i])
    exact = np.histogram(d[i, j], np.append(0, limits), weights=weight)[0]
    assert np.allclose(found[:, 1], exact, rtol=1e-4)
    assert area.shift_table(150.0).error < 1e-4


@pytest.mark.parametrize("polygon", [comb(), shapely.box(0, 0, 90, 40)])
def test_tables_know_their_error(polygon):
    area = StudyArea(polygon)
    table = area.shift_table(60.0, isotropic=True)
    r = np.linspace(0, 60, 501)
    exact = area.isotropic_set_covariance(r) / area.area
    read = np.interp(r, np.linspace(0, 60, len(table.values)), table.values[:, 0])
    assert np.abs(read - exact).max() < max(3 * table.error, 1e-6)


@pytest.mark.parametrize("edge_weight", EDGE_WEIGHTS)
def test_tiles_add_up(edge_weight: str):
    area = StudyArea(NAMED["sample reserve"]())
    survey = clumps(area, seed=5, n=1500)
    xy = survey.local_xy
    limits = np.linspace(5, 90, 18)
    v = np.random.default_rng(2).uniform(0.5, 2, survey.n)
    whole = pair_sums(xy, area, limits, edge_weight=edge_weight, point_weights=v)
    # quarters of the survey, each with the points within reach of it
    tile = (xy[:, 0] > 0).astype(int) + 2 * (xy[:, 1] > 50)
    total = None
    for t in range(4):
        lead = tile == t
        low, high = xy[lead].min(0) - 90, xy[lead].max(0) + 90
        kept = np.all((xy >= low) & (xy <= high), axis=1)
        part = pair_sums(
            xy[kept], area, limits, edge_weight=edge_weight, point_weights=v[kept], first=lead[kept]
        )
        total = part if total is None else total + part
    # a table may serve the whole where pairs of a tile are few enough to be exact
    tolerance = 1e-4 if edge_weight == "translation" else 1e-10
    assert np.allclose(total.moments, whole.moments, rtol=tolerance)
    if edge_weight == "minus-sampling":
        assert np.allclose(total.border, whole.border)


@pytest.mark.parametrize("edge_weight", EDGE_WEIGHTS)
def test_same_bits_for_any_number_of_workers(edge_weight: str):
    area = StudyArea(NAMED["sample reserve"]())
    xy = area.local(area.uniform_points(20_000, 6))
    limits = np.linspace(2, 40, 20)
    one = pair_sums(xy, area, limits, edge_weight=edge_weight, workers=1)
    other = pair_sums(xy, area, limits, edge_weight=edge_weight, workers=4)
    assert np.array_equal(one.moments, other.moments)


@pytest.mark.parametrize("edge_weight", EDGE_WEIGHTS)
def test_constant_intensity_of_any_level_is_the_homogeneous_curve(edge_weight: str):
    survey = clumps()
    radii = np.linspace(5, 40, 8)
    plain = k_function(survey, radii, edge_weight).values
    for level in (survey.intensity, 3.7):
        found = k_function(survey, radii, edge_weight, intensity_at_points=np.full(survey.n, level)).values
        assert np.allclose(found, plain, rtol=1e-12)


@pytest.mark.parametrize("edge_weight", [w for w in EDGE_WEIGHTS if w != "unweighted"])
def test_inhomogeneous_poisson_has_k_of_complete_randomness(edge_weight: str):
    # thinned to an intensity that rises sevenfold across; the true intensity as weights
    area = StudyArea(NAMED["ragged reserve"]())
    rng = np.random.default_rng(9)
    minx, _, maxx, _ = area.bounds
    radii = np.array([40.0, 80.0, 160.0])
    runs = 60
    k = np.empty((runs, 3))
    for s in range(runs):
        xy = area.local_uniform_points(500, rng)
        keep = np.exp(-2 * (xy[:, 0] + area.origin[0] - minx) / (maxx - minx))
        kept = rng.random(500) < keep
        measured = SecondOrder.of_points(
            xy[kept], area, radii, None, edge_weight, point_weights=1 / keep[kept]
        )
        k[s] = measured.k_values()
    error = (k.mean(0) - np.pi * radii**2) / (k.std(0, ddof=1) / np.sqrt(runs))
    # four weights at three radii: one false alarm in a hundred at most
    assert np.abs(error).max() < 3.6


def test_minus_sampling_where_no_centre_can_be_deep_enough():
    survey = clumps()
    curve = k_function(survey, [10.0, 45.0, 55.0], "minus-sampling")
    assert np.isfinite(curve.values[:2]).all()
    assert np.isnan(curve.values[2])


def test_translation_where_the_study_area_misses_its_copy():
    # a strip 10 wide: beyond that, only shifts within arcsin(10/r) of its direction leave a pair
    area = StudyArea(shapely.box(0, 0, 1000, 10))
    measured = SecondOrder.of_points(area.local_uniform_points(50, np.random.default_rng(1)), area,
                                     np.array([8.0, 20.0, 40.0]), None, "translation")  # fmt: skip
    expected = [1.0, 2 / np.pi * np.arcsin(10 / 20), 2 / np.pi * np.arcsin(10 / 40)]
    assert np.allclose(measured.window / area.area, expected, atol=0.02)


@pytest.mark.parametrize(
    ("intensity", "said"),
    [([1.0], "one value a point"), (0.0, "positive and finite; got 0.0"), (np.nan, "positive and finite")],
)
def test_bad_intensity(intensity, said: str):
    survey = clumps()
    given = intensity if isinstance(intensity, list) else np.full(survey.n, intensity)
    with pytest.raises(UsageError, match=said):
        k_function(survey, [5.0], intensity_at_points=given)


def test_unknown_edge_weight():
    with pytest.raises(UsageError, match="one of isotropic, translation, rigid-motion, minus-sampling, unw"):
        k_function(clumps(), [5.0], "none")
