"""Numbers per zone, and what polygons that were not walked probably hold."""

from __future__ import annotations

import geopandas as gpd
import numpy as np
import numpy.typing as npt
import shapely

from geoclust.area.study_area import StudyArea
from geoclust.fitting.sampling import ChainSetup, Draws
from geoclust.fitting.shares import heavy_tailed, share_beyond
from geoclust.intensity.base import Intensity
from geoclust.intensity.cells import Cells

Floats = npt.NDArray[np.float64]


def _polygon_part(geometry: shapely.Geometry) -> shapely.MultiPolygon:
    """The polygons of whatever an overlay returned."""
    parts = [
        g for g in shapely.get_parts(shapely.make_valid(geometry))
        if isinstance(g, shapely.Polygon | shapely.MultiPolygon) and g.area > 0
    ]  # fmt: skip
    # the constructor takes an empty list, where nothing is left; the array function does not
    return shapely.MultiPolygon([p for g in parts for p in shapely.get_parts(g)])


def _areas(geometries: gpd.GeoSeries, area: StudyArea) -> list[StudyArea | None]:
    out: list[StudyArea | None] = []
    for g in geometries:
        part = _polygon_part(g)
        out.append(None if part.is_empty else StudyArea(part, area.crs))
    return out


def _with_numbers(
    given: gpd.GeoDataFrame, areas: list[StudyArea | None], numbers: dict[str, npt.NDArray[np.generic]]
) -> gpd.GeoDataFrame:
    out = given.copy()
    out["area_ha"] = [0.0 if a is None else a.area / 1e4 for a in areas]
    for name, values in numbers.items():
        out[name] = values
    return out


def _summary(counts: Floats, name: str) -> dict[str, Floats]:
    """Mean and 95 % interval over draws; counts is (polygons, draws)."""
    low, high = np.quantile(counts, [0.025, 0.975], axis=1) if counts.size else np.zeros((2, len(counts)))
    return {
        f"{name}_mean": counts.mean(axis=1) if counts.size else np.zeros(len(counts)),
        f"{name}_low": low,
        f"{name}_high": high,
    }


def zone_numbers(
    zones: gpd.GeoDataFrame, draws: Draws, local_xy: Floats, area: StudyArea
) -> gpd.GeoDataFrame:
    """Points and centres in the part of each zone that was surveyed.

    Adds `area_ha` (of that part), `points`, `centres_mean`, `centres_low`,
    `centres_high` (95 %).
    """
    parts = _areas(zones.geometry.intersection(area.polygon), area)
    flat = [c for chain in draws.centres for c in chain]
    counts = np.zeros((len(parts), len(flat)))
    points = np.zeros(len(parts), np.int64)
    stacked = np.concatenate(flat) if flat else np.empty((0, 2))
    which = np.repeat(np.arange(len(flat)), [len(c) for c in flat])
    for k, part in enumerate(parts):
        if part is None:
            continue
        inside = part.contains(stacked + area.origin) & area.local_contains(stacked)
        counts[k] = np.bincount(which[inside], minlength=len(flat))
        points[k] = int(part.contains(local_xy + area.origin).sum())
    return _with_numbers(zones, parts, {"points": points, **_summary(counts, "centres")})


def _thinning(part: StudyArea, intensity: Intensity | None) -> tuple[float, float]:
    """Largest and mean intensity in a part that was not walked, relative to that of the study area.

    From its cells, where the covariates are known there too.
    """
    if intensity is None:
        return 1.0, 1.0
    cells = Cells.square(part, float(np.sqrt(part.area / 10_000)))
    places = cells.places(2)
    values = intensity.at(places.reshape(-1, 2)).reshape(len(cells), -1) / intensity.mean
    # between the places it may be a little higher
    return 1.1 * float(values.max()), float(values.mean(axis=1) @ cells.areas / part.area)


def _share_from_further(part: StudyArea, wide: StudyArea, setup: ChainSetup, scales: Floats) -> Floats:
    """Share of the points of a part whose centre lies further out than any that is drawn, by scale."""
    union = StudyArea(_polygon_part(wide.polygon.union(setup.wide.polygon)), setup.area.crs)
    # fixed seed: the points are a quadrature, not a sample
    at = part.uniform_points(200, 2013) - union.origin
    known = np.geomspace(scales.min(), scales.max(), 12)
    return np.interp(scales, known, [float(share_beyond(union, at, s).mean()) for s in known])


def predict_unsurveyed(
    unsurveyed: gpd.GeoDataFrame, setup: ChainSetup, draws: Draws, rng: np.random.Generator
) -> gpd.GeoDataFrame:
    """What polygons outside the study area probably hold, individuals and centres.

    For every posterior draw, the sampled centres near the study area send
    offspring there (independent of those seen, as numbers in disjoint regions
    are), new centres are drawn where none were sampled, and background points
    are added. Parts inside the study area are cut off first: they were walked.
    With a heavy tail, centres further out than those drawn count by their mean.

    Adds `area_ha` (of the part not walked), `points_mean`, `points_low`,
    `points_high` and the same for centres (95 % prediction intervals).
    """
    area, kind, intensity = setup.area, type(setup.start), setup.intensity
    parts = _areas(unsurveyed.geometry.difference(area.polygon), area)
    flat = [
        (draws.centres[a][b], draws.scale[a, b], draws.parent_intensity[a, b],
         draws.mean_offspring[a, b], draws.background[a, b])
        for a in range(draws.scale.shape[0]) for b in range(draws.scale.shape[1])
    ]  # fmt: skip
    points = np.zeros((len(parts), len(flat)))
    centres = np.zeros_like(points)
    for k, part in enumerate(parts):
        if part is None:
            continue
        most, mean = _thinning(part, intensity)
        wide = part.dilated(setup.margin)
        beyond = _polygon_part(wide.polygon.difference(setup.wide.polygon))
        outer = None if beyond.is_empty else StudyArea(beyond, area.crs)
        heavy = heavy_tailed(kind)
        further = np.zeros(len(flat))
        if heavy:
            further = _share_from_further(part, wide, setup, draws.scale.ravel())
        for m, (known, scale, rho, mu, epsilon) in enumerate(flat):
            where = known + area.origin
            where = where if heavy else where[wide.contains(where)]
            if outer is not None:
                fresh = outer.uniform_points(int(rng.poisson(rho * outer.area)), rng)
                where = np.concatenate([where, fresh])
            centres[k, m] = part.contains(where).sum()
            model = kind.of(rho, scale, mu)
            source = np.repeat(where, rng.poisson(mu * most, len(where)), axis=0)
            offspring = source + model.draw_offsets(len(source), rng)
            held = part.contains(offspring)
            if intensity is not None:
                there = intensity.at(offspring[held]) / intensity.mean
                held[held] = rng.random(len(there)) * most < there
            spread = epsilon + rho * mu * further[m]
            points[k, m] = held.sum() + rng.poisson(spread * mean * part.area)
    return _with_numbers(unsurveyed, parts, {**_summary(points, "points"), **_summary(centres, "centres")})
