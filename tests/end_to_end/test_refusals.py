"""Every kind of input that cannot be used, through the command line.

One sentence on stderr, exit status 1 or 2, nothing on stdout, no traceback,
nothing written, nothing changed.
"""

from __future__ import annotations

from pathlib import Path

import geopandas as gpd
import numpy as np
import pyogrio
import pytest
import rasterio
import shapely
from affine import Affine

from geoclust.cli.entry import run

WEST, SOUTH = 500_000.0, 5_400_000.0
BOX = shapely.box(WEST, SOUTH, WEST + 1000, SOUTH + 1000)


def points(path: Path, xy=None, crs="EPSG:25832") -> Path:
    if xy is None:
        xy = np.random.default_rng(1).uniform([WEST, SOUTH], [WEST + 1000, SOUTH + 1000], (40, 2))
    frame = gpd.GeoDataFrame({"k": range(len(xy))}, geometry=shapely.points(xy), crs=crs)
    pyogrio.write_dataframe(frame, path, layer="mounds")
    return path


def area(path: Path, polygon=BOX, crs="EPSG:25832") -> Path:
    frame = gpd.GeoDataFrame({"k": [1]}, geometry=[polygon], crs=crs)
    pyogrio.write_dataframe(frame, path, layer="reserve")
    return path


def raster(path: Path, crs: str | None = "EPSG:25832", x: float = WEST, y: float = SOUTH + 1000) -> Path:
    with rasterio.open(path, "w", driver="GTiff", height=20, width=20, count=1, dtype="float32", crs=crs,
                       transform=Affine(50, 0, x, 0, -50, y)) as out:  # fmt: skip
        out.write(np.ones((1, 20, 20), "float32"))
    return path


def missing_file(d: Path) -> list[str]:
    return [str(d / "nowhere.gpkg"), str(area(d / "a.gpkg"))]


def no_such_layer(d: Path) -> list[str]:
    return [str(points(d / "p.gpkg")), str(area(d / "a.gpkg")), "--points-layer", "moulds"]


def no_crs(d: Path) -> list[str]:
    return [str(points(d / "p.gpkg", crs=None)), str(area(d / "a.gpkg", crs=None))]


def points_as_area(d: Path) -> list[str]:
    return [str(points(d / "p.gpkg")), str(d / "p.gpkg")]


def no_point_inside(d: Path) -> list[str]:
    return [str(points(d / "p.gpkg", np.array([[WEST - 50, SOUTH], [WEST - 70, SOUTH + 9]]))),
            str(area(d / "a.gpkg"))]  # fmt: skip


def one_point(d: Path) -> list[str]:
    return [str(points(d / "p.gpkg", np.array([[WEST + 50, SOUTH + 50]]))), str(area(d / "a.gpkg"))]


def all_points_equal(d: Path) -> list[str]:
    return [str(points(d / "p.gpkg", np.full((30, 2), [WEST + 50, SOUTH + 50]))), str(area(d / "a.gpkg"))]


def zero_area(d: Path) -> list[str]:
    line = shapely.Polygon(
        [(WEST, SOUTH), (WEST + 100, SOUTH + 100), (WEST + 200, SOUTH + 200), (WEST, SOUTH)]
    )
    return [str(points(d / "p.gpkg")), str(area(d / "a.gpkg", line))]


def bow_tie(d: Path) -> list[str]:
    corners = [(0, 0), (1000, 1000), (1000, 0), (0, 1000)]
    crossed = shapely.Polygon([(WEST + x, SOUTH + y) for x, y in corners])
    return [str(points(d / "p.gpkg")), str(area(d / "a.gpkg", crossed))]


def antimeridian(d: Path) -> list[str]:
    """A polygon from 179.9° E to 179.9° W that a program wrote the long way round the Earth."""
    round_the_earth = shapely.box(-179.9, -17, 179.9, -16.9)
    xy = np.random.default_rng(1).uniform([179.85, -17], [179.9, -16.9], (30, 2))
    return [
        str(points(d / "p.gpkg", xy, "EPSG:4326")),
        str(area(d / "a.gpkg", round_the_earth, "EPSG:4326")),
    ]


def web_mercator(d: Path) -> list[str]:
    x, y = 1_000_000.0, 8_399_738.0  # 60° N
    xy = np.random.default_rng(1).uniform([x, y], [x + 1000, y + 1000], (30, 2))
    return [str(points(d / "p.gpkg", xy, "EPSG:3857")),
            str(area(d / "a.gpkg", shapely.box(x, y, x + 1000, y + 1000), "EPSG:3857")),
            "--metric-crs", "EPSG:3857"]  # fmt: skip


def raster_as_points(d: Path) -> list[str]:
    return [str(raster(d / "r.tif")), str(area(d / "a.gpkg"))]


