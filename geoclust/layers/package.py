"""GeoPackages out: the layers of the results with their styles, and simulated patterns."""

from __future__ import annotations

import csv
import datetime as dt
import sqlite3
from collections.abc import Iterator, Mapping
from contextlib import ExitStack, closing, contextmanager, suppress
from pathlib import Path
from types import TracebackType
from typing import Protocol, Self

import fiona
import geopandas as gpd
import numpy as np
import pyproj
import shapely

# GDAL's own complaints reach Python under this class, which fiona does not show elsewhere
from fiona._err import CPLE_BaseError
from fiona.errors import FionaError

from geoclust.errors import OutputError, UsageError, not_allowed
from geoclust.layers.columns import fields_of
from geoclust.layers.results_folder import results_file

GEOMETRY_COLUMN = "geom"
KEY_COLUMN = "fid"

# Types of layers that may turn out to have no row.
_USUAL_TYPES = {
    "points": "Point",
    "simulated_points": "Point",
    "study_area": "MultiPolygon",
    "clusters": "MultiPolygon",
    "zones": "MultiPolygon",
}
_DRIVERS = {".gpkg": "GPKG", ".fgb": "FlatGeobuf", ".geojson": "GeoJSON"}
_BATCH = 20_000
# An index built in a thread beside the writing needs memory for every point, and is slower on few cores.
_GDAL_OPTIONS = {"OGR_GPKG_ALLOW_THREADED_RTREE": "NO"}
_WRITE_ERRORS = (FionaError, CPLE_BaseError, sqlite3.Error, RuntimeError, OSError)

# A table that GIS programs look for; the GeoPackage standard lets it stand beside the layers as attributes.
_STYLE_TABLE = """
CREATE TABLE layer_styles (
    id INTEGER PRIMARY KEY AUTOINCREMENT NOT NULL,
    f_table_catalog TEXT(256),
    f_table_schema TEXT(256),
    f_table_name TEXT(256),
    f_geometry_column TEXT(256),
    styleName TEXT(30),
    styleQML TEXT,
    styleSLD TEXT,
    useAsDefault BOOLEAN,
    description TEXT,
    owner TEXT(30),
    ui TEXT(30),
    update_time DATETIME DEFAULT (strftime('%Y-%m-%dT%H:%M:%fZ', 'now'))
)
"""


def write_package(
    path: str | Path,
    layers: Mapping[str, gpd.GeoDataFrame],
    styles: Mapping[str, str] | None = None,
    *,
    written_at: dt.datetime | None = None,
) -> dict[str, dict[str, str]]:
    """Write layers into a new GeoPackage, with a styled look.

    Parameters
    ----------
    path
        File to write; must not exist.
    layers
        Name and content of each layer. Missing values stay missing whatever their
        type; columns that cannot stand beside the others (``fid`` and ``geom`` are
        taken, capitals do not tell names apart) are renamed. Z values are dropped, and
        empty geometries are written as missing ones.
    styles
        Styled Layer Descriptor of layers by name, kept in the table `layer_styles`.
        A layer that is added later may have one too.
    written_at
        Moment that the file gives as its last change; now if not given.

    Returns
    -------
    dict
        For each layer, old and new names of the columns that were renamed.

    Raises
    ------
    UsageError
        If a layer name cannot be used.
    OutputError
        If the file exists or cannot be written.
    """
    path = Path(path)
    if path.exists():
        raise OutputError(f"{path} exists already; choose another name.")
    _check_layer_names(list(layers))
    stamp = _stamp(written_at)
    renamed = {}
    with _said_in_a_sentence(path), fiona.Env(OGR_CURRENT_DATE=stamp, **_GDAL_OPTIONS):
        try:
            for name, layer in layers.items():
                renamed[name] = _write_layer(path, name, layer)
            _write_styles(path, styles or {}, stamp)
            _check_counts(path, {name: len(layer) for name, layer in layers.items()})
        except BaseException:
            path.unlink(missing_ok=True)
            raise
    return renamed


