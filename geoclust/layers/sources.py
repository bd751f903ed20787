"""Reading one vector layer from whatever file GDAL opens, or a table of coordinates.

Everything that depends on file formats ends here: what comes out is a frame of
geometries with their attributes, a CRS, and a record of where it came from.
"""

from __future__ import annotations

import hashlib
import importlib.util
import os
import warnings
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import geopandas as gpd
import numpy as np
import pyogrio
import pyproj
import rasterio
import shapely
from pyogrio.errors import DataLayerError, DataSourceError
from rasterio.errors import RasterioIOError

from geoclust.errors import InputError, UsageError
from geoclust.layers.crs import horizontal, label, parse_crs
from geoclust.layers.tables import is_table, read_table

Kind = Literal["points", "polygons"]
PathLike = str | os.PathLike[str]

_PARQUET = (".parquet", ".geoparquet")
_SHAPEFILE_PARTS = (".shp", ".shx", ".dbf", ".prj", ".cpg")
# shapely's type numbers
_KIND_OF_TYPE = {0: "points", 4: "points", 1: "lines", 2: "lines", 5: "lines", 3: "polygons", 6: "polygons"}
_COLLECTION = 7


@dataclass(frozen=True)
class LayerRecord:
    """Where a layer came from.

    Attributes
    ----------
    file, layer, driver
        File name without its folder, name of the layer in it, and format.
    sha256
        Digest of the file; of a Shapefile or a folder, digest of the sorted list
        of file names and their digests. None for files in archives.
    crs
        Name and code of its CRS.
    crs_stated
        True if the CRS was stated by the user because the layer has none.
    features
        Number of features read.
    """

    file: str
    layer: str | None
    driver: str
    sha256: str | None
    crs: str
    crs_stated: bool
    features: int


@dataclass(frozen=True)
class Layer:
    """A layer as read: features with their geometry untouched, CRS and origin."""

    frame: gpd.GeoDataFrame
    crs: pyproj.CRS
    record: LayerRecord
    notes: tuple[str, ...]


def read_layer(
    path: PathLike,
    wanted: Kind,
    *,
    layer: str | None = None,
    layer_option: str = "layer",
    crs: object | None = None,
    x_column: str | None = None,
    y_column: str | None = None,
) -> Layer:
    """Read one layer of points or polygons.

    Parameters
    ----------
    path
        File (or folder) that GDAL opens as vector, GeoParquet, or a table
        (.csv, .tsv, .txt) with coordinate columns.
    wanted
        What the layer has to hold.
    layer
        Name of the layer. Without one, the only layer that holds what is wanted.
    layer_option
        What the user calls that name, for messages.
    crs
        CRS of a table, or of a layer that has none.
    x_column, y_column
        Coordinate columns of a table.

    Raises
    ------
    InputError, UsageError
        In one sentence: no such file or layer, a raster, the wrong kind of
        geometry, no CRS.
    """
    name = os.fspath(path)
    in_archive = name.startswith("/vsi")
    if not in_archive and not Path(name).exists():
        raise InputError(f"there is no file {name}: check the path of the {wanted} layer")
    notes: list[str] = []
    if is_table(name):
        if wanted == "polygons":
            raise InputError(
                f"{name} is a table, which can only hold points: give the polygons as a GIS layer"
            )
        frame: gpd.GeoDataFrame = read_table(name, x_column, y_column)
        chosen, driver, own = None, "CSV", None
    elif wanted == "points" and (x_column is not None or y_column is not None):
        raise UsageError(f"x_column and y_column are for tables (.csv, .tsv, .txt); {name} is not one")
    elif name.lower().endswith(_PARQUET):
        frame = _read_parquet(name)
        chosen, driver, own = None, "GeoParquet", frame.crs
    else:
        chosen, notes = _choose_layer(name, wanted, layer, layer_option)
        frame, driver, more = _read_gdal(name, chosen, wanted)
        own, notes = frame.crs, [*notes, *more]
    place = f"layer '{chosen}' of {name}" if chosen is not None else name
    _require_kind(frame, wanted, place)
    found, stated = _settle_crs(own, crs, place)
    record = LayerRecord(
        file=Path(name).name,
        layer=chosen,
        driver=driver,
        sha256=None if in_archive else digest(Path(name)),
        crs=label(found),
        crs_stated=stated,
        features=len(frame),
    )
    frame = frame.reset_index(drop=True).set_crs(found, allow_override=True)
    return Layer(frame, found, record, tuple(notes))


