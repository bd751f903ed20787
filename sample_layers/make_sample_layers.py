"""Make the sample layers: wood-ant nest mounds in an invented upland forest reserve.

Nothing here was surveyed: all is drawn from a seeded generator, so that the centres
of the clusters are known and anyone can see how well a map finds them. Run

    python sample_layers/make_sample_layers.py [FOLDER]

and the same files come back (FOLDER defaults to the folder of this script).
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path

import fiona
import geopandas as gpd
import numpy as np
import pandas as pd
import rasterio
import shapely
from shapely.geometry import LineString, MultiPolygon, Polygon, box

SEED = 20260514
DATE = "2026-06-30"  # that the files carry inside: with today's, no two runs would give the same bytes
CRS = "EPSG:25832"
ORIGIN = np.array([604_000.0, 5_737_000.0])  # middle of the reserve: easting, northing
CELL = 10.0  # metres, both rasters

# The nested cluster process, before the terrain thins it. Intensities in m⁻², lengths in metres.
OUTER_INTENSITY = 0.30e-4
OUTER_SIGMA = 60.0
INNER_PER_OUTER = 3.0
INNER_SIGMA = 13.0
MEAN_OFFSPRING = 8.8

# The terrain effect: retention = exp(constant + WETNESS_EFFECT·wetness + ELEVATION_EFFECT·elevation/100 m),
# the constant such that retention is 1 in the most favourable cell of the rasters.
WETNESS_EFFECT = -0.20
ELEVATION_EFFECT = -0.25

# Centres outside the reserve are kept in the layer of true centres as far out as they still matter.
OUTSIDE_INNER = 3.0 * INNER_SIGMA
OUTSIDE_OUTER = 2.0 * OUTER_SIGMA


@dataclass(frozen=True)
class Terrain:
    """Elevation (m) and wetness (topographic wetness index) on one north-up grid."""

    elevation: np.ndarray
    wetness: np.ndarray
    west: float
    north: float

    def retention(self, xy: np.ndarray) -> np.ndarray:
        """Probability that a mound at each of (n, 2) positions survives the terrain, by cell."""
        row = np.floor((self.north - xy[:, 1]) / CELL).astype(int)
        column = np.floor((xy[:, 0] - self.west) / CELL).astype(int)
        rows, columns = self.wetness.shape
        # beyond the rasters the nearest cell stands in: only centres' far offspring ever get there
        return self.retention_raster()[np.clip(row, 0, rows - 1), np.clip(column, 0, columns - 1)]

    def retention_raster(self) -> np.ndarray:
        """Retention of every cell."""
        return np.exp(self.constant() + self.effect())

    def effect(self) -> np.ndarray:
        """The log-linear effect of the terrain in every cell, without the constant."""
        return WETNESS_EFFECT * self.wetness + ELEVATION_EFFECT * self.elevation / 100.0

    def constant(self) -> float:
        """The constant that makes retention 1 where it is largest."""
        return float(-self.effect().max())


# --- outlines ---------------------------------------------------------------------------------


def ragged_ring(corners: np.ndarray, roughness: float, rng: np.random.Generator) -> np.ndarray:
    """Displace midpoints of a closed ring again and again, until no edge is longer than 11 m."""
    ring = [tuple(corner) for corner in corners]
    done = False
    while not done:
        done = True
        finer = []
        for start, end in zip(ring, ring[1:] + ring[:1], strict=True):
            a, b = np.array(start), np.array(end)
            length = float(np.hypot(*(b - a)))
            finer.append(start)
            if length > 11.0:
                normal = np.array([a[1] - b[1], b[0] - a[0]]) / length
                finer.append(tuple((a + b) / 2 + normal * rng.normal(0.0, roughness) * length))
                done = False
        ring = finer
    return np.array(ring)


def solid(geometry: shapely.Geometry) -> Polygon:
    """Return the largest polygon of a geometry, made valid and without its holes."""
    valid = shapely.make_valid(geometry)
    parts = [part for part in shapely.get_parts(valid) if part.geom_type == "Polygon"]
    return Polygon(max(parts, key=lambda part: part.area).exterior)


def blob(
    centre: tuple[float, float], radii: tuple[float, float], roughness: float, rng: np.random.Generator
) -> Polygon:
    """Draw an irregular ellipse with a ragged outline, `centre` relative to ORIGIN."""
    corners = max(6, int(sum(radii) / 90))
    angles = (np.arange(corners) + rng.uniform(-0.25, 0.25, corners)) * 2 * np.pi / corners
    reach = rng.uniform(0.85, 1.15, corners)
    ring = np.column_stack([radii[0] * np.cos(angles), radii[1] * np.sin(angles)]) * reach[:, None]
    return solid(Polygon(ragged_ring(ring + ORIGIN + centre, roughness, rng)))


def tongue(
    start: np.ndarray, heading: float, length: float, width: float, rng: np.random.Generator
) -> Polygon:
    """Draw a winding, tapering strip: an inlet when cut out, a spit when added."""
    steps = int(length // 20)
    headings = heading + np.cumsum(rng.normal(0.0, 0.22, steps))
    spine = np.vstack(
        [start, start + np.cumsum(20 * np.column_stack([np.cos(headings), np.sin(headings)]), 0)]
    )
    half = np.linspace(width / 2, width / 10, len(spine))
    side = np.column_stack(
        [-np.sin(np.append(headings, headings[-1])), np.cos(np.append(headings, headings[-1]))]
    )
    ring = np.vstack([spine + side * half[:, None], (spine - side * half[:, None])[::-1]])
    return solid(Polygon(ragged_ring(ring, 0.10, rng)))


@dataclass(frozen=True)
class Outlines:
    """Polygons of the scenario in the metric CRS."""

    reserve: MultiPolygon
    filled: MultiPolygon  # the same with the tarns filled in
    tarns: list[Polygon]
    unwalked: Polygon


def shore_point(block: Polygon, bearing: float, beyond: float) -> np.ndarray:
    """Find the outermost place where a ray from ORIGIN crosses the outline, and go `beyond` it."""
    outward = np.array([np.cos(bearing), np.sin(bearing)])
    crossings = shapely.get_coordinates(
        block.exterior.intersection(LineString([ORIGIN, ORIGIN + 3000 * outward]))
    )
    return crossings[np.argmax(crossings @ outward)] + beyond * outward


def draw_outlines(rng: np.random.Generator) -> Outlines:
    """Draw the reserve (main block with two tarns, detached parcel) and the part nobody walked."""
    main = blob((0.0, 0.0), (860.0, 720.0), 0.16, rng)
    inlets = [(0.9, 330, 75), (2.3, 420, 90), (3.6, 260, 60), (4.5, 380, 80), (5.5, 240, 55)]
    for bearing, length, width in inlets:
        mouth = shore_point(main, bearing, 15.0)
        main = solid(main.difference(tongue(mouth, bearing + np.pi, length, width, rng)))
    for bearing, length, width in [(1.6, 200, 70), (2.9, 260, 80), (5.0, 220, 60)]:  # spits
        main = solid(main.union(tongue(shore_point(main, bearing, -15.0), bearing, length, width, rng)))
    parcel = solid(blob((-1010.0, -770.0), (230.0, 170.0), 0.13, rng).difference(main.buffer(60.0)))
    tarns = [blob((-230.0, 170.0), (115.0, 80.0), 0.10, rng), blob((290.0, -150.0), (85.0, 110.0), 0.10, rng)]
    filled = MultiPolygon([main, parcel])
    reserve = MultiPolygon([main.difference(tarns[0]).difference(tarns[1]), parcel])
    unwalked = solid(blob((900.0, 330.0), (330.0, 360.0), 0.12, rng).difference(main))
    return Outlines(reserve, filled, tarns, unwalked)


# --- terrain ----------------------------------------------------------------------------------


def rough_surface(shape: tuple[int, int], power: float, rng: np.random.Generator) -> np.ndarray:
    """Gaussian noise whose spectrum falls with frequency to the `power`; mean 0, deviation 1."""
    padded = (2 * shape[0], 2 * shape[1])  # twice the size, so that opposite edges do not match up
    frequency = np.hypot(np.fft.fftfreq(padded[0])[:, None], np.fft.rfftfreq(padded[1])[None, :])
    frequency[0, 0] = np.inf
    noise = np.fft.irfft2(np.fft.rfft2(rng.standard_normal(padded)) * frequency**-power, s=padded)
    cut = noise[: shape[0], : shape[1]]
    return (cut - cut.mean()) / cut.std()


def smooth(values: np.ndarray, cells: float) -> np.ndarray:
    """Gaussian average with a standard deviation in cells, edges repeated."""
    reach = int(4 * cells) + 1
    weights = np.exp(-0.5 * (np.arange(-reach, reach + 1) / cells) ** 2)
    weights /= weights.sum()
    for axis in (0, 1):
        width = [(reach, reach) if a == axis else (0, 0) for a in (0, 1)]
        windows = np.lib.stride_tricks.sliding_window_view(
            np.pad(values, width, mode="edge"), len(weights), axis
        )
        values = windows @ weights
    return values


def wetness_index(elevation: np.ndarray) -> np.ndarray:
    """Topographic wetness index ln(a / tan β) (Beven & Kirkby 1979).

    a is the upslope area per contour length, shared among all lower neighbours
    in proportion to slope (Freeman 1991); β is the local slope.
    """
    rows, columns = elevation.shape
    area = np.full(elevation.shape, CELL**2)
    shifts = [(i, j) for i in (-1, 0, 1) for j in (-1, 0, 1) if (i, j) != (0, 0)]
    for flat in np.argsort(elevation, axis=None)[::-1]:
        row, column = divmod(int(flat), columns)
        lower = []
        for i, j in shifts:
            if 0 <= row + i < rows and 0 <= column + j < columns:
                fall = (elevation[row, column] - elevation[row + i, column + j]) / np.hypot(i, j)
                if fall > 0:
                    lower.append((row + i, column + j, fall**1.1))
        total = sum(fall for _, _, fall in lower)
        for down_row, down_column, fall in lower:
            area[down_row, down_column] += area[row, column] * fall / total
    slope = np.hypot(*np.gradient(elevation, CELL))
    return np.log(area / CELL / np.maximum(slope, 0.01))


def draw_terrain(outlines: Outlines, rng: np.random.Generator) -> Terrain:
    """Draw a coherent upland: rough hills, hollows with the tarns in them, wetness where water gathers."""
    everything = shapely.union_all([outlines.filled, outlines.unwalked])
    west, south, east, north = everything.bounds
    west, south = (np.floor((bound - 150.0) / CELL) * CELL for bound in (west, south))
    east, north = (np.ceil((bound + 150.0) / CELL) * CELL for bound in (east, north))
    shape = (int((north - south) / CELL), int((east - west) / CELL))
    x = west + CELL * (np.arange(shape[1]) + 0.5)
    y = north - CELL * (np.arange(shape[0]) + 0.5)
    tilt = 0.045 * (x[None, :] - ORIGIN[0]) + 0.03 * (y[:, None] - ORIGIN[1])
    elevation = 690.0 + tilt + 34.0 * rough_surface(shape, 2.1, rng)
    for tarn in outlines.tarns:
        away = np.hypot(x[None, :] - tarn.centroid.x, y[:, None] - tarn.centroid.y)
        elevation -= 30.0 * np.exp(-0.5 * (away / 150.0) ** 2)
    elevation = smooth(elevation, 1.5)
    wetness = smooth(wetness_index(elevation), 1.5)
    # as stored, so that the process sees exactly what the files hold
    return Terrain(
        np.round(elevation, 1).astype("float32").astype(float),
        np.round(wetness, 2).astype("float32").astype(float),
        float(west),
        float(north),
    )


# --- mounds -----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Nests:
    """Everything the nested process made, over more ground than the reserve."""

    outer: np.ndarray
    inner: np.ndarray
    inner_parent: np.ndarray
    mounds: np.ndarray
    mound_parent: np.ndarray


def scatter(
    centres: np.ndarray, mean: float, sigma: float, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Give every centre a Poisson number of offspring, Gaussian around it; also whose they are."""
    parent = np.repeat(np.arange(len(centres)), rng.poisson(mean, len(centres)))
    return centres[parent] + rng.normal(0.0, sigma, (len(parent), 2)), parent


