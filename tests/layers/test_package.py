"""GeoPackages: valid by GDAL's validator and by the essentials of the standard; streamed patterns."""

from __future__ import annotations

import csv
import datetime as dt
import importlib.util
import os
import resource
import signal
import sqlite3
import subprocess
import sys
from contextlib import closing
from pathlib import Path

import fiona
import geopandas as gpd
import numpy as np
import pandas as pd
import pyproj
import pytest
import shapely

from geoclust.errors import OutputError, UsageError
from geoclust.layers.columns import with_our_columns
from geoclust.layers.package import PatternWriter, write_package
from geoclust.layers.styles import vector_styles

UTM = pyproj.CRS("EPSG:25832")
SQUARE = shapely.box(604_000, 5_737_000, 604_100, 5_737_100)
MOMENT = dt.datetime(2026, 5, 14, 8, 30, 0, 120_000, tzinfo=dt.UTC)


def points(n=3, **columns):
    xy = np.random.default_rng(1).uniform((604_000, 5_737_000), (604_100, 5_737_100), (n, 2))
    return gpd.GeoDataFrame(columns, geometry=gpd.points_from_xy(*xy.T), crs=UTM)


def gdal_validator():
    """Command that runs validate_gpkg.py of GDAL's Python utilities, where they are installed."""
    if importlib.util.find_spec("osgeo_utils") is not None:
        return [sys.executable, "-m", "osgeo_utils.samples.validate_gpkg"]
    system = Path("/usr/bin/python3")
    script = Path("/usr/lib/python3/dist-packages/osgeo_utils/samples/validate_gpkg.py")
    return [str(system), str(script)] if script.exists() and system.exists() else None


def check_package(path):
    """GDAL's validator if it is there, and the essentials of OGC 12-128r18 in any case.

    The numbers are those of the requirements of the standard, from memory.
    """
    command = gdal_validator()
    if command:
        ran = subprocess.run([*command, str(path)], capture_output=True, text=True, timeout=60)
        assert ran.returncode == 0, ran.stderr
    with closing(sqlite3.connect(path)) as db:
        assert path.read_bytes()[:16] == b"SQLite format 3\0"  # 1
        assert db.execute("PRAGMA application_id").fetchone()[0] == int.from_bytes(b"GPKG", "big")  # 2
        assert db.execute("PRAGMA user_version").fetchone()[0] >= 10200  # 2
        assert db.execute("PRAGMA integrity_check").fetchall() == [("ok",)]  # 6
        assert db.execute("PRAGMA foreign_key_check").fetchall() == []  # 7
        systems = {row[0] for row in db.execute("SELECT srs_id FROM gpkg_spatial_ref_sys")}
        assert {-1, 0, 4326} <= systems  # 11
        tables = {row[0] for row in db.execute("SELECT name FROM sqlite_master WHERE type='table'")}
        contents = db.execute(
            "SELECT table_name, data_type, last_change, srs_id FROM gpkg_contents"
        ).fetchall()
        for table, kind, changed, srs in contents:
            assert table in tables  # 14
            dt.datetime.strptime(changed, "%Y-%m-%dT%H:%M:%S.%fZ")  # 15
            columns = {row[1]: row for row in db.execute(f'PRAGMA table_info("{table}")')}
            assert sum(row[5] for row in columns.values()) == 1  # 29, 119: one integer primary key
            if kind == "attributes":
                continue
            assert kind == "features"
            assert srs in systems
            (row,) = db.execute(
                "SELECT column_name, geometry_type_name, srs_id, z, m FROM gpkg_geometry_columns"
                " WHERE table_name=?",
                (table,),
            ).fetchall()  # 22
            assert row[0] in columns
            assert row[1:] == (columns[row[0]][2].upper(), srs, 0, 0)  # 25, 26
            blobs = [blob for (blob,) in db.execute(f'SELECT "{row[0]}" FROM "{table}"') if blob is not None]
            assert all(blob[:3] == b"GP\0" for blob in blobs)  # 19
            assert f"rtree_{table}_{row[0]}" in tables  # 75, 77: the spatial index
            extension = db.execute(
                "SELECT count(*) FROM gpkg_extensions"
                " WHERE table_name=? AND extension_name='gpkg_rtree_index'",
                (table,),
            ).fetchone()
            assert extension == (1,)
            indexed = db.execute(f'SELECT count(*) FROM "rtree_{table}_{row[0]}"').fetchone()[0]
            assert indexed <= len(blobs)
        return {table: kind for table, kind, _, _ in contents}


