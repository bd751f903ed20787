"""Commands from the outside: data on stdout, talk on stderr, exit status, files that are whole or not "
"there."""

from __future__ import annotations

import io
import json
import signal
import subprocess
import sys
import time
from functools import partial
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio

from geoclust.cli.entry import INTERRUPTED, run
from geoclust.cli.talk import Talk
from geoclust.fitting import assessment

LAYERS = ["--points-layer", "mounds", "--area-layer", "reserve"]


def both(path: Path) -> list[str]:
    return [str(path), str(path), *LAYERS]


def at_random(path: Path) -> list[str]:
    return [str(path), str(path), "--points-layer", "random", "--area-layer", "reserve"]


@pytest.fixture(scope="module")
def fit_file(survey_file, tmp_path_factory) -> Path:
    out = tmp_path_factory.mktemp("fit") / "fit.json"
    quick = ["--method", "minimum-contrast", "--bootstrap", "39", "--seed", "1", "--quiet"]
    assert run(["fit", *both(survey_file), "--out", str(out), *quick]) == 0
    return out


def test_audit_prints_text_json_and_writes(survey_file, tmp_path, capsys):
    assert run(["audit", *both(survey_file)]) == 0
    text = capsys.readouterr()
    assert "9 ha" in text.out
    assert text.err == ""
    out = tmp_path / "audit.json"
    assert run(["audit", *both(survey_file), "--json", "--out", str(out)]) == 0
    printed = json.loads(capsys.readouterr().out)
    assert printed["area_ha"] == pytest.approx(9.0)
    assert json.loads(out.read_text()) == printed
    # what is there already is not lost
    assert run(["audit", *both(survey_file), "--out", str(out)]) == 1
    assert "--overwrite" in capsys.readouterr().err
    assert run(["audit", *both(survey_file), "--out", str(out), "--overwrite"]) == 0


def test_describe_prints_curves(survey_file, tmp_path, capsys):
    figures = tmp_path / "figures"
    arguments = ["describe", *both(survey_file), "--simulations", "39", "--seed", "3", "--r-max", "50"]
    assert run([*arguments, "--figures", str(figures)]) == 0
    captured = capsys.readouterr()
    table = pd.read_csv(io.StringIO(captured.out))
    assert list(table) == ["function", "r_m", "estimate", "theory", "lower", "upper"]
    assert set(table["function"]) == {"K", "L", "g", "G", "F", "J"}
    pairs = table[table["function"].isin(["K", "L", "g"])]
    assert pairs["r_m"].max() == pytest.approx(50)
    j = table[(table["function"] == "J") & table["estimate"].notna()]
    assert j["estimate"].iloc[-1] < 0.5
    k = table[table["function"] == "K"]
    assert k["theory"].to_numpy() == pytest.approx(np.pi * k["r_m"].to_numpy() ** 2)
    assert "complete randomness by L: p = 0.025" in captured.err
    assert "Clark & Evans (1954): 0." in captured.err
    assert "quadrat dispersion: " in captured.err
    names = ["F_empty_space.svg", "G_nearest_neighbour.svg", "J.svg", "L.svg", "g.svg"]
    assert sorted(p.name for p in figures.iterdir()) == names
    out = tmp_path / "curves.csv"
    assert run([*arguments, "--out", str(out), "--quiet"]) == 0
    again = capsys.readouterr()
    assert (again.out, again.err) == ("", "")
    assert out.read_text() == captured.out


