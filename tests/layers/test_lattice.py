"""Rounded coordinates are found, and full precision raises no alarm."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from geoclust.layers.lattice import MINIMUM_VALUES, axis_lattices, find_lattices

DATA = Path(__file__).parents[1] / "data"


def table(name, x="x", y="y"):
    return pd.read_csv(DATA / name)[[x, y]].to_numpy(dtype=float)


def field(seed, size=400):
    """Full-precision coordinates of a field of 3 km in a metric CRS."""
    return np.random.default_rng(seed).uniform([412_000, 5_310_000], [415_000, 5_313_000], (size, 2))


def spacings(xy, geographic=False):
    return [
        (lattice.axis, lattice.spacing, lattice.share) for lattice in find_lattices(xy, geographic=geographic)
    ]


@pytest.mark.parametrize(
    ("name", "columns", "spacing"),
    [
        # tests/data/README.md: recorded to 0.001 of the 9 m plot
        ("brambles.csv", ("x", "y"), 0.001),
        ("caveolae.csv", ("x", "y"), 1.0),
        ("nuclei_px512.csv", ("x", "y"), 0.01),
        ("nyc_zip_centres_epsg2263.csv", ("x", "y"), 0.1),
        # centres of boxes with whole corners
        ("tree_crowns_yell_px2299x2472.csv", ("x", "y"), 0.5),
    ],
)
def test_known_roundings(name, columns, spacing):
    assert spacings(table(name, *columns)) == [("x", spacing, 1.0), ("y", spacing, 1.0)]


def test_brambles_scaled_to_their_plot():
    found = spacings(9 * table("brambles.csv"))
    assert [(axis, share) for axis, _, share in found] == [("x", 1.0), ("y", 1.0)]
    assert [spacing for _, spacing, _ in found] == pytest.approx([0.009, 0.009])


def test_seconds_of_arc_behind_rounded_degrees():
    # five decimals, but every value is a whole number of seconds within half a unit of the fifth
    lonlat = table("lux_places_epsg4326.csv", "lon", "lat")
    assert np.abs(lonlat * 3600 - np.rint(lonlat * 3600)).max() <= 3600 * 0.5e-5 * (1 + 1e-6)
    assert spacings(lonlat, geographic=True) == [("x", 1 / 3600, 1.0), ("y", 1 / 3600, 1.0)]
    # taken for metres, nobody would look for seconds
    assert spacings(lonlat)[0] == ("x", 1e-5, 1.0)


def test_degrees_of_five_decimals():
    lonlat = np.round(np.random.default_rng(3).uniform([6.0, 49.0], [6.5, 50.0], (138, 2)), 5)
    assert spacings(lonlat, geographic=True) == [("x", 1e-5, 1.0), ("y", 1e-5, 1.0)]


def test_no_alarm_for_recorded_full_precision():
    assert spacings(table("mars_pickering_craters.csv")) == []


def test_no_false_alarm():
    for seed in range(500):
        rng = np.random.default_rng(seed)
        size = int(rng.integers(MINIMUM_VALUES, 300))
        xy = rng.random((size, 2)) * 10 ** rng.uniform(-2, 5) + 10 ** rng.uniform(0, 7)
        assert spacings(xy, geographic=bool(seed % 2)) == []
        # full precision in another unit is full precision
        assert spacings(xy * 0.3048) == []


@pytest.mark.parametrize("spacing", [0.01, 0.1, 0.25, 1.0, 5.0, 30.0])
def test_any_decimal_spacing(spacing):
    for seed in range(20):
        xy = np.rint(field(seed) / spacing) * spacing
        found = spacings(xy)
        assert [axis for axis, _, _ in found] == ["x", "y"]
        assert [found[0][1], found[1][1]] == pytest.approx([spacing, spacing], rel=1e-9)


def test_offset_lattices_such_as_cell_centres():
    xy = np.rint(field(1) / 40) * 40 + 20
    assert spacings(xy) == [("x", 40.0, 1.0), ("y", 40.0, 1.0)]


def test_whole_feet_in_metres():
    feet = np.rint(field(2) / 0.3048) * 0.3048
    assert [spacing for _, spacing, _ in spacings(feet)] == pytest.approx([0.3048, 0.3048], rel=1e-9)
    # and rounded to centimetres afterwards
    assert [spacing for _, spacing, _ in spacings(np.round(feet, 2))] == pytest.approx([0.3048, 0.3048])


def test_a_spacing_of_no_round_number():
    xy = 0.3127 * np.random.default_rng(4).integers(0, 2000, (300, 2)) + 5000
    assert [spacing for _, spacing, _ in spacings(xy)] == pytest.approx([0.3127, 0.3127], rel=1e-6)


def test_mixture_of_rounded_and_full_precision():
    xy = field(5)
    xy[:240] = np.rint(xy[:240])
    found = spacings(xy)
    assert [(axis, spacing) for axis, spacing, _ in found] == [("x", 1.0), ("y", 1.0)]
    assert [share for _, _, share in found] == [0.6, 0.6]


def test_mixture_of_two_roundings():
    xy = np.round(field(6), 2)
    xy[:240] = np.rint(xy[:240] / 10) * 10
    found = spacings(xy)
    assert [(axis, spacing) for axis, spacing, _ in found] == [
        ("x", 10.0),
        ("x", 0.01),
        ("y", 10.0),
        ("y", 0.01),
    ]
    # 160 others fall on the coarse lattice by chance once in a thousand
    assert found[0][2] == pytest.approx(0.6, abs=4 * np.sqrt(160 * 0.001) / 400)
    assert found[1][2] == 1.0


def test_one_point_of_full_precision_does_not_hide_the_lattice():
    xy = np.rint(field(7))
    xy[17] += 0.123456789
    assert [(spacing, share) for _, spacing, share in spacings(xy)] == [(1.0, 399 / 400)] * 2


def test_axes_are_looked_at_separately():
    xy = field(8)
    xy[:, 1] = np.rint(xy[:, 1])
    assert spacings(xy) == [("y", 1.0, 1.0)]


def test_too_few_values_to_tell():
    assert axis_lattices(np.arange(MINIMUM_VALUES - 1.0), geographic=False) == []
    assert axis_lattices(np.full(50, 3.0), geographic=False) == []
    assert axis_lattices(np.array([]), geographic=False) == []