def test_results_as_a_whole_are_valid(tmp_path):
    path = tmp_path / "results.gpkg"
    layers = {
        "points": points(
            cluster=[0, 1, 1], membership_probability=[np.nan, 0.9, 0.7], note=["a", None, "ö <&>"]
        ),
        "study_area": gpd.GeoDataFrame(geometry=[SQUARE], crs=UTM),
        "clusters": gpd.GeoDataFrame({"cluster": [1]}, geometry=[SQUARE.buffer(-40)], crs=UTM),
        "zones": gpd.GeoDataFrame({"name": ["A", "B"]}, geometry=[SQUARE, None], crs=UTM).to_crs(4326),
    }
    renamed = write_package(path, layers, vector_styles("name"))
    with PatternWriter(path, "simulated_points", UTM, into_package=True) as writer:
        writer.append(1, np.array([[604_001.5, 5_737_002.5]]))
        writer.append(2, np.empty((0, 2)))
    assert os.listdir(tmp_path) == ["results.gpkg"]
    assert renamed == {name: {} for name in layers}
    assert check_package(path) == {
        **dict.fromkeys([*layers, "simulated_points"], "features"),
        "layer_styles": "attributes",
    }
    for name, layer in layers.items():
        back = gpd.read_file(path, layer=name)
        assert back.crs == layer.crs
        assert len(back) == len(layer)
        with fiona.open(path, layer=name) as opened:
            assert pyproj.CRS(opened.crs_wkt) == layer.crs
    back = gpd.read_file(path, layer="points")
    assert back["cluster"].tolist() == [0, 1, 1]
    assert back["note"].tolist()[::2] == ["a", "ö <&>"]
    assert back["note"].isna().tolist() == [False, True, False]
    assert back.geometry.geom_equals(layers["points"].geometry).all()
    assert gpd.read_file(path, layer="simulated_points")["pattern"].tolist() == [1]


def test_styles_are_kept_where_programs_look(tmp_path):
    styles = vector_styles()
    write_package(tmp_path / "r.gpkg", {"points": points()}, styles)
    with closing(sqlite3.connect(tmp_path / "r.gpkg")) as db:
        rows = db.execute(
            "SELECT f_table_name, f_geometry_column, styleSLD, useAsDefault FROM layer_styles ORDER BY id"
        ).fetchall()
        geometry = db.execute("SELECT column_name FROM gpkg_geometry_columns").fetchone()[0]
    assert rows == [(name, geometry, text, 1) for name, text in styles.items()]


def test_package_without_styles_has_no_table_of_them(tmp_path):
    write_package(tmp_path / "r.gpkg", {"points": points()})
    assert check_package(tmp_path / "r.gpkg") == {"points": "features"}


