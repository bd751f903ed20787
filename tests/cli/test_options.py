"""Every option is declared once, told with unit and default, and answered in one line if it is wrong."""

from __future__ import annotations

import doctest
import inspect
import re

import click
import pytest
from click.testing import CliRunner

from geoclust.cli import options, places
from geoclust.cli.entry import cli, run
from geoclust.errors import UsageError
from geoclust.fitting.fit import fit_clusters
from geoclust.workflow import analyse

COMMANDS = ("audit", "describe", "fit", "locate", "simulate", "analyse")


def help_of(command: str) -> str:
    """Help of a command, each option in one line."""
    result = CliRunner().invoke(cli, [command, "--help"], terminal_width=100)
    assert result.exit_code == 0
    return re.sub(r"\s+", " ", result.output)


def test_commands_are_those_of_the_design():
    assert tuple(cli.commands) == COMMANDS


@pytest.mark.parametrize("command", COMMANDS)
def test_help_tells_every_option_with_its_default(command):
    text = help_of(command)
    assert "POINTS AREA" in text
    for parameter in cli.commands[command].params:
        if not isinstance(parameter, click.Option):
            continue
        flag = parameter.opts[0]
        assert f" {flag} " in text
        assert parameter.help
        assert parameter.help.endswith(".")
        record = parameter.get_help_record(click.Context(cli.commands[command]))
        assert record is not None
        if not parameter.is_flag:
            assert "[default: " in record[1] or "[required]" in record[1], flag
            assert parameter.metavar or isinstance(parameter.type, click.Choice), flag


@pytest.mark.parametrize("option", options.OPTIONS.values(), ids=lambda option: option.flag)
def test_options_are_used_and_tell_their_unit(option):
    users = [name for name in COMMANDS if option.name in {p.name for p in cli.commands[name].params}]
    assert users
    if isinstance(option.kind, click.FloatRange):
        assert re.search(r"metres|no unit", option.what)
    if isinstance(option.kind, click.IntRange):
        assert option.metavar in ("COUNT", "NUMBER")


def test_shared_options_are_the_same_everywhere():
    for name in COMMANDS:
        for parameter in cli.commands[name].params:
            declared = options.OPTIONS.get(str(parameter.name))
            if declared is not None and isinstance(parameter, click.Option):
                assert parameter.help == declared.what
                assert parameter.opts == [declared.flag]


def test_defaults_are_those_of_the_functions():
    for command, function in (("analyse", analyse), ("fit", fit_clusters)):
        known = inspect.signature(function).parameters
        for parameter in cli.commands[command].params:
            if parameter.name in known and known[parameter.name].default is not inspect.Parameter.empty:
                given = parameter.get_default(click.Context(cli.commands[command]))
                if not isinstance(given, str | int | float):  # left out
                    given = None
                expected = known[parameter.name].default
                assert given == expected or (given is None and not expected), parameter.name


def test_every_argument_of_analyse_has_its_option():
    known = set(inspect.signature(analyse).parameters) - {"progress", "command"}
    # an option that may be repeated is named in the singular
    known = {name if name != "covariates" else "covariate" for name in known}
    assert known <= {p.name for p in cli.commands["analyse"].params}


def test_examples():
    for module in (options, places):
        failed, tried = doctest.testmod(module)
        assert failed == 0
        assert tried > 0


def test_zones_are_a_file_or_a_layer_of_the_area(tmp_path):
    area = tmp_path / "survey.gpkg"
    there = tmp_path / "zones"
    there.mkdir()
    find = places.file_and_layer
    assert find(None, None, area, "--zones") == (None, None)
    assert find("wards", None, area, "--zones") == (area, "wards")
    # what exists is a file, whatever it looks like
    assert find(str(there), None, area, "--zones") == (there, None)
    assert find(str(there), "wards", area, "--zones") == (there, "wards")
    # what looks like a file is meant as one, so that a mistyped name is answered as such
    assert find("zons.gpkg", None, area, "--zones")[1] is None
    for value, layer in ((None, "wards"), ("wards", "others")):
        with pytest.raises(UsageError) as error:
            find(value, layer, area, "--zones")
        assert "--zones-layer" in str(error.value)


