"""Minimum contrast: the model whose curve is nearest to the survey's.

Diggle & Gratton (1984), Journal of the Royal Statistical Society B 46:
193-227: minimise the integral of |T̂(r)^q - T(r; theta)^q|² over a range of r.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
from scipy.optimize import least_squares

from geoclust.errors import not_allowed
from geoclust.models.base import ClusterModel

Floats = npt.NDArray[np.float64]

FUNCTIONS = ("g", "K")
# variance-stabilising powers: Diggle 1983 for K; for g the square root, by the same reasoning
EXPONENTS = {"K": 0.25, "g": 0.5}
# nodes of the contrast surface in parent intensity and scale
SURFACE = (61, 61)
# valleys of the surface that are searched, the deepest first
STARTS = 6
# smallest scale searched, as a part of the bandwidth of g
NARROWEST = 50.0
# nodes of the integral over the kernel of g, crowded towards its lower end
SMOOTHING_NODES = 40


@dataclass(frozen=True, eq=False)
class ContrastSurface:
    """The contrast over parent intensity and scale: a flat valley in it means the data cannot tell.

    Attributes
    ----------
    parent_intensities
        (a,) per square metre, equal steps of the logarithm.
    scales
        (b,) metres, equal steps of the logarithm.
    scale_name
        Name of the scale parameter, such as ``sigma``.
    contrast
        (a, b) contrast at each pair, in units of its minimum over the surface.
    """

    parent_intensities: Floats
    scales: Floats
    scale_name: str
    contrast: Floats


@dataclass(frozen=True, eq=False)
class ContrastFit:
    """Result of one minimisation.

    Attributes
    ----------
    model
        The fitted model.
    value
        The contrast at the minimum.
    bounds
        Lower and upper bound of each searched parameter.
    on_bound
        Names of parameters that ended on a bound.
    surface
        Contrast surface in absolute units.
    """

    model: ClusterModel
    value: float
    bounds: dict[str, tuple[float, float]]
    on_bound: tuple[str, ...]
    surface: ContrastSurface


@dataclass(frozen=True, eq=False)
class Contrast:
    """What is compared: a curve, the power, the weight of each radius.

    Attributes
    ----------
    function
        ``g`` or ``K``.
    radii
        (k,) metres, increasing.
    values
        (k,) the survey's curve; not a number where it is not known.
    exponent
        Power of the curve.
    bandwidth
        Half width of the kernel that g was estimated with, metres. The model's g
        is smoothed with the same kernel before the two are compared: clusters
        narrower than the kernel are blurred by it in the survey's curve as well.
    """

    function: str
    radii: Floats
    values: Floats
    exponent: float
    bandwidth: float | None = None

    @cached_property
    def _target(self) -> Floats:
        known = np.where(np.isfinite(self.values), self.values, 0.0)
        return np.asarray(np.maximum(known, 0.0) ** self.exponent)

    @cached_property
    def _root_weights(self) -> Floats:
        """Square root of the trapezoid weights, none where the curve is not known."""
        steps = np.gradient(self.radii)
        steps[[0, -1]] *= 0.5
        return np.where(np.isfinite(self.values), np.sqrt(steps), 0.0)

    def residuals(self, curve: Floats) -> Floats:
        """(..., k) weighted differences of powers between a model's curve and the survey's."""
        return np.asarray(self._root_weights * (np.maximum(curve, 0.0) ** self.exponent - self._target))

    def curve_of(self, model: ClusterModel) -> Floats:
        """The model's curve at the radii, as the survey's is expected to come out."""
        base, excess = self.excess_of(model)
        return np.asarray(base + excess / model.parent_intensity)

    def excess_of(self, model: ClusterModel) -> tuple[Floats, Floats]:
        """Curve of randomness and the model's excess over it, to be divided by the parent intensity."""
        if self.function == "K":
            return np.pi * self.radii**2, model.sibling_distribution(self.radii)
        if self.bandwidth is None:
            return np.ones_like(self.radii), model.sibling_density(self.radii)
        distances, weights = self._kernel
        return np.ones_like(self.radii), np.sum(model.sibling_density(distances) * weights, axis=1)

    @cached_property
    def _kernel(self) -> tuple[Floats, Floats]:
        """(k, nodes) distances and weights of the Epanechnikov kernel over its part above zero.

        With every pair divided by its own distance, the expected estimate of g is
        g smoothed by just this kernel.
        """
        assert self.bandwidth is not None
        node, weight = np.polynomial.legendre.leggauss(SMOOTHING_NODES)
        t = 0.5 * (1.0 + node)
        low = np.maximum(self.radii - self.bandwidth, 0.0)[:, None]
        width = (self.radii + self.bandwidth)[:, None] - low
        # squares crowd the nodes at the lower end, where the density of siblings is steepest
        distances = low + width * t**2
        z = (distances - self.radii[:, None]) / self.bandwidth
        weights = weight * t * width * np.maximum(1.0 - z * z, 0.0)
        return distances, weights / weights.sum(axis=1, keepdims=True)


