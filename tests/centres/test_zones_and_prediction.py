"""Numbers per zone, and what parts that nobody walked probably hold."""

from __future__ import annotations

import geopandas as gpd
import numpy as np
import pytest
import shapely
from hand_made import area as hand_made_area
from hand_made import fit_of, scattered_draws

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.centres.locate import locate_centres
from geoclust.centres.prediction import predict_unsurveyed, zone_numbers
from geoclust.errors import CannotTell, UsageError
from geoclust.fitting.convergence import sample_until_converged
from geoclust.fitting.sampling import ChainSetup
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

MODEL = Thomas(parent_intensity=3e-4, sigma=10.0, mean_offspring=5.0)


def layer(polygons, crs="EPSG:25832") -> gpd.GeoDataFrame:
    return gpd.GeoDataFrame({"name": [f"zone {k}" for k in range(len(polygons))]}, geometry=polygons, crs=crs)


def test_zones_that_tile_the_area_add_up():
    area = hand_made_area()
    draws = scattered_draws(area)
    points = area.local_uniform_points(40, np.random.default_rng(1))
    west, south, east, north = area.bounds
    x, y = 0.5 * (west + east), 0.4 * south + 0.6 * north
    zones = layer([shapely.box(west - 5, south - 5, x, y), shapely.box(x, south - 5, east + 9, y),
                   shapely.box(west - 50, y, east + 50, north + 5), shapely.box(0, 0, 10, 10)])  # fmt: skip
    found = zone_numbers(zones, draws, points, area)
    assert list(found.columns) == ["name", "geometry", "area_ha", "points", "centres_mean", "centres_low",
                                   "centres_high"]  # fmt: skip
    assert found["points"].sum() == 40
    assert found["area_ha"].sum() == pytest.approx(area.area / 1e4, rel=1e-9)
    assert found["centres_mean"].sum() == pytest.approx(draws.number_inside.mean(), rel=1e-12)
    # the last zone lies elsewhere
    assert found.iloc[3][["area_ha", "points", "centres_mean", "centres_high"]].tolist() == [0, 0, 0, 0]
    # one zone by direct counting
    part = zones.geometry[1].intersection(area.polygon)
    counts = [shapely.contains_xy(part, *(c + area.origin).T).sum() for chain in draws.centres for c in chain]
    row = found.iloc[1]
    assert row["centres_mean"] == pytest.approx(np.mean(counts))
    assert [row["centres_low"], row["centres_high"]] == np.quantile(counts, [0.025, 0.975]).tolist()
    assert zones.columns.tolist() == ["name", "geometry"], "the layer given stays as it was"


def square(west: float, east: float) -> shapely.Polygon:
    return shapely.box(600_000 + west, 5_700_000, 600_000 + east, 5_700_300)


@pytest.fixture(scope="module")
def sampled():
    area = StudyArea(square(0, 300), "EPSG:25832")
    pattern = draw_pattern(MODEL, area, np.random.default_rng(8))
    setup = ChainSetup(pattern.points, area, MODEL)
    return setup, sample_until_converged(setup, rng=np.random.default_rng(9), chains=4).draws


def test_far_from_all_data_the_prediction_is_the_model(sampled):
    """A part 2 km away: points have mean lambda |B|, centres are Poisson with mean rho |B|.

    Four chains of 250 to 500 independent predictions each: three standard errors
    of the mean over draws. The variance of the number of points is (1 + mu) times
    its mean, less what clusters lose at the boundary, so far above a Poisson's.
    """
    setup, draws = sampled
    away = layer([square(2000, 2400)])
    found = predict_unsurveyed(away, setup, draws, np.random.default_rng(3)).iloc[0]
    size = draws.scale.size
    expected = MODEL.intensity * 400 * 300
    assert found["area_ha"] == pytest.approx(12.0)
    assert found["points_mean"] == pytest.approx(expected, abs=3 * np.sqrt(6 * expected / size))
    centres = MODEL.parent_intensity * 400 * 300
    assert found["centres_mean"] == pytest.approx(centres, abs=3 * np.sqrt(centres / size))
    spread = (found["points_high"] - found["points_low"]) / (2 * 1.96)
    assert np.sqrt(3 * expected) < spread < np.sqrt(7 * expected)


def test_what_was_walked_is_not_predicted(sampled):
    """Parts inside the study area are cut off first; a part that was all walked holds nothing."""
    setup, draws = sampled
    found = predict_unsurveyed(layer([square(100, 200), square(250, 350)]), setup, draws,
                               np.random.default_rng(3))  # fmt: skip
    assert found["area_ha"].tolist() == pytest.approx([0.0, 1.5])
    assert found.iloc[0][["points_mean", "points_low", "points_high", "centres_mean"]].tolist() == [
        0,
        0,
        0,
        0,
    ]


