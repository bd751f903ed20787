"""Study areas that several tests share, and slow second opinions on their geometry."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import geopandas as gpd
import numpy as np
import shapely

HERE = Path(__file__).parent
# one US survey foot in metres (US National Geodetic Survey)
SURVEY_FOOT = 1200 / 3937


@cache
def ragged_reserve() -> shapely.Polygon:
    """A reserve of 2,400 edges with inlets, a ragged boundary and three ponds; about 2 km across."""
    rng = np.random.default_rng(2400)

    def ring(vertices: int, x: float, y: float, radius: float, waves: int, rough: float) -> np.ndarray:
        t = np.linspace(0, 2 * np.pi, vertices, endpoint=False)
        r = np.ones(vertices)
        for k in range(2, waves):
            r += 0.45 / k * rng.normal() * np.cos(k * t + rng.uniform(0, 2 * np.pi))
        r = np.clip(r, 0.35, 1.7) * (1 + rough * rng.normal(size=vertices))
        return np.column_stack([x + radius * r * np.cos(t), y + radius * r * np.sin(t)])

    outer = ring(1800, 500_000, 5_400_000, 800, 14, 0.006)
    ponds = [
        ring(200, 500_000 + 300 * np.cos(a), 5_400_000 + 300 * np.sin(a), 70, 6, 0.01)
        for a in (0.4, 2.5, 4.6)
    ]
    reserve = shapely.Polygon(outer, ponds)
    assert reserve.is_valid
    return reserve


@cache
def sample_reserve() -> shapely.MultiPolygon:
    """The reserve of the sample layers, in metres (EPSG:25832)."""
    frame = gpd.read_file(HERE.parent / "sample_layers" / "reserve.shp")
    return _multi(frame.union_all())


@cache
def finland() -> shapely.MultiPolygon:
    """Land of Finland without its lakes (EPSG:3067, metres)."""
    return _multi(gpd.read_file(HERE / "data" / "finland_lakes_epsg3067.gpkg").union_all())


@cache
def new_york() -> shapely.MultiPolygon:
    """The boroughs of New York as one area, scaled from feet to metres."""
    boroughs = gpd.read_file(HERE / "data" / "nybb_epsg2263.gpkg").union_all()
    return _multi(shapely.transform(boroughs, lambda at: at * SURVEY_FOOT))


def comb(teeth: int = 12, width: float = 20.0, gap: float = 30.0, length: float = 600.0) -> shapely.Polygon:
    """Thin parallel strips that hang on one thin spine."""
    pitch = width + gap
    strips = [shapely.box(k * pitch, 0, k * pitch + width, length) for k in range(teeth)]
    spine = shapely.box(0, length - width, (teeth - 1) * pitch + width, length)
    return shapely.union_all([*strips, spine])


def strips(
    count: int = 12, width: float = 20.0, gap: float = 30.0, length: float = 600.0
) -> shapely.Geometry:
    """The teeth of the comb alone, which do not touch."""
    pitch = width + gap
    return shapely.MultiPolygon([shapely.box(k * pitch, 0, k * pitch + width, length) for k in range(count)])


def _multi(polygon: shapely.Geometry) -> shapely.MultiPolygon:
    return polygon if isinstance(polygon, shapely.MultiPolygon) else shapely.MultiPolygon([polygon])


NAMED = {
    "ragged reserve": ragged_reserve,
    "sample reserve": sample_reserve,
    "finland": finland,
    "new york": new_york,
}


def share_by_arcs(polygon: shapely.Geometry, centre: np.ndarray, radius: float) -> float:
    """Share of a circle inside a polygon: cut at every edge, shapely says which arcs are inside."""
    x, y = centre
    reach = radius + 1
    near = shapely.clip_by_rect(polygon.boundary, x - reach, y - reach, x + reach, y + reach)
    angles = []
    for line in shapely.get_parts(near):
        at = shapely.get_coordinates(line).astype(np.longdouble) - np.asarray(centre, np.longdouble)
        a, d = at[:-1], np.diff(at, axis=0)
        qa, qb, qc = (d * d).sum(1), (a * d).sum(1), (a * a).sum(1) - np.longdouble(radius) ** 2
        root = qb * qb - qa * qc
        keep = (root > 0) & (qa > 0)
        a, d, qa, qb, root = a[keep], d[keep], qa[keep], qb[keep], np.sqrt(root[keep])
        for sign in (-1, 1):
            t = (-qb + sign * root) / qa
            on = (t >= 0) & (t < 1)
            hit = a[on] + t[on, None] * d[on]
            angles.append(np.arctan2(hit[:, 1], hit[:, 0]).astype(float))
    cuts = np.sort(np.concatenate([*angles, np.empty(0)]))
    if len(cuts) == 0:
        return float(shapely.contains_xy(polygon, x + radius, y))
    ends = np.append(cuts, cuts[0] + 2 * np.pi)
    middle = 0.5 * (ends[:-1] + ends[1:])
    inside = shapely.contains_xy(polygon, x + radius * np.cos(middle), y + radius * np.sin(middle))
    return float(np.sum(np.diff(ends)[inside]) / (2 * np.pi))


def share_by_drawing(polygon: shapely.Geometry, centre: np.ndarray, radius: float, corners: int) -> float:
    """Share of a finely drawn circle inside a polygon, by shapely's overlay."""
    t = np.linspace(0, 2 * np.pi, corners + 1)
    circle = shapely.LinearRing(
        np.column_stack([centre[0] + radius * np.cos(t[:-1]), centre[1] + radius * np.sin(t[:-1])])
    )
    x, y = centre
    near = shapely.clip_by_rect(
        polygon, x - 1.01 * radius, y - 1.01 * radius, x + 1.01 * radius, y + 1.01 * radius
    )
    return float(shapely.intersection(circle, shapely.make_valid(near)).length / circle.length)


def random_circles(polygon: shapely.Geometry, count: int, rng: np.random.Generator, largest: float):
    """Centres uniform in the polygon and radii up to `largest`, log-uniform over three decades."""
    minx, miny, maxx, maxy = polygon.bounds
    shapely.prepare(polygon)
    centres = np.empty((0, 2))
    while len(centres) < count:
        at = rng.uniform((minx, miny), (maxx, maxy), (4 * count, 2))
        centres = np.vstack([centres, at[shapely.contains_xy(polygon, at[:, 0], at[:, 1])]])
    return centres[:count], largest * 10 ** rng.uniform(-3, 0, count)


def share_in_rectangle(x: float, y: float, r: float, a: float, b: float) -> float:
    """Share of a circle inside [0, a] x [0, b].

    Closed form: each side hides an arc of 2 arccos(d/r) if it is nearer than r,
    and two sides whose corner lies inside the circle share part of it (Ripley
    1977; Diggle 1983, Statistical Analysis of Spatial Point Patterns, p. 72).
    """
    right, top, left, bottom = a - x, b - y, x, y
    hidden = sum(2 * np.arccos(d / r) for d in (right, top, left, bottom) if d < r)
    for d, e in ((right, top), (top, left), (left, bottom), (bottom, right)):
        if d * d + e * e < r * r:
            hidden -= np.arccos(d / r) + np.arccos(e / r) - np.pi / 2
    return 1 - hidden / (2 * np.pi)