def digest(path: Path) -> str:
    """SHA-256 of a file, or of the names and digests of a data set of several files."""
    if path.is_dir():
        parts = sorted(file for file in path.rglob("*") if file.is_file())
    elif path.suffix.lower() == ".shp":
        parts = sorted(
            file
            for file in path.parent.iterdir()
            if file.stem == path.stem and file.suffix.lower() in _SHAPEFILE_PARTS
        )
    else:
        return _file_digest(path)
    listing = "".join(f"{_file_digest(file)}  {file.name}\n" for file in parts)
    return hashlib.sha256(listing.encode()).hexdigest()


def kinds_in(geometries: np.ndarray) -> list[str]:
    """Kinds of geometry ("points", "lines", "polygons") in an array, most frequent first."""
    geometries = np.asarray(geometries, dtype=object)
    types = shapely.get_type_id(geometries)
    if (types == _COLLECTION).any():
        types = np.concatenate(
            [types[types != _COLLECTION], shapely.get_type_id(_flat_parts(geometries[types == _COLLECTION]))]
        )
    kinds = [_KIND_OF_TYPE[int(number)] for number in types if int(number) in _KIND_OF_TYPE]
    return sorted(set(kinds), key=lambda kind: (-kinds.count(kind), kind))


def _flat_parts(collections: np.ndarray) -> np.ndarray:
    parts = shapely.get_parts(collections)
    while (shapely.get_type_id(parts) == _COLLECTION).any():
        parts = shapely.get_parts(parts)
    return parts


def _file_digest(path: Path) -> str:
    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError as error:
        raise InputError(f"{path} cannot be read: {error.strerror}") from error


def _choose_layer(name: str, wanted: Kind, layer: str | None, option: str) -> tuple[str, list[str]]:
    """The layer to read, and a note if it was found and not named."""
    try:
        listed = pyogrio.list_layers(name)
    except (DataSourceError, DataLayerError) as error:
        raise _not_vector(name) from error
    every = [str(row[0]) for row in listed]
    spatial = [str(row[0]) for row in listed if row[1] is not None]
    if layer is not None:
        if layer not in every:
            raise InputError(f"{name} has no layer '{layer}': its layers are {_listing(every)}")
        if layer not in spatial:
            raise InputError(
                f"layer '{layer}' of {name} is a table without geometry: choose a {wanted} layer"
            )
        return layer, []
    if not spatial:
        if _is_raster(name):
            raise InputError(f"{name} is a raster: a vector layer of {wanted} is needed here")
        raise InputError(
            f"{name} holds no layer with geometry: give a {wanted} layer (a table with coordinate columns "
            "can be saved as .csv)"
        )
    if len(spatial) == 1:
        return spatial[0], []
    fitting = [each for each in spatial if wanted in _declared_kinds(name, each)]
    if len(fitting) == 1:
        others = [each for each in spatial if each != fitting[0]]
        return fitting[0], [
            f"layer '{fitting[0]}' of {Path(name).name} was taken, as the only one with {wanted} "
            f"(the others: {_listing(others)})"
        ]
    if not fitting:
        raise InputError(f"none of the layers of {name} holds {wanted}: they are {_listing(spatial)}")
    raise InputError(f"{name} has several layers with {wanted}, {_listing(fitting)}: name one as {option}")


def _listing(names: list[str]) -> str:
    shown = ", ".join(f"'{each}'" for each in names[:12])
    return shown + (f" and {len(names) - 12} more" if len(names) > 12 else "") if names else "none"


