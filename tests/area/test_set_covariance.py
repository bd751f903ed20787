"""Set covariance against closed forms and shapely's overlay."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from known_areas import NAMED, comb
from shapely.affinity import rotate, translate

from geoclust.area.study_area import StudyArea
from geoclust.errors import UsageError


@pytest.mark.parametrize("angle", [0.0, 0.3])
def test_rectangle_closed_form(angle: float):
    # (a - |h1|)(b - |h2|), Stoyan & Stoyan (1994)
    a, b = 120.0, 50.0
    area = StudyArea(rotate(shapely.box(0, 0, a, b), angle, origin=(0, 0), use_radians=True))
    rng = np.random.default_rng(1)
    shifts = np.vstack(
        [
            rng.uniform(-130, 130, (500, 2)),
            rng.integers(-13, 14, (200, 2)) * 10.0,
            [[120, 0], [0, 50], [5, 0]],
        ]
    )
    h = np.abs(shifts)
    expected = np.maximum(a - h[:, 0], 0) * np.maximum(b - h[:, 1], 0)
    turn = np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])
    found = area.set_covariance(shifts @ turn)
    assert np.abs(found - expected).max() < 1e-9 * area.area


def test_disc_closed_form():
    # 2R² arccos(r/2R) - (r/2) sqrt(4R² - r²), Stoyan & Stoyan (1994); the drawn disc of equal
    # area is off by the order of 1/corners²
    corners, radius = 20_000, 100.0
    t = np.linspace(0, 2 * np.pi, corners, endpoint=False)
    grown = radius * np.sqrt(2 * np.pi / (corners * np.sin(2 * np.pi / corners)))
    area = StudyArea(shapely.Polygon(grown * np.column_stack([np.cos(t), np.sin(t)])))
    r = np.linspace(0.5, 199.5, 40)
    turn = np.random.default_rng(2).uniform(0, 2 * np.pi, 40)
    expected = 2 * radius**2 * np.arccos(r / 200) - r / 2 * np.sqrt(4 * radius**2 - r**2)
    found = area.set_covariance(np.column_stack([r * np.cos(turn), r * np.sin(turn)]))
    assert np.abs(found - expected).max() < 1e-8 * area.area


@pytest.mark.parametrize(("name", "count"), [("ragged reserve", 40), ("sample reserve", 40), ("finland", 6)])
def test_shapely_agrees(name: str, count: int):
    polygon = NAMED[name]()
    area = StudyArea(polygon)
    rng = np.random.default_rng(3)
    turn, far = rng.uniform(0, 2 * np.pi, count), 10 ** rng.uniform(-4, 0.1, count) * np.sqrt(area.area)
    shifts = np.column_stack([np.cos(turn), np.sin(turn)]) * far[:, None]
    expected = [shapely.intersection(polygon, translate(polygon, *h)).area for h in shifts]
    # shapely shifts coordinates of millions of metres, and so rounds them
    assert np.abs(area.set_covariance(shifts) - expected).max() < 1e-9 * area.area


def test_comb_worked_out_by_hand():
    # teeth 2 wide every 5, 10 long, hanging on a spine 2 thick
    area = StudyArea(comb(teeth=3, width=2.0, gap=3.0, length=10.0))
    assert area.area == 72
    # one pitch across: two teeth meet their neighbours, the spine loses 5 of 12
    assert area.set_covariance([[5.0, 0.0]])[0] == pytest.approx(2 * 2 * 8 + 7 * 2)
    # down by one: every tooth loses 1 of 8, and the spine keeps half of its thickness,
    # while its other half meets the teeth
    assert area.set_covariance([[0.0, 1.0]])[0] == pytest.approx(3 * 2 * 9 + (12 - 6) * 1)
    # half a pitch across: teeth meet nothing
    assert area.set_covariance([[2.5, 0.0]])[0] == pytest.approx((12 - 2.5) * 2)


def test_no_shift_opposite_shifts_and_far_ones():
    area = StudyArea(NAMED["ragged reserve"]())
    shifts = np.random.default_rng(4).normal(0, 500, (300, 2))
    assert np.array_equal(area.set_covariance(shifts), area.set_covariance(-shifts))
    assert area.set_covariance([[0, 0], [5000, 0], [0, -1e9]]).tolist() == [area.area, 0.0, 0.0]
    assert area.set_covariance(np.empty((0, 2))).shape == (0,)


def test_tiny_shifts_lose_the_projected_boundary():
    # |W| - γ(h) -> |h| times half the boundary's projection across h (Matheron 1975)
    area = StudyArea(NAMED["sample reserve"]())
    a, b = area._starts, area._ends
    for turn in (0.1, 1.3, 2.9):
        u = np.array([np.cos(turn), np.sin(turn)])
        projection = 0.5 * np.abs((b - a) @ [-u[1], u[0]]).sum()
        lost = area.area - area.set_covariance([1e-4 * u])[0]
        assert lost == pytest.approx(1e-4 * projection, rel=1e-3)


def test_same_bits_for_any_number_of_workers():
    area = StudyArea(NAMED["sample reserve"]())
    shifts = np.random.default_rng(5).normal(0, 300, (1500, 2))
    assert np.array_equal(area.set_covariance(shifts, workers=1), area.set_covariance(shifts, workers=3))


def test_bad_shifts():
    area = StudyArea(shapely.box(0, 0, 1, 1))
    with pytest.raises(UsageError, match="shifts must be an array of shape"):
        area.set_covariance([1.0, 2.0, 3.0])
    with pytest.raises(UsageError, match="shifts must hold finite coordinates"):
        area.set_covariance([[np.nan, 1.0]])
