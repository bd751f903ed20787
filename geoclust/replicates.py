"""Layers that hold several plots: read plot by plot, with the group that each belongs to."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Unpack

from geoclust.area.plots import pool_surveys
from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import InputError
from geoclust.layers.sources import read_layer
from geoclust.layers.survey_layers import PathLike, Reading, plot_names, read_survey_layers


@dataclass(frozen=True, eq=False)
class Plots:
    """Surveys of several plots.

    Attributes
    ----------
    surveys
        By name of the plot, in the order of the study area layer.
    group_of
        Name of the group of each plot; empty without groups.
    strays
        Points whose plot has no study area; they are left out.
    """

    surveys: dict[str, Survey]
    group_of: dict[str, str]
    strays: int

    def pooled(self) -> Survey:
        """All plots side by side, as one survey."""
        return pool_surveys(list(self.surveys.values()), names=list(self.surveys))

    def groups(self) -> dict[str, list[Survey]]:
        """Surveys by name of the group."""
        out: dict[str, list[Survey]] = {}
        for name, survey in self.surveys.items():
            out.setdefault(self.group_of[name], []).append(survey)
        return out

    def lines(self) -> list[str]:
        """What was read, in a few lines of text."""
        n = sum(survey.n for survey in self.surveys.values())
        hectares = sum(survey.area.area for survey in self.surveys.values()) / 1e4
        out = [f"{len(self.surveys)} plots, {n:,} points in {hectares:,.4g} ha"]
        empty = [name for name, survey in self.surveys.items() if survey.n == 0]
        if empty:
            out.append(f"without any point: {', '.join(empty)}")
        outside = sum(s.audit.points_outside for s in self.surveys.values() if s.audit is not None)
        if outside:
            out.append(f"{outside:,} points lie outside the study area of their plot and were left out")
        if self.strays:
            out.append(f"{self.strays:,} points belong to plots that have no study area and were left out")
        return out


def read_plots(
    points: PathLike,
    area: PathLike,
    *,
    plot_column: str,
    group_column: str | None = None,
    **reading: Unpack[Reading],
) -> Plots:
    """Read plots from two layers with a column that names the plot of each point and polygon.

    Every polygon of the study area layer belongs to a plot, and every plot there counts, with points
    or without: that nothing was found in it is news.

    Parameters
    ----------
    points, area, reading
        As for `geoclust.workflow.read_survey`.
    plot_column
        Column of both layers.
    group_column
        Column of the study area layer that names the group of each plot.

    Raises
    ------
    InputError, UsageError
        One sentence on what was given, what is wrong and what to do.
    """
    crs = reading.get("crs")
    areas = read_layer(area, "polygons", layer=reading.get("area_layer"), layer_option="area_layer", crs=crs)
    given = read_layer(
        points, "points", layer=reading.get("points_layer"), layer_option="points_layer", crs=crs,
        x_column=reading.get("x_column"), y_column=reading.get("y_column"),
    )  # fmt: skip
    of_area, of_points = plot_names(areas, plot_column), plot_names(given, plot_column)
    names = list(dict.fromkeys(of_area))
    group_of: dict[str, str] = {}
    if group_column is not None:
        for name, group in zip(of_area, plot_names(areas, group_column), strict=True):
            if group_of.setdefault(name, group) != group:
                raise InputError(
                    f"plot {name} belongs to the groups {group_of[name]} and {group} in the column "
                    f"{group_column}; a plot has one group"
                )
    surveys = {}
    for name in names:
        found = read_survey_layers(points, area, plot=(plot_column, name), **reading)
        surveys[name] = Survey(
            found.xy, StudyArea(found.polygon, found.crs), attributes=found.attributes, audit=found.audit
        )
    if not any(survey.n for survey in surveys.values()):
        raise InputError(
            f"no point lies in the study area of its plot; check the column {plot_column} of both layers"
        )
    return Plots(surveys, group_of, int((~of_points.isin(names)).sum()))
