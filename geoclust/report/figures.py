"""Figures that are no maps: curves, the surface of the fit, numbers of centres, zones."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, MaxNLocator
from scipy.interpolate import RectBivariateSpline

from geoclust.fitting.contrast import ContrastSurface, LevelSurface
from geoclust.fitting.pair_likelihoods import LikelihoodSurface
from geoclust.report import canvas
from geoclust.report.canvas import Floats

if TYPE_CHECKING:
    import geopandas as gpd
    from matplotlib.axes import Axes

    from geoclust.centres.result import CentreMap
    from geoclust.curves.envelopes import EnvelopeTest
    from geoclust.fitting.result import ClusterFit

_SIZE = (5.2, 3.6)
# contrast in units of its minimum up to which the valley is shaded: there fits are hardly told apart
VALLEY = 1.25
_LEVELS = (VALLEY, 2.0, 4.0, 8.0)


def curve_figure(test: EnvelopeTest, *, fit: ClusterFit | None = None) -> Figure:
    """L(r) − r or g(r) with its global envelope, and the curve of the fitted model if there is one.

    Parameters
    ----------
    test
        The survey's curve in its envelope; L, g or K.
    fit
        A fit whose model is drawn as well.
    """
    curve = test.curve
    r = curve.radii
    off = r if curve.function == "L" else np.zeros_like(r)
    with canvas.look():
        figure, ax = _axes()
        if curve.lower is not None and curve.upper is not None:
            # one-sided envelopes have no other limit: they run out of the picture
            span = _span(curve.values - off, curve.upper - off, curve.lower - off)
            low = np.where(np.isfinite(curve.lower), curve.lower - off, span[0])
            high = np.where(np.isfinite(curve.upper), curve.upper - off, span[1])
            ax.fill_between(r, low, high, color=canvas.BAND, lw=0, label=_band_label(test))
        ax.plot(r, curve.theory - off, color=canvas.INK, lw=0.9, ls=(0, (4, 3)), label="expected at random")
        if fit is not None:
            modelled = {"L": fit.model.l_function, "g": fit.model.pair_correlation, "K": fit.model.k_function}
            ax.plot(
                r,
                modelled[curve.function](r) - off,
                color=canvas.UNSURE,
                lw=2.2,
                ls=(0, (5, 1.2)),
                label="fitted clusters",
            )
        ax.plot(r, curve.values - off, color=canvas.CLUSTER, lw=1.6, label="survey")
        name = "L(r) − r (m)" if curve.function == "L" else f"{curve.function}(r)"
        ax.set_ylabel(f"{name} (m²)" if curve.function == "K" else name)
        ax.set_xlabel("distance r (m)")
        ax.set_xlim(0, r[-1])
        ax.set_ylim(*_span(curve.values - off, *([] if fit is None else [modelled[curve.function](r) - off]),
                           curve.theory - off, *_finite_limits(test, off)))  # fmt: skip
        ax.legend(loc="best", handlelength=1.6)
        return figure


def _band_label(test: EnvelopeTest) -> str:
    if test.curve.intensity is None:
        return "range of complete randomness"
    return "range of what covariates explain"


def surface_figure(fit: ClusterFit) -> Figure | None:
    """The surface of the fit over parent intensity and scale, or over two scales; None if it has none."""
    if isinstance(fit.surface, LevelSurface):
        return level_figure(fit)
    return likelihood_figure(fit) if isinstance(fit.surface, LikelihoodSurface) else contrast_figure(fit)


def contrast_figure(fit: ClusterFit) -> Figure | None:
    """The contrast over parent intensity and scale, its lowest place and the valley round it.

    None if the fit has no such surface.
    """
    surface = fit.surface
    if not isinstance(surface, ContrastSurface):
        return None
    cloud = _draws(fit, surface.scale_name) if fit.sample is not None else np.empty((0, 2))
    rho, scales, ratio = _ratio(surface, _shown(fit, cloud))
    top = min(max(float(np.nanmax(ratio)), 2.0), 32.0)
    with canvas.look():
        figure, ax = _axes()
        # dark is low: the valley is the deep part
        ax.contourf(rho, scales, np.minimum(ratio, top).T, levels=np.geomspace(1.0, top, 13),
                    cmap=canvas.RAMP_COLOURS.reversed(), extend="max", norm="log")  # fmt: skip
        lines = [level for level in _LEVELS if level < top]
        widths = [2.0 if level == VALLEY else 0.8 for level in lines]
        drawn = ax.contour(rho, scales, ratio.T, levels=lines, colors="white", linewidths=widths)
        ax.clabel(drawn, levels=lines[1:], fmt=lambda v: f"× {v:g}", fontsize=8)
        _finish_surface(ax, fit, surface, (rho, scales), cloud, "draws of the posterior")
        return figure


def likelihood_figure(fit: ClusterFit) -> Figure | None:
    """What is lost in log-likelihood over parent intensity and scale, with the bootstrap's estimates.

    The bold line is the loss that 95 % of these do not exceed. None if the fit has no such surface.
    """
    surface = fit.surface
    if not isinstance(surface, LikelihoodSurface):
        return None
    cloud = _draws(fit, surface.scale_name)
    bold = surface.level
    unit = bold if bold else 4.0
    rho, scales, above = _fine(surface, surface.loss, 2.0 * unit, _shown(fit, cloud))
    # equal steps of the root of the loss are equal steps on the ground round the estimate
    root = np.sqrt(np.maximum(above, 0.0))
    top = min(float(np.nanmax(root)), 6.0 * float(np.sqrt(unit)))
    with canvas.look():
        figure, ax = _axes()
        ax.contourf(rho, scales, np.minimum(root, top).T, levels=np.linspace(0.0, top, 13),
                    cmap=canvas.RAMP_COLOURS.reversed(), extend="max")  # fmt: skip
        thin = [float(f"{unit * k:.1g}") for k in (3.0, 9.0)]
        drawn = ax.contour(rho, scales, above.T, levels=thin, colors="white", linewidths=0.8)
        ax.clabel(drawn, fmt=lambda v: f"− {v:g}", fontsize=8)
        if bold:
            ax.contour(rho, scales, above.T, levels=[bold], colors="white", linewidths=2.0)
        _finish_surface(ax, fit, surface, (rho, scales), cloud, "estimates of the bootstrap")
        return figure


def level_figure(fit: ClusterFit) -> Figure | None:
    """The contrast over both scales of a nested process, with the best intensities for each pair.

    None if the fit has no such surface.
    """
    surface = fit.surface
    if not isinstance(surface, LevelSurface):
        return None
    best = (fit.parameters[surface.outer_name], fit.parameters[surface.inner_name])
    # the spline of the other surfaces would be torn where the outer scale is not the larger one
    ratio = np.ma.masked_invalid(surface.contrast / np.nanmin(surface.contrast))
    top = min(max(float(ratio.max()), 2.0), 32.0)
    with canvas.look():
        figure, ax = _axes()
        ax.contourf(surface.outer_scales, surface.inner_scales, np.ma.minimum(ratio, top).T,
                    levels=np.geomspace(1.0, top, 13), cmap=canvas.RAMP_COLOURS.reversed(), extend="max",
                    norm="log")  # fmt: skip
        lines = [level for level in _LEVELS if level < top]
        widths = [2.0 if level == VALLEY else 0.8 for level in lines]
        ax.contour(surface.outer_scales, surface.inner_scales, ratio.T, levels=lines, colors="white",
                   linewidths=widths)  # fmt: skip
        ax.plot(*best, "o", ms=8, mfc=canvas.UNSURE, mec="white", mew=1.4, label="estimate")
        low = (ratio < 16.0).filled(False)
        across, up = surface.outer_scales[low.any(axis=1)], surface.inner_scales[low.any(axis=0)]
        _logarithmic(ax, np.append(across, best[0]), np.append(up, best[1]))
        ax.set_xlabel(f"{surface.outer_name.replace('_', ' ')} (m)")
        ax.set_ylabel(f"{surface.inner_name.replace('_', ' ')} (m)")
        ax.legend(loc="upper left", frameon=True, framealpha=0.85, edgecolor="none", handletextpad=0.2)
        return figure


def _finish_surface(
    ax: Axes,
    fit: ClusterFit,
    surface: ContrastSurface | LikelihoodSurface,
    limits: tuple[Floats, Floats],
    cloud: Floats,
    label: str,
) -> None:
    """Draws, estimate, logarithmic axes and key of a surface."""
    if len(cloud):
        ax.plot(*cloud.T, ".", ms=3, mfc="white", mec=canvas.INK, mew=0.3, label=label)
    ax.plot(*_estimate(fit), "o", ms=8, mfc=canvas.UNSURE, mec="white", mew=1.4, label="estimate")
    _logarithmic(ax, *limits)
    ax.set_xlabel("cluster centres per hectare (ha⁻¹)")
    ax.set_ylabel(f"{surface.scale_name.replace('_', ' ')} (m)")
    ax.legend(loc="upper right", frameon=True, framealpha=0.85, edgecolor="none", handletextpad=0.2)


def _logarithmic(ax: Axes, across: Floats, up: Floats) -> None:
    """Logarithmic axes that span these values."""
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_xlim(across.min(), across.max())
    ax.set_ylim(up.min(), up.max())
    for axis in (ax.xaxis, ax.yaxis):
        axis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:g}"))
        axis.set_minor_formatter(FuncFormatter(_one_two_five))
        axis.set_tick_params(which="minor", labelsize=9)


def _estimate(fit: ClusterFit) -> Floats:
    """Centres per hectare and scale of the fit."""
    return np.array([fit.parameters["parent_intensity"] * 1e4, fit.model.scale])


def _shown(fit: ClusterFit, cloud: Floats) -> Floats:
    return np.vstack([_estimate(fit), cloud])


def number_figure(centres: CentreMap) -> Figure:
    """How often each number of centres inside the study area came up in the sample."""
    draws = np.asarray(centres.number_inside).ravel()
    mean, low, high = centres.interval_inside()
    width = max(1, int(np.ceil((draws.max() - draws.min() + 1) / 45)))
    edges = np.arange(draws.min(), draws.max() + width + 1, width) - 0.5
    shares, _ = np.histogram(draws, edges)
    middles = 0.5 * (edges[1:] + edges[:-1])
    inside = (middles >= low - width / 2) & (middles <= high + width / 2)
    with canvas.look():
        figure, ax = _axes()
        heights = 100 * shares / len(draws)
        ax.bar(middles[inside], heights[inside], 0.92 * width, color=canvas.CLUSTER, label="95 % interval")
        ax.bar(middles[~inside], heights[~inside], 0.92 * width, color=canvas.BAND, label="beyond it")
        ax.vlines(mean, 0, 1.06 * heights.max(), color=canvas.UNSURE, lw=2, label="mean")
        ax.set_xlabel("number of cluster centres inside the study area")
        ax.set_ylabel("share of the sample (%)")
        ax.xaxis.set_major_locator(MaxNLocator(integer=True, nbins=8, steps=[1, 2, 5, 10]))
        ax.set_ylim(0, 1.25 * heights.max())
        ax.legend(loc="upper left", ncols=3, handlelength=1.2, columnspacing=1.2)
        return figure


def zones_figure(zones: gpd.GeoDataFrame, names: list[str]) -> Figure:
    """Cluster centres per hectare in each zone, with 95 % intervals.

    Parameters
    ----------
    zones
        With the columns `centres_mean`, `centres_low`, `centres_high`, `area_ha`.
    names
        Name of each zone, row by row.
    """
    hectares = zones["area_ha"].to_numpy(dtype=float)
    with np.errstate(invalid="ignore", divide="ignore"):
        mean, low, high = (
            zones[f"centres_{k}"].to_numpy(dtype=float) / hectares for k in ("mean", "low", "high")
        )
    rows = np.arange(len(zones))[::-1]
    with canvas.look():
        figure, ax = _axes((5.2, 1.0 + 0.36 * max(len(zones), 2)))
        ax.hlines(rows, low, high, color=canvas.CLUSTER, lw=2.2)
        ax.plot(mean, rows, "o", ms=6.5, mfc=canvas.UNSURE, mec=canvas.INK, mew=0.8)
        ax.set_yticks(rows, [name if len(name) <= 28 else f"{name[:27]}…" for name in names])
        ax.set_ylim(-0.6, len(zones) - 0.4)
        ax.set_xlim(left=0)
        ax.set_xlabel("cluster centres per hectare (ha⁻¹)")
        ax.grid(axis="x", color=canvas.BAND, lw=0.7)
        ax.set_axisbelow(True)
        ax.spines["left"].set_visible(False)
        ax.tick_params(axis="y", length=0)
        return figure


def _axes(size: tuple[float, float] = _SIZE) -> tuple[Figure, Axes]:
    figure = Figure(figsize=size, layout="constrained", facecolor="white")
    return figure, figure.add_subplot()


def _finite_limits(test: EnvelopeTest, off: Floats) -> list[Floats]:
    limits = [test.curve.lower, test.curve.upper]
    return [v - off for v in limits if v is not None and np.isfinite(v).any()]


def _span(*curves: Floats) -> tuple[float, float]:
    """Lowest and highest value that the picture has to hold, with room for the key on top."""
    values = np.concatenate([c[np.isfinite(c)] for c in curves]) if curves else np.zeros(1)
    low, high = (float(values.min()), float(values.max())) if values.size else (0.0, 1.0)
    height = max(high - low, 1e-9 * max(abs(high), 1.0), 1e-12)
    return low - 0.05 * height, high + 0.12 * height


def _draws(fit: ClusterFit, scale_name: str, most: int = 400) -> Floats:
    """Up to `most` draws, (k, 2): centres per hectare and scale."""
    if not fit.draws:
        return np.empty((0, 2))
    both = np.column_stack([fit.draws["parent_intensity"] * 1e4, fit.draws[scale_name]])
    return both[:: max(1, int(np.ceil(len(both) / most)))]


def _ratio(surface: ContrastSurface, shown: Floats) -> tuple[Floats, Floats, Floats]:
    """Centres per hectare (a,), scale in metres (b,), contrast in units of the least (a, b)."""
    # a ratio is a difference of logarithms
    height = np.log(np.maximum(surface.contrast, 1e-300))
    rho, scales, above = _fine(surface, height, height.min() + np.log(4.0), shown)
    return rho, scales, np.exp(above)


def _fine(
    surface: ContrastSurface | LikelihoodSurface, height: Floats, valley: float, shown: Floats
) -> tuple[Floats, Floats, Floats]:
    """The part of the surface with its valley and all that is `shown`, interpolated.

    Parameters
    ----------
    surface
        Its axes.
    height
        (a, b) height at the nodes; the valley is what lies below `valley`.
    valley
        Height.
    shown
        (k, 2) centres per hectare and scale.

    Returns centres per hectare (a,), scale in metres (b,), height above the lowest (a, b).
    """
    x, y = np.log(surface.parent_intensities * 1e4), np.log(surface.scales)
    low = height <= max(valley, float(height.min()))
    inside = [np.asarray(np.any(low, axis=k)) for k in (1, 0)]
    smooth = RectBivariateSpline(x, y, height)
    across, up = (np.linspace(*_window(v, inside[k], np.log(shown[:, k])), 181) for k, v in enumerate((x, y)))
    fine = smooth(across, up)
    # between the nodes a spline may dip below its lowest node: that is the least then
    least = min(float(fine.min()), float(height.min()))
    return np.exp(across), np.exp(up), fine - least


def _window(values: Floats, low: np.ndarray, also: Floats) -> tuple[float, float]:
    """The part of an axis where the contrast is low or something is shown, with some room on either side."""
    inside = np.concatenate([values[low], also])
    wide = max(float(inside.max() - inside.min()), 1.0)
    return max(float(values[0]), inside.min() - 0.4 * wide), min(float(values[-1]), inside.max() + 0.4 * wide)


def _one_two_five(value: float, _: int) -> str:
    """Labels of the minor ticks of a logarithmic axis: only those that begin with 2 or 5."""
    lead = value / 10.0 ** np.floor(np.log10(value) + 1e-9)
    return f"{value:g}" if min(abs(lead - 2), abs(lead - 5)) < 1e-6 else ""