def test_fit_prints_parameters_with_units(survey_file, fit_file, capsys):
    quick = ["--method", "minimum-contrast", "--bootstrap", "39", "--seed", "1", "--quiet"]
    assert run(["fit", *both(survey_file), *quick]) == 0
    text = capsys.readouterr().out
    assert "ha⁻¹" in text
    assert run(["fit", *both(survey_file), *quick, "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record == json.loads(fit_file.read_text())
    assert record["seed"] == 1
    sigma = record["parameters"]["sigma"]["value"]
    # the pattern was drawn with 6 m
    assert 4 < sigma < 9
    assert f"{sigma:.2f}" in text


def test_fit_is_assessed(survey_file, monkeypatch, capsys):
    """The sentence and the record of the same test, on a pattern that the model was drawn from."""
    few = partial(assessment.assess_fit, simulations=19, first_stage=19)
    monkeypatch.setattr(assessment, "assess_fit", few)
    quick = ["--method", "minimum-contrast", "--bootstrap", "0", "--seed", "1", "--quiet", "--assess"]
    assert run(["fit", *both(survey_file), *quick]) == 0
    last = capsys.readouterr().out.splitlines()[-1]
    assert run(["fit", *both(survey_file), *quick, "--json"]) == 0
    record = json.loads(capsys.readouterr().out)["assessment"]
    assert record["sentence"] == last
    assert last.startswith("The fitted model reproduces the distances from points to the next point (p = ")
    assert record["p_value"] > 0.05


@pytest.mark.parametrize(
    ("more", "told"),
    [
        (["--against", "gauss"], "model must be one of"),
        (["--against", "nested-thomas"], "nested-thomas cannot be compared"),
        (
            ["--against", "matern-cluster", "--covariate", "none.tif"],
            "--against does not go with --covariate",
        ),
    ],
)
def test_comparisons_that_cannot_be_made(more, told, survey_file, capsys):
    """Told before anything is fitted."""
    assert run(["fit", *both(survey_file), "--seed", "1", *more]) == 2
    captured = capsys.readouterr()
    assert told in captured.err
    assert captured.out == ""


def test_random_points_end_in_cannot_tell(survey_file, tmp_path, capsys):
    quick = ["--method", "minimum-contrast", "--bootstrap", "0", "--seed", "1"]
    assert run(["fit", *at_random(survey_file), *quick, "--json"]) == 3
    captured = capsys.readouterr()
    assert json.loads(captured.out)["status"] == "no-clustering"
    assert "cannot tell (no-clustering)" in captured.err
    out = tmp_path / "fit.json"
    assert run(["fit", *at_random(survey_file), *quick, "--out", str(out), "--quiet"]) == 3
    assert capsys.readouterr() == ("", "")
    # and nothing can be built on it
    target = tmp_path / "map"
    assert run(["locate", *at_random(survey_file), "--fit", str(out), "--out", str(target)]) == 3
    assert "cannot" in capsys.readouterr().err or not target.exists()
    assert not target.exists()


def test_locate_from_a_fit(survey_file, fit_file, tmp_path, capsys):
    out = tmp_path / "map"
    arguments = [
        "locate",
        *both(survey_file),
        "--fit",
        str(fit_file),
        "--zones",
        "zones",
        "--cell",
        "10",
        "--seed",
        "2",
    ]
    assert run([*arguments, "--out", str(out)]) == 0
    captured = capsys.readouterr()
    assert "cluster centres in the study area" in captured.out
    with rasterio.open(out / "centre_intensity.tif") as raster:
        assert raster.descriptions[0] == "centres_per_ha_mean"
        mean = raster.read(1, masked=True)
        assert raster.res == (10.0, 10.0)
    # 36 clusters expected, 9 ha: mean times area is the number of centres inside
    assert 15 < float(mean.sum()) * 0.01 < 60
    points = gpd.read_file(out / "results.gpkg", layer="points")
    assert {"note", "cluster", "membership_probability"} <= set(points)
    assert set(gpd.read_file(out / "results.gpkg", layer="zones")["name"]) == {"west", "east"}
    assert run([*arguments, "--out", str(out)]) == 1
    assert "--overwrite" in capsys.readouterr().err


def test_simulate_in_three_ways(survey_file, fit_file, tmp_path, capsys):
    def patterns(name: str, *more: str) -> pd.DataFrame:
        out = tmp_path / name
        start = ["simulate", *both(survey_file), "--out", str(out), "--count", "30", "--seed", "4", "--quiet"]
        assert run([*start, *more]) == 0
        return pd.read_csv(out)

    stated = [
        "--parameter",
        "parent_intensity=4",
        "--parameter",
        "sigma=6",
        "--parameter",
        "mean-offspring=5",
    ]
    clustered = patterns("a.csv", *stated)
    assert set(clustered["pattern"]) == set(range(1, 31))
    # 4 per ha times 5 on 9 ha, variance of a count at most mean times (1 + 5): three standard errors
    assert len(clustered) / 30 == pytest.approx(180, abs=3 * np.sqrt(180 * 6 / 30))
    assert (tmp_path / "a.csv").read_bytes() == _again(patterns, tmp_path, stated)
    n = len(gpd.read_file(survey_file, layer="mounds"))
    scattered = patterns("c.csv", "--random")
    assert len(scattered) / 30 == pytest.approx(n, abs=3 * np.sqrt(n / 30))
    fitted = patterns("d.csv", "--fit", str(fit_file))
    assert len(fitted) / 30 == pytest.approx(n, abs=3 * np.sqrt(n * 8 / 30))
    assert capsys.readouterr() == ("", "")


def _again(patterns, folder: Path, stated: list[str]) -> bytes:
    patterns("b.csv", *stated, "--workers", "1")
    return (folder / "b.csv").read_bytes()


RECORD = {
    "schema": "1.0", "status": "ok", "reason": "", "model": "thomas", "parameters": {}, "choices": {},
    "method": "posterior", "seed": 1,
}  # fmt: skip


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("not json", "not JSON"),
        ("[]", "no fit"),
        ('{"status": "ok"}', "no fit"),
        (json.dumps(RECORD | {"schema": "9.0"}), "9.0"),
        (json.dumps(RECORD | {"model": "other"}), "other"),
        (json.dumps(RECORD), "thomas"),
    ],
)  # fmt: skip
def test_fits_that_are_none(text, expected, survey_file, tmp_path, capsys):
    bad = tmp_path / "fit.json"
    bad.write_text(text)
    out = tmp_path / "x.csv"
    assert run(["simulate", *both(survey_file), "--fit", str(bad), "--out", str(out), "--quiet"]) == 1
    captured = capsys.readouterr()
    assert expected in captured.err
    assert captured.err.count("\n") == 1
    assert not out.exists()