def test_values_of_every_kind_survive(tmp_path):
    days = [dt.date(2026, 5, 1), None, dt.date(1899, 12, 31)]
    zone = dt.timezone(dt.timedelta(hours=2))
    moments = [dt.datetime(2026, 5, 1, 12, 30, 15, 250_000), None, dt.datetime(2026, 5, 2)]
    columns = {
        "whole": pd.array([1, None, 2**62], dtype="Int64"),
        "whole_objects": pd.Series([7, None, -3], dtype=object),
        "huge": pd.Series([2**63, None, 1], dtype=object),
        "unsigned": np.array([1, 2, 3], dtype="uint8"),
        "real": [1.5, np.nan, -2.25],
        "yes": [True, False, True],
        "maybe": pd.array([True, None, False], dtype="boolean"),
        "text": ["ä", None, "with 'quotes' \"and\" \0 nothing"],
        "kind": pd.Categorical(["a", None, "b"]),
        "grade": pd.Categorical([2, 1, 2]),
        "day": pd.Series(days, dtype=object),
        "midnight": pd.to_datetime(["2026-05-01", None, "2026-05-03"]),
        "moment": pd.Series(moments),
        "moment_objects": pd.Series(moments, dtype=object),
        "zoned": pd.to_datetime(["2026-05-01T12:00:00+02:00", None, "2026-05-01T00:00:00+02:00"]),
        "mixed_zones": pd.Series([dt.datetime(2026, 5, 1, 1, tzinfo=zone), None, moments[0]], dtype=object),
        "bytes": pd.Series([b"\x00\x01", None, b""], dtype=object),
        "lists": pd.Series([[1, 2], None, {"a": "ö"}], dtype=object),
        "nothing": pd.Series([None, None, None], dtype=object),
        "delta": pd.to_timedelta([1, None, 3], unit="h"),
    }
    path = tmp_path / "v.gpkg"
    assert write_package(path, {"v": points(**columns)}) == {"v": {}}
    check_package(path)
    with fiona.open(path, layer="v") as layer:
        kinds = dict(layer.schema["properties"])
        rows = [dict(feature["properties"]) for feature in layer]

    def column(name):
        return [row[name] for row in rows]

    assert column("whole") == [1, None, 2**62]
    assert column("whole_objects") == [7, None, -3]
    assert column("huge") == [str(2**63), None, "1"]
    assert column("unsigned") == [1, 2, 3]
    assert column("real") == [1.5, None, -2.25]
    assert column("yes") == [True, False, True]
    assert column("maybe") == [True, None, False]
    assert kinds["yes"] == kinds["maybe"] == "bool"
    assert column("text") == ["ä", None, "with 'quotes' \"and\"  nothing"]
    assert column("kind") == ["a", None, "b"]
    assert column("grade") == [2, 1, 2]
    assert column("day") == ["2026-05-01", None, "1899-12-31"]
    assert column("midnight") == ["2026-05-01", None, "2026-05-03"]
    assert kinds["day"] == kinds["midnight"] == "date"
    expected = ["2026-05-01T12:30:15.250000", None, "2026-05-02T00:00:00"]
    assert [text and text[:26].removesuffix("+00:00") for text in column("moment")] == expected
    assert column("moment_objects") == column("moment")
    assert column("zoned") == ["2026-05-01T10:00:00+00:00", None, "2026-04-30T22:00:00+00:00"]
    assert column("mixed_zones")[0] == "2026-04-30T23:00:00+00:00"
    assert column("bytes") == [b"\x00\x01", None, b""]
    assert column("lists") == ["[1, 2]", None, '{"a": "ö"}']
    assert column("nothing") == [None, None, None]
    assert column("delta")[1] is None


def test_awkward_column_names_are_renamed_and_reported(tmp_path):
    layer = points()
    names = ["fid", "FID", "geom", "Name", "name", "NAME_2", "", 'a"b', "select", "x\ny"]
    for k in range(len(names)):
        layer.insert(k, f"_{k}", [k] * 3)
    layer.columns = [*names, "geometry"]
    renamed = write_package(tmp_path / "n.gpkg", {"n": layer})["n"]
    check_package(tmp_path / "n.gpkg")
    back = gpd.read_file(tmp_path / "n.gpkg", layer="n")
    stored = list(back.columns.drop("geometry"))
    assert [back[name].iloc[0] for name in stored] == list(range(len(names)))
    assert stored[0] == "fid_input"
    assert stored[2] == "geom_input"
    assert stored[3:6] == ["Name", "name_3", "NAME_2"]
    assert stored[8] == "select"
    assert renamed["name"] == "name_3"
    assert renamed["fid"] == "fid_input"
    assert renamed["FID"] == stored[1]
    assert len({name.casefold() for name in stored}) == len(stored)


def test_repeated_and_numeric_labels(tmp_path):
    layer = points()
    frame = pd.DataFrame([[1, 2, 3]] * 3, columns=["a", "a", 5])
    layer = gpd.GeoDataFrame(pd.concat([frame, layer], axis=1), geometry="geometry", crs=UTM)
    assert write_package(tmp_path / "r.gpkg", {"r": layer})["r"] == {"a": "a_2"}
    assert list(gpd.read_file(tmp_path / "r.gpkg").columns[:3]) == ["a", "a_2", "5"]


