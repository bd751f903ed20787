"""Log-linear intensity against statsmodels, direct integration and simulation; covariates with gaps."""

from __future__ import annotations

from functools import cache

import geopandas as gpd
import numpy as np
import pandas as pd
import pyproj
import pytest
import shapely
import statsmodels.api as sm
from affine import Affine
from known_areas import HERE, ragged_reserve, sample_reserve
from scipy.integrate import quad
from scipy.special import erf

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import InputError, UsageError
from geoclust.intensity.cells import Cells
from geoclust.intensity.clustering import Clustering, cell_pair_means, excess_matrix, fit_clustering
from geoclust.intensity.covariates import DistanceCovariate, RasterCovariate, coordinate_covariates
from geoclust.intensity.loglinear import Quadrature, fit_intensity
from geoclust.intensity.regression import logistic_regression
from geoclust.layers.covariates import read_covariate_bands
from geoclust.layers.raster import Grid
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

SAMPLE = HERE.parent / "sample_layers"
UTM = pyproj.CRS("EPSG:25832")


@cache
def mounds() -> Survey:
    at = gpd.read_file(SAMPLE / "mounds.shp").geometry
    return Survey(np.column_stack([at.x, at.y]), StudyArea(sample_reserve(), UTM))


@cache
def terrain() -> tuple[RasterCovariate, ...]:
    bands = [b for name in ("wetness", "elevation") for b in read_covariate_bands(SAMPLE / f"{name}.tif")]
    return tuple(RasterCovariate(b.name, b.values, b.grid, UTM) for b in bands)


def test_coefficients_and_naive_errors_equal_those_of_statsmodels():
    survey = mounds()
    found = fit_intensity(survey, terrain())
    q = found.quadrature
    # the cells are those of the rasters, and their areas are exact
    assert all(c.fits(q.cells) for c in terrain())
    assert q.cells.areas.sum() == pytest.approx(survey.area.area, rel=1e-12)
    counts = q.cells.counts(survey.xy)
    assert counts.sum() == survey.n
    other = sm.GLM(
        counts, sm.add_constant(q.values), sm.families.Poisson(), offset=np.log(q.cells.areas)
    ).fit(tol=1e-14, maxiter=200)
    assert np.allclose(list(found.coefficients.values()), other.params, rtol=1e-6, atol=1e-9)
    assert np.allclose(list(found.standard_errors["naive"].values()), other.bse, rtol=1e-6)
    # the intensity at the points is that of their cells
    beta = other.params
    direct = np.exp(beta[0] + np.column_stack([c.at(survey.xy) for c in terrain()]) @ beta[1:])
    assert np.allclose(found.at_own_points(), direct, rtol=1e-6)
    # of a fit with an intercept the expected number of points is the number of points
    assert found.cell_values @ q.cells.areas == pytest.approx(survey.n, rel=1e-9)
    # the mounds were drawn with -0.2 and -0.0025: inside the wider interval
    for name, truth in (("wetness", -0.2), ("elevation", -0.0025)):
        low, high = found.intervals()[name]
        assert low < truth < high
        assert found.standard_errors["clustered"][name] > 1.3 * found.standard_errors["naive"][name]


def test_logistic_regression_equals_that_of_statsmodels():
    rng = np.random.default_rng(1)
    values = rng.normal((5, 600), (1, 40), (800, 2))
    observed = rng.random(800) < 1 / (1 + np.exp(1 - 0.4 * (values[:, 0] - 5)))
    found = logistic_regression(values, observed, 0.002, ("a", "b"))
    other = sm.GLM(
        observed.astype(float), sm.add_constant(values), sm.families.Binomial(),
        offset=np.full(800, -np.log(0.002)),
    ).fit(tol=1e-14, maxiter=200)  # fmt: skip
    assert np.allclose(found.coefficients, other.params, rtol=1e-6)
    assert np.allclose(np.sqrt(np.diag(np.linalg.inv(found.information))), other.bse, rtol=1e-6)


def test_logistic_form_agrees_with_the_likelihood():
    survey = mounds()
    poisson = fit_intensity(survey, terrain())
    logistic = [fit_intensity(survey, terrain(), form="logistic", rng=seed) for seed in range(8)]
    for name, value in poisson.coefficients.items():
        found = np.array([fit.coefficients[name] for fit in logistic])
        error = poisson.standard_errors["naive"][name]
        # dummy points add up to half as much variance again (four of them a point)
        assert abs(found.mean() - value) < 4 * 0.6 * error / np.sqrt(8)
        naive = [fit.standard_errors["naive"][name] for fit in logistic]
        assert np.mean(naive) == pytest.approx(error * np.sqrt(1.25), rel=0.1)
    assert "logistic" in logistic[0].method