def no_layer_at_all(d: Path) -> list[str]:
    (d / "notes.gpkg").write_text("these are notes")
    return [str(d / "notes.gpkg"), str(area(d / "a.gpkg"))]


def table_without_columns(d: Path) -> list[str]:
    (d / "p.csv").write_text("east,north\n1,2\n")
    return [str(d / "p.csv"), str(area(d / "a.gpkg")), "--crs", "EPSG:25832"]


def good(d: Path) -> list[str]:
    return [str(points(d / "p.gpkg")), str(area(d / "a.gpkg"))]


def template_without_crs(d: Path) -> list[str]:
    return [*good(d), "--like", str(raster(d / "r.tif", crs=None))]


def template_elsewhere(d: Path) -> list[str]:
    return [*good(d), "--like", str(raster(d / "r.tif", x=WEST + 5000))]


def template_and_cell(d: Path) -> list[str]:
    return [*good(d), "--like", str(raster(d / "r.tif")), "--cell", "5"]


def zones_missing(d: Path) -> list[str]:
    return [*good(d), "--zones", "zoens"]


def zones_of_points(d: Path) -> list[str]:
    return [*good(d), "--zones", str(d / "p.gpkg")]


def unknown_model(d: Path) -> list[str]:
    return [*good(d), "--model", "toms"]


def too_few_simulations(d: Path) -> list[str]:
    return [*good(d), "--simulations", "5"]


CASES = {
    missing_file: (1, "nowhere.gpkg"),
    no_such_layer: (1, "moulds"),
    no_crs: (1, "coordinate reference system"),
    points_as_area: (1, "polygon"),
    no_point_inside: (1, "none of the 2 points"),
    one_point: (1, "one point"),
    all_points_equal: (1, "same"),
    zero_area: (1, "area"),
    bow_tie: (1, "--repair"),
    antimeridian: (1, "180"),
    web_mercator: (1, "EPSG:3857"),
    raster_as_points: (1, "raster"),
    no_layer_at_all: (1, "notes.gpkg"),
    table_without_columns: (2, "--x-column"),
    template_without_crs: (1, "coordinate reference system"),
    template_elsewhere: (2, "does not overlap"),
    template_and_cell: (2, "cell size"),
    zones_missing: (1, "zoens"),
    zones_of_points: (1, "polygon"),
    unknown_model: (2, "thomas"),
    too_few_simulations: (2, "39"),
}


def held(folder: Path) -> dict[Path, bytes]:
    return {p: p.read_bytes() for p in folder.rglob("*") if p.is_file()}


def refused(arguments: list[str], folder: Path, capsys) -> tuple[int, str]:
    """Run analyse, see that nothing but one line on stderr came of it, and return status and line."""
    before = held(folder)
    status = run(["analyse", *arguments, "--out", str(folder / "results"), "--seed", "1", "--quiet"])
    told = capsys.readouterr()
    assert told.out == ""
    assert told.err.count("\n") == 1, told.err
    assert told.err.startswith("geoclust: ")
    assert "Traceback" not in told.err
    assert "unexpected" not in told.err
    assert held(folder) == before
    assert sorted(p.name for p in folder.iterdir()) == sorted(
        {p.relative_to(folder).parts[0] for p in before}
    )
    return status, told.err


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.__name__)
def test_input_that_cannot_be_used(case, tmp_path, capsys):
    status, said = refused(case(tmp_path), tmp_path, capsys)
    expected, word = CASES[case]
    assert status == expected, said
    assert word in said


def test_folder_that_cannot_be_written(tmp_path, capsys):
    """The parent is a file: nobody, not even the administrator, can make a folder there."""
    arguments = good(tmp_path)
    (tmp_path / "taken").write_text("a file")
    before = held(tmp_path)
    status = run(["analyse", *arguments, "--out", str(tmp_path / "taken" / "results"), "--quiet"])
    told = capsys.readouterr()
    assert status == 1
    assert told.err.count("\n") == 1
    assert "taken" in told.err
    assert held(tmp_path) == before


def test_folder_that_holds_results(tmp_path, capsys):
    results = tmp_path / "results"
    results.mkdir()
    (results / "fit.json").write_text("{}")
    status, said = refused(good(tmp_path), tmp_path, capsys)
    assert status == 1
    assert "--overwrite" in said


def test_overwriting_is_for_earlier_results_only(tmp_path, capsys):
    """--overwrite does not sweep away a folder that geoclust did not make."""
    results = tmp_path / "results"
    results.mkdir()
    (results / "thesis.txt").write_text("years of work")
    status, said = refused([*good(tmp_path), "--overwrite"], tmp_path, capsys)
    assert status in (1, 2)
    assert "results" in said