def test_our_columns_keep_their_names():
    layer = points(cluster=["x", "y", "z"], Membership_Probability=[1, 2, 3], cluster_input=[7, 8, 9])
    layer.index = [5, 3, 3]
    ours = {
        "cluster": np.array([0, 1, 2]),
        "membership_probability": pd.Series([0.1, 0.2, 0.3]),
        "background_probability": [0.9, 0.8, 0.7],
    }
    both, renamed = with_our_columns(layer, ours)
    assert renamed == {
        "cluster": "cluster_input_2",
        "Membership_Probability": "Membership_Probability_input",
    }
    assert list(both.columns) == [
        "cluster_input_2", "Membership_Probability_input", "cluster_input", *ours, "geometry"
    ]  # fmt: skip
    assert both["cluster"].tolist() == [0, 1, 2]
    assert both["membership_probability"].tolist() == [0.1, 0.2, 0.3]
    assert both["cluster_input_2"].tolist() == ["x", "y", "z"]
    assert both.crs == UTM
    with pytest.raises(UsageError, match="one a row"):
        with_our_columns(layer, {"cluster": [1]})


def test_geometries_of_one_layer_have_one_type(tmp_path):
    multi = shapely.MultiPolygon([SQUARE, shapely.box(0, 0, 1, 1)])
    layers = {
        "mixed": gpd.GeoDataFrame(geometry=[SQUARE, multi, None], crs=UTM),
        "high": gpd.GeoDataFrame(geometry=[shapely.Point(1, 2, 3)], crs=UTM),
        "all": gpd.GeoDataFrame(geometry=[SQUARE, shapely.Point(1, 2)], crs=UTM),
        "clusters": gpd.GeoDataFrame({"cluster": np.zeros(0, dtype=int)}, geometry=[], crs=UTM),
        "points": gpd.GeoDataFrame(geometry=[], crs=UTM),
        "empty_part": gpd.GeoDataFrame(geometry=[shapely.Polygon(), multi], crs=UTM),
    }
    path = tmp_path / "g.gpkg"
    write_package(path, layers)
    check_package(path)
    with closing(sqlite3.connect(path)) as db:
        kinds = dict(db.execute("SELECT table_name, geometry_type_name FROM gpkg_geometry_columns"))
    assert kinds == {
        "mixed": "MULTIPOLYGON",
        "high": "POINT",
        "all": "GEOMETRY",
        "clusters": "MULTIPOLYGON",
        "points": "POINT",
        "empty_part": "MULTIPOLYGON",
    }
    assert gpd.read_file(path, layer="mixed").area.tolist()[:2] == [1e4, 1e4 + 1]
    assert not gpd.read_file(path, layer="high").has_z.any()
    assert len(gpd.read_file(path, layer="clusters")) == 0


@pytest.mark.parametrize(
    "crs",
    [
        "EPSG:2263",
        "EPSG:4326",
        "+proj=aeqd +lat_0=-14 +lon_0=175 +R=3396190 +units=m +no_defs",
        "+proj=laea +lat_0=61 +lon_0=25 +ellps=GRS80 +units=m +no_defs",
        None,
    ],
)
def test_any_crs_can_be_stored(tmp_path, crs):
    layer = gpd.GeoDataFrame({"a": [1]}, geometry=[shapely.Point(10, 20)], crs=crs)
    write_package(tmp_path / "c.gpkg", {"points": layer})
    check_package(tmp_path / "c.gpkg")
    back = gpd.read_file(tmp_path / "c.gpkg")
    assert back.geometry[0].equals(shapely.Point(10, 20))
    if crs is not None:
        # the same place, whatever the spelling
        transform = pyproj.Transformer.from_crs(crs, back.crs, always_xy=True).transform
        np.testing.assert_allclose(transform(10.0, 20.0), (10.0, 20.0), atol=1e-6)


