"""Area deeper than a distance, against closed forms and shapely's buffer."""

from __future__ import annotations

import numpy as np
import shapely
from known_areas import sample_reserve

from geoclust.area.study_area import StudyArea


def test_rectangle():
    area = StudyArea(shapely.box(0, 0, 200, 100))
    d = np.linspace(0, 60, 61)
    expected = np.maximum(200 - 2 * d, 0) * np.maximum(100 - 2 * d, 0)
    assert np.abs(area.eroded_area(60.0)(d) - expected).max() < 1e-3
    assert area.eroded_area(60.0)([50.1, 60.0]).tolist() == [0.0, 0.0]


def test_square_ring_with_round_corners_of_its_hole():
    # d off the outside, and the hole grown by d with round corners
    area = StudyArea(shapely.box(-50, -50, 50, 50) - shapely.box(-10, -10, 10, 10))
    d = np.linspace(0, 19, 20)
    expected = (100 - 2 * d) ** 2 - (400 + 80 * d + np.pi * d * d)
    assert np.abs(area.eroded_area(19.0)(d) - expected).max() < 1e-4 * area.area


def test_reserve_as_drawn():
    area = StudyArea(sample_reserve())
    d = np.array([3.0, 40.0, 111.0, 205.0, 255.0])
    expected = [area.polygon.buffer(-v, quad_segs=200).area for v in d]
    # a thousandth of what is left, even where little is
    assert np.allclose(area.eroded_area(300.0)(d), expected, rtol=2e-3)
