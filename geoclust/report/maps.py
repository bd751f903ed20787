"""Maps: the survey, where the centres are, which points belong together."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyproj
import shapely
from matplotlib.colors import to_rgb
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import PathPatch, Rectangle
from matplotlib.path import Path as Outline
from matplotlib.ticker import FuncFormatter, MaxNLocator

from geoclust.layers.styles import quantile_breaks
from geoclust.report import canvas
from geoclust.report.canvas import Floats

if TYPE_CHECKING:
    import geopandas as gpd
    from matplotlib.artist import Artist
    from matplotlib.axes import Axes

    from geoclust.area.survey import Survey
    from geoclust.centres.result import CentreMap

# inches
WIDE = 6.7
NARROW = 5.0
_MARGINS = {"left": 0.6, "right": 0.1, "top": 0.1, "bottom": 0.48}
_STRIP = 0.62
_KEY_STRIP = 0.55
_TALLEST_SHAPE = 1.05
# membership probability from which a point is drawn as surely in its cluster, as in the style of the layer
SURE = 0.8


@dataclass(frozen=True)
class _Sheet:
    """A sheet with a map on it and strips below for scale, key and colour ramp."""

    figure: Figure
    map: Axes
    metres_per_inch: float
    strip: Axes
    ramp: Axes | None


def survey_map(
    survey: Survey,
    *,
    zones: gpd.GeoDataFrame | None = None,
    unsurveyed: gpd.GeoDataFrame | None = None,
    width: float = WIDE,
) -> Figure:
    """Map of the study area with its holes and the mapped points.

    Parameters
    ----------
    survey
        Points and study area, metres.
    zones, unsurveyed
        Polygons to draw with it, in the CRS of the survey.
    width
        Inches.
    """
    with canvas.look():
        sheet = _sheet(survey, width=width, also=[unsurveyed])
        keys = _ground(sheet, survey, zones, unsurveyed)
        keys.insert(0, _draw_points(sheet, survey.xy, facecolor=canvas.CLUSTER, edgecolor="white",
                                    label="mapped points"))  # fmt: skip
        _finish(sheet, keys)
        return sheet.figure


def centre_map(centres: CentreMap, survey: Survey) -> Figure:
    """Map of the expected cluster centres per hectare with the mapped points on it."""
    breaks = quantile_breaks(centres.mean)
    with canvas.look():
        sheet = _sheet(survey, ramp=True)
        _draw_raster(sheet, centres, survey, canvas.ramp_places(centres.mean, breaks))
        keys = [
            _draw_points(sheet, survey.xy, facecolor=canvas.INK, edgecolor="white", label="mapped points")
        ]
        keys += _ground(sheet, survey, centres.zones, None, fill=None)
        labels = [_ramp_label(value) for value in breaks]
        labels = [text if text != before else "" for before, text in zip(["", *labels], labels, strict=False)]
        _draw_ramp(sheet, np.linspace(0.0, 1.0, len(breaks)), labels, "expected cluster centres per hectare")
        _finish(sheet, keys)
        return sheet.figure


def probability_map(centres: CentreMap, survey: Survey, *, width: float = WIDE) -> Figure:
    """Map of the probability that a cell holds at least one cluster centre."""
    across, down = centres.grid.cell
    top = float(np.nanmax(centres.probability)) if np.isfinite(centres.probability).any() else 0.0
    ceiling = next(c for c in (0.05, 0.1, 0.2, 0.5, 1.0) if top <= c)
    with canvas.look():
        sheet = _sheet(survey, width=width, ramp=True)
        _draw_raster(sheet, centres, survey, centres.probability / ceiling)
        keys = _ground(sheet, survey, centres.zones, None, fill=None)
        ticks = np.linspace(0.0, 1.0, 6)
        size = f"{across:.3g}" if across == down else f"{across:.3g} by {down:.3g}"
        unit = "m cells" if centres.grid.crs.is_projected else "cells of the template"
        _draw_ramp(
            sheet, ticks, [f"{t * ceiling:.2g}" for t in ticks],
            f"probability of at least one centre ({size} {unit})",
        )  # fmt: skip
        _finish(sheet, keys)
        return sheet.figure


def clusters_map(centres: CentreMap, survey: Survey) -> Figure:
    """Map of the delineated clusters, their centres, and which points belong to one."""
    member = centres.points["cluster"].to_numpy() > 0
    sure = centres.points["membership_probability"].to_numpy(dtype=float, na_value=0.0) >= SURE
    clusters = centres.clusters
    at = clusters[["centre_e_m", "centre_n_m"]].to_numpy(dtype=float)
    with canvas.look():
        sheet = _sheet(survey, beyond=at)
        dense = len(clusters) > canvas.DENSE_POINTS // 10
        keys = _ground(sheet, survey, None, None)
        face = (*to_rgb(canvas.CLUSTER), 0.25)
        for outline in clusters.geometry:
            if outline is not None and not outline.is_empty:
                patch = PathPatch(_path(shapely.get_parts(outline)), fc=face, ec=canvas.CLUSTER, lw=0.7)
                patch.set_rasterized(dense)
                sheet.map.add_patch(patch)
        keys.append(
            Rectangle((0, 0), 1, 1, facecolor=face, edgecolor=canvas.CLUSTER, lw=0.7, label="cluster")
        )
        groups = [
            (~member, "none", canvas.BACKGROUND, "in no cluster"),
            (member & ~sure, canvas.UNSURE, canvas.INK, "perhaps in a cluster"),
            (member & sure, canvas.CLUSTER, canvas.INK, f"in a cluster (probability {SURE:g} or more)"),
        ]
        for chosen, fill, edge_colour, label in groups:
            keys.append(
                _draw_points(
                    sheet, survey.xy[chosen], facecolor=fill, edgecolor=edge_colour, label=label, of=survey.n
                )
            )
        cross: dict[str, Any] = {
            "marker": "+",
            "color": "black",
            "linestyle": "none",
            "markersize": 4,
            "markeredgewidth": 0.7,
        }
        (drawn,) = sheet.map.plot(
            at[:, 0], at[:, 1], label="cluster centre", zorder=3, rasterized=dense, **cross
        )
        _finish(sheet, [*keys, drawn])
        return sheet.figure


def _sheet(
    survey: Survey,
    *,
    width: float = WIDE,
    ramp: bool = False,
    also: list[gpd.GeoDataFrame | None] | None = None,
    beyond: Floats | None = None,
) -> _Sheet:
    """Lay out a sheet whose map has the shape of what it shows."""
    boxes = [survey.area.bounds]
    boxes += [tuple(frame.total_bounds) for frame in also or [] if frame is not None and len(frame)]
    if beyond is not None and len(beyond):
        boxes.append((*beyond.min(axis=0), *beyond.max(axis=0)))
    west, south = (min(b[k] for b in boxes) for k in (0, 1))
    east, north = (max(b[k] for b in boxes) for k in (2, 3))
    pad = 0.02 * max(east - west, north - south)
    west, south, east, north = west - pad, south - pad, east + pad, north + pad

    room = width - _MARGINS["left"] - _MARGINS["right"]
    shape = (north - south) / (east - west)
    wide = room * min(1.0, _TALLEST_SHAPE / shape)
    high = wide * shape
    low = _STRIP + (_KEY_STRIP if ramp else 0.0) + _MARGINS["bottom"]
    full = low + high + _MARGINS["top"]
    figure = Figure(figsize=(width, full), facecolor="white")
    left = _MARGINS["left"] + 0.5 * (room - wide)
    box = figure.add_axes((left / width, low / full, wide / width, high / full))
    box.set_xlim(west, east)
    box.set_ylim(south, north)
    box.set_aspect("equal", adjustable="box")
    _metric_axes(box, max(east - west, north - south))
    margin = _MARGINS["left"]
    across = room / width
    strip = figure.add_axes((margin / width, 0.0, across, _STRIP / full))
    strip.set_axis_off()
    strip.set_xlim(0, room)
    strip.set_ylim(0, _STRIP)
    key = None
    if ramp:
        key = figure.add_axes((margin / width, (_STRIP + 0.24) / full, across, 0.13 / full))
    return _Sheet(figure, box, (east - west) / wide, strip, key)


def _metric_axes(ax: Axes, extent: float) -> None:
    """Eastings and northings along the edges, in kilometres where metres would be too long."""
    kilometres = extent >= 2000
    divisor, unit = (1000.0, "km") if kilometres else (1.0, "m")
    for axis in (ax.xaxis, ax.yaxis):
        axis.set_major_locator(MaxNLocator(nbins=5, steps=[1, 2, 5, 10]))
        axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value / divisor:,.10g}"))
    ax.tick_params(axis="y", labelrotation=90)
    for label in ax.get_yticklabels():
        label.set_verticalalignment("center")
    ax.set_xlabel(f"easting ({unit})", labelpad=2)
    ax.set_ylabel(f"northing ({unit})", labelpad=2)
    ax.tick_params(direction="out", length=3, labelsize=9)
    for side in ax.spines.values():
        side.set_visible(True)
        side.set_linewidth(0.6)
        side.set_color(canvas.BACKGROUND)


def _ground(
    sheet: _Sheet,
    survey: Survey,
    zones: gpd.GeoDataFrame | None,
    unsurveyed: gpd.GeoDataFrame | None,
    fill: str | None = canvas.PAPER,
) -> list[Artist]:
    """Study area, zones and parts not walked; returns what the key says about them."""
    polygon = survey.area.polygon
    path = _path(shapely.get_parts(polygon))
    dense = len(np.asarray(path.vertices)) > canvas.DENSE_VERTICES
    if fill is not None:
        sheet.map.add_patch(PathPatch(path, facecolor=fill, lw=0, zorder=0.5, rasterized=dense))
    edge = PathPatch(path, fill=False, edgecolor=canvas.INK, lw=1.1, zorder=1.6, rasterized=dense)
    sheet.map.add_patch(edge)
    keys: list[Artist] = [Line2D([], [], color=canvas.INK, lw=1.1, label="study area")]
    if unsurveyed is not None and len(unsurveyed):
        style: dict[str, Any] = {
            "facecolor": "none",
            "edgecolor": canvas.BACKGROUND,
            "hatch": "////",
            "lw": 0.8,
        }
        for shape in unsurveyed.geometry:
            sheet.map.add_patch(PathPatch(_path(shapely.get_parts(shape)), zorder=0.8, **style))
        keys.append(Rectangle((0, 0), 1, 1, label="not walked", **style))
    if zones is not None and len(zones):
        # edges that two zones share are drawn once, or their dashes would fill each other's gaps
        lines = shapely.line_merge(shapely.union_all(shapely.boundary(zones.geometry.to_numpy())))
        for line in shapely.get_parts(lines):
            at = shapely.get_coordinates(line)
            sheet.map.plot(at[:, 0], at[:, 1], color=canvas.INK, lw=0.8, ls=(0, (5, 3)), zorder=1.5)
        keys.append(Line2D([], [], color=canvas.INK, lw=0.8, ls=(0, (5, 3)), label="zone"))
    return keys


def _draw_points(
    sheet: _Sheet, xy: Floats, *, facecolor: str, edgecolor: str, label: str, of: int | None = None
) -> Artist:
    """Points sized so that they stay apart where they can; returns the entry of the key."""
    width = float(sheet.figure.get_size_inches()[0])
    size = width / WIDE * float(np.clip(75.0 / np.sqrt(max(of or len(xy), 1)), 1.4, 5.0))
    look: dict[str, Any] = {
        "marker": "o",
        "linestyle": "none",
        "markerfacecolor": facecolor,
        "markeredgecolor": edgecolor,
    }
    edge_width = min(0.6, 0.18 * size)
    dense = len(xy) > canvas.DENSE_POINTS
    sheet.map.plot(xy[:, 0], xy[:, 1], markersize=size, markeredgewidth=edge_width, zorder=2.5,
                   rasterized=dense, **look)  # fmt: skip
    return Line2D([], [], markersize=max(size, 4.0), markeredgewidth=edge_width, label=label, **look)


def _draw_raster(sheet: _Sheet, centres: CentreMap, survey: Survey, places: Floats) -> None:
    """Cells of a raster, coloured by their place along the ramp."""
    west, south, east, north = centres.grid.bounds
    limits = sheet.map.get_xlim(), sheet.map.get_ylim()
    here = survey.area.crs
    if here is not None and not here.equals(centres.grid.crs, ignore_axis_order=True):
        (west, east), (south, north) = limits
        places = _seen_from(here, limits, centres, places)
    sheet.map.imshow(
        np.ma.masked_invalid(places), extent=(west, east, south, north), origin="upper",
        cmap=canvas.RAMP_COLOURS, vmin=0.0, vmax=1.0, interpolation="nearest", zorder=1.0, aspect="equal",
    )  # fmt: skip
    sheet.map.set_xlim(limits[0])
    sheet.map.set_ylim(limits[1])


def _seen_from(
    here: pyproj.CRS,
    limits: tuple[tuple[float, float], tuple[float, float]],
    centres: CentreMap,
    places: Floats,
) -> Floats:
    """Values of a raster in another CRS at the pixels of the map."""
    (west, east), (south, north) = limits
    step = (east - west) / 800
    x = np.arange(west + step / 2, east, step)
    y = np.arange(north - step / 2, south, -step)
    there = pyproj.Transformer.from_crs(here, centres.grid.crs, always_xy=True)
    moved = np.column_stack(there.transform(*(v.ravel() for v in np.meshgrid(x, y))))
    row, column, held = centres.grid.cells_of(np.where(np.isfinite(moved), moved, np.inf))
    return np.where(held, places[row, column], np.nan).reshape(len(y), len(x))


def _draw_ramp(sheet: _Sheet, places: Floats, labels: list[str], title: str) -> None:
    """The colour ramp with its values below the map."""
    ax = sheet.ramp
    if ax is None:
        return
    ax.imshow(np.linspace(0, 1, 256)[None, :], cmap=canvas.RAMP_COLOURS, extent=(0, 1, 0, 1), aspect="auto")
    ax.set_yticks([])
    ax.set_xticks(places if len(labels) > 1 else [1.0], labels)
    if len(labels) > 1:
        # the outermost labels stay on the sheet
        ax.get_xticklabels()[0].set_horizontalalignment("left")
        ax.get_xticklabels()[-1].set_horizontalalignment("right")
    ax.tick_params(axis="x", length=2.5, labelsize=9, pad=1.5)
    ax.set_title(title, fontsize=9.5, loc="left", pad=3)
    for side in ax.spines.values():
        side.set_visible(True)
        side.set_linewidth(0.5)


def _ramp_label(value: float) -> str:
    return "< 0.001" if 0 < value < 0.001 else f"{value:.2g}" if value < 100 else f"{value:,.0f}"


def _finish(sheet: _Sheet, keys: list[Artist]) -> None:
    """Scale bar, north arrow and key into the strip below the map."""
    across = sheet.strip.get_xlim()[1]
    length = nice_length(sheet.metres_per_inch * min(0.24 * across, 1.5))
    inches = length / sheet.metres_per_inch
    left, base, bar = 0.02, 0.3, 0.07
    for k, fill in enumerate((canvas.INK, "white")):
        half = Rectangle((left + k * inches / 2, base), inches / 2, bar, fc=fill, ec=canvas.INK, lw=0.7)
        sheet.strip.add_patch(half)
    for part, text in (
        (0.0, "0"),
        (0.5, _distance(length / 2, length)),
        (1.0, _distance(length, length, True)),
    ):
        sheet.strip.text(
            left + part * inches, base - 0.05, text, ha="center" if part else "left", va="top", fontsize=9
        )
    arrow = left + inches + 0.42
    sheet.strip.annotate("", xy=(arrow, 0.52), xytext=(arrow, 0.12),
                         arrowprops={"arrowstyle": "-|>", "color": canvas.INK, "lw": 1.2})  # fmt: skip
    sheet.strip.text(arrow + 0.08, 0.26, "N", ha="left", va="center", fontsize=10, fontweight="bold")
    sheet.strip.legend(
        handles=keys, loc="center right", bbox_to_anchor=(1.0, 0.5), ncols=1 if len(keys) < 3 else 2,
        handletextpad=0.5, columnspacing=1.2, borderaxespad=0.0, fontsize=9,
    )  # fmt: skip


def nice_length(metres: float) -> float:
    """The round length, 1, 2 or 5 times a power of ten, that is nearest below.

    Examples
    --------
    >>> nice_length(420.0), nice_length(1900.0), nice_length(0.6)
    (200.0, 1000.0, 0.5)
    """
    power = 10.0 ** np.floor(np.log10(metres))
    return float(max(step * power for step in (1, 2, 5) if step * power <= metres * (1 + 1e-9)))


def _distance(metres: float, longest: float, unit: bool = False) -> str:
    kilometres = longest >= 1000
    value = f"{metres / 1000:g}" if kilometres else f"{metres:g}"
    return value + (" km" if kilometres else " m") * unit


def _path(polygons: np.ndarray | list[shapely.Polygon]) -> Outline:
    """Outlines of polygons as one path; holes run the other way, so they stay empty."""
    vertices, codes = [], []
    for polygon in polygons:
        if polygon.geom_type != "Polygon" or polygon.is_empty:
            continue
        turned = shapely.geometry.polygon.orient(polygon)
        for ring in (turned.exterior, *turned.interiors):
            at = shapely.get_coordinates(ring)
            vertices.append(at)
            codes.append([Outline.MOVETO, *[Outline.LINETO] * (len(at) - 2), Outline.CLOSEPOLY])
    if not vertices:
        return Outline(np.empty((0, 2)))
    return Outline(np.concatenate(vertices), np.concatenate(codes))
