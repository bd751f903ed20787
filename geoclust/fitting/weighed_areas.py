"""How a varying intensity changes the expected number of pairs at each distance.

The areas themselves are exact. What an intensity adds is a mean of it over them, which varies
slowly with the distance; it is taken from a lattice of cells. As the same cells
stand in the numerator and the denominator, the grain of the lattice cancels: for an intensity that
changes by e over 150 m in 20 ha the mean is off by 2 parts in 1,000 at the width of a cell (2 m), by
4 in 10,000 beyond 30 m.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy import fft
from scipy.interpolate import PchipInterpolator

from geoclust.intensity.base import Intensity
from geoclust.intensity.cells import Cells

Floats = npt.NDArray[np.float64]

# places per side of a cell over which the intensity is averaged
PLACES = 2


def mean_round_points(intensity: Intensity, local_xy: Floats, radii: Floats) -> Floats:
    """Mean intensity over what lies in the study area within each radius of the points, all in one.

    Parameters
    ----------
    intensity
        Points per square metre, place by place.
    local_xy
        (n, 2) points in local coordinates.
    radii
        (k,) metres.

    Returns
    -------
    ndarray, (k,)
        Points per square metre; times the summed areas it is the integral of the intensity over them.
    """
    cells, cover, weighed = _lattice(intensity)
    at = cells.find(local_xy + cells.area.origin)
    points = np.zeros(cells.shape)
    np.add.at(points, (cells.row[at], cells.column[at]), 1.0)
    here = float(np.mean(weighed[cells.row, cells.column][at] / cells.areas[at]))
    return _ratio(points, points, weighed, cover, here, cells.transform.a, radii)


def mean_of_products(intensity: Intensity, radii: Floats) -> Floats:
    """Mean of the product of the intensities at two places in the study area within each radius.

    Parameters and result as for `mean_round_points`, in squares of points per square metre.
    """
    cells, cover, weighed = _lattice(intensity)
    here = float(np.sum(weighed[cells.row, cells.column] ** 2 / cells.areas) / cells.areas.sum())
    return _ratio(weighed, cover, weighed, cover, here, cells.transform.a, radii)


def _lattice(intensity: Intensity) -> tuple[Cells, Floats, Floats]:
    """Cells, the area of each inside the study area, and the same times the intensity there."""
    cells = Cells.square(intensity.area)
    values = intensity.at(cells.places(PLACES).reshape(-1, 2)).reshape(len(cells), -1).mean(axis=1)
    cover, weighed = np.zeros(cells.shape), np.zeros(cells.shape)
    cover[cells.row, cells.column] = cells.areas
    weighed[cells.row, cells.column] = cells.areas * values
    return cells, cover, weighed


def _ratio(
    a: Floats, b: Floats, over_a: Floats, over_b: Floats, here: float, cell: float, radii: Floats
) -> Floats:
    """Correlation of `a` and `over_a` over that of `b` and `over_b`, both summed up to each radius.

    `here` is its limit at radius zero.
    """
    reach = int(np.ceil(radii[-1] / cell)) + 1
    shape = [fft.next_fast_len(n + reach, real=True) for n in a.shape]
    turned = {id(v): fft.rfft2(v, shape) for v in (a, b, over_a, over_b)}
    above, below = (
        fft.irfft2(np.conj(turned[id(p)]) * turned[id(q)], shape) for p, q in ((a, over_a), (b, over_b))
    )
    down, across = (np.minimum(np.arange(n), n - np.arange(n)) for n in shape)
    distance = cell * np.hypot(down[:, None], across[None, :])
    near = distance <= cell * reach
    ring = np.rint(distance[near] / cell).astype(int)
    sums = [np.cumsum(np.bincount(ring, weights=v[near])) for v in (above, below)]
    # the sums up to a ring of shifts reach half a cell beyond it
    knots = cell * (np.arange(len(sums[0])) + 0.5)
    ratio = sums[0] / sums[1]
    knots[0], ratio[0] = 0.0, here
    return np.asarray(PchipInterpolator(knots, ratio)(np.minimum(radii, knots[-1])))
