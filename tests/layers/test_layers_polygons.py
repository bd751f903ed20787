"""Polygons taken apart, mended, united and carried to another projection."""

import numpy as np
import pyproj
import pytest
import shapely

from geoclust.errors import InputError
from geoclust.layers.crs import datum_step
from geoclust.layers.points import coincident, median_nearest, place_points, take_points
from geoclust.layers.polygons import (
    BEND_TOLERANCE,
    carry_over,
    mend,
    take_apart,
    unite,
    unwrap_longitudes,
)

WGS84 = pyproj.CRS("EPSG:4326")
BOW_TIE = shapely.Polygon([(0, 0), (1, 1), (1, 0), (0, 1)])


def parts_of(*geometries):
    return take_apart(np.array(geometries, dtype=object))


def with_loop(size, loop):
    """A square whose top edge crosses itself in a loop of a given height."""
    return shapely.Polygon([(0, 0), (size, 0), (size, size), (50, size), (50.5, size + loop),
                            (50, size + loop), (50.4, size), (0, size)])  # fmt: skip


def test_take_apart_counts_everything():
    square = shapely.box(0, 0, 1, 1)
    parts = parts_of(
        square,
        shapely.MultiPolygon([square, shapely.box(2, 0, 3, 1)]),
        None,
        shapely.Polygon(),
        shapely.Point(0, 0),
        shapely.GeometryCollection([shapely.Point(9, 9), shapely.MultiPolygon([shapely.box(5, 5, 6, 6)])]),
        shapely.force_3d(square, 12.0),
    )
    assert parts.feature.tolist() == [0, 1, 1, 5, 6]
    assert (parts.null, parts.empty, parts.other, parts.z_dropped) == (1, 1, 1, 1)
    assert not shapely.has_z(parts.polygons).any()


def test_a_bow_tie_is_refused_and_repaired_on_request():
    with pytest.raises(InputError, match=r"Self-intersection\[0.5 0.5\] in feature 1"):
        mend(parts_of(BOW_TIE), "the study area", allow=False)
    mended, repair = mend(parts_of(BOW_TIE), "the study area", allow=True)
    assert shapely.is_valid(mended.polygons).all()
    assert shapely.area(mended.polygons).sum() == pytest.approx(0.5)  # two triangles of 1/4
    assert repair.polygons == 1
    assert repair.change == pytest.approx(1.0)  # the ring encloses +1/4 and -1/4


def test_a_small_crossing_is_repaired_without_asking():
    polygon = with_loop(100.0, 1.0)
    assert not polygon.is_valid
    mended, repair = mend(parts_of(polygon), "the study area", allow=False)
    assert shapely.is_valid(mended.polygons).all()
    # the loop is a triangle of base 0.5 cut off at its crossing: far below 0.1 % of 10,000
    assert 0 < repair.change < 1e-4
    assert shapely.area(mended.polygons).sum() == pytest.approx(10_000, rel=1e-4)


def test_areas_that_cancel_do_not_pass_as_unchanged():
    # A square with a loop inside that is wound twice (counted out by the repair) and an equal
    # one outside that is wound backwards (counted in): the signed area of the ring and that
    # of the repaired polygon agree, although 6 + 6 of 100 square units have changed sides.
    square = [(0, 0), (10, 0), (10, 10), (0, 10), (0, 0)]
    inside, outside = [(3, 1), (3, 3), (1, 3), (0, 0)], [(-1, -3), (-3, -3), (-3, -1), (0, 0)]
    ring = shapely.Polygon([*square, *inside, *outside])
    assert not ring.is_valid
    assert shapely.make_valid(ring).area == pytest.approx(ring.area, rel=1e-9)
    with pytest.raises(InputError, match="repairing it would move"):
        mend(parts_of(ring), "the study area", allow=False)


def test_zones_are_held_to_the_limit_one_by_one():
    large = shapely.box(0, 10, 1000, 1010)
    layer = parts_of(large, BOW_TIE)
    _, repair = mend(layer, "the study area", allow=False)
    assert repair.change == pytest.approx(0.5 / 1_000_000.5)
    with pytest.raises(InputError, match="in feature 2"):
        mend(layer, "the zones", allow=False, each_feature=True)


def test_flat_polygons():
    flat = shapely.Polygon([(0, 0), (1, 1), (2, 2)])
    with pytest.raises(InputError, match="has no area"):
        mend(parts_of(flat), "the study area", allow=True)
    kept, repair = mend(parts_of(flat, shapely.box(0, 0, 1, 1)), "the study area", allow=False)
    assert (repair.flat, len(kept.polygons)) == (1, 1)
    strip = shapely.box(0, 0, 1_000_000, 1)
    assert len(mend(parts_of(strip), "the study area", allow=False)[0].polygons) == 1


def test_infinite_coordinates_are_refused():
    with pytest.raises(InputError, match="not finite"):
        mend(parts_of(shapely.Polygon([(0, 0), (np.inf, 0), (1, 1)])), "the study area", allow=True)


def test_overlaps_are_united_and_measured():
    whole, overlap = unite(parts_of(shapely.box(0, 0, 2, 1), shapely.box(1, 0, 3, 1)))
    assert (whole.area, overlap) == (3.0, 1.0)
    assert isinstance(whole, shapely.MultiPolygon)
    assert unite(parts_of(shapely.box(0, 0, 1, 1), shapely.box(1, 0, 2, 1)))[1] == 0.0


