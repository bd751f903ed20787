"""Maps of sampled centres: nothing lost, nothing counted twice, in any coordinate reference system."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from affine import Affine
from hand_made import area as hand_made_area
from hand_made import scattered_draws
from pyproj import CRS, Transformer

from geoclust.area.study_area import StudyArea
from geoclust.centres.rasters import cell_areas, centre_maps, default_cell, grid_for
from geoclust.errors import UsageError
from geoclust.layers.raster import Grid


@pytest.fixture(scope="module")
def area() -> StudyArea:
    return hand_made_area()


@pytest.fixture(scope="module")
def draws(area):
    return scattered_draws(area)


def template(area: StudyArea, crs: str, cells: int) -> Grid:
    """A grid of about `cells` columns over the whole study area in another system."""
    bent = shapely.segmentize(area.polygon, 1.0)
    forward = Transformer.from_crs(area.crs, crs, always_xy=True)
    x, y = forward.transform(*shapely.get_coordinates(bent).T)
    step = np.ptp(x) / cells
    columns, rows = cells + 4, int(np.ceil(np.ptp(y) / step)) + 4
    return Grid(Affine(step, 0, x.min() - 2 * step, 0, -step, y.max() + 2 * step), (rows, columns), CRS(crs))


@pytest.mark.parametrize("cell", [3.0, 7.0, 10.0, 60.0])
def test_mean_times_area_adds_up_to_the_number_inside(area, draws, cell):
    grid = grid_for(area, cell)
    cover = cell_areas(grid, area)
    assert cover.sum() == pytest.approx(area.area, rel=1e-12)
    mean, _, probability = centre_maps(draws, area, grid, cover)
    assert np.nansum(mean * cover / 1e4) == pytest.approx(draws.number_inside.mean(), rel=1e-9)
    assert np.array_equal(np.isnan(mean), cover <= 0)
    assert np.nanmin(probability) >= 0
    assert np.nanmax(probability) <= 1


def test_maps_against_direct_counting(area, draws):
    """Mean, standard deviation and probability of every cell by counting draw by draw with shapely."""
    grid = grid_for(area, 15.0)
    cover = cell_areas(grid, area)
    mean, sd, probability = centre_maps(draws, area, grid, cover)
    west, _south, _east, north = grid.bounds
    flat = [c + area.origin for chain in draws.centres for c in chain]
    for row in range(grid.shape[0]):
        for column in range(grid.shape[1]):
            cell = shapely.box(west + 15 * column, north - 15 * (row + 1), west + 15 * (column + 1),
                               north - 15 * row)  # fmt: skip
            part = cell.intersection(area.polygon)
            assert cover[row, column] == pytest.approx(part.area, abs=1e-6)
            if part.area == 0:
                continue
            counts = np.array([shapely.contains_xy(part, c[:, 0], c[:, 1]).sum() for c in flat])
            hectares = part.area / 1e4
            assert mean[row, column] == pytest.approx(counts.mean() / hectares, rel=1e-9)
            assert sd[row, column] == pytest.approx(counts.std() / hectares, rel=1e-9, abs=1e-9)
            assert probability[row, column] == pytest.approx((counts > 0).mean(), rel=1e-12)


@pytest.mark.parametrize("crs", ["EPSG:4326", "EPSG:3035", "EPSG:25833"])
def test_template_in_another_system(area, draws, crs):
    """Degrees, the equal-area system of Europe, the neighbouring UTM zone: nothing is lost.

    Areas of cells are those of the study area's own plane; the edges of a cell
    are taken as straight there, which over 120 m is off by far less than 1e-5.
    """
    grid = template(area, crs, 23)
    cover = cell_areas(grid, area)
    assert cover.sum() == pytest.approx(area.area, rel=1e-5)
    mean, _, _ = centre_maps(draws, area, grid, cover)
    assert np.nansum(mean * cover / 1e4) == pytest.approx(draws.number_inside.mean(), rel=1e-9)
    # cell by cell against shapely
    back = Transformer.from_crs(crs, area.crs, always_xy=True)
    for row, column in [(5, 4), (12, 8), (grid.shape[0] // 2, 15), (3, 3)]:
        x, y = grid.transform @ (np.array([column, column + 1, column + 1, column]),
                                 np.array([row, row, row + 1, row + 1]))  # fmt: skip
        cell = shapely.Polygon(np.column_stack(back.transform(x, y)))
        assert cover[row, column] == pytest.approx(cell.intersection(area.polygon).area, abs=0.02)


def test_template_that_covers_a_part(area, draws):
    """Only the centres in the part covered are on the map."""
    west, south, _, _ = area.bounds
    grid = Grid(Affine(5.0, 0, west + 40, 0, -5.0, south + 50), (10, 9), area.crs)
    covered = shapely.box(*grid.bounds)
    cover = cell_areas(grid, area)
    assert cover.sum() == pytest.approx(covered.intersection(area.polygon).area, rel=1e-9)
    mean, _, _ = centre_maps(draws, area, grid, cover)
    part = covered.intersection(area.polygon)
    inside = [shapely.contains_xy(part, *(c + area.origin).T).sum() for chain in draws.centres for c in chain]
    assert np.nansum(mean * cover / 1e4) == pytest.approx(np.mean(inside), rel=1e-9)
    elsewhere = Grid(Affine(5.0, 0, west + 4000, 0, -5.0, south), (10, 9), area.crs)
    assert not cell_areas(elsewhere, area).any()


@pytest.mark.parametrize(
    ("scale", "expected"), [(15.0, 5.0), (8.0, 2.5), (4.0, 2.0), (45.0, 20.0), (100.0, 50.0), (0.06, 0.025)]
)
def test_default_cell_is_a_round_number_below_half_a_scale(scale, expected):
    area = StudyArea(shapely.box(0, 0, 10, 10)) if scale < 1 else StudyArea(shapely.box(0, 0, 1000, 1000))
    assert default_cell(scale, area) == pytest.approx(expected)


def test_default_cell_keeps_rasters_below_a_million_cells():
    area = StudyArea(shapely.box(0, 0, 40_000, 30_000))
    cell = default_cell(10.0, area)
    assert cell == 50.0
    assert 40_000 * 30_000 / cell**2 < 1e6


@pytest.mark.parametrize("bad", [0.0, -5.0, np.nan, 1e-3])
def test_bad_cells(area, bad):
    with pytest.raises(UsageError, match="cell"):
        grid_for(area, bad)
