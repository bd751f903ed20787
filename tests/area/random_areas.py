"""Random study areas with everything that is awkward about real ones."""

from __future__ import annotations

import numpy as np
import shapely
from hypothesis import strategies as st
from shapely.affinity import translate

# exact in binary, so that moving or scaling a polygon changes no digit of its shape
SHIFTS = [(0.0, 0.0), (500_000.0, 6_700_000.0), (-1024.5, 77.25)]
SCALES = [2.0**-10, 1.0, 64.0, 2.0**14]


@st.composite
def shapes(draw: st.DrawFn) -> shapely.Polygon:
    """A box, a sliver or a star on a lattice of quarters."""
    kind = draw(st.sampled_from(["box", "sliver", "star"]))
    x, y = draw(st.integers(0, 10)), draw(st.integers(0, 10))
    if kind == "star":
        spikes = draw(st.lists(st.integers(1, 12), min_size=3, max_size=9))
        t = np.linspace(0, 2 * np.pi, len(spikes), endpoint=False)
        at = np.column_stack([x + np.array(spikes) / 3 * np.cos(t), y + np.array(spikes) / 3 * np.sin(t)])
        return shapely.Polygon(np.round(at * 2**20) / 2**20)
    width = draw(st.integers(1, 6))
    height = 2.0**-9 if kind == "sliver" else draw(st.integers(1, 6))
    return shapely.box(x, y, x + width, y + height)


@st.composite
def areas(draw: st.DrawFn) -> tuple[shapely.MultiPolygon, float]:
    """A valid multipolygon and its unit of length.

    Unions of shapes with others cut out: holes, many parts, parts that share a
    corner, collinear runs; some re-noded, some with repeated vertices.
    """
    body = shapely.union_all(draw(st.lists(shapes(), min_size=1, max_size=5)))
    for hole in draw(st.lists(shapes(), max_size=3)):
        body = body - hole
    parts = [p for p in shapely.get_parts(body) if isinstance(p, shapely.Polygon) and p.area > 1e-6]
    if not parts:
        parts = [shapely.box(0, 0, 4, 3)]
    if draw(st.booleans()):
        # the neighbour's corner
        corner = shapely.get_coordinates(parts[0])[np.argmin(shapely.get_coordinates(parts[0]).sum(1))]
        other = shapely.box(corner[0] - 1, corner[1] - 1, corner[0], corner[1])
        together = shapely.MultiPolygon([*parts, other])
        parts = [*parts, other] if together.is_valid else parts
    polygon = shapely.MultiPolygon(parts)
    if draw(st.booleans()):
        polygon = shapely.MultiPolygon(
            [shapely.Polygon(_doubled(p.exterior), [_doubled(h) for h in p.interiors]) for p in polygon.geoms]
        )
    scale, shift = draw(st.sampled_from(SCALES)), draw(st.sampled_from(SHIFTS))
    if shift[1] > 1e6:
        # metres with a thousandth, as in a survey's file, so that no digit is lost far from the origin
        polygon = shapely.transform(polygon, lambda at: np.round(at * 2**9) / 2**9)
        scale = max(scale, 2.0**-4)
    polygon = translate(shapely.transform(polygon, lambda at: at * scale), *shift)
    if not polygon.is_valid or polygon.area <= 0:
        polygon = shapely.MultiPolygon([translate(shapely.box(0, 0, 4 * scale, 3 * scale), *shift)])
    return polygon, scale


def _doubled(ring: shapely.LinearRing) -> np.ndarray:
    return np.repeat(shapely.get_coordinates(ring), 2, axis=0)


def circles(
    polygon: shapely.Geometry, unit: float, seed: int, count: int = 40
) -> tuple[np.ndarray, np.ndarray]:
    """Circles about a polygon: some round its vertices, some with round radii."""
    count = 40
    rng = np.random.default_rng(seed)
    minx, miny, maxx, maxy = polygon.bounds
    centres = rng.uniform((minx - unit, miny - unit), (maxx + unit, maxy + unit), (count, 2))
    vertices = shapely.get_coordinates(polygon)
    half = count // 2
    centres[:half] = vertices[rng.integers(len(vertices), size=half)]
    radii = unit * 10 ** rng.uniform(-2, 1.2, count)
    radii[::4] = unit * rng.integers(1, 8, len(radii[::4]))
    return centres, radii
