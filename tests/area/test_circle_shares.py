"""Shares of circles inside the study area against closed forms and shapely."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from known_areas import NAMED, random_circles, share_by_arcs, share_by_drawing, share_in_rectangle

from geoclust.area.study_area import StudyArea
from geoclust.errors import UsageError


def test_rectangle_closed_form():
    # Ripley (1977), Diggle (1983)
    rng = np.random.default_rng(1977)
    a, b = 137.0, 59.0
    area = StudyArea(shapely.box(0, 0, a, b))
    centres = rng.uniform((0, 0), (a, b), (1000, 2))
    radii = 75.0 * 10 ** rng.uniform(-2, 0, 1000)
    expected = [share_in_rectangle(x, y, r, a, b) for (x, y), r in zip(centres, radii, strict=True)]
    assert np.abs(area.circle_shares(centres, radii) - expected).max() < 1e-9


@pytest.mark.parametrize("name", NAMED)
def test_arcs_that_shapely_finds_inside(name: str):
    polygon = NAMED[name]()
    centres, radii = random_circles(polygon, 1000, np.random.default_rng(7), 0.2 * np.sqrt(polygon.area))
    # the largest circles of the largest polygon would take shapely minutes
    radii = np.minimum(radii, 3000.0)
    expected = [share_by_arcs(polygon, c, r) for c, r in zip(centres, radii, strict=True)]
    assert np.abs(StudyArea(polygon).circle_shares(centres, radii) - expected).max() < 1e-8


@pytest.mark.parametrize("name", NAMED)
def test_finely_drawn_circle(name: str):
    polygon = NAMED[name]()
    centres, radii = random_circles(polygon, 150, np.random.default_rng(8), 0.1 * np.sqrt(polygon.area))
    radii = np.minimum(radii, 3000.0)
    expected = [share_by_drawing(polygon, c, r, 80_000) for c, r in zip(centres, radii, strict=True)]
    assert np.abs(StudyArea(polygon).circle_shares(centres, radii) - expected).max() < 1e-6


def test_annulus_worked_out_by_hand():
    # a square ring: the circle of radius 2 round the middle lies in the hole, that of 6 in
    # the ring, and the one through the outer corners meets W nowhere but there
    ring = shapely.box(-10, -10, 10, 10) - shapely.box(-4, -4, 4, 4)
    area = StudyArea(ring)
    shares = area.circle_shares(np.zeros((4, 2)), [2.0, 6.0, np.sqrt(200) + 1e-9, 8 / np.sqrt(3)])
    assert shares[0] == 0.0
    assert shares[1] == 1.0
    assert shares[2] == pytest.approx(0.0, abs=1e-9)
    # 8/sqrt(3) = 4/cos(30 degrees): beyond each side of the hole lie 60 of 360 degrees
    assert shares[3] == pytest.approx(4 * 60 / 360, abs=1e-12)


def test_radius_zero_is_the_inside_test():
    area = StudyArea(NAMED["sample reserve"]())
    at = np.random.default_rng(3).uniform(area.bounds[:2], area.bounds[2:], (500, 2))
    assert np.array_equal(area.circle_shares(at, 0.0), area.contains(at).astype(float))


def test_circles_that_swallow_the_study_area_or_miss_it():
    area = StudyArea(shapely.box(0, 0, 10, 10))
    assert area.circle_shares([[5, 5], [5, 5], [500, 5]], [100, 1e7, 3]).tolist() == [0.0, 0.0, 0.0]


def test_same_bits_for_any_number_of_workers():
    polygon = NAMED["ragged reserve"]()
    area = StudyArea(polygon)
    centres, radii = random_circles(polygon, 45_000, np.random.default_rng(5), 300.0)
    one = area.circle_shares(centres, radii, workers=1)
    assert np.array_equal(one, area.circle_shares(centres, radii, workers=3))


@pytest.mark.parametrize(
    ("centres", "radii", "said"),
    [
        ([[0, 0]], -1.0, "radii must be finite and not negative; got -1.0"),
        ([[0, 0]], np.nan, "radii must be finite and not negative; got nan"),
        ([[0, 0]], [1.0, 2.0], "radii must be one number or one a centre (1); got shape (2,)."),
        ([0, 0, 0], 1.0, "centres must be an array of shape (n, 2); got shape (3,)."),
        ([[0, np.inf]], 1.0, "centres must hold finite coordinates; 1 of 1 rows do not."),
    ],
)
def test_bad_input(centres, radii, said: str):
    area = StudyArea(shapely.box(0, 0, 10, 10))
    with pytest.raises(UsageError) as caught:
        area.circle_shares(centres, radii)
    assert str(caught.value) == said


def test_no_centres_no_shares():
    area = StudyArea(shapely.box(0, 0, 10, 10))
    assert area.circle_shares(np.empty((0, 2)), 1.0).shape == (0,)