class PatternWriter:
    """Stream simulated patterns into a layer; memory does not grow with their number.

    Parameters
    ----------
    path
        A file of its own, by suffix .gpkg, .fgb, .geojson (in longitude and latitude,
        as its standard asks) or .csv (columns pattern, x, y), which appears under its
        name once the block ends well; or, with `into_package`, a GeoPackage that exists.
    layer
        Name of the layer.
    crs
        Coordinate reference system of the points that are given.
    layer_crs
        That of the layer, if another one.
    into_package
        Whether to add the layer to the GeoPackage `path` instead of making a new file.
    overwrite
        Whether a file that exists may be replaced.

    Raises
    ------
    UsageError
        If the suffix or the layer name cannot be used.
    OutputError
        If the file exists, cannot be written, or has such a layer already.

    Examples
    --------
    >>> import tempfile
    >>> path = Path(tempfile.mkdtemp(), "patterns.csv")
    >>> with PatternWriter(path, crs=pyproj.CRS("EPSG:25832")) as writer:
    ...     writer.append(1, np.array([[604000.0, 5737000.0]]))
    >>> print(path.read_text().strip())
    pattern,x,y
    1,604000.0,5737000.0
    """

    def __init__(
        self,
        path: str | Path,
        layer: str = "simulated_points",
        crs: pyproj.CRS | None = None,
        *,
        layer_crs: pyproj.CRS | None = None,
        into_package: bool = False,
        overwrite: bool = False,
    ) -> None:
        self.path = Path(path)
        self.layer = layer
        self.points = 0
        """Number of points appended."""
        suffix = self.path.suffix.lower()
        allowed = [".gpkg"] if into_package else [*_DRIVERS, ".csv"]
        if suffix not in allowed:
            raise not_allowed("the suffix of a file of patterns", allowed, self.path.name)
        _check_layer_names([layer])
        if suffix == ".geojson":
            # RFC 7946, section 4: longitude and latitude on WGS 84, and nothing else
            layer_crs = pyproj.CRS("OGC:CRS84")
            if crs is None:
                raise UsageError("crs must be given for a .geojson file, which holds longitude and latitude")
        self._crs = layer_crs or crs
        self._transform = None
        if crs is not None and layer_crs is not None and crs != layer_crs:
            self._transform = pyproj.Transformer.from_crs(crs, layer_crs, always_xy=True)
        self._into_package, self._overwrite = into_package, overwrite
        self._stack = ExitStack()
        self._sink: _Sink | None = None
        self._numbers: list[int] = []
        self._rows: list[list[float]] = []

    def __enter__(self) -> Self:
        with ExitStack() as stack:
            if self._into_package:
                target = self.path
                if not target.is_file():
                    raise OutputError(f"There is no GeoPackage {target} to put a layer into; write it first.")
                if self.layer.casefold() in (name.casefold() for name in fiona.listlayers(target)):
                    raise OutputError(f"{target} has a layer {self.layer} already; choose another name.")
            else:
                target = stack.enter_context(results_file(self.path, self._overwrite))
            with _said_in_a_sentence(self.path):
                self._sink = _open_sink(target, self.layer, self._crs)
            stack.push(self._close)
            self._stack = stack.pop_all()
        return self

    def append(self, pattern: int, xy: np.ndarray) -> None:
        """Add the points of one pattern.

        Parameters
        ----------
        pattern
            Its number, which every point carries in the column `pattern`.
        xy
            (n, 2) coordinates in the CRS given at the start; n may be 0.
        """
        if self._sink is None:
            raise UsageError("append must be called within the `with` block of its PatternWriter")
        points = np.asarray(xy, dtype=float)
        if points.ndim != 2 or points.shape[1] != 2 or not np.isfinite(points).all():
            raise not_allowed("xy", "finite coordinates of shape (n, 2)", points.shape)
        if self._transform is not None:
            points = np.column_stack(self._transform.transform(points[:, 0], points[:, 1]))
            if not np.isfinite(points).all():
                raise OutputError(f"Points of pattern {pattern} have no place in the CRS of {self.path}.")
        self.points += len(points)
        self._numbers.extend([int(pattern)] * len(points))
        self._rows.extend(points.tolist())
        if len(self._rows) >= _BATCH:
            self._flush()

    def _flush(self) -> None:
        if self._sink is not None and self._rows:
            with _said_in_a_sentence(self.path):
                self._sink.write(self._numbers, self._rows)
        self._numbers, self._rows = [], []

    def _close(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        sink, failed = self._sink, kind is not None
        try:
            if not failed:
                self._flush()
        except OutputError:
            failed = True
            raise
        finally:
            self._sink = None
            # what the block failed of is what gets told, not that the file could not be closed after it
            with suppress(*_WRITE_ERRORS) if failed else _said_in_a_sentence(self.path):
                if sink is not None:
                    sink.close()
                    sink.check(self.points)

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stack.__exit__(kind, error, trace)


class _Sink(Protocol):
    """Where batches of points go."""

    def write(self, numbers: list[int], rows: list[list[float]]) -> None: ...

    def close(self) -> None: ...

    def check(self, count: int) -> None:
        """See that the last of `count` points arrived: on a full disk GDAL may end without a complaint."""


class _CsvSink:
    """A table with the columns pattern, x, y."""

    def __init__(self, path: Path) -> None:
        self._file = path.open("w", newline="", encoding="utf-8")
        self._writer = csv.writer(self._file, lineterminator="\n")
        self._writer.writerow(["pattern", "x", "y"])

    def write(self, numbers: list[int], rows: list[list[float]]) -> None:
        self._writer.writerows([number, *row] for number, row in zip(numbers, rows, strict=True))

    def close(self) -> None:
        self._file.close()

    def check(self, count: int) -> None:
        """Nothing to see: Python complains by itself."""


class _LayerSink:
    """A point layer with the column pattern."""

    def __init__(self, path: Path, layer: str, crs: pyproj.CRS | None, driver: str) -> None:
        options: dict[str, object] = {}
        if driver == "GPKG":
            options = {"layer": layer, "GEOMETRY_NAME": GEOMETRY_COLUMN, "FID": KEY_COLUMN}
        elif driver == "FlatGeobuf":
            options = {"SPATIAL_INDEX": "NO"}  # the index would hold every point in memory
        elif driver == "GeoJSON":
            options = {"RFC7946": "YES", "COORDINATE_PRECISION": 9}
        schema = {"geometry": "Point", "properties": {"pattern": "int64" if driver == "GPKG" else "int32"}}
        wkt = crs.to_wkt() if crs is not None else None
        self._path, self._name = path, layer if driver == "GPKG" else None
        with fiona.Env(**_GDAL_OPTIONS):
            self._layer = fiona.open(path, "w", driver=driver, crs_wkt=wkt, schema=schema, **options)

    def write(self, numbers: list[int], rows: list[list[float]]) -> None:
        with fiona.Env(**_GDAL_OPTIONS):
            self._layer.writerecords(
                {"geometry": {"type": "Point", "coordinates": row}, "properties": {"pattern": number}}
                for number, row in zip(numbers, rows, strict=True)
            )

    def close(self) -> None:
        with fiona.Env(**_GDAL_OPTIONS):
            self._layer.close()

    def check(self, count: int) -> None:
        with fiona.open(self._path, layer=self._name) as layer:
            if count and next(layer.filter(count - 1, count), None) is None:
                raise OSError("the file is incomplete; the disk may be full")


def _open_sink(path: Path, layer: str, crs: pyproj.CRS | None) -> _Sink:
    suffix = path.suffix.lower()
    return _CsvSink(path) if suffix == ".csv" else _LayerSink(path, layer, crs, _DRIVERS[suffix])


def _check_layer_names(names: list[str]) -> None:
    """Refuse names that a GeoPackage keeps for itself, or cannot tell apart."""
    seen = {"layer_styles"}
    for name in names:
        plain = name.casefold()
        if not plain.strip() or plain.startswith(("gpkg_", "sqlite_", "rtree_")) or plain in seen:
            raise not_allowed(
                "a layer name",
                "distinct from others, not empty, not `layer_styles` nor gpkg_, sqlite_, rtree_",
                name,
            )
        seen.add(plain)


def _write_layer(path: Path, name: str, layer: gpd.GeoDataFrame) -> dict[str, str]:
    """Write one layer into a package that may or may not exist; return the renamed columns."""
    fields, renamed = fields_of(layer, reserved=[KEY_COLUMN, GEOMETRY_COLUMN])
    geometry_type, geometries = _one_type(layer.geometry.array, _USUAL_TYPES.get(name, "Unknown"))
    schema = {"geometry": geometry_type, "properties": {field.name: field.kind for field in fields}}
    with fiona.open(
        path,
        "w",
        driver="GPKG",
        layer=name,
        crs_wkt=layer.crs.to_wkt() if layer.crs is not None else None,
        schema=schema,
        GEOMETRY_NAME=GEOMETRY_COLUMN,
        FID=KEY_COLUMN,
    ) as target:
        names = [field.name for field in fields]
        rows = zip(*(field.values for field in fields), strict=True) if fields else (() for _ in geometries)
        target.writerecords(
            {
                "geometry": None if geometry is None else shapely.geometry.mapping(geometry),
                "properties": dict(zip(names, row, strict=True)),
            }
            for geometry, row in zip(geometries, rows, strict=True)
        )
    return renamed


def _one_type(geometries: object, usual: str) -> tuple[str, np.ndarray]:
    """The one type that holds all geometries, and the geometries as that type, without Z.

    Empty ones become missing ones: programs disagree on how an empty one is stored.
    """
    flat = np.array(shapely.force_2d(np.asarray(geometries, dtype=object)), dtype=object)
    flat[shapely.is_empty(flat)] = None
    kinds = {geometry.geom_type for geometry in flat if geometry is not None}
    if not kinds:
        return usual, flat
    for single in ("Point", "LineString", "Polygon"):
        multi = f"Multi{single}"
        if kinds == {single} and usual != multi:
            return single, flat
        if kinds <= {single, multi}:
            return multi, np.array([_as_multi(geometry, single) for geometry in flat], dtype=object)
    return "Unknown", flat


def _as_multi(geometry: shapely.Geometry | None, single: str) -> shapely.Geometry | None:
    if geometry is None or geometry.geom_type != single:
        return geometry
    return {
        "Point": shapely.MultiPoint,
        "LineString": shapely.MultiLineString,
        "Polygon": shapely.MultiPolygon,
    }[single]([geometry])


def _write_styles(path: Path, styles: Mapping[str, str], stamp: str) -> None:
    """Put the styles into the table `layer_styles`, registered as the standard asks."""
    if not styles:
        return
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute(_STYLE_TABLE)
        connection.executemany(
            "INSERT INTO layer_styles (f_table_catalog, f_table_schema, f_table_name, f_geometry_column,"
            " styleName, styleSLD, useAsDefault, description, owner, update_time)"
            " VALUES ('', '', ?, ?, ?, ?, 1, ?, '', ?)",
            [
                (name, GEOMETRY_COLUMN, name, text, f"Style of the layer {name}", stamp)
                for name, text in styles.items()
            ],
        )
        connection.execute(
            "INSERT INTO gpkg_contents (table_name, data_type, identifier, description, last_change)"
            " VALUES ('layer_styles', 'attributes', 'layer_styles', 'Styles of the layers', ?)",
            (stamp,),
        )


def _check_counts(path: Path, counts: Mapping[str, int]) -> None:
    """See that every row arrived: on a full disk GDAL may end without a complaint."""
    with closing(sqlite3.connect(path)) as connection:
        for name, expected in counts.items():
            quoted = name.replace('"', '""')
            (found,) = connection.execute(f'SELECT count(*) FROM "{quoted}"').fetchone()
            if found != expected:
                raise OutputError(f"{path} is incomplete: {found} of {expected} rows of {name} arrived.")


def _stamp(moment: dt.datetime | None) -> str:
    """A moment as the standard wants it: UTC, with milliseconds."""
    utc = (moment or dt.datetime.now(dt.UTC)).astimezone(dt.UTC)
    return f"{utc:%Y-%m-%dT%H:%M:%S}.{utc.microsecond // 1000:03d}Z"


@contextmanager
def _said_in_a_sentence(path: Path) -> Iterator[None]:
    """Turn what the libraries say when a file cannot be written into an OutputError."""
    try:
        yield
    except _WRITE_ERRORS as error:
        reason = str(error).splitlines()[0][:200] if str(error) else type(error).__name__
        raise OutputError(f"{path} cannot be written: {reason}") from error
