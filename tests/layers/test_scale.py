"""Scale errors against published formulas, geodesics and PROJ's own factors."""

import numpy as np
import pyproj
import pytest
import shapely

from geoclust.errors import InputError
from geoclust.layers.scale import geodetic_of, sample_points, scale_errors, to_lonlat


def errors_at(code, lon, lat):
    return scale_errors(pyproj.CRS(code), np.radians([lon]), np.radians([lat]))


def test_utm_scale_is_0_9996_on_the_central_meridian():
    # definition of UTM: Snyder 1987, USGS Professional Paper 1395, p. 57
    for lat in (0.0, 35.0, 70.0):
        errors = errors_at("EPSG:32632", 9.0, lat)
        assert errors.smallest == pytest.approx(0.9996, abs=1e-8)
        assert errors.largest == pytest.approx(0.9996, abs=1e-8)
        assert errors.area == pytest.approx(1 - 0.9996**2, abs=1e-8)


def test_utm_scale_off_the_meridian_follows_the_series():
    # Snyder 1987, eq. 8-11: k = k0 [1 + (1 + C) A²/2 + ...], A = Δλ cos φ, C = e'² cos² φ
    lat, dlon = np.radians(40.0), np.radians(2.0)
    e2 = 0.00669437999014
    ep2 = e2 / (1 - e2)
    t, c, a = np.tan(lat) ** 2, ep2 * np.cos(lat) ** 2, dlon * np.cos(lat)
    series = 0.9996 * (
        1
        + (1 + c) * a**2 / 2
        + (5 - 4 * t + 42 * c + 13 * c**2 - 28 * ep2) * a**4 / 24
        + (61 - 148 * t + 16 * t**2) * a**6 / 720
    )
    errors = errors_at("EPSG:32632", 11.0, 40.0)
    assert errors.largest == pytest.approx(series, abs=1e-9)
    assert errors.smallest == pytest.approx(series, abs=1e-9)


def test_web_mercator_stretches_by_the_secant_of_the_latitude():
    # On the sphere the scale is 1/cos φ (Snyder 1987, eq. 7-3); on the ellipsoid east-west
    # distances are a/(N cos φ) and north-south ones a/(M cos φ) times as long.
    errors = errors_at("EPSG:3857", 10.0, 60.0)
    assert errors.largest == pytest.approx(2.0, rel=0.007)
    assert errors.smallest == pytest.approx(2.0, rel=0.007)
    a, e2, s2 = 6378137.0, 0.00669437999014, 0.75
    normal, meridional = a / np.sqrt(1 - e2 * s2), a * (1 - e2) / (1 - e2 * s2) ** 1.5
    assert errors.smallest == pytest.approx(a / normal / 0.5, rel=1e-8)
    assert errors.largest == pytest.approx(a / meridional / 0.5, rel=1e-8)


def test_web_mercator_is_wrong_at_the_equator_too():
    # M = a (1 - e²) there, so north-south distances are too long by e²/(1 - e²) = 0.674 %;
    # factors on the projection's own sphere would say 0
    errors = errors_at("EPSG:3857", 10.0, 0.0)
    assert errors.distance == pytest.approx(0.00669437999014 / (1 - 0.00669437999014), rel=1e-6)


@pytest.mark.parametrize(
    ("code", "lon", "lat"),
    [(3067, 24.0, 61.0), (3035, 30.0, 40.0), (2263, -73.9, 40.7), (3031, 20.0, -75.0), (27700, -4.0, 57.0)],
)
def test_agrees_with_proj_factors(code, lon, lat):
    crs = pyproj.CRS(code)
    at = pyproj.Transformer.from_crs(4326, geodetic_of(crs), always_xy=True, only_best=False)
    lon, lat = at.transform(lon, lat)
    factors = pyproj.Proj(crs).get_factors(lon, lat)
    errors = errors_at(code, lon, lat)
    assert errors.largest == pytest.approx(factors.tissot_semimajor, abs=1e-6)
    assert errors.smallest == pytest.approx(factors.tissot_semiminor, abs=1e-6)
    assert errors.area == pytest.approx(abs(factors.areal_scale - 1), abs=1e-6)


def test_agrees_with_geodesic_distances():
    # pyproj.Geod (Karney 2013): a line of 2 km in the plane against its length on the ellipsoid
    crs = pyproj.CRS("EPSG:3035")
    lon, lat = 28.0, 62.0
    back = pyproj.Transformer.from_crs(crs, 4258, always_xy=True)
    x, y = back.transform(lon, lat, direction="INVERSE")
    geod = pyproj.Geod(ellps="GRS80")
    angles = np.radians(np.arange(0, 180, 1.0))
    start = back.transform(x - 1000 * np.cos(angles), y - 1000 * np.sin(angles))
    end = back.transform(x + 1000 * np.cos(angles), y + 1000 * np.sin(angles))
    scales = 2000 / geod.inv(*start, *end)[2]
    errors = errors_at(3035, lon, lat)
    assert errors.largest == pytest.approx(scales.max(), abs=1e-5)
    assert errors.smallest == pytest.approx(scales.min(), abs=1e-5)


def test_places_that_a_projection_does_not_reach_are_unusable():
    # gnomonic: nothing beyond the hemisphere
    crs = pyproj.CRS("+proj=gnom +lat_0=90 +lon_0=0 +datum=WGS84 +type=crs")
    assert scale_errors(crs, np.radians([0.0]), np.radians([-30.0])).worst == np.inf


def test_samples_cover_boundary_and_inside():
    ring = shapely.Point(0, 0).buffer(100).difference(shapely.Point(0, 0).buffer(50))
    samples = sample_points(ring)
    radius = np.hypot(*samples.T)
    assert ((radius > 49) & (radius < 101)).all()
    assert (np.isclose(radius, 100)).any()
    assert (np.isclose(radius, 50)).any()
    assert ((radius > 60) & (radius < 90)).sum() > 50


def test_layers_of_two_bodies_do_not_go_together():
    mars = pyproj.CRS("+proj=laea +lat_0=-33 +lon_0=-133 +R=3396190 +units=m +type=crs")
    with pytest.raises(InputError, match="cannot be brought"):
        to_lonlat(np.zeros((1, 2)), mars, pyproj.CRS(4326))
