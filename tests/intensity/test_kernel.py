"""Kernel intensity, its bandwidth, residual maps, against direct sums."""

from __future__ import annotations

import numpy as np
import pyproj
import pytest
import shapely
from affine import Affine
from known_areas import ragged_reserve
from scipy.stats import multivariate_normal

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import InputError, UsageError
from geoclust.intensity.kernel import cronie_van_lieshout_bandwidth, kernel_intensity, kernel_sums
from geoclust.intensity.loglinear import fit_intensity
from geoclust.intensity.maps import intensity_bands, residual_raster
from geoclust.layers.raster import Grid, grid_over

UTM = pyproj.CRS("EPSG:25832")


def survey_of(n: int, seed: int) -> Survey:
    area = StudyArea(ragged_reserve(), UTM)
    return Survey(area.uniform_points(n, seed), area)


def direct_sums(points: np.ndarray, places: np.ndarray, bandwidth: float) -> np.ndarray:
    kernel = multivariate_normal([0, 0], bandwidth**2 * np.eye(2))
    return kernel.pdf(places[:, None] - points[None]).sum(axis=1)


@pytest.mark.parametrize("bandwidth", [5.0, 80.0, 3000.0])
def test_sums_by_scipys_normal_density(bandwidth: float):
    rng = np.random.default_rng(1)
    points, places = rng.uniform(0, 1000, (300, 2)), rng.uniform(-200, 1200, (200, 2))
    found = kernel_sums(points, places, bandwidth)
    expected = direct_sums(points, places, bandwidth)
    # cut off at six bandwidths
    assert np.allclose(found, expected, rtol=1e-9, atol=300 * 1.6e-8 / (2 * np.pi * bandwidth**2))
    weights = rng.uniform(0, 2, 300)
    doubled = kernel_sums(np.repeat(points, 2, axis=0), places, bandwidth, np.repeat(weights / 2, 2))
    assert np.allclose(doubled, kernel_sums(points, places, bandwidth, weights), rtol=1e-9)


def test_estimate_has_the_exact_edge_mass():
    survey = survey_of(400, 3)
    found = kernel_intensity(survey, 60.0)
    places = survey.area.uniform_points(50, 4)
    mass = survey.area.gaussian_shares(places, 60.0)
    assert np.allclose(found.at(places), direct_sums(survey.xy, places, 60.0) / mass, rtol=1e-6)
    others = direct_sums(survey.xy, survey.xy, 60.0) - 1 / (2 * np.pi * 60.0**2)
    expected = others / survey.area.gaussian_shares(survey.xy, 60.0)
    assert np.allclose(found.at_own_points(), expected, rtol=1e-5)
    # without bias for a constant intensity: Diggle (1985)
    rng = np.random.default_rng(5)
    many = [
        kernel_intensity(Survey(survey.area.uniform_points(400, rng), survey.area), 60.0).at(places)
        for _ in range(60)
    ]
    error = (np.mean(many, axis=0) - survey.intensity) / (np.std(many, axis=0, ddof=1) / np.sqrt(60))
    assert np.mean(error**2) < 1 + 4 * np.sqrt(2 / 50) * 1.5


def test_bandwidth_solves_its_equation():
    """Inverse estimates at the points, without edge correction, add up to the area."""
    for survey in (survey_of(150, 7), survey_of(2, 1)):
        found = cronie_van_lieshout_bandwidth(survey.local_xy, survey.area)
        total = np.sum(1 / direct_sums(survey.xy, survey.xy, found))
        assert total == pytest.approx(survey.area.area, rel=1e-2)
    chosen = kernel_intensity(survey_of(150, 7))
    assert "Cronie & van Lieshout" in chosen.method
    assert chosen.refit(survey_of(150, 7).local_xy, np.random.default_rng(1)).bandwidth == pytest.approx(
        chosen.bandwidth
    )


def test_points_are_drawn_as_the_estimate_says():
    area = StudyArea(shapely.box(0, 0, 1000, 500))
    rng = np.random.default_rng(2)
    survey = Survey(np.column_stack([1000 * rng.beta(2, 5, 500), rng.uniform(0, 500, 500)]), area)
    found = kernel_intensity(survey, 80.0)
    drawn = found.draw(20_000, rng) + area.origin
    edges = np.linspace(0, 1000, 11)
    share = np.histogram(drawn[:, 0], edges)[0] / 20_000
    fine = Affine(10, 0, 0, 0, -10, 500)
    values = found.raster(Grid(fine, (50, 100), UTM))
    expected = values.sum(axis=0).reshape(10, 10).sum(axis=1) / values.sum()
    assert np.all(np.abs(share - expected) < 4 * np.sqrt(expected / 20_000) + 1e-3)


def test_residuals_of_a_constant_intensity_by_direct_sums():
    survey = survey_of(300, 9)
    constant = fit_intensity(survey, clustered=False)
    grid = grid_over(survey.area.bounds, 50.0, UTM)
    found = residual_raster(survey, constant, grid, bandwidth=70.0)
    row, column = np.nonzero(np.isfinite(found))
    inside = survey.area.contains(np.column_stack([grid.x[column], grid.y[row]]))
    row, column = row[inside], column[inside]
    places = np.column_stack([grid.x[column], grid.y[row]])
    mass = survey.area.gaussian_shares(places, 70.0)
    # the smoothed constant is the constant times the mass: exactly what the estimate is divided by
    expected = direct_sums(survey.xy, places, 70.0) / mass - survey.intensity
    assert np.abs(found[row, column] - expected).max() < 0.01 * survey.intensity


def test_bands_are_per_hectare_and_end_at_the_boundary():
    survey = survey_of(300, 9)
    grid = grid_over(survey.area.bounds, 40.0, UTM)
    bands = intensity_bands(survey, fit_intensity(survey, clustered=False), grid)
    inside = survey.area.cell_areas(grid.transform, grid.shape) > 0
    intensity = bands["intensity_per_ha"]
    assert np.array_equal(np.isfinite(intensity), inside)
    assert np.allclose(intensity[inside], survey.intensity * 1e4, rtol=1e-9)
    assert set(bands) == {"intensity_per_ha", "residual_per_ha"}


def test_bad_arguments():
    survey = survey_of(20, 1)
    with pytest.raises(UsageError, match="bandwidth must be a positive number of metres"):
        kernel_intensity(survey, -1.0)
    with pytest.raises(InputError, match="no points to estimate an intensity"):
        kernel_intensity(Survey(np.empty((0, 2)), survey.area))
    with pytest.raises(InputError, match="at least two"):
        kernel_intensity(Survey(survey.xy[:1], survey.area))
    other = grid_over((0, 0, 10, 10), 1.0, pyproj.CRS("EPSG:3067"))
    with pytest.raises(UsageError, match="give a grid in the latter"):
        kernel_intensity(survey, 10.0).raster(other)