@pytest.mark.parametrize(
    ("arguments", "expected"),
    [
        (["analyse", "a.gpkg"], "AREA"),
        (["analyse", "a.gpkg", "b.gpkg"], "--out"),
        (["analyse", "a.gpkg", "b.gpkg", "--out", "x", "--cell", "-1"], "--cell"),
        (["analyse", "a.gpkg", "b.gpkg", "--out", "x", "--cell", "1", "--like", "y.tif"], "template raster"),
        (["analyse", "a.gpkg", "b.gpkg", "--out", "x", "--simulations", "3"], "--simulations"),
        (["analyse", "a.gpkg", "b.gpkg", "--out", "x", "--model", "tomas"], "thomas"),
        (["analyse", "a.gpkg", "b.gpkg", "--out", "x", "--zones-layer", "z"], "--zones"),
        (["fit", "a.gpkg", "b.gpkg", "--speed", "9"], "--speed"),
        (["fit", "a.gpkg", "b.gpkg", "--function", "F"], "'L'"),
        (
            ["fit", "a.gpkg", "b.gpkg", "--model", "nested-thomas", "--method", "posterior"],
            "nested-thomas is fitted by minimum-contrast",
        ),
        (
            ["locate", "a.gpkg", "b.gpkg", "--out", "x", "--model", "variance-gamma"],
            "Centres can be located for the models thomas",
        ),
        (
            ["analyse", "a.gpkg", "b.gpkg", "--out", "x", "--model", "nested-thomas", "--zones", "z.gpkg"],
            "leave them out",
        ),
        (
            ["simulate", "a.gpkg", "b.gpkg", "--out", "x.gpkg", "--model", "variance-gamma"]
            + [
                w
                for v in ("parent_intensity=1", "scale=9", "shape=-0.5", "mean_offspring=4")
                for w in ("--parameter", v)
            ],
            "shape must be a finite number above -0.5",
        ),
        (
            ["simulate", "a.gpkg", "b.gpkg", "--out", "x.gpkg", "--random", "--parameter", "sigma=1"],
            "--random",
        ),
        (["simulate", "a.gpkg", "b.gpkg", "--out", "x.gpkg", "--parameter", "sigma"], "NAME=VALUE"),
        (["simulate", "a.gpkg", "b.gpkg", "--out", "x.gpkg", "--parameter", "sigma=wide"], "NAME=VALUE"),
        (["simulate", "a.gpkg", "b.gpkg", "--out", "x.gpkg", "--parameter", "width=1"], "width"),
        (["simulate", "a.gpkg", "b.gpkg", "--out", "x.gpkg", "--parameter", "sigma=1"], "parent_intensity"),
        (["cluster", "a.gpkg"], "cluster"),
    ],
)
def test_wrong_usage_is_one_line_and_status_2(arguments, expected, capsys, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert run(arguments) == 2
    captured = capsys.readouterr()
    assert captured.out == ""
    assert captured.err.startswith("geoclust: ")
    assert captured.err.count("\n") == 1
    assert expected in captured.err
    assert list(tmp_path.iterdir()) == []


def test_no_command_shows_the_help_and_is_wrong_usage(capsys):
    assert run([]) == 2
    captured = capsys.readouterr()
    assert captured.out == ""
    assert "analyse" in captured.err


def test_version(capsys):
    from geoclust.version import __version__

    assert run(["--version"]) == 0
    assert capsys.readouterr().out == f"geoclust {__version__}\n"


def test_messages_name_options_as_they_are_typed():
    assert options.as_typed("out holds files already; pass overwrite.").endswith("pass --overwrite.")
    assert options.as_typed("read with x_column and y_column") == "read with --x-column and --y-column"
    # names of files, layers and columns stay as they are
    for text in ("no layer 'points_layer': choose", "crs.gpkg is missing", "data/area_layer.shp is bad",
                 "the model needs cell walls"):  # fmt: skip
        assert options.as_typed(text) == text
