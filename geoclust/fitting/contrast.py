"""Minimum contrast: the model whose curve is nearest to the survey's.

Diggle & Gratton (1984), Journal of the Royal Statistical Society B 46:
193-227: minimise the integral of w(r) |T̂(r)^q - T(r; theta)^q|² over a range of r.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import numpy.typing as npt

from geoclust.errors import not_allowed
from geoclust.models.base import ClusterModel, sum_of_levels

Floats = npt.NDArray[np.float64]

FUNCTIONS = ("g", "K", "L")
# variance-stabilising powers: Diggle 1983 for K; for g the square root, by the same reasoning; L has
# about the same variance at all distances as it is (Besag 1977)
EXPONENTS = {"K": 0.25, "g": 0.5, "L": 1.0}
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
class LevelSurface:
    """The contrast over the two scales of a nested process, both intensities the best for each pair.

    Attributes
    ----------
    outer_scales, inner_scales
        (a,), (b,) metres, equal steps of the logarithm.
    outer_name, inner_name
        Names of the parameters, such as ``outer_sigma``.
    contrast
        (a, b) contrast at each pair; infinite where the outer scale is not the larger one.
    """

    outer_scales: Floats
    inner_scales: Floats
    outer_name: str
    inner_name: str
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
    surface: ContrastSurface | LevelSurface


@dataclass(frozen=True, eq=False)
class Contrast:
    """What is compared: a curve, the power, the weight of each radius.

    Attributes
    ----------
    function
        ``g``, ``K`` or ``L``.
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
    distance_weight
        Each squared difference counts its distance to this power; 0 for all alike.
    """

    function: str
    radii: Floats
    values: Floats
    exponent: float
    bandwidth: float | None = None
    distance_weight: float = 0.0

    def up_to(self, r_max: float) -> Contrast:
        """The same contrast over the shorter range."""
        kept = self.radii <= r_max
        return replace(self, radii=self.radii[kept], values=self.values[kept])

    @property
    def power(self) -> float:
        """Power of the curve that is linear in one over the parent intensity: of g or K."""
        return self.exponent / 2.0 if self.function == "L" else self.exponent

    @cached_property
    def target(self) -> Floats:
        """(k,) the survey's curve to the power, nothing where it is not known."""
        known = np.where(np.isfinite(self.values), self.values, 0.0)
        return np.asarray(np.maximum(known, 0.0) ** self.exponent)

    @cached_property
    def root_weights(self) -> Floats:
        """(k,) square root of the weights of the trapezoid rule, none where the curve is not known."""
        steps = np.gradient(self.radii)
        steps[[0, -1]] *= 0.5
        weights = steps * self.radii**self.distance_weight
        return np.where(np.isfinite(self.values), np.sqrt(weights), 0.0)

    @cached_property
    def base(self) -> Floats:
        """(k,) g or K of randomness."""
        return np.ones_like(self.radii) if self.function == "g" else np.pi * self.radii**2

    def raised(self, linear: Floats) -> Floats:
        """(..., k) the curve to its power, of g or K."""
        positive = np.maximum(linear, 0.0)
        if self.function == "L":
            positive = positive / np.pi
        return np.asarray(np.sqrt(positive) if self.power == 0.5 else positive**self.power)

    def residuals_of(self, linear: Floats) -> Floats:
        """(..., k) weighted differences of powers between a model's g or K and the survey's curve."""
        return np.asarray(self.root_weights * (self.raised(linear) - self.target))

    def residuals(self, curve: Floats) -> Floats:
        """The same of a curve as it is fitted: g, K or L."""
        return np.asarray(self.root_weights * (np.maximum(curve, 0.0) ** self.exponent - self.target))

    def value_of(self, model: ClusterModel) -> float:
        """The contrast of a model."""
        return float(np.sum(self.residuals_of(self.linear_of(model)) ** 2))

    def curve_of(self, model: ClusterModel) -> Floats:
        """The model's curve at the radii, as the survey's is expected to come out."""
        linear = self.linear_of(model)
        return np.asarray(np.sqrt(linear / np.pi)) if self.function == "L" else linear

    def linear_of(self, model: ClusterModel) -> Floats:
        """The model's g or K at the radii, as the survey's is expected to come out."""
        return np.asarray(self.base + sum_of_levels(model, self.excess_of))

    def excess_of(self, level: ClusterModel) -> Floats:
        """(k,) excess of a level's g or K over randomness, to be divided by the intensity of its centres."""
        if self.function != "g":
            return level.sibling_distribution(self.radii)
        if self.bandwidth is None:
            return level.sibling_density(self.radii)
        distances, weights = self._kernel
        return np.asarray(np.sum(level.sibling_density(distances) * weights, axis=1))

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