def test_missing_files_and_layers_are_one_line(survey_file, tmp_path, capsys):
    for arguments, expected in (
        (["audit", "nowhere.gpkg", str(survey_file)], "nowhere.gpkg"),
        (["audit", str(survey_file), str(survey_file), "--points-layer", "mouds"], "mouds"),
        (
            ["simulate", *both(survey_file), "--fit", "none.json", "--out", str(tmp_path / "x.csv")],
            "none.json",
        ),
        (["locate", *both(survey_file), "--zones", "zoens", "--out", str(tmp_path / "x")], "zoens"),
    ):
        assert run([*arguments, *(["--quiet"] if arguments[0] != "audit" else [])]) == 1
        error = capsys.readouterr().err
        assert expected in error
        assert error.startswith("geoclust: ")
        assert error.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


def test_interrupt_is_one_line(survey_file, monkeypatch, capsys):
    def interrupted(*_: object, **__: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("geoclust.layers.survey_layers.audit_survey", interrupted)
    assert run(["audit", *both(survey_file)]) == INTERRUPTED == 130
    error = capsys.readouterr().err
    assert error.strip().endswith("interrupted; nothing was written.")
    assert error.strip().count("\n") == 0


def in_a_process(code: str, *arguments: str) -> subprocess.CompletedProcess[str]:
    start = f"import sys\nsys.argv = ['geoclust', *{list(arguments)!r}]\n"
    end = "\nfrom geoclust.cli import main\nmain()\n"
    return subprocess.run(
        [sys.executable, "-c", start + code + end], capture_output=True, text=True, timeout=300, check=False
    )


BROKEN = "import geoclust.layers.survey_layers as s\ns.audit_survey = lambda *a, **k: {}['mounds']"


def test_unexpected_error_is_one_line_unless_asked(survey_file):
    told = in_a_process(BROKEN, "audit", *both(survey_file))
    assert told.returncode == 1
    assert told.stderr.startswith("geoclust: unexpected error (KeyError: 'mounds')")
    assert "--traceback" in told.stderr
    assert told.stderr.count("\n") == 1
    shown = in_a_process(BROKEN, "--traceback", "audit", *both(survey_file))
    assert shown.returncode == 1
    assert "Traceback" in shown.stderr


def test_reader_of_stdout_may_leave(survey_file):
    command = [sys.executable, "-m", "geoclust", "audit", *both(survey_file)]
    reader = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    assert reader.stdout is not None
    assert reader.stderr is not None
    reader.stdout.close()
    assert reader.stderr.read() == b""
    reader.stderr.close()
    assert reader.wait(timeout=120) == 1


@pytest.mark.parametrize("sent", [signal.SIGINT, signal.SIGTERM])
def test_stopped_analysis_leaves_nothing(sent, survey_file, tmp_path):
    out = tmp_path / "results"
    command = [sys.executable, "-m", "geoclust", "analyse", *both(survey_file), "--out", str(out),
               "--simulations", "99999", "--seed", "1"]  # fmt: skip
    running = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    try:
        assert running.stderr is not None
        assert "complete randomness" in running.stderr.readline()
        time.sleep(0.5)
        running.send_signal(sent)
        said, error = running.communicate(timeout=120)
    finally:
        running.kill()
    assert running.returncode == 128 + sent
    assert said == ""
    assert "Traceback" not in error
    assert list(tmp_path.iterdir()) == []


def test_help_does_not_wait_for_the_libraries():
    code = (
        "import sys, geoclust.cli\n"
        "print([m for m in ('numpy', 'numba', 'geopandas', 'matplotlib') if m in sys.modules])"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert result.stdout.strip() == "[]"


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def tell(talk: Talk) -> None:
    with talk:
        talk.say("seed 1")
        for done in (1, 2, 3):
            talk.progress("bootstrap", done, 3)
        talk.progress("chains", 1, 10)
        talk.say("done")


def test_talk_has_bars_on_a_terminal_and_lines_elsewhere():
    terminal, file, nothing = Terminal(), io.StringIO(), Terminal()
    tell(Talk(stream=terminal))
    assert "\r" in terminal.getvalue()
    assert "bootstrap" in terminal.getvalue()
    assert "0/10" in terminal.getvalue()
    tell(Talk(stream=file))
    assert file.getvalue() == "seed 1\nbootstrap (3)\nchains (10)\ndone\n"
    tell(Talk(quiet=True, stream=nothing))
    assert nothing.getvalue() == ""