def test_mean_of_gaussian_excess_over_pairs_of_cells():
    """Per axis in closed form: the Gaussian against the triangular density of two uniforms' difference."""
    found = cell_pair_means(Clustering(3.0, 9.0, 1.0).excess, 72.0, 10.0, 7.0)

    def mean(shift: float, width: float) -> float:
        s = np.sqrt(2) * 9.0

        def twice(x: float) -> float:  # second antiderivative of exp(-x²/2s²)
            return s * np.sqrt(np.pi / 2) * x * erf(x / (s * np.sqrt(2))) + s**2 * np.exp(-((x / s) ** 2) / 2)

        return (twice(shift + width) - 2 * twice(shift) + twice(shift - width)) / width**2

    down, across = (n // 2 for n in found.shape)
    for j in range(-down, down + 1):
        for i in range(-across, across + 1):
            expected = 3.0 * mean(10.0 * i, 10.0) * mean(7.0 * j, 7.0)
            assert found[down + j, across + i] == pytest.approx(expected, rel=3e-4, abs=1e-6)


def test_double_integral_by_the_set_covariance():
    """Over all pairs of places, g - 1 adds up to its integral with 2 pi r times the set covariance."""
    area = StudyArea(ragged_reserve())
    clustering = Clustering(2.0, 25.0, 1.0)
    cells = Cells.square(area, 8.0)
    found = excess_matrix(cells, cells.areas[:, None], clustering.excess, clustering.reach)[0, 0]
    r = np.linspace(0, clustering.reach, 400)
    shared = area.isotropic_set_covariance(r)
    expected = quad(
        lambda t: clustering.excess(t) * 2 * np.pi * t * np.interp(t, r, shared), 0, clustering.reach,
        limit=400,
    )[0]  # fmt: skip
    assert found == pytest.approx(expected, rel=1e-3)


def test_fitted_excess_of_a_thomas_process():
    area = StudyArea(ragged_reserve())
    model = Thomas(parent_intensity=150 / area.area, sigma=20.0, mean_offspring=8.0)
    rng = np.random.default_rng(3)
    found = [fit_clustering(draw_pattern(model, area, rng).points, area, None) for _ in range(5)]
    height = float(model.pair_correlation(0.0)) - 1
    assert np.median([f.height for f in found]) == pytest.approx(height, rel=0.25)
    assert np.median([f.scale for f in found]) == pytest.approx(20.0, rel=0.15)
    random = [fit_clustering(area.local_uniform_points(1200, rng), area, None) for _ in range(5)]
    # number of further points in a cluster: eight for the Thomas process, none at random
    extra = [4 * np.pi * f.scale**2 * f.height * 1200 / area.area for f in random]
    assert np.median(extra) < 1.0


def test_errors_of_a_constant_intensity_under_clustering():
    """The logarithm of the number of points of a Thomas process varies as the clustered error says."""
    area = StudyArea(ragged_reserve())
    model = Thomas(parent_intensity=150 / area.area, sigma=20.0, mean_offspring=8.0)
    rng = np.random.default_rng(8)
    drawn = [draw_pattern(model, area, rng).points + area.origin for _ in range(10)]
    told = [fit_intensity(Survey(at, area), cell=20.0) for at in drawn]
    level = np.array([t.coefficients["intercept"] for t in told])
    counts = np.array([len(t.points) for t in told])
    assert np.allclose(level, np.log(counts / area.area), atol=1e-9)
    # a centre c with share s(c) of its offspring inside adds Poisson(mu s(c)) points: the variance of
    # their number is the integral of rho (mu s + mu² s²) (Neyman & Scott 1958), no g in it
    wide = Cells.square(area.dilated(120.0), 20.0)
    offspring = model.mean_offspring * area.gaussian_shares(wide.centres, model.sigma)
    variance = model.parent_intensity * np.sum(wide.areas * (offspring + offspring**2))
    expected = np.sqrt(variance) / (model.intensity * area.area)
    naive = np.mean([t.standard_errors["naive"]["intercept"] for t in told])
    clustered = np.mean([t.standard_errors["clustered"]["intercept"] for t in told])
    # the mean of ten, each estimated to about a fifth
    assert clustered == pytest.approx(expected, rel=0.2)
    assert naive == pytest.approx(1 / np.sqrt(1200), rel=0.05)
    assert clustered > 2.5 * naive


@cache
def luxembourg() -> tuple[Survey, np.ndarray, RasterCovariate]:
    area = gpd.read_file(HERE / "data" / "lux_epsg4326.gpkg").to_crs(UTM).union_all()
    rows = pd.read_csv(HERE / "data" / "lux_places_epsg4326.csv")
    places = gpd.GeoSeries.from_xy(rows["lon"], rows["lat"], crs=4326).to_crs(UTM)
    xy = np.column_stack([places.x, places.y])
    within = StudyArea(area if area.geom_type == "MultiPolygon" else shapely.MultiPolygon([area]), UTM)
    band = read_covariate_bands(HERE / "data" / "lux_elev_epsg4326.tif")[0]
    return (
        Survey(xy[within.contains(xy)], within),
        xy,
        RasterCovariate(band.name, band.values, band.grid, UTM),
    )


def test_luxembourg_with_a_raster_in_degrees():
    """138 places, five of them on nodata; four of those lie outside the cantons (stated with the data)."""
    survey, everything, elevation = luxembourg()
    assert elevation.name == "elevation"
    assert len(everything) == 138
    assert np.isnan(elevation.at(everything)).sum() == 5
    assert survey.n == 133
    found = fit_intensity(survey, [elevation])
    assert found.points_without_value == 1
    assert 0 < found.quadrature.uncovered_area < 0.05 * survey.area.area
    assert "1 of 133 points" in found.notes()[0]
    record = found.record()
    assert record["points_without_value"] == 1
    assert "mean of 4 by 4 places" in str(record["covariates"])
    assert "WGS 84" in str(record["covariates"])
    # villages lie in the valleys
    assert found.coefficients["elevation"] < 0
    with pytest.raises(InputError, match=r"1 of 133 points and .* \(more than the 0% allowed\)"):
        fit_intensity(survey, [elevation], nodata_share=0.0)


def meuse() -> tuple[StudyArea, dict[str, RasterCovariate], np.ndarray]:
    crs = pyproj.CRS("EPSG:28992")
    rows = pd.read_csv(HERE / "data" / "meuse_grid_40m_epsg28992.csv")
    ring = pd.read_csv(HERE / "data" / "meuse_area_epsg28992.csv").to_numpy()
    area = StudyArea(shapely.make_valid(shapely.Polygon(ring)), crs)
    west, north = rows["x"].min() - 20, rows["y"].max() + 20
    i = ((north - rows["y"]) / 40).astype(int)
    j = ((rows["x"] - west) / 40).astype(int)
    grid = Grid(Affine(40, 0, west, 0, -40, north), (i.max() + 1, j.max() + 1), crs)
    out = {}
    for name in ("dist", "soil"):
        values = np.full(grid.shape, np.nan)
        values[i, j] = rows[name]
        out[name] = RasterCovariate(name, values, grid, crs)
    return area, out, rows[["x", "y"]].to_numpy()


def test_meuse_with_a_ragged_grid():
    area, covariates, cells = meuse()
    assert len(cells) == 3103
    rng = np.random.default_rng(2)
    # points that become rarer away from the river
    at = cells[rng.integers(len(cells), size=4000)] + rng.uniform(-20, 20, (4000, 2))
    kept = rng.random(4000) < np.exp(-2.0 * covariates["dist"].at(at))
    xy = at[kept & area.contains(at)]
    found = fit_intensity(Survey(xy, area), list(covariates.values()))
    assert np.sum(found.quadrature.covered) <= 3103
    low, high = found.intervals()["dist"]
    assert low < -2.0 < high
    assert found.quadrature.cells.areas.sum() == pytest.approx(area.area, rel=1e-12)


def test_a_raster_that_covers_half_is_refused():
    survey = mounds()
    wetness = terrain()[0]
    values = wetness.values.copy()
    values[:, : values.shape[1] // 2] = np.nan
    with pytest.raises(InputError, match=r"of 888 points and .* of the study area lie where a covariate"):
        fit_intensity(survey, [RasterCovariate("wetness", values, wetness.grid, UTM)])
    nowhere = RasterCovariate("wetness", np.full_like(values, np.nan), wetness.grid, UTM)
    with pytest.raises(InputError, match="No part of the study area has a value of wetness"):
        fit_intensity(survey, [nowhere])


def test_distances_and_coordinates():
    survey = mounds()
    pond = next(shapely.Polygon(p.interiors[0]) for p in survey.area.polygon.geoms if len(p.interiors))
    distance = DistanceCovariate("distance_to_water_m", pond)
    at = survey.xy[:50]
    assert np.allclose(distance.at(at), shapely.distance(pond, shapely.points(at)), rtol=1e-12)
    plane = coordinate_covariates(survey.area)
    assert [c.name for c in plane] == ["easting_km", "northing_km"]
    assert [c.name for c in coordinate_covariates(survey.area, 2)][2:] == [
        "easting2_km2", "easting_northing_km2", "northing2_km2",
    ]  # fmt: skip
    assert np.allclose(plane[0].at(survey.xy) * 1000, survey.xy[:, 0] - survey.area.origin[0])
    found = fit_intensity(survey, [distance, *plane], cell=20.0)
    assert list(found.coefficients) == ["intercept", "distance_to_water_m", "easting_km", "northing_km"]
    assert found.quadrature.cells.transform.a == 20.0


def test_cells_finer_than_the_raster_and_coarser():
    survey = mounds()
    wetness = terrain()[0]
    fine = Quadrature.over(survey.area, [wetness], 2.0)
    # each square of two metres lies in one cell of the raster
    assert np.allclose(fine.values[:, 0], wetness.at(fine.cells.centres), rtol=1e-12)
    coarse = Cells.square(survey.area, 40.0)
    inner = coarse.areas > 1600 - 1e-6
    means = wetness.cell_means(coarse)[0][inner]
    blocks = [
        wetness.at(c + 10.0 * (np.stack(np.meshgrid(range(4), range(4)), -1).reshape(-1, 2) - 1.5)).mean()
        for c in coarse.centres[inner]
    ]
    assert np.allclose(means, blocks, rtol=1e-12)


def test_points_are_drawn_as_the_intensity_says():
    survey = mounds()
    found = fit_intensity(survey, terrain())
    local = found.draw(200_000, np.random.default_rng(6))
    assert survey.area.local_contains(local).all()
    counts = found.quadrature.cells.counts(local + survey.area.origin)
    expected = found.cell_values * found.quadrature.cells.areas
    expected *= 200_000 / expected.sum()
    large = expected > 5
    z = (counts - expected)[large] / np.sqrt(expected[large])
    assert np.mean(z**2) == pytest.approx(1.0, abs=4 * np.sqrt(2 / large.sum()))


def test_refit_is_a_fit():
    survey = mounds()
    found = fit_intensity(survey, terrain())
    other = Survey(found.draw(700, np.random.default_rng(1)) + survey.area.origin, survey.area)
    again = found.refit(other.local_xy, np.random.default_rng(1))
    assert again.coefficients == fit_intensity(other, terrain()).coefficients


@pytest.mark.parametrize(
    ("call", "error", "said"),
    [
        (
            lambda s, c: fit_intensity(s, c, form="probit"),
            UsageError,
            "form must be one of poisson, logistic",
        ),
        (lambda s, c: fit_intensity(s, c, form="logistic"), UsageError, "rng must be a generator"),
        (lambda s, c: fit_intensity(s, [c[0], c[0]]), UsageError, "of different names"),
        (lambda s, c: fit_intensity(s, c, nodata_share=1.5), UsageError, "nodata_share must be"),
        (lambda s, c: fit_intensity(s, c, cell=0.0), UsageError, "cell must be a positive"),
        (lambda s, c: fit_intensity(s, c).intervals(errors="robust"), UsageError, "errors must be one of"),
        (lambda s, c: fit_intensity(Survey(s.xy[:2], s.area), c), InputError, "too few for an intensity"),
        (
            lambda s, c: fit_intensity(
                s, [c[0], RasterCovariate("double", 2 * c[0].values + 1, c[0].grid, UTM)]
            ),
            InputError,
            "One of the covariates wetness, double follows from the others",
        ),
        (
            lambda s, c: fit_intensity(s, [RasterCovariate("flat", 0 * c[0].values + 3, c[0].grid, UTM)]),
            InputError,
            "Covariate flat is the same everywhere",
        ),
    ],
)
def test_bad_arguments(call, error: type[Exception], said: str):
    with pytest.raises(error, match=said):
        call(mounds(), list(terrain()))


def test_no_best_fit_is_said():
    survey = mounds()
    wetness = terrain()[0]
    # a step that separates all points from a part without any
    where = wetness.values > np.nanquantile(wetness.values, 0.6)
    step = RasterCovariate("step", where.astype(float), wetness.grid, UTM)
    dry = survey.xy[step.at(survey.xy) == 0]
    with pytest.raises(InputError, match="no best fit on step"):
        fit_intensity(Survey(dry, survey.area), [step])