def _declared_kinds(name: str, layer: str) -> list[str]:
    """Kinds of geometry a layer holds, from its declared type or, if that is open, its data."""
    info = pyogrio.read_info(name, layer=layer, force_feature_count=True)
    if info["features"] == 0:
        return []
    declared = str(info["geometry_type"])
    for word, kind in (
        ("Point", "points"),
        ("Line", "lines"),
        ("Polygon", "polygons"),
        ("Surface", "polygons"),
    ):
        if word in declared and "Collection" not in declared:
            return [kind]
    return kinds_in(_read_gdal(name, layer, "points")[0].geometry.to_numpy())


def _read_gdal(name: str, layer: str, wanted: Kind) -> tuple[gpd.GeoDataFrame, str, list[str]]:
    # A point that cannot be built is counted as null; a boundary must not lose a ring unnoticed.
    on_invalid = "raise" if wanted == "polygons" else "warn"
    try:
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            frame = pyogrio.read_dataframe(name, layer=layer, on_invalid=on_invalid)
            driver = str(pyogrio.read_info(name, layer=layer)["driver"])
    except (DataSourceError, DataLayerError, UnicodeDecodeError) as error:
        raise InputError(
            f"layer '{layer}' of {name} cannot be read ({_first_line(error)}): export it anew"
        ) from error
    except shapely.errors.GEOSException as error:
        raise InputError(
            f"layer '{layer}' of {name} holds a polygon that cannot be built ({_first_line(error)}): mend it "
            "and save it anew"
        ) from error
    return frame, driver, [f"reading '{layer}': {_first_line(warning.message)}" for warning in caught]


def _first_line(message: object) -> str:
    lines = str(message).strip().splitlines()
    return lines[0].rstrip(".") if lines else type(message).__name__


def _is_raster(name: str) -> bool:
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            with rasterio.open(name) as raster:
                return bool(raster.count or raster.subdatasets)
    except RasterioIOError:
        return False


def _not_vector(name: str) -> InputError:
    if _is_raster(name):
        return InputError(f"{name} is a raster: a vector layer is needed here")
    return InputError(
        f"{name} cannot be read as a vector layer: it is damaged, or in a format that GDAL does not know; "
        "save it as GeoPackage"
    )


def _read_parquet(name: str) -> gpd.GeoDataFrame:
    if importlib.util.find_spec("pyarrow") is None:
        raise InputError(
            f"{name} is GeoParquet, which needs the package pyarrow: install it with "
            "pip install 'geoclust[geoparquet]', or save the layer as GeoPackage"
        )
    try:
        return gpd.read_parquet(name)
    except (ValueError, OSError) as error:
        raise InputError(f"{name} cannot be read as GeoParquet ({_first_line(error)})") from error


def _require_kind(frame: gpd.GeoDataFrame, wanted: Kind, place: str) -> None:
    if len(frame) == 0:
        raise InputError(f"{place} is empty: it holds no feature at all")
    kinds = kinds_in(frame.geometry.to_numpy())
    if not kinds:
        raise InputError(f"{place} holds {len(frame)} features, but none of them has a geometry")
    if wanted not in kinds:
        raise InputError(f"{place} holds {' and '.join(kinds)}, not {wanted}: give a {wanted} layer")


def _settle_crs(own: object | None, stated: object | None, place: str) -> tuple[pyproj.CRS, bool]:
    """The layer's own CRS, or the stated one if it has none."""
    known = None if own is None else horizontal(pyproj.CRS.from_user_input(own))
    # GeoPackage layers without a CRS come back with a placeholder of this name
    if known is not None and not known.name.lower().startswith("undefined"):
        return known, False
    if stated is None:
        raise InputError(
            f"{place} has no coordinate reference system: state the one it was measured in with crs, such as "
            "crs EPSG:25832 (or crs local for plot coordinates in metres)"
        )
    return parse_crs(stated), True
