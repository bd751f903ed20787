"""The metric CRS that is chosen for a study area."""

from pathlib import Path

import geopandas as gpd
import numpy as np
import pyproj
import pytest
import rasterio
import shapely

from geoclust.errors import InputError, UsageError
from geoclust.layers.crs import (
    SCALE_LIMIT,
    choose_metric_crs,
    datum_step,
    in_metres,
    label,
    outside_area_of_use,
    parse_crs,
)

DATA = Path(__file__).parents[1] / "data"
WGS84 = pyproj.CRS("EPSG:4326")


def box(lon, lat, width=0.1, height=0.1):
    return shapely.box(lon, lat, lon + width, lat + height)


def choose(polygon, crs, points_crs=None, **kwargs):
    return choose_metric_crs(polygon, pyproj.CRS(crs), pyproj.CRS(points_crs or crs), **kwargs)


def test_degrees_go_to_the_utm_zone_of_the_centre():
    # zone 32 is 6 to 12 °E, zone 55 is 144 to 150 °E (definition of UTM)
    assert choose(box(8.9, 48.7), 4326).crs.to_epsg() == 32632
    assert choose(box(145.0, -37.9), 4326).crs.to_epsg() == 32755
    assert choose(box(8.9, 48.7), 4258).crs.to_epsg() == 25832  # ETRS89 stays on its datum


def test_a_good_projected_crs_is_kept():
    area = shapely.box(180000, 330000, 182000, 333000)
    choice = choose(area, 28992)
    assert choice.crs.to_epsg() == 28992
    # scale of the Dutch grid at its origin is 0.9999079 (EPSG definition)
    assert choice.errors.distance < 1e-4


def test_the_crs_of_the_points_comes_first():
    area = pyproj.Transformer.from_crs(4326, 32632, always_xy=True)
    polygon = shapely.transform(box(8.9, 48.7), lambda xy: np.column_stack(area.transform(*xy.T)))
    assert choose(polygon, 32632, 25832).crs.to_epsg() == 25832
    assert choose(polygon, 32632, 4326).crs.to_epsg() == 32632


def test_web_mercator_is_replaced():
    to = pyproj.Transformer.from_crs(4326, 3857, always_xy=True)
    polygon = shapely.transform(box(10, 60), lambda xy: np.column_stack(to.transform(*xy.T)))
    choice = choose(polygon, 3857)
    assert choice.crs.to_epsg() == 32632
    assert choice.errors.worst <= SCALE_LIMIT
    near_equator = shapely.box(1e6, 0, 1.01e6, 1e4)
    assert choose(near_equator, 3857).crs.to_epsg() == 32632


@pytest.mark.parametrize("lat", [60.0, 30.0, 0.0])
def test_web_mercator_insisted_on_is_an_error(lat):
    with pytest.raises(InputError, match=r"above the limit of 0\.1 %"):
        choose(box(10, lat), 4326, insisted="EPSG:3857")


def test_a_good_crs_insisted_on_is_taken():
    choice = choose(box(10, 60), 4326, insisted="EPSG:25832")
    assert choice.crs.to_epsg() == 25832
    assert choice.reason == "asked for"
    assert choose(box(-73.9, 40.7), 4326, insisted="EPSG:2263").crs.to_epsg() == 32118


@pytest.mark.parametrize("insisted", ["EPSG:4326", "local", "EPSG:4978"])
def test_degrees_cannot_be_insisted_on(insisted):
    with pytest.raises(UsageError, match="projected CRS"):
        choose(box(10, 60), 4326, insisted=insisted)


def test_no_such_crs_is_a_usage_error():
    with pytest.raises(UsageError, match="got 'EPSG:1'"):
        parse_crs("EPSG:1")


def test_feet_become_metres_of_the_same_projection():
    feet = pyproj.CRS("EPSG:2263")
    metres = in_metres(feet)
    assert metres.to_epsg() == 32118  # NAD83 / New York Long Island, the metric zone
    assert metres.axis_info[0].unit_conversion_factor == 1.0
    x, y = datum_step(feet, metres, (-74.0, 40.7)).transformer.transform(1_000_000.0, 200_000.0)
    assert x == pytest.approx(1_000_000.0 * 1200 / 3937, abs=1e-6)  # US survey foot
    assert y == pytest.approx(200_000.0 * 1200 / 3937, abs=1e-6)


def test_feet_without_a_registered_twin():
    feet = pyproj.CRS("+proj=tmerc +lat_0=0 +lon_0=9 +datum=WGS84 +units=ft +type=crs")
    metres = in_metres(feet)
    assert {axis.unit_name for axis in metres.axis_info} == {"metre"}
    x, _ = datum_step(feet, metres, (9.0, 50.0)).transformer.transform(1000.0, 2000.0)
    assert x == pytest.approx(304.8, abs=1e-9)


def test_a_local_plane_is_taken_as_it_is():
    local = parse_crs("local")
    choice = choose_metric_crs(shapely.box(0, 0, 9, 9), local, local)
    assert choice.crs == local
    assert choice.errors is None
    with pytest.raises(InputError, match="same CRS"):
        choose_metric_crs(shapely.box(0, 0, 9, 9), local, WGS84)


def test_a_local_plane_in_feet_becomes_metres():
    feet = pyproj.CRS.from_wkt(parse_crs("local").to_wkt().replace('"metre",1', '"foot",0.3048'))
    metres = in_metres(feet)
    assert datum_step(feet, metres, None).transformer.transform(10.0, 20.0) == pytest.approx((3.048, 6.096))


