"""Search for the least contrast: several starts, parent intensities profiled out where they can be."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.interpolate import CubicSpline
from scipy.optimize import least_squares

from geoclust.fitting.contrast import (
    NARROWEST,
    STARTS,
    SURFACE,
    Contrast,
    ContrastFit,
    ContrastSurface,
    LevelSurface,
    _valleys,
)
from geoclust.models.base import ClusterModel, Parameter
from geoclust.models.nested_thomas import NestedThomas
from geoclust.models.thomas import Thomas

Floats = npt.NDArray[np.float64]

# values of a further parameter, such as a shape, that the surface is lowest over
FORMS = 7
# nodes of each scale of a nested process
LEVELS = 31
# valleys that are searched where there are more than two parameters
LEVEL_STARTS = 3
# steps of a search by interpolated curves, and the relative drop of the contrast that ends it
MOST_STEPS = 80
SMALL_DROP = 1e-7
# step of the logarithm in the table of curves by scale: the cubic between is off by some 1e-4 of the peak
TABLE_STEP = 0.15
# the outer sigma is at least this many times the inner one
LEAST_RATIO = 1.01
# steps of Gauss and Newton for the intensities, where the power bends the curve
STEPS = 6
# a parameter so near to its limit, in logarithms, is on it
NEAR = 1e-3


def fit_contrast(kind: type[ClusterModel], contrast: Contrast, intensity: float, area: float) -> ContrastFit:
    """Fit a model by minimum contrast.

    A surface is computed first; every local minimum of it, at most six, is the start
    of a least-squares search in logarithms. For a model of one level the
    surface is that over parent intensity and scale (the lowest over a further
    parameter, if there is one); where the curve enters the contrast
    linearly in 1/rho, the search leaves rho out, as the best one for given other
    parameters is known in closed form. For two levels it is that over both
    scales, with the best intensities for each pair.

    Parameters
    ----------
    kind
        A model class.
    contrast
        The survey's curve with range and power.
    intensity
        Points per square metre; mean offspring follows from it.
    area
        Area of the study area, m², which bounds the intensities of centres.
    """
    limits = Limits.of(contrast, intensity, area)
    if issubclass(kind, NestedThomas):
        return _fit_two_levels(contrast, intensity, limits)
    return _fit_one_level(kind, contrast, intensity, limits)


@dataclass(frozen=True)
class Limits:
    """Lower and upper limits of the search: intensities of centres per m², scales in metres."""

    intensity: tuple[float, float]
    scale: tuple[float, float]

    @classmethod
    def of(cls, contrast: Contrast, intensity: float, area: float) -> Limits:
        """From a tenth of a centre in the study area to ten centres a point, and twice the range.

        Clusters much narrower than the kernel of g, or than the first radius of K, all look the same.
        """
        if contrast.bandwidth is None:
            # radii that crowd at short distances see no smaller clusters than even ones
            narrowest = max(contrast.radii[0] / 4.0, contrast.radii[-1] / 512.0)
        else:
            narrowest = contrast.bandwidth / NARROWEST
        return cls((0.1 / area, 10.0 * intensity), (float(narrowest), 2.0 * float(contrast.radii[-1])))

    @property
    def reciprocals(self) -> tuple[float, float]:
        """Limits of one over an intensity."""
        return 1.0 / self.intensity[1], 1.0 / self.intensity[0]


def _fit_one_level(
    kind: type[ClusterModel], contrast: Contrast, intensity: float, limits: Limits
) -> ContrastFit:
    described = {p.name: p for p in kind.described if p.name != "mean_offspring"}
    names = list(described)
    further = [n for n in names if n not in (kind.intensity_names[0], kind.scale_name)]
    bounds = {n: _bounds_of(described[n], limits) for n in names}
    above = np.array([described[n].above for n in names])
    low, high = (np.log(np.array([bounds[n][k] for n in names]) - above) for k in (0, 1))

    def model_at(theta: Floats) -> ClusterModel:
        values = dict(zip(names, np.exp(theta) + above, strict=True))
        return kind.with_intensity(values, intensity)

    rhos = np.linspace(low[0], high[0], SURFACE[0])
    at = names.index(kind.scale_name)
    scales = np.linspace(low[at], high[at], SURFACE[1])
    # parameters beyond intensity and scale on a grid of their own: the surface is the lowest over it
    forms = _grid([np.linspace(low[k], high[k], FORMS) for k in range(len(names)) if names[k] in further])
    grid = np.full(SURFACE, np.inf)
    best_form = np.zeros(SURFACE, dtype=int)

    def theta_of(rho: float, scale: float, form: Floats) -> Floats:
        theta = np.empty(len(names))
        theta[0], theta[at] = rho, scale
        theta[[names.index(n) for n in further]] = form
        return theta

    # with many forms a third of the scales is enough, and a cubic between them
    nodes = scales[:: 3 if further else 1]
    for f, form in enumerate(forms):
        curves = np.array([contrast.excess_of(model_at(theta_of(rhos[0], s, form))) for s in nodes])
        curves = CubicSpline(nodes, curves)(scales) if further else curves
        for b, excess in enumerate(curves):
            values = np.sum(
                contrast.residuals_of(contrast.base + excess / np.exp(rhos)[:, None]) ** 2, axis=1
            )
            better = values < grid[:, b]
            grid[better, b], best_form[better, b] = values[better], f
    valleys = _valleys(grid)[: LEVEL_STARTS if further else STARTS]
    starts = [theta_of(rhos[a], scales[b], forms[best_form[a, b]]) for a, b in valleys]
    if contrast.power == 1.0:
        theta = _search_without_intensity(contrast, model_at, starts, (low, high), limits)
    else:

        def residuals(theta: Floats) -> Floats:
            return contrast.residuals_of(contrast.linear_of(model_at(theta)))

        theta = _lowest(residuals, starts, (low, high))
    model = model_at(theta)
    on_bound = tuple(n for n, t, lo, hi in zip(names, theta, low, high, strict=True)
                     if t - lo < NEAR or hi - t < NEAR)  # fmt: skip
    surface = ContrastSurface(np.exp(rhos), np.exp(scales), kind.scale_name, grid)
    return ContrastFit(model, contrast.value_of(model), bounds, on_bound, surface)


def _bounds_of(parameter: Parameter, limits: Limits) -> tuple[float, float]:
    if parameter.search is not None:
        return parameter.search
    return limits.intensity if parameter.per_area else limits.scale


def _grid(axes: list[Floats]) -> Floats:
    """(m, d) all combinations of the values on the axes; a single empty one without axes."""
    if not axes:
        return np.empty((1, 0))
    return np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, len(axes))


def _lowest(
    residuals: Callable[[Floats], Floats], starts: list[Floats], bounds: tuple[Floats, Floats]
) -> Floats:
    """Where the lowest of several least-squares searches ended."""
    found = [least_squares(residuals, s, bounds=bounds, xtol=1e-10, ftol=1e-12) for s in starts]
    return np.asarray(min(found, key=lambda f: float(f.cost)).x)


def _search_without_intensity(
    contrast: Contrast,
    model_at: Callable[[Floats], ClusterModel],
    starts: list[Floats],
    bounds: tuple[Floats, Floats],
    limits: Limits,
) -> Floats:
    """The best parameters where rho is known in closed form given the others; rho comes first."""

    def whole(rest: Floats) -> Floats:
        excess = contrast.excess_of(model_at(np.concatenate([[bounds[1][0]], rest])))
        reciprocal, _ = best_reciprocals(contrast, excess[None, None, :], limits)
        return np.concatenate([-np.log(reciprocal[0]), rest])

    def residuals(rest: Floats) -> Floats:
        return contrast.residuals_of(contrast.linear_of(model_at(whole(rest))))

    low, high = bounds
    return whole(_lowest(residuals, [s[1:] for s in starts], (low[1:], high[1:])))


def best_reciprocals(contrast: Contrast, curves: Floats, limits: Limits) -> tuple[Floats, Floats]:
    """One over the intensity of each level that makes the contrast least, given the curves of the levels.

    The curve is linear in them; its power is not, so the weighted linear problem is
    solved a few times over (Gauss & Newton), within the limits. With power 1 once is enough.

    Parameters
    ----------
    contrast
        What is compared.
    curves
        (m, levels, k) excess of each level, to be multiplied by what is sought; one or two levels.
    limits
        Of the search.

    Returns
    -------
    reciprocals : ndarray, (m, levels)
    values : ndarray, (m,)
        The contrast there.
    """
    power, weights = contrast.power, contrast.root_weights
    constant = np.pi**-power if contrast.function == "L" else 1.0
    seen = (contrast.target / constant) ** (1.0 / power)

    def slope(linear: Floats) -> Floats:
        return constant * power * weights * linear ** (power - 1.0)

    # where the curve is far below randomness a weight by its own value would be without bound
    about = slope(np.maximum(seen, 0.3 * contrast.base))
    wanted = np.broadcast_to(about * (seen - contrast.base), curves[:, 0].shape)
    found = _within(about * curves, wanted, limits)
    for _ in range(0 if power == 1.0 else STEPS):
        linear = contrast.base + np.einsum("ml,mlk->mk", found, curves)
        steep = slope(linear)[:, None, :] * curves
        wanted = np.einsum("ml,mlk->mk", found, steep) - contrast.residuals_of(linear)
        found = _within(steep, wanted, limits)
    linear = contrast.base + np.einsum("ml,mlk->mk", found, curves)
    return found, np.sum(contrast.residuals_of(linear) ** 2, axis=1)


def _within(columns: Floats, wanted: Floats, limits: Limits) -> Floats:
    """(m, levels) solution of m linear least-squares problems with one or two unknowns in a box."""
    low, high = limits.reciprocals
    b = np.einsum("mlk,mk->ml", columns, wanted)
    if columns.shape[1] == 1:
        return np.clip(b / np.maximum(np.einsum("mlk,mlk->ml", columns, columns), 1e-300), low, high)
    g = np.einsum("mik,mjk->mij", columns, columns)
    across, one, two = g[:, 0, 1], np.maximum(g[:, 0, 0], 1e-300), np.maximum(g[:, 1, 1], 1e-300)
    det = one * two - across**2
    free = np.stack([two * b[:, 0] - across * b[:, 1], one * b[:, 1] - across * b[:, 0]], axis=1)
    candidates = [np.clip(free / np.maximum(det, 1e-12 * one * two)[:, None], low, high)]
    # the least of a convex function in a box lies inside or on one of the four sides
    for edge in (low, high):
        side = np.full(len(b), edge)
        candidates.append(np.stack([side, np.clip((b[:, 1] - across * edge) / two, low, high)], axis=1))
        candidates.append(np.stack([np.clip((b[:, 0] - across * edge) / one, low, high), side], axis=1))
    every = np.stack(candidates)
    values = np.einsum("cmi,mij,cmj->cm", every, g, every) - 2.0 * np.einsum("cmi,mi->cm", every, b)
    return np.asarray(every[np.argmin(values, axis=0), np.arange(len(b))])


class CurvesByScale:
    """The excess of a Thomas process at any scale, interpolated: (m,) logarithms of scales -> (m, k)."""

    def __init__(self, contrast: Contrast, limits: Limits) -> None:
        low, high = np.log(limits.scale[0]), np.log(limits.scale[1] * np.sqrt(2.0))
        nodes = np.linspace(low, high, int(np.ceil((high - low) / TABLE_STEP)) + 1)
        curves = np.array([contrast.excess_of(Thomas(1.0, s, 1.0)) for s in np.exp(nodes)])
        self._spline = CubicSpline(nodes, curves)

    def __call__(self, logs: Floats | float, derivative: int = 0) -> Floats:
        return np.asarray(self._spline(logs, derivative))


@dataclass(frozen=True, eq=False)
class TwoLevels:
    """The best nested process for a contrast, by interpolated curves.

    Attributes
    ----------
    value
        The contrast.
    theta
        (4,) logarithms of outer and inner intensity, of the inner sigma, and of the outer sigma over it.
    bounds
        (4,) and (4,) limits of them.
    surface
        Contrast over both sigmas.
    """

    value: float
    theta: Floats
    bounds: tuple[Floats, Floats]
    surface: LevelSurface


@dataclass(frozen=True)
class OneLevel:
    """The best Thomas process for a contrast: its value, parent intensity and scale."""

    value: float
    parent_intensity: float
    scale: float


def best_single_level(contrast: Contrast, limits: Limits, curves: CurvesByScale) -> OneLevel:
    """The Thomas process of least contrast, quickly: the parent intensity profiled out at every scale."""
    logs = np.linspace(np.log(limits.scale[0]), np.log(limits.scale[1]), SURFACE[1])
    reciprocals, profile = best_reciprocals(contrast, curves(logs)[:, None, :], limits)
    low, high = (np.log([limits.intensity[k], limits.scale[k]]) for k in (0, 1))

    def parts(theta: Floats) -> tuple[Floats, Floats]:
        reciprocal = np.exp(-theta[0])
        excess, grown = (curves(theta[1], d) * reciprocal for d in (0, 1))
        return contrast.base + excess, np.stack([-excess, grown])

    starts = [
        np.array([-np.log(reciprocals[a, 0]), logs[a]]) for a, _ in _valleys(profile[:, None])[:LEVEL_STARTS]
    ]
    value, theta = min((_descend(contrast, parts, s, (low, high)) for s in starts), key=lambda f: f[0])
    return OneLevel(value, float(np.exp(theta[0])), float(np.exp(theta[1])))


def _descend(
    contrast: Contrast,
    parts: Callable[[Floats], tuple[Floats, Floats]],
    start: Floats,
    bounds: tuple[Floats, Floats],
) -> tuple[float, Floats]:
    """Levenberg–Marquardt steps within bounds; `parts` gives the curve (k,) and its derivatives (p, k)."""
    low, high = bounds
    constant = contrast.power * (np.pi**-contrast.power if contrast.function == "L" else 1.0)
    theta = np.clip(start, low, high)
    linear, grown = parts(theta)
    residuals = contrast.residuals_of(linear)
    value, damping = float(residuals @ residuals), 1e-3
    for _ in range(MOST_STEPS):
        slope = constant * contrast.root_weights * np.maximum(linear, 1e-300) ** (contrast.power - 1.0)
        columns = grown * slope
        gradient = columns @ residuals
        # what a limit holds back stays there
        free = ~(((theta <= low) & (gradient > 0)) | ((theta >= high) & (gradient < 0)))
        if not free.any():
            break
        normal = columns[free] @ columns[free].T
        normal[np.diag_indices_from(normal)] *= 1.0 + damping
        normal[np.diag_indices_from(normal)] += 1e-12 * max(float(np.trace(normal)), 1e-300)
        step = np.zeros_like(theta)
        step[free] = -np.linalg.solve(normal, gradient[free])
        tried = np.clip(theta + np.clip(step, -1.0, 1.0), low, high)
        there, slopes = parts(tried)
        residuals_there = contrast.residuals_of(there)
        better = float(residuals_there @ residuals_there)
        if better >= value:
            damping *= 4.0
            if damping > 1e6:
                break
            continue
        done = value - better < SMALL_DROP * value
        theta, linear, grown, residuals, value = tried, there, slopes, residuals_there, better
        damping = max(0.2 * damping, 1e-9)
        if done:
            break
    return value, theta


def _fit_two_levels(contrast: Contrast, intensity: float, limits: Limits) -> ContrastFit:
    curves = CurvesByScale(contrast, limits)
    found = search_two_levels(contrast, limits, curves)
    low, high = found.bounds

    def model_at(theta: Floats) -> NestedThomas:
        rho_outer, rho_inner, scale, ratio = (float(v) for v in np.exp(theta))
        # the ratio is searched, but it is the outer scale that has a limit
        outer = max(min(scale * ratio, limits.scale[1]), scale * LEAST_RATIO)
        return NestedThomas(rho_outer, outer, rho_inner, scale, intensity / rho_inner)

    def residuals(theta: Floats) -> Floats:
        return contrast.residuals_of(contrast.linear_of(model_at(theta)))

    # the last digits without the table
    theta = least_squares(residuals, found.theta, bounds=(low, high), xtol=1e-10, ftol=1e-12).x
    names = ("outer_intensity", "inner_intensity", "inner_sigma", "outer_sigma")
    most = np.minimum(high, [*high[:3], np.log(limits.scale[1]) - theta[2]])
    on_bound = tuple(n for n, t, lo, hi in zip(names, theta, low, most, strict=True)
                     if t - lo < NEAR or hi - t < NEAR)  # fmt: skip
    bounds = {n: limits.intensity if n.endswith("intensity") else limits.scale for n in names}
    model = model_at(theta)
    return ContrastFit(model, contrast.value_of(model), bounds, on_bound, found.surface)


def search_two_levels(contrast: Contrast, limits: Limits, curves: CurvesByScale) -> TwoLevels:
    """The nested process of least contrast: the surface over both sigmas, then down from its valleys."""
    logs = np.linspace(np.log(limits.scale[0]), np.log(limits.scale[1]), LEVELS)
    outer, inner = (index.ravel() for index in np.indices((LEVELS, LEVELS)))
    apart = outer > inner
    outer, inner = outer[apart], inner[apart]
    # outer centres are seen through both scatters
    whole = 0.5 * np.logaddexp(2.0 * logs[outer], 2.0 * logs[inner])
    pairs = np.stack([curves(whole), curves(logs)[inner]], axis=1)
    reciprocals, profile = best_reciprocals(contrast, pairs, limits)
    grid = np.full((LEVELS, LEVELS), np.inf)
    grid[outer, inner] = profile
    row = np.zeros((LEVELS, LEVELS), dtype=int)
    row[outer, inner] = np.arange(len(profile))
    starts = [
        np.array([*-np.log(reciprocals[row[a, b]]), logs[b], logs[a] - logs[b]])
        for a, b in _valleys(grid)
        if np.isfinite(grid[a, b])
    ]
    widest = np.log(limits.scale[1] / limits.scale[0])
    rhos = np.log(limits.intensity)
    low = np.array([rhos[0], rhos[0], np.log(limits.scale[0]), np.log(LEAST_RATIO)])
    high = np.array([rhos[1], rhos[1], np.log(limits.scale[1]), widest])

    def parts(theta: Floats) -> tuple[Floats, Floats]:
        logs = np.array([theta[2] + 0.5 * np.log1p(np.exp(2.0 * theta[3])), theta[2]])
        share = 1.0 / (1.0 + np.exp(-2.0 * theta[3]))
        reciprocals = np.exp(-theta[:2])[:, None]
        excess, grown = (curves(logs, d) * reciprocals for d in (0, 1))
        derivatives = np.stack([-excess[0], -excess[1], grown.sum(axis=0), share * grown[0]])
        return contrast.base + excess.sum(axis=0), derivatives

    value, theta = min(
        (_descend(contrast, parts, s, (low, high)) for s in starts[:LEVEL_STARTS]), key=lambda f: f[0]
    )
    scales = np.exp(logs)
    surface = LevelSurface(scales, scales, "outer_sigma", "inner_sigma", grid)
    return TwoLevels(value, theta, (low, high), surface)