def test_written_twice_gives_the_same_bytes(tmp_path):
    for name in ("a.gpkg", "b.gpkg"):
        write_package(tmp_path / name, {"points": points(a=[1, 2, 3])}, vector_styles(), written_at=MOMENT)
    assert (tmp_path / "a.gpkg").read_bytes() == (tmp_path / "b.gpkg").read_bytes()
    with closing(sqlite3.connect(tmp_path / "a.gpkg")) as db:
        moments = {row[0] for row in db.execute("SELECT last_change FROM gpkg_contents")}
    assert moments == {"2026-05-14T08:30:00.120Z"}


@pytest.mark.parametrize("names", [[""], ["gpkg_mine"], ["Layer_Styles"], ["a", "A"], ["sqlite_x"]])
def test_impossible_layer_names_are_refused(tmp_path, names):
    with pytest.raises(UsageError, match="a layer name must be"):
        write_package(tmp_path / "n.gpkg", {name: points() for name in names})
    assert os.listdir(tmp_path) == []


def test_existing_package_is_kept(tmp_path):
    (tmp_path / "r.gpkg").write_text("mine")
    with pytest.raises(OutputError, match="exists already"):
        write_package(tmp_path / "r.gpkg", {"points": points()})
    assert (tmp_path / "r.gpkg").read_text() == "mine"
    with pytest.raises(OutputError, match="cannot be written"):
        write_package(tmp_path / "nowhere" / "r.gpkg", {"points": points()})


@pytest.fixture
def small_files():
    """Let no file of this process grow beyond 100 kB, as on a full disk."""
    before, handler = resource.getrlimit(resource.RLIMIT_FSIZE), signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, before[1]))
    yield
    resource.setrlimit(resource.RLIMIT_FSIZE, before)
    signal.signal(signal.SIGXFSZ, handler)


@pytest.mark.usefixtures("small_files")
def test_full_disk_leaves_no_package(tmp_path):
    with pytest.raises(OutputError, match=r"r\.gpkg"):
        write_package(tmp_path / "r.gpkg", {"points": points(20_000, a=["x" * 30] * 20_000)})
    assert os.listdir(tmp_path) == []


@pytest.mark.usefixtures("small_files")
@pytest.mark.parametrize("suffix", ["gpkg", "fgb", "geojson", "csv"])
def test_full_disk_leaves_no_patterns(tmp_path, suffix):
    def write():
        with PatternWriter(tmp_path / f"p.{suffix}", crs=UTM) as writer:
            writer.append(1, np.random.default_rng(1).uniform(0, 1000, (10_000, 2)))

    with pytest.raises(OutputError, match=rf"p\.{suffix}"):
        write()
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("suffix", ["gpkg", "fgb", "geojson", "csv"])
def test_patterns_in_a_file_of_their_own(tmp_path, suffix):
    path = tmp_path / f"patterns.{suffix}"
    patterns = [
        np.random.default_rng(k).uniform(size=(k * 5000, 2)) * 100 + (604_000, 5_737_000) for k in range(4)
    ]
    with PatternWriter(path, crs=UTM) as writer:
        for number, xy in enumerate(patterns, start=1):
            writer.append(number, xy)
        assert not path.exists()
    assert os.listdir(tmp_path) == [path.name]
    assert writer.points == sum(map(len, patterns))
    expected_number = np.repeat([1, 2, 3, 4], [len(xy) for xy in patterns])
    if suffix == "csv":
        with path.open() as file:
            rows = list(csv.DictReader(file))
        number = np.array([int(row["pattern"]) for row in rows])
        back = np.array([[float(row["x"]), float(row["y"])] for row in rows])
    else:
        layer = gpd.read_file(path)
        assert layer.crs.equals(UTM if suffix != "geojson" else pyproj.CRS(4326), ignore_axis_order=True)
        layer = layer.to_crs(UTM)
        number, back = layer["pattern"].to_numpy(), np.column_stack([layer.geometry.x, layer.geometry.y])
    np.testing.assert_array_equal(number, expected_number)
    # nine decimals of a degree in GeoJSON, of which GDAL takes 000 and 999 near the end for noise
    np.testing.assert_allclose(back, np.vstack(patterns), rtol=0, atol=2e-3 if suffix == "geojson" else 0)
    if suffix == "gpkg":
        assert check_package(path) == {"simulated_points": "features"}