def fit_contrast(
    kind: type[ClusterModel],
    contrast: Contrast,
    intensity: float,
    area: float,
) -> ContrastFit:
    """Fit a model with one scale parameter by minimum contrast.

    The surface over parent intensity and scale is computed first; every local
    minimum of it, at most six, is the start of a least-squares search in
    logarithms.

    Parameters
    ----------
    kind
        A model class with parameters parent intensity, one scale in metres, mean offspring.
    contrast
        The survey's curve with range and power.
    intensity
        Points per square metre; mean offspring follows from it.
    area
        Area of the study area, m², which bounds the parent intensity.
    """
    scale_name = kind.scale_name
    # from a tenth of a centre in the study area to ten centres a point
    # clusters much narrower than the kernel of g, or than the first radius of K, all look the same
    narrowest = contrast.radii[0] / 4.0 if contrast.bandwidth is None else contrast.bandwidth / NARROWEST
    low = np.log([0.1 / area, narrowest])
    high = np.log([10.0 * intensity, 2.0 * contrast.radii[-1]])

    def model_at(theta: Floats) -> ClusterModel:
        rho, scale = np.exp(theta)
        return kind.of(rho, scale, intensity / rho)

    def residuals(theta: Floats) -> Floats:
        return contrast.residuals(contrast.curve_of(model_at(theta)))

    rhos = np.linspace(low[0], high[0], SURFACE[0])
    scales = np.linspace(low[1], high[1], SURFACE[1])
    grid = np.empty(SURFACE)
    for b, scale in enumerate(scales):
        base, excess = contrast.excess_of(model_at(np.array([rhos[0], scale])))
        grid[:, b] = np.sum(contrast.residuals(base + excess / np.exp(rhos)[:, None]) ** 2, axis=1)

    best: tuple[float, Floats] | None = None
    for a, b in _valleys(grid)[:STARTS]:
        found = least_squares(
            residuals, np.array([rhos[a], scales[b]]), bounds=(low, high), xtol=1e-10, ftol=1e-12
        )
        if best is None or 2 * found.cost < best[0]:
            best = (2 * float(found.cost), found.x)
    assert best is not None
    value, theta = best
    names = ("parent_intensity", scale_name)
    near = 1e-3
    on_bound = tuple(n for n, t, lo, hi in zip(names, theta, low, high, strict=True)
                     if t - lo < near or hi - t < near)  # fmt: skip
    bounds = {n: (float(np.exp(lo)), float(np.exp(hi))) for n, lo, hi in zip(names, low, high, strict=True)}
    surface = ContrastSurface(np.exp(rhos), np.exp(scales), scale_name, grid)
    return ContrastFit(model_at(theta), value, bounds, on_bound, surface)


def _valleys(grid: Floats) -> list[tuple[int, int]]:
    """Places of a surface that are lowest within two nodes, the deepest first.

    One node would be too near: in a slanting ravine every few nodes look like a minimum.
    """
    padded = np.pad(grid, 2, constant_values=np.inf)
    least = np.ones(grid.shape, dtype=bool)
    rows, columns = grid.shape
    for i in range(5):
        for j in range(5):
            least &= grid <= padded[i : i + rows, j : j + columns]
    found = np.argwhere(least)
    order = np.argsort(grid[least])
    return [(int(a), int(b)) for a, b in found[order]]


def checked_function(function: str) -> str:
    """Return the name of the curve to fit on, or say which are legal."""
    if function not in FUNCTIONS:
        raise not_allowed("function", FUNCTIONS, function)
    return function
