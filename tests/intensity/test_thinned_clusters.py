"""Clusters beyond terrain: patterns, fits, centres and predictions with offspring thinned place by place."""

from __future__ import annotations

from functools import cache

import geopandas as gpd
import numpy as np
import pyproj
import pytest
import shapely
from affine import Affine

import geoclust as gc
from geoclust.fitting._table import share_at
from geoclust.fitting.moments import ContrastChoices, factors_of, fit_points
from geoclust.fitting.posterior import default_priors, sample_posterior
from geoclust.fitting.shares import share_table
from geoclust.intensity.covariates import RasterCovariate
from geoclust.intensity.loglinear import LogLinearIntensity, fit_intensity
from geoclust.layers.raster import Grid
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

UTM = pyproj.CRS("EPSG:25832")
AREA = gc.StudyArea(shapely.box(0, 0, 800, 800) - shapely.box(300, 300, 420, 400), UTM)
MODEL = Thomas(parent_intensity=100 / 640_000, sigma=10.0, mean_offspring=7.0)
SLOPE = -3.0


def gradient() -> RasterCovariate:
    """From 0 in the west to 1 in the east and on to 1.25 beyond the study area, in 10 m cells."""
    grid = Grid(Affine(10, 0, 0, 0, -10, 800), (80, 100), UTM)
    return RasterCovariate("gradient", np.tile((np.arange(100) + 0.5) / 80, (80, 1)), grid, UTM)


@cache
def truth() -> LogLinearIntensity:
    """Clusters thinned by exp(-3 gradient), with the right mean."""
    start = fit_intensity(gc.Survey(AREA.uniform_points(500, 1), AREA), [gradient()], clustered=False)
    values = np.exp(SLOPE * start.quadrature.values[:, 0])
    areas = start.quadrature.cells.areas
    level = float(np.log(MODEL.intensity * areas.sum() / (values @ areas)))
    return LogLinearIntensity(
        AREA, start.quadrature, {"intercept": level, "gradient": SLOPE}, {}, None, start.points, 0, "poisson"
    )


@cache
def surveyed() -> tuple[gc.Survey, LogLinearIntensity]:
    pattern = draw_pattern(MODEL, AREA, np.random.default_rng(31), truth())
    survey = gc.Survey(pattern.points + AREA.origin, AREA)
    return survey, fit_intensity(survey, [gradient()])


