"""Layers with a plot column: pooled, compared by group, and refused in one sentence."""

from __future__ import annotations

import json
from pathlib import Path

import geopandas as gpd
import numpy as np
import pytest
import shapely

from geoclust.area.study_area import StudyArea
from geoclust.cli.entry import run
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

BOX = shapely.box(0, 0, 160, 160)
QUICK = ["--method", "minimum-contrast", "--seed", "2"]


@pytest.fixture(scope="module")
def plots_file(tmp_path_factory) -> Path:
    """Eight plots in coordinates of their own, all from (0, 0); clusters twice as wide where mown.

    Plot 9 has no point, and one point belongs to a plot 10 without a study area.
    """
    path = tmp_path_factory.mktemp("plots") / "plots.gpkg"
    area = StudyArea(BOX)
    points, names = [], []
    for k, rng in enumerate(np.random.default_rng(21).spawn(8)):
        xy = draw_pattern(Thomas(4e-4, 4.0 if k < 4 else 8.0, 7.0), area, rng).points + area.origin
        points.append(xy)
        names += [k + 1] * len(xy)
    points.append([[5.0, 5.0]])
    names.append(10)
    gpd.GeoDataFrame({"plot": names}, geometry=shapely.points(np.concatenate(points))).to_file(
        path, layer="mounds"
    )
    treatment = ["grazed"] * 4 + ["mown"] * 5
    gpd.GeoDataFrame({"plot": range(1, 10), "treatment": treatment}, geometry=[BOX] * 9).to_file(
        path, layer="plots"
    )
    return path


def layers(path: Path) -> list[str]:
    return [str(path), str(path), "--points-layer", "mounds", "--area-layer", "plots", "--crs", "local"]


def test_pooled_fit(plots_file, capsys):
    given = ["fit", *layers(plots_file), "--plot-column", "plot", *QUICK, "--bootstrap", "0", "--json"]
    assert run(given) == 0
    said = capsys.readouterr()
    assert json.loads(said.out)["status"] == "ok"
    assert "9 plots" in said.err
    assert "without any point: 9" in said.err
    assert "1 points belong to plots that have no study area" in said.err


def test_groups_are_compared(plots_file, tmp_path, capsys):
    out = tmp_path / "groups.json"
    given = ["fit", *layers(plots_file), "--plot-column", "plot", "--group-column", "treatment", *QUICK,
             "--bootstrap", "39", "--out", str(out), "--quiet"]  # fmt: skip
    assert run(given) == 0
    text = capsys.readouterr().out
    assert "grazed: 4 plots" in text
    assert "mown: 5 plots" in text
    record = json.loads(out.read_text(encoding="utf-8"))
    assert set(record["groups"]) == {"grazed", "mown"}
    sigma = next(row for row in record["differences"] if row["parameter"] == "sigma")
    assert sigma["ratio_low"] < 0.5 < sigma["ratio_high"] < 1


def test_describe_pools(plots_file, capsys):
    given = ["describe", *layers(plots_file), "--plot-column", "plot", "--simulations", "39", "--seed", "1"]
    assert run(given) == 0
    said = capsys.readouterr()
    rows = [line.split(",") for line in said.out.splitlines()]
    furthest = max(float(r[1]) for r in rows if r[0] == "L")
    assert furthest == pytest.approx(40.0, rel=1e-6), "a quarter of the side of one plot"
    assert "complete randomness by L: p = 0.025" in said.err


@pytest.mark.parametrize(
    ("options", "status", "words"),
    [
        (["--plot-column", "plto"], 1, "has no column plto; it has plot"),
        (["--group-column", "treatment"], 2, "--group-column needs --plot-column"),
        (["--plot-column", "plot", "--group-column", "burnt"], 1, "has no column burnt"),
        (["--plot-column", "plot", "--group-column", "plot", "--assess"], 2, "--group-column does not go"),
    ],
)
def test_columns_that_are_not_there(options, status, words, plots_file, capsys):
    assert run(["fit", *layers(plots_file), *options, *QUICK]) == status
    said = capsys.readouterr()
    assert words in said.err
    assert said.out == ""
    assert "Traceback" not in said.err