def test_parts_on_both_sides_of_the_antimeridian_are_joined():
    parts = parts_of(shapely.box(179, -17, 180, -16), shapely.box(-180, -17, -179.5, -16))
    joined, shifted = unwrap_longitudes(parts, WGS84, "the study area")
    assert shifted
    assert unite(joined)[0].bounds == (179.0, -17.0, 180.5, -16.0)
    # a projected CRS, or one side only, is left alone
    assert unwrap_longitudes(parts, pyproj.CRS(3857), "")[1] is False
    assert unwrap_longitudes(parts_of(shapely.box(170, 0, 190, 1)), WGS84, "")[1] is False


def test_a_jump_at_the_antimeridian_is_refused():
    jump = shapely.Polygon([(179, -17), (-179.5, -17), (-179.5, -16), (179, -16)])
    with pytest.raises(InputError, match="antimeridian"):
        unwrap_longitudes(parts_of(jump), WGS84, "the study area")


def test_more_than_half_the_globe_is_refused():
    around = [shapely.box(lon, 80, lon + 20, 81) for lon in range(-180, 180, 20)]
    with pytest.raises(InputError, match="polar"):
        unwrap_longitudes(parts_of(*around), WGS84, "the study area")


def test_long_edges_bend_with_the_projection():
    box = shapely.box(0, 60, 10, 61)
    step = datum_step(WGS84, pyproj.CRS("EPSG:32631"), (5.0, 60.5))
    carried, added = carry_over(np.array([box]), step, "the study area")
    fine = shapely.segmentize(box, 0.001)
    x, y = step.transformer.transform(*shapely.get_coordinates(fine).T)
    true = shapely.Polygon(np.column_stack([x, y]))
    assert added > 100
    # the corners alone would cut off several kilometres
    assert shapely.hausdorff_distance(carried[0], true) < 2 * BEND_TOLERANCE * np.sqrt(true.area)
    assert carried[0].area == pytest.approx(true.area, rel=1e-5)
    # area on the ellipsoid by pyproj.Geod (Karney 2013), times the scale of UTM
    geodesic = abs(pyproj.Geod(ellps="WGS84").geometry_area_perimeter(fine)[0])
    assert carried[0].area == pytest.approx(geodesic, rel=0.001)


def test_carrying_over_keeps_holes_and_short_edges():
    ring = shapely.box(9.0, 50.0, 9.01, 50.01).difference(shapely.box(9.002, 50.002, 9.004, 50.004))
    other = shapely.box(9.02, 50.0, 9.03, 50.01)
    step = datum_step(WGS84, pyproj.CRS("EPSG:32632"), (9.0, 50.0))
    carried, added = carry_over(np.array([ring, other]), step, "the study area")
    assert [shapely.get_num_interior_rings(polygon) for polygon in carried] == [1, 0]
    assert shapely.get_num_coordinates(carried).sum() == 15 + added
    x, y = step.transformer.transform(9.0, 50.0)
    assert np.isclose(shapely.get_coordinates(carried[0]), (x, y), rtol=0, atol=1e-9).all(axis=1).any()
    assert carry_over(np.array([ring]), None, "")[0][0] is ring


def test_take_points_counts_everything():
    points = take_points(
        np.array(
            [
                shapely.Point(1, 2),
                shapely.MultiPoint([(3, 4), (5, 6)]),
                shapely.MultiPoint([(7, 8)]),
                shapely.Point(9, 10, 11),
                None,
                shapely.Point(),
                shapely.LineString([(0, 0), (1, 1)]),
                shapely.Point(np.inf, 0),
                shapely.GeometryCollection([shapely.Point(11, 12), shapely.LineString([(0, 0), (1, 1)])]),
            ],
            dtype=object,
        )
    )
    assert points.xy.tolist() == [[1, 2], [3, 4], [5, 6], [7, 8], [9, 10], [11, 12]]
    assert points.feature.tolist() == [0, 1, 1, 2, 3, 8]
    assert (points.null, points.empty, points.other, points.nonfinite) == (1, 1, 1, 1)
    assert (points.multipoints, points.z_dropped) == (1, 1)


def test_places_inside_on_and_outside():
    area = shapely.MultiPolygon([shapely.box(0, 0, 10, 10).difference(shapely.box(4, 4, 6, 6))])
    xy = np.array([[1, 1], [0, 5], [5, 5], [4, 5], [-3, -4], [10 + 5e-6, 5], [10 + 2e-5, 5]])
    placed = place_points(xy, area)
    assert placed.tolerance == pytest.approx(1e-6 * np.sqrt(96))
    assert placed.kept.tolist() == [True, True, False, True, False, True, False]
    assert placed.on_boundary.tolist() == [False, True, False, True, False, True, False]
    assert placed.furthest == pytest.approx(5.0)  # 3-4-5 from the corner


def test_coincident_and_nearest():
    xy = np.array([[0.0, 0], [0, 0], [0, 0], [3, 4], [3, 4], [10, 0]])
    assert coincident(xy) == (3, 2)
    assert median_nearest(xy) == pytest.approx(5.0)