def test_mars_keeps_its_own_crs():
    mars = pyproj.CRS((DATA / "mars_pickering_crs.txt").read_text())
    area = gpd.read_file(DATA / "mars_pickering_area.gpkg")
    choice = choose_metric_crs(area.union_all(), area.crs, mars)
    assert choice.crs.equals(mars)
    # an equal-area projection, and the angle to the rim is 58 km / 3396 km = 0.017, whose
    # square over 8 is the error of distances (Snyder 1987, eq. 24-2: sec(c/2))
    assert choice.errors.area < 1e-8
    assert choice.errors.distance == pytest.approx((63.8 / 3396.19) ** 2 / 8, rel=0.5)


def test_degrees_on_mars_get_a_projection_on_mars():
    mars = pyproj.CRS("+proj=longlat +R=3396190 +no_defs +type=crs")
    choice = choose_metric_crs(box(-133.5, -33.5), mars, mars)
    assert choice.crs.ellipsoid.semi_major_metre == 3396190
    assert choice.crs.is_projected
    assert choice.errors.worst < 1e-4
    with pytest.raises(InputError):
        choose_metric_crs(box(-133.5, -33.5), mars, mars, insisted="EPSG:32632")


def test_finland_gets_an_area_within_the_limit():
    area = gpd.read_file(DATA / "finland_lakes_epsg3067.gpkg")
    choice = choose_metric_crs(area.union_all(), area.crs, area.crs)
    # TM35FIN is off by 0.19 % in areas at the western rim, 332 km from its meridian
    assert choice.crs != area.crs
    assert choice.errors.worst <= SCALE_LIMIT
    with pytest.raises(InputError, match=r"TM35FIN\(E,N\) \(EPSG:3067\) is wrong"):
        choose_metric_crs(area.union_all(), area.crs, area.crs, insisted=area.crs)


def test_a_subcontinent_gets_the_best_there_is():
    choice = choose(shapely.box(20, 40, 45, 60), 4326)
    assert choice.errors.worst > SCALE_LIMIT
    # no worse than any of the usual choices for a region of this size
    for code in (32635, 3035, 3857):
        with pytest.raises(InputError):
            choose(shapely.box(20, 40, 45, 60), 4326, insisted=f"EPSG:{code}")
    assert choice.errors.worst < 0.01


def test_a_belt_on_the_equator_gets_a_mercator():
    choice = choose(shapely.box(20, -1, 40, 1), 4326)
    assert "Mercator" in label(choice.crs)
    assert choice.errors.worst <= SCALE_LIMIT


def test_poles():
    south = choose(shapely.box(-2e5, -2e5, 2e5, 2e5), 3031)  # polar stereographic, true at 71 °S: 0.97 here
    assert south.crs.to_epsg() != 3031
    assert south.errors.worst <= SCALE_LIMIT
    north = choose(box(36, 86, 10, 1), 4326)  # beyond UTM
    assert north.errors.worst <= SCALE_LIMIT
    svalbard = choose(shapely.box(5e5, -2.2e6, 5.1e5, -2.19e6), 3995)
    assert svalbard.errors.worst <= SCALE_LIMIT


def test_centred_projections_survive_gdal():
    choice = choose(box(36, 86, 10, 1), 4326)
    through = pyproj.CRS.from_user_input(rasterio.crs.CRS.from_wkt(choice.crs.to_wkt()))
    assert through.equals(choice.crs, ignore_axis_order=True)
    there = pyproj.Transformer.from_crs(4326, through, always_xy=True).transform(40.0, 86.5)
    here = pyproj.Transformer.from_crs(4326, choice.crs, always_xy=True).transform(40.0, 86.5)
    assert there == pytest.approx(here, abs=1e-6)


def test_southing_axes_are_not_taken_for_northings():
    # EPSG:2048, Hartebeesthoek94 / Lo19: westings and southings
    to = pyproj.Transformer.from_crs(4148, 2048, always_xy=True)
    polygon = shapely.transform(box(19.0, -33.9), lambda xy: np.column_stack(to.transform(*xy.T)))
    choice = choose(polygon, 2048)
    assert {axis.direction for axis in choice.crs.axis_info} == {"east", "north"}


def test_grads_and_paris():
    # EPSG:27572, NTF (Paris) / Lambert zone II: base CRS in grads from the meridian of Paris
    choice = choose(shapely.box(600000, 2200000, 610000, 2210000), 27572)
    assert choice.crs.to_epsg() == 27572
    assert choice.errors.distance == pytest.approx(1 - 0.99987742, abs=2e-6)  # scale at 46.8 °N


def test_compound_crs_lose_their_heights():
    assert parse_crs("EPSG:25832+5783").to_epsg() == 25832
    assert parse_crs("EPSG:4979").to_epsg() == 4326


def test_area_of_use():
    utm = pyproj.CRS("EPSG:25832")
    assert not outside_area_of_use(utm, 9.0, 50.0)
    assert outside_area_of_use(utm, 170.0, -40.0)
    nz = pyproj.CRS("EPSG:2193")  # 166 to 179 °E
    assert not outside_area_of_use(nz, 178.0, -40.0)
    fiji = pyproj.CRS("EPSG:3460")  # across the antimeridian
    assert not outside_area_of_use(fiji, -179.0, -17.0)
    assert outside_area_of_use(fiji, 0.0, -17.0)
    assert not outside_area_of_use(WGS84, 190.0, 0.0)


def test_a_change_of_datum_is_named():
    same = datum_step(pyproj.CRS(4258), pyproj.CRS(25832), (9.0, 50.0))
    assert same.description is None
    other = datum_step(pyproj.CRS(4326), pyproj.CRS(25832), (9.0, 50.0))
    assert other.description is not None
    assert datum_step(WGS84, WGS84, None) is None