def test_withheld_parts_hold_what_was_predicted():
    """Ten surveys of which the east was hidden: the 95 % interval holds the truth in at least eight.

    With a right interval, fewer than eight of ten happen in 1.2 % of all cases (binomial).
    """
    walked, hidden = StudyArea(square(0, 300), "EPSG:25832"), layer([square(300, 360)])
    whole = StudyArea(square(0, 360), "EPSG:25832")
    held = 0
    for seed in np.random.default_rng(77).spawn(10):
        xy = draw_pattern(MODEL, whole, seed).points + whole.origin
        seen = walked.contains(xy)
        setup = ChainSetup(walked.local(xy[seen]), walked, MODEL)
        draws = sample_until_converged(setup, rng=seed, chains=2, most_rounds=1).draws
        row = predict_unsurveyed(hidden, setup, draws, seed).iloc[0]
        held += row["points_low"] <= (~seen).sum() <= row["points_high"]
    assert held >= 8


def test_clusters_cut_by_the_boundary_carry_news():
    """Twelve points crowd at the middle of the eastern edge, half a cluster of twice as many: by
    symmetry about twelve are expected across it. At the northern end of the edge nothing was found,
    so less than the model's mean is expected there."""
    walked = StudyArea(square(0, 300), "EPSG:25832")
    model = Thomas(parent_intensity=3e-4, sigma=10.0, mean_offspring=20.0)
    half = model.draw_offsets(24, np.random.default_rng(5)) * [-1, 1]
    half[:, 0] = -np.abs(half[:, 0])
    xy = half[:12] + np.array([600_300.0, 5_700_150.0])
    setup = ChainSetup(walked.local(xy), walked, model)
    draws = sample_until_converged(setup, rng=np.random.default_rng(6), chains=2, most_rounds=2).draws
    parts = [shapely.box(600_300, 5_700_110, 600_340, 5_700_190),
             shapely.box(600_300, 5_700_250, 600_310, 5_700_290)]  # fmt: skip
    found = predict_unsurveyed(layer(parts), setup, draws, np.random.default_rng(7))
    plain = model.intensity * np.array([40 * 80, 10 * 40])
    assert 10 < found["points_mean"][0] < 12 + plain[0] + 10
    assert found["points_mean"][1] < 0.7 * plain[1]


@pytest.fixture(scope="module")
def survey() -> Survey:
    area = StudyArea(square(0, 300), "EPSG:25832")
    return Survey(draw_pattern(MODEL, area, np.random.default_rng(8)).points + area.origin, area)


def test_the_whole_map(survey):
    """Sum of the raster, zones and draws agree; the answer does not depend on the number of workers."""
    zones = layer([square(0, 150), square(150, 300)])
    maps = [
        locate_centres(survey, fit_of(MODEL), cell=10.0, zones=zones, unsurveyed=layer([square(300, 360)]),
                       chains=2, rng=4, workers=w)
        for w in (1, 2)
    ]  # fmt: skip
    one, two = maps
    assert np.array_equal(one.mean, two.mean, equal_nan=True)
    assert one.points.equals(two.points)
    assert one.clusters.equals(two.clusters)
    assert one.unsurveyed.drop(columns="geometry").equals(two.unsurveyed.drop(columns="geometry"))
    mean, low, high = one.interval_inside()
    assert np.nansum(one.mean * one.cell_areas / 1e4) == pytest.approx(mean, rel=1e-9)
    assert one.zones["centres_mean"].sum() == pytest.approx(mean, rel=1e-9)
    assert low < mean < high
    assert one.grid.cell == (10.0, 10.0)
    assert one.converged
    assert one.margin == pytest.approx(45.0)
    assert len(one.points) == survey.n
    assert one.clusters["points"].sum() == (one.points["cluster"] > 0).sum()


def test_no_map_that_pretends(survey):
    with pytest.raises(CannotTell, match="The valley is flat") as caught:
        locate_centres(survey, fit_of(MODEL, "flat-valley", "The valley is flat."), rng=1)
    assert caught.value.status == "flat-valley"


def test_bad_arguments(survey):

    with pytest.raises(UsageError, match="chains"):
        locate_centres(survey, fit_of(MODEL), chains=1, rng=1)
    with pytest.raises(UsageError, match="cell"):
        locate_centres(survey, fit_of(MODEL), cell=-1.0, rng=1)
