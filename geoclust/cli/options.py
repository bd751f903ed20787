"""Every option of every command, declared once.

A command names the options it takes; type, unit, default and help are the same
wherever an option turns up.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeVar

import click

Command = TypeVar("Command", bound=Callable[..., Any])


@dataclass(frozen=True)
class Option:
    """One option.

    Attributes
    ----------
    flag
        As it is typed.
    what
        What it does, with its unit, in one line.
    default
        Its value if it is left out.
    otherwise
        What happens if it is left out, where there is no such value.
    kind
        Type of the value, None for a switch.
    metavar
        Stands for the value in the help.
    many
        Whether it may be given more than once.
    """

    flag: str
    what: str
    default: Any = None
    otherwise: str | None = None
    kind: Any = None
    metavar: str | None = None
    many: bool = False

    @property
    def name(self) -> str:
        """Name of the argument that a command receives."""
        return self.flag.removeprefix("--").replace("-", "_")

    def decorate(self, command: Command) -> Command:
        """Give the option to a command."""
        if self.kind is None:
            return click.option(self.flag, is_flag=True, help=self.what)(command)
        return click.option(
            self.flag,
            type=self.kind,
            default=self.default,
            multiple=self.many,
            metavar=self.metavar,
            help=self.what,
            # a text stands in the help for what is chosen later
            show_default=self.otherwise if self.otherwise is not None else True,
        )(command)


_POSITIVE = click.FloatRange(min=0, min_open=True)


class _Bandwidth(click.ParamType):
    """A positive number of metres, or the word for choosing one by cross-validation."""

    name = "bandwidth"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float | str:
        if value == CROSS_VALIDATION:
            return CROSS_VALIDATION
        try:
            return _POSITIVE.convert(value, param, ctx)
        except click.BadParameter:
            self.fail(f"{value!r} is neither a positive number of metres nor {CROSS_VALIDATION}.", param, ctx)


CROSS_VALIDATION = "cross-validation"
_PATH = click.Path(path_type=Path)

_DECLARED = (
    # reading the layers
    Option("--points-layer", "Layer of POINTS that holds the mapped points.", kind=str, metavar="NAME",
           otherwise="the only point layer of the file"),
    Option("--area-layer", "Layer of AREA that holds the study area.", kind=str, metavar="NAME",
           otherwise="the only polygon layer of the file"),
    Option("--crs", "Coordinate reference system of a table, or of a layer that has none, such as "
                    "EPSG:25832; "
           "'local' for plot coordinates in metres.", kind=str, metavar="CRS", otherwise="as the layers say"),
    Option("--x-column", "Column of a table that holds the easting or longitude.", kind=str, metavar="NAME",
           otherwise="none; needed for a table"),
    Option("--y-column", "Column of a table that holds the northing or latitude.", kind=str, metavar="NAME",
           otherwise="none; needed for a table"),
    Option("--metric-crs", "Metric coordinate reference system to measure in.", kind=str, metavar="CRS",
           otherwise="the best one for the study area"),
    Option("--repair", "Repair invalid polygons even if that moves more than 0.1 % of the area."),
    # further layers
    Option("--zones", "Polygons to give numbers for: a file, or the name of a layer in AREA.", kind=str,
           metavar="LAYER", otherwise="none"),
    Option("--zones-layer", "Layer of the file given by --zones.", kind=str, metavar="NAME",
           otherwise="its only polygon layer"),
    Option("--unsurveyed", "Polygons that nobody walked, to predict for: a file, or the name of a layer in "
                           "AREA.",
           kind=str, metavar="LAYER", otherwise="none"),
    Option("--unsurveyed-layer", "Layer of the file given by --unsurveyed.", kind=str, metavar="NAME",
           otherwise="its only polygon layer"),
    Option("--covariate", "Raster that may explain where points are, such as elevation; each band is one. "
                          "May be repeated. Clusters are then those beyond it.",
           kind=_PATH, metavar="RASTER", many=True, default=(), otherwise="none"),
    Option("--plot-column", "Column of both layers that names the plot of each feature: plots are "
                            "replicates, pooled with common parameters.",
           kind=str, metavar="NAME", otherwise="one survey"),
    Option("--group-column", "Column of the study area that names the group of each plot: every group is "
                             "fitted by itself, and they are compared.",
           kind=str, metavar="NAME", otherwise="no groups"),
    # the maps
    Option("--like", "Template raster: the maps follow its grid. Not together with --cell.", kind=_PATH,
           metavar="RASTER", otherwise="none"),
    Option("--cell", "Side of a map cell in metres.", kind=_POSITIVE, metavar="METRES",
           otherwise="a round number near half the spread of a cluster"),
    # curves and fit
    Option("--model", "Cluster model; a wrong name lists the models there are.", default="thomas", kind=str,
           metavar="NAME"),
    Option("--simulations", "Random patterns for the envelopes, at least 39.", default=999,
           kind=click.IntRange(min=39), metavar="COUNT"),
    Option("--method", "Way of fitting: posterior, or a quick look by minimum-contrast, palm or "
           "composite-likelihood.",
           kind=str, metavar="NAME",
           otherwise="posterior; minimum-contrast for nested-thomas and variance-gamma"),
    Option("--background", "Points may belong to no cluster (posterior only)."),
    Option("--chains", "Chains of the sampler, at least 2.", default=4, kind=click.IntRange(min=2),
           metavar="COUNT"),
    Option("--function", "Curve to fit the model on.", default="g", kind=click.Choice(["g", "K", "L"])),
    Option("--r-min", "Smallest distance to use, metres.", kind=click.FloatRange(min=0), metavar="METRES",
           otherwise="half the bandwidth for g, 0 for K and L"),
    Option("--r-max", "Largest distance to use, metres.", kind=_POSITIVE, metavar="METRES",
           otherwise="curves: a quarter of the side of a square of equal area; fit: from a first fit"),
    Option("--exponent", "Power of the curve in the contrast, no unit.", kind=_POSITIVE, metavar="NUMBER",
           otherwise="0.5 for g, 0.25 for K, 1 for L"),
    Option("--distance-weight", "Each squared difference of the contrast counts its distance to this power.",
           default=0.0, kind=float, metavar="NUMBER"),
    Option("--level-simulations", "Patterns simulated to tell whether the second level of nested-thomas "
                                  "earns its place: 0 to leave that open, or at least 39.",
           default=99, kind=click.IntRange(min=0), metavar="COUNT"),
    Option("--bandwidth", "Half width of the kernel of g in metres, or the word cross-validation "
                          "(Guan 2007).", kind=_Bandwidth(), metavar="METRES",
           otherwise="0.15 mean spacings"),
    Option("--bootstrap", "Patterns simulated for the 95 % intervals: 0 for no intervals, or at least 39.",
           default=199, kind=click.IntRange(min=0), metavar="COUNT"),
    Option("--assess", "Test whether the fitted model reproduces the distances to the next point, on which "
                       "it was not fitted."),
    Option("--against", "Model to compare with by how well held-out ground is predicted, beside complete "
                        "randomness. May be repeated.", kind=str, metavar="NAME", many=True, default=(),
           otherwise="no comparison"),
    Option("--fit", "Fit to take over, written by `geoclust fit --out` or `geoclust analyse` "
                    "(fit.json).", kind=_PATH,
           metavar="FILE", otherwise="a fit is made now"),
    # simulated patterns
    Option("--count", "Number of patterns.", default=39, kind=click.IntRange(min=1), metavar="COUNT"),
    Option("--random", "Simulate complete randomness with the intensity of the survey instead of clusters."),
    Option("--parameter", "Value of a parameter of --model instead of a fit, once for each: "
                          "intensities per hectare, "
           "lengths in metres, mean_offspring in points per cluster.",
           kind=str, metavar="NAME=VALUE", many=True,
           default=(), otherwise="from a fit"),
    # running
    Option("--seed", "Seed of all random numbers: the same seed gives the same results.",
           kind=click.IntRange(min=0), metavar="NUMBER", otherwise="drawn, and told"),
    Option("--workers", "Threads to use; results do not depend on it.", kind=click.IntRange(min=1),
           metavar="COUNT", otherwise="one a core"),
    Option("--quiet", "No talk and no progress on stderr; errors are still told."),
    Option("--overwrite", "Replace earlier results of geoclust in that place."),
    # what comes out
    Option("--json", "Print JSON instead of text."),
)  # fmt: skip

OPTIONS: dict[str, Option] = {option.name: option for option in _DECLARED}

# where a message names an argument of a function, the person typed an option
_AS_ARGUMENT = re.compile(
    r"(?<![\w/.'-])(?:("
    + "|".join(name for name in OPTIONS if "_" in name)
    + r")|(?<=with )(repair)\b|(?<=pass )(overwrite|repair)|(?<=leave )(crs)(?= out)"
    + r"|^("
    + "|".join(name for name in OPTIONS if "_" not in name)
    + r")(?= (?:must be|is for)))(?![\w/'-]|\.\w)"
)


def as_typed(message: str) -> str:
    """A message with the options that it names as they are typed.

    Examples
    --------
    >>> as_typed("cell must be a positive number of metres; got -1.0")
    '--cell must be a positive number of metres; got -1.0'
    >>> as_typed("state the column with x_column (easting), or pass overwrite")
    'state the column with --x-column (easting), or pass --overwrite'
    >>> as_typed("there is no file area_layer.gpkg")
    'there is no file area_layer.gpkg'
    """
    return _AS_ARGUMENT.sub(lambda match: "--" + match[0].replace("_", "-"), message)


READING = ("points_layer", "area_layer", "crs", "x_column", "y_column", "metric_crs", "repair")
PLACES = ("zones", "zones_layer", "unsurveyed", "unsurveyed_layer")
RUNNING = ("workers", "quiet")


def takes(*names: str) -> Callable[[Command], Command]:
    """Give options to a command, shown in its help in this order.

    Examples
    --------
    >>> @takes("seed", "quiet")
    ... def command(seed, quiet):
    ...     pass
    """

    def decorate(command: Command) -> Command:
        for name in reversed(names):
            command = OPTIONS[name].decorate(command)
        return command

    return decorate


def survey_arguments(command: Command) -> Command:
    """The two layers that every command starts from."""
    command = click.argument("area", type=_PATH, metavar="AREA")(command)
    return click.argument("points", type=_PATH, metavar="POINTS")(command)


def out_option(what: str, *, required: bool = False, folder: bool = False) -> Callable[[Command], Command]:
    """Where results go: each command says what it writes."""
    return click.option(
        "--out",
        type=_PATH,
        required=required,
        metavar="DIR" if folder else "FILE",
        help=what,
        show_default=None if required else "stdout",
    )
