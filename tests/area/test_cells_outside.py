"""Cells that the study area does not touch have no area at all, not what rounding leaves of it."""

import numpy as np
import shapely
from affine import Affine

from geoclust.area.study_area import StudyArea


def ragged_area(vertices: int) -> shapely.Polygon:
    """A star with irregular rays, far from the origin of its coordinates."""
    rng = np.random.default_rng(11)
    angle = np.linspace(0, 2 * np.pi, vertices, endpoint=False)
    radius = rng.uniform(300, 900, vertices)
    at = np.column_stack([604_000 + radius * np.cos(angle), 5_737_000 + radius * np.sin(angle)])
    return shapely.Polygon(at)


def test_cells_outside_are_exactly_empty():
    polygon = ragged_area(1500)
    transform, shape = Affine(10.0, 0, 603_000, 0, -10.0, 5_738_000), (200, 200)
    cover = StudyArea(polygon).cell_areas(transform, shape)
    x = 603_000 + 10.0 * np.arange(200)
    y = 5_738_000 - 10.0 * np.arange(1, 201)
    cells = shapely.box(*np.meshgrid(x, y), *np.meshgrid(x + 10, y + 10))
    touched = shapely.intersects(polygon, cells)
    assert (cover[~touched] == 0).all()
    assert np.isclose(cover.sum(), polygon.area, rtol=1e-12)