def draw_nests(outlines: Outlines, terrain: Terrain, rng: np.random.Generator) -> Nests:
    """Draw groups, clusters and mounds, and thin the mounds by the terrain."""
    # six standard deviations out: offspring of groups even farther away are practically never inside
    margin = 6.0 * (OUTER_SIGMA + INNER_SIGMA)
    west, south, east, north = shapely.union_all([outlines.filled, outlines.unwalked]).buffer(margin).bounds
    count = rng.poisson(OUTER_INTENSITY * (east - west) * (north - south))
    outer = rng.uniform((west, south), (east, north), (count, 2))
    inner, inner_parent = scatter(outer, INNER_PER_OUTER, OUTER_SIGMA, rng)
    mounds, mound_parent = scatter(inner, MEAN_OFFSPRING, INNER_SIGMA, rng)
    kept = rng.uniform(size=len(mounds)) < terrain.retention(mounds)
    return Nests(outer, inner, inner_parent, mounds[kept], mound_parent[kept])


def inside(polygon: shapely.Geometry, xy: np.ndarray) -> np.ndarray:
    """Which of (n, 2) positions lie inside."""
    shapely.prepare(polygon)
    return shapely.contains_xy(polygon, xy)


# --- layers -----------------------------------------------------------------------------------

SPECIES = ["Formica polyctena", "Formica rufa", "Formica lugubris"]