def test_patterns_can_be_stored_in_another_crs(tmp_path):
    xy = np.array([[604_000.0, 5_737_000.0], [604_050.0, 5_737_020.0]])
    with PatternWriter(tmp_path / "p.gpkg", "sim", UTM, layer_crs=pyproj.CRS(4326)) as writer:
        writer.append(1, xy)
        writer.append(2, np.empty((0, 2)))
    back = gpd.read_file(tmp_path / "p.gpkg", layer="sim")
    assert back.crs == pyproj.CRS(4326)
    expected = gpd.GeoSeries(gpd.points_from_xy(*xy.T), crs=UTM).to_crs(4326)
    assert back.geometry.geom_equals_exact(expected, 1e-12).all()


def test_patterns_are_written_whole_or_not_at_all(tmp_path):
    path = tmp_path / "p.gpkg"
    path.write_text("old")

    def fail_in_the_block():
        with PatternWriter(path, crs=UTM, overwrite=True) as writer:
            writer.append(1, np.zeros((30_000, 2)))
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        fail_in_the_block()
    assert path.read_text() == "old"
    assert os.listdir(tmp_path) == ["p.gpkg"]
    with pytest.raises(OutputError, match="exists already"), PatternWriter(path, crs=UTM):
        pytest.fail("the block must not run")
    with PatternWriter(path, crs=UTM, overwrite=True) as writer:
        writer.append(1, np.zeros((3, 2)))
    assert len(gpd.read_file(path)) == 3


def test_errors_of_the_block_are_not_disguised(tmp_path):
    def fail_in_the_block():
        with PatternWriter(tmp_path / "p.gpkg", crs=UTM):
            raise FileNotFoundError("another file")

    with pytest.raises(FileNotFoundError, match="another file"):
        fail_in_the_block()


def test_wrong_uses_are_refused(tmp_path):
    with pytest.raises(UsageError, match=r"one of \.gpkg, \.fgb, \.geojson, \.csv; got 'p\.shp'"):
        PatternWriter(tmp_path / "p.shp", crs=UTM)
    with pytest.raises(UsageError, match=r"one of \.gpkg; got 'p\.csv'"):
        PatternWriter(tmp_path / "p.csv", crs=UTM, into_package=True)
    with pytest.raises(UsageError, match="crs must be given"):
        PatternWriter(tmp_path / "p.geojson")
    with (
        pytest.raises(OutputError, match="no GeoPackage"),
        PatternWriter(tmp_path / "p.gpkg", into_package=True),
    ):
        pytest.fail("the block must not run")
    write_package(tmp_path / "p.gpkg", {"simulated_points": points()})
    with (
        pytest.raises(OutputError, match="has a layer"),
        PatternWriter(tmp_path / "p.gpkg", "Simulated_Points", into_package=True),
    ):
        pytest.fail("the block must not run")
    writer = PatternWriter(tmp_path / "q.csv", crs=UTM)
    with pytest.raises(UsageError, match="within the `with` block"):
        writer.append(1, np.zeros((1, 2)))
    with writer:
        for bad in (np.zeros(2), np.zeros((2, 3)), np.full((1, 2), np.nan)):
            with pytest.raises(UsageError, match="xy must be"):
                writer.append(1, bad)


def test_memory_does_not_grow_with_the_number_of_patterns(tmp_path):
    # in a process of its own: peak memory after 40,000 points and after 80,000 more
    code = """
import resource, sys
import numpy as np, pyproj
from geoclust.layers.package import PatternWriter
peak = lambda: resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
rng = np.random.default_rng(1)
with PatternWriter(sys.argv[1], crs=pyproj.CRS("EPSG:25832")) as writer:
    for pattern in range(120):
        writer.append(pattern, rng.uniform(size=(1000, 2)))
        if pattern == 39:
            before = peak()
    print(peak() - before)
"""
    ran = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path / "p.gpkg")], capture_output=True, text=True, check=True
    )
    # 80,000 points as Python lists alone would need 9,600 kB (two floats and a list of two, 120 bytes)
    assert int(ran.stdout) < 3_000
