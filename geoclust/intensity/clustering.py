"""How far and how strongly points cluster beyond their intensity, and what that does to its errors."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import minimize_scalar
from scipy.signal import fftconvolve

from geoclust.area.study_area import StudyArea
from geoclust.curves.second_order import SecondOrder
from geoclust.intensity.cells import Cells

Floats = npt.NDArray[np.float64]

# power of K in the contrast, and its range in scales, as for the cluster models
EXPONENT = 0.25
RANGE_IN_SCALES = 6.0
RADII = 64


@dataclass(frozen=True)
class Clustering:
    """The pair correlation beyond one: height·exp(-r²/4·scale²), that of Gaussian clusters.

    Attributes
    ----------
    height
        g(0) - 1, not negative.
    scale
        Standard deviation of offspring round their centre per axis, metres.
    r_max
        Largest distance of the contrast it was fitted by, metres.
    """

    height: float
    scale: float
    r_max: float

    def excess(self, r: npt.ArrayLike) -> Floats:
        """g(r) - 1."""
        return self.height * np.exp(-(np.asarray(r, dtype=np.float64) ** 2) / (4.0 * self.scale**2))

    @property
    def reach(self) -> float:
        """Distance in metres beyond which the excess is below 1e-7 of its height."""
        return 8.0 * self.scale


def fit_clustering(
    local_xy: Floats, area: StudyArea, factors: Floats | None, r_max: float | None = None
) -> Clustering:
    """Fit the excess by minimum contrast on the weighted K.

    Diggle & Gratton (1984), Journal of the Royal Statistical Society B 46: 193-227,
    as Waagepetersen (2007) does for the errors of an intensity. The range is six
    scales of a first fit, whose range is a quarter of the side of the square of
    equal area.

    Parameters
    ----------
    local_xy
        (n, 2) local coordinates.
    factors
        (n,) one over the intensity at each point, or None if it is constant.
    r_max
        Largest distance in metres.
    """
    widest = 0.25 * area.side
    found = _contrast(local_xy, area, factors, widest if r_max is None else r_max)
    if r_max is None and found.height > 0:
        shorter = RANGE_IN_SCALES * found.scale
        if shorter < 0.8 * widest:
            found = _contrast(local_xy, area, factors, shorter)
    return found


def _contrast(local_xy: Floats, area: StudyArea, factors: Floats | None, r_max: float) -> Clustering:
    radii = np.linspace(0.0, r_max, RADII + 1)[1:]
    pairs = SecondOrder.of_points(local_xy, area, radii, None, "isotropic", 1, factors)
    k = pairs.k_values()
    usable = np.isfinite(k)
    r, target = radii[usable], np.maximum(k[usable], 0.0) ** EXPONENT
    disc = np.pi * r**2
    # the part of K beyond chance is the inverse parent intensity times 1 - exp(-r²/4 scale²)
    largest = max(float(k[usable].max(initial=0.0)), float(disc[-1])) if len(r) else 1.0

    def best_at(log_scale: float) -> tuple[float, float]:
        shape = -np.expm1(-(r**2) / (4.0 * np.exp(2.0 * log_scale)))

        def distance(clump: float) -> float:
            return float(np.sum((target - (disc + clump * shape) ** EXPONENT) ** 2))

        found = minimize_scalar(distance, bounds=(0.0, largest), method="bounded")
        clump = float(found.x)
        return (distance(0.0), 0.0) if distance(0.0) <= found.fun else (float(found.fun), clump)

    scales = np.linspace(np.log(r_max / 200.0), np.log(r_max), 25)
    values = [best_at(s)[0] for s in scales]
    k_best = int(np.argmin(values))
    low, high = scales[max(k_best - 1, 0)], scales[min(k_best + 1, len(scales) - 1)]
    finest = minimize_scalar(lambda s: best_at(s)[0], bounds=(low, high), method="bounded")
    clump = best_at(float(finest.x))[1]
    scale = float(np.exp(finest.x))
    return Clustering(clump / (4.0 * np.pi * scale**2), scale, r_max)


def cell_pair_means(excess: Callable[[Floats], Floats], reach: float, width: float, height: float) -> Floats:
    """Mean of g - 1 over all pairs of places in two cells, for every shift of cells within reach.

    The difference of two uniform places in cells has a triangular density per
    axis, integrated by Gauss-Legendre nodes, more of them near the origin.
    """
    across, down = int(np.ceil(reach / width)) + 1, int(np.ceil(reach / height)) + 1
    out = np.empty((2 * down + 1, 2 * across + 1))
    few, many = _triangle(3), _triangle(16)
    for j in range(down + 1):
        for i in range(across + 1):
            at, weight = many if max(i, j) <= 2 else few
            x, y = (i + at) * width, (j + at) * height
            value = weight @ excess(np.hypot(x[None, :], y[:, None])) @ weight
            out[down + j, across + i] = out[down - j, across + i] = value
            out[down + j, across - i] = out[down - j, across - i] = value
    return out


def _triangle(nodes: int) -> tuple[Floats, Floats]:
    """Nodes and weights for the triangular density on (-1, 1)."""
    at, weight = np.polynomial.legendre.leggauss(nodes)
    half = 0.5 * (at + 1.0)
    mass = 0.5 * weight * (1.0 - half)
    return np.concatenate([-half[::-1], half]), np.concatenate([mass[::-1], mass])


def excess_matrix(cells: Cells, masses: Floats, excess: Callable[[Floats], Floats], reach: float) -> Floats:
    """Double integral of g - 1 against masses in cells: sum over pairs of cells.

    Parameters
    ----------
    cells
        The quadrature.
    masses
        (m, p) weight of each cell: design times expected points.
    excess
        g(r) - 1.
    reach
        Distance beyond which it is zero, metres.

    Returns
    -------
    ndarray, (p, p)
    """
    width, height = cells.transform.a, -cells.transform.e
    t = min(reach, float(np.hypot(cells.shape[0] * height, cells.shape[1] * width)))
    kernel = cell_pair_means(excess, t, width, height)
    p = masses.shape[1]
    spread = np.empty_like(masses)
    for k in range(p):
        grid = np.zeros(cells.shape)
        grid[cells.row, cells.column] = masses[:, k]
        spread[:, k] = _centred(grid, kernel)[cells.row, cells.column]
    product = masses.T @ spread
    return 0.5 * (product + product.T)


def _centred(grid: Floats, kernel: Floats) -> Floats:
    """Convolution of the size of the grid, whichever of both is larger."""
    full = fftconvolve(grid, kernel, mode="full")
    a, b = (kernel.shape[0] - 1) // 2, (kernel.shape[1] - 1) // 2
    return np.asarray(full[a : a + grid.shape[0], b : b + grid.shape[1]])