def mounds_layer(xy: np.ndarray, rng: np.random.Generator) -> gpd.GeoDataFrame:
    """The mounds as somebody walking strips from west to east would have noted them down."""
    xy = xy[np.lexsort((xy[:, 1], np.floor(xy[:, 0] / 60.0)))]
    n = len(xy)
    height = np.clip(np.round(rng.lognormal(np.log(55.0), 0.45, n)), 8, 190).astype(int)
    days = pd.date_range("2026-04-20", "2026-06-05", freq="B")
    day = days[(np.arange(n) * len(days)) // n]
    noted = rng.choice(
        ["", "sunny edge", "on a stump", "overgrown", "damaged"], n, p=[0.7, 0.1, 0.08, 0.08, 0.04]
    )
    return gpd.GeoDataFrame(
        {
            "id": np.arange(1, n + 1),
            "species": rng.choice(SPECIES, n, p=[0.62, 0.23, 0.15]),
            "height_cm": height,
            "width_cm": np.round(height * rng.lognormal(np.log(1.7), 0.2, n)).astype(int),
            "occupied": (rng.uniform(size=n) < 0.93).astype(int),
            "survey_date": [stamp.date() for stamp in day],
            "surveyor": np.where(np.arange(n) % 97 < 55, "A", "B"),
            "note": pd.Series(noted).replace("", None),
        },
        geometry=gpd.points_from_xy(*xy.T),
        crs=CRS,
    )


def zones_layer(outlines: Outlines) -> gpd.GeoDataFrame:
    """Management zones: the main block in four, the parcel on its own; tarns belong to their zone."""
    main, parcel = outlines.filled.geoms
    seeds = {
        "Tarn Hollow": ((-260.0, 330.0), "no intervention"),
        "Ridge Wood": ((420.0, 300.0), "selective felling"),
        "Lower Slope": ((330.0, -380.0), "conversion to mixed stand"),
        "West Side": ((-430.0, -250.0), "selective felling"),
    }
    reach = 4000.0
    rows = []
    for name, (seed, management) in seeds.items():
        cell: shapely.Geometry = box(*(ORIGIN - reach), *(ORIGIN + reach))
        for other, _ in seeds.values():
            if other != seed:
                cell = cell.intersection(nearer_to(np.array(seed), np.array(other), reach))
        rows.append((name, management, main.intersection(cell)))
    rows.append(("Outlying Parcel", "coppice", parcel))
    names, managements, shapes = zip(*rows, strict=True)
    frame = gpd.GeoDataFrame({"name": names, "management": managements}, geometry=list(shapes), crs=CRS)
    frame.insert(2, "zone_area_ha", (frame.area / 1e4).round(2))
    return frame


def nearer_to(seed: np.ndarray, other: np.ndarray, reach: float) -> Polygon:
    """The half plane of places nearer to one seed than to another, cut off at `reach`."""
    middle, toward = ORIGIN + (seed + other) / 2, (seed - other) / np.hypot(*(seed - other))
    along = np.array([-toward[1], toward[0]])
    near, far = 3 * reach * along, 3 * reach * toward
    return Polygon([middle - near, middle + near, middle + near + far, middle - near + far])


def centres_layer(nests: Nests, reserve: MultiPolygon) -> gpd.GeoDataFrame:
    """True centres of both levels in the reserve and just outside it, with the mounds each has inside."""
    kept_mound = inside(reserve, nests.mounds)
    per_inner = np.bincount(nests.mound_parent[kept_mound], minlength=len(nests.inner))
    per_outer = np.bincount(nests.inner_parent, weights=per_inner, minlength=len(nests.outer)).astype(int)
    frames = []
    for level, xy, groups, counts, reach in [
        ("outer", nests.outer, np.arange(len(nests.outer)), per_outer, OUTSIDE_OUTER),
        ("inner", nests.inner, nests.inner_parent, per_inner, OUTSIDE_INNER),
    ]:
        frames.append(
            gpd.GeoDataFrame(
                {
                    "level": level,
                    "group_id": groups + 1,
                    "mounds": counts,
                    "inside": inside(reserve, xy).astype(int),
                },
                geometry=gpd.points_from_xy(*xy.T),
                crs=CRS,
            )[inside(reserve.buffer(reach), xy)]
        )
    return pd.concat(frames, ignore_index=True)


def write_layer(path: Path, layer: gpd.GeoDataFrame, driver: str, name: str | None = None) -> None:
    """Write one vector layer, dates as dates and short texts in short fields."""
    kinds = {"species": "str:20", "surveyor": "str:1", "note": "str:20", "level": "str:5"}
    kinds |= {"survey_date": "date", "surveyed": "date"}
    schema = gpd.io.file.infer_schema(layer)
    schema["properties"] = {field: kinds.get(field, kind) for field, kind in schema["properties"].items()}
    options = {"DBF_DATE_LAST_UPDATE": DATE} if driver == "ESRI Shapefile" else {}
    layer.to_file(path, layer=name, driver=driver, engine="fiona", schema=schema, **options)


def write_raster(
    path: Path, terrain: Terrain, values: np.ndarray, name: str, unit: str, decimals: int
) -> None:
    """Write one cloud-optimised raster."""
    with rasterio.open(
        path,
        "w",
        driver="COG",
        height=values.shape[0],
        width=values.shape[1],
        count=1,
        dtype="float32",
        crs=CRS,
        transform=rasterio.Affine(CELL, 0.0, terrain.west, 0.0, -CELL, terrain.north),
        nodata=-9999.0,
        compress="DEFLATE",
        predictor=3,
        overview_resampling="average",
    ) as raster:
        raster.write(np.round(values, decimals).astype("float32"), 1)
        raster.set_band_description(1, name)
        raster.set_band_unit(1, unit)


def main(folder: Path) -> None:
    """Make every layer and the page that describes them."""
    rng_outline, rng_terrain, rng_nests, rng_notes = (
        np.random.default_rng(child) for child in np.random.SeedSequence(SEED).spawn(4)
    )
    outlines = draw_outlines(rng_outline)
    terrain = draw_terrain(outlines, rng_terrain)
    nests = draw_nests(outlines, terrain, rng_nests)

    seen = inside(outlines.reserve, nests.mounds)
    mounds = mounds_layer(nests.mounds[seen], rng_notes)
    reserve = gpd.GeoDataFrame({"name": ["Hochmoos Forest Reserve"]}, geometry=[outlines.reserve], crs=CRS)
    zones = zones_layer(outlines)
    unwalked = gpd.GeoDataFrame(
        {"name": ["Eastern Compartment"], "reason": ["windthrow, closed to foot traffic"]},
        geometry=[outlines.unwalked],
        crs=CRS,
    )
    centres = centres_layer(nests, outlines.reserve)

    folder.mkdir(parents=True, exist_ok=True)
    with fiona.Env(OGR_CURRENT_DATE=f"{DATE}T00:00:00.000Z"):
        package = folder / "reserve.gpkg"
        package.unlink(missing_ok=True)
        layers = {
            "mounds": mounds,
            "reserve": reserve,
            "zones": zones,
            "unwalked": unwalked,
            "true_centres": centres,
        }
        for name, layer in layers.items():
            write_layer(package, layer.to_crs("EPSG:4326"), "GPKG", name)
        # ten letters at most for a column in a Shapefile
        write_layer(
            folder / "mounds.shp", mounds.rename(columns={"survey_date": "surveyed"}), "ESRI Shapefile"
        )
        write_layer(folder / "reserve.shp", reserve, "ESRI Shapefile")
    write_raster(folder / "wetness.tif", terrain, terrain.wetness, "wetness", "1", 2)
    write_raster(folder / "elevation.tif", terrain, terrain.elevation, "elevation", "m", 1)
    (folder / "README.md").write_text(
        describe(outlines, terrain, nests, mounds, zones, centres), encoding="utf-8"
    )


def describe(
    outlines: Outlines,
    terrain: Terrain,
    nests: Nests,
    mounds: gpd.GeoDataFrame,
    zones: gpd.GeoDataFrame,
    centres: gpd.GeoDataFrame,
) -> str:
    """Write the page about the layers, with the numbers that this run gave."""
    x = terrain.west + CELL * (np.arange(terrain.wetness.shape[1]) + 0.5)
    y = terrain.north - CELL * (np.arange(terrain.wetness.shape[0]) + 0.5)
    cells = np.column_stack([grid.ravel() for grid in np.meshgrid(x, y)])
    retention = float(terrain.retention(cells)[inside(outlines.reserve, cells)].mean())
    count = {
        f"{level}_{place}": int(((centres["level"] == level) & (centres["inside"] == flag)).sum())
        for level in ("outer", "inner")
        for flag, place in enumerate(("outside", "inside"))
    }
    zone_lines = "\n".join(
        f"| {zone.name} | {zone.management} | {zone.zone_area_ha} |"
        for zone in zones[["name", "management", "zone_area_ha"]].itertuples(index=False)
    )
    template = (Path(__file__).parent / "README.md.in").read_text(encoding="utf-8")
    return template.format(
        **{name: value for name, value in globals().items() if name.isupper()},
        **count,
        mounds=len(mounds),
        zones=len(zones),
        zone_lines=zone_lines,
        area=outlines.reserve.area / 1e4,
        vertices=shapely.get_num_coordinates(outlines.reserve) - len(shapely.get_rings(outlines.reserve)),
        unwalked_area=outlines.unwalked.area / 1e4,
        unwalked_mounds=int(inside(outlines.unwalked, nests.mounds).sum()),
        unwalked_inner=int(inside(outlines.unwalked, nests.inner).sum()),
        outer_per_ha=OUTER_INTENSITY * 1e4,
        inner_per_ha=OUTER_INTENSITY * INNER_PER_OUTER * 1e4,
        retention=retention,
        thinned_offspring=MEAN_OFFSPRING * retention,
        constant=terrain.constant(),
        with_mounds=int(((centres["level"] == "inner") & (centres["mounds"] > 0)).sum()),
    )


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