def test_patterns_follow_the_intensity_and_centres_do_not():
    rng = np.random.default_rng(5)
    counts, outer = np.zeros(8), np.zeros(8)
    runs = 150
    for _ in range(runs):
        pattern = draw_pattern(MODEL, AREA, rng, truth())
        assert AREA.local_contains(pattern.points).all()
        counts += np.histogram(pattern.points[:, 0] + AREA.origin[0], 8, (0, 800))[0]
        inside = pattern.centres + AREA.origin
        outer += np.histogram(inside[(inside[:, 1] > 0) & (inside[:, 1] < 800), 0], 8, (0, 800))[0]
    cells = truth().quadrature.cells
    expected = np.bincount(
        (cells.centres[:, 0] // 100).astype(int), weights=truth().cell_values * cells.areas, minlength=8
    )
    # numbers of clustered points: variance 1 + mean offspring times that of single points at most
    error = np.sqrt(expected * (1 + 20) / runs)
    assert np.all(np.abs(counts / runs - expected) < 4 * error)
    assert np.all(np.abs(outer / runs - 12.5) < 4 * np.sqrt(12.5 / runs))


def test_shares_are_those_of_the_thinned_offspring():
    """Against integration of the kernel times the relative intensity over the study area."""
    table = share_table(Thomas, AREA, 45.0, (10.0, 10.0), intensity=truth())
    relative = truth()

    def exact(x: float, y: float) -> float:
        # places in the middle of squares of one metre
        across = np.arange(-60, 60) + 0.5
        at = np.stack(np.meshgrid(x + across, y + across), axis=-1).reshape(-1, 2)
        inside = AREA.contains(at)
        d2 = ((at - [x, y]) ** 2).sum(axis=1)
        weight = np.exp(-d2 / 200.0) / (2 * np.pi * 100.0)
        return float(np.sum(weight[inside] * relative.relative(at[inside] - AREA.origin)))

    for x, y in ((400.0, 600.0), (5.0, 120.0), (-15.0, 300.0), (302.0, 350.0), (795.0, 799.0)):
        found = share_at(table, x - AREA.origin[0], y - AREA.origin[1], 10.0)
        assert found == pytest.approx(exact(x, y), rel=0.02, abs=1e-3)


def test_a_constant_intensity_changes_nothing():
    survey, _ = surveyed()
    constant = fit_intensity(survey, clustered=False)
    plain = share_table(Thomas, AREA, 45.0, (10.0, 10.0))
    thinned = share_table(Thomas, AREA, 45.0, (10.0, 10.0), intensity=constant)
    assert np.allclose(plain.values, thinned.values, atol=1e-9)
    fits = [
        fit_points(Thomas, survey.local_xy, AREA, ContrastChoices(), factors=factors_of(i)).fit.model
        for i in (None, constant)
    ]
    for name, value in fits[0].parameters.items():
        assert fits[1].parameters[name] == pytest.approx(value, rel=1e-6)


def test_contrast_on_the_weighted_curve_finds_the_clusters():
    survey, intensity = surveyed()
    plain = gc.fit_clusters(survey, method="minimum-contrast", bootstrap=0, rng=1)
    fit = gc.fit_clusters(survey, method="minimum-contrast", bootstrap=39, intensity=intensity, rng=1)
    assert fit.intensity is intensity
    assert fit.choices["clustering_p_value"] == pytest.approx(1 / 200)
    for name, value in MODEL.parameters.items():
        assert fit.parameters[name] == pytest.approx(value, rel=0.35)
        low, high = fit.intervals[name]
        assert low < fit.parameters[name] < high
    # the gradient, not allowed for, passes as few clusters
    assert plain.parameters["parent_intensity"] < 0.8 * fit.parameters["parent_intensity"]


def test_posterior_of_thinned_clusters():
    survey, _ = surveyed()
    # the south-western quarter, some forty centres
    part = gc.StudyArea(shapely.box(0, 0, 500, 500) & AREA.polygon, UTM)
    survey = gc.Survey(survey.xy[part.contains(survey.xy)], part)
    intensity = fit_intensity(survey, [gradient()], clustered=False)
    draws = sample_posterior(
        survey.local_xy, part, MODEL, default_priors(survey.n, part), chains=2, enough=20.0, most_rounds=1,
        rng=np.random.default_rng(3), intensity=intensity,
    ).draws  # fmt: skip
    medians = [np.median(v) for v in (draws.parent_intensity, draws.scale, draws.mean_offspring)]
    # offspring are told relative to the mean intensity, which is higher in this part
    offspring = MODEL.mean_offspring * truth().at(part.uniform_points(20_000, 1)).mean() / truth().mean
    # some forty centres: a standard error of 1/sqrt(40) = 0.16 of the intensity at least, and two of them
    assert medians == pytest.approx([MODEL.parent_intensity, MODEL.sigma, offspring], rel=0.35)


def test_map_and_prediction_of_thinned_clusters():
    survey, intensity = surveyed()
    fit = gc.fit_clusters(survey, method="minimum-contrast", bootstrap=0, intensity=intensity, rng=1)
    beside = gpd.GeoDataFrame({"name": ["east"]}, geometry=[shapely.box(800, 0, 1000, 800)], crs=UTM)
    centres = gc.locate_centres(survey, fit, unsurveyed=beside, cell=20.0, chains=2, rng=4)
    half = centres.mean.shape[1] // 2
    numbers = np.nan_to_num(centres.mean) * centres.cell_areas / 1e4
    west, east = numbers[:, :half].sum(), numbers[:, half:].sum()
    # centres are as many in the bare east as in the west: fifty each, known to about a quarter
    assert east == pytest.approx(50, rel=0.45)
    assert west == pytest.approx(50, rel=0.45)
    assert centres.unsurveyed is not None
    row = centres.unsurveyed.iloc[0]
    # 160,000 m² with the intensity that the gradient has there
    level = truth().coefficients["intercept"]
    expected = 160_000 * np.mean(np.exp(level + SLOPE * (np.arange(80, 100) + 0.5) / 80))
    assert row["points_low"] <= expected <= row["points_high"]
    assert row["points_mean"] < 3 * expected + 10


def test_simulated_patterns_of_a_fit_are_thinned():
    survey, intensity = surveyed()
    fit = gc.fit_clusters(survey, method="minimum-contrast", bootstrap=0, intensity=intensity, rng=1)
    drawn = gc.simulate_patterns(fit, AREA, 60, rng=2)
    assert drawn is not None
    west = float(np.mean(drawn.geometry.x < 400))
    cells = intensity.quadrature.cells
    mass = intensity.cell_values * cells.areas
    expected = float(mass[cells.centres[:, 0] < 400].sum() / mass.sum())
    assert west == pytest.approx(expected, abs=0.03)
