"""How a varying intensity changes the expected number of pairs at each distance.

The areas themselves are exact. What an intensity adds is a mean of it over them, which varies
slowly with the distance; it is taken from a lattice of cells. As the same cells
stand in the numerator and the denominator, the grain of the lattice cancels: the mean is off by
less than a thousandth.
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
    return _ratio(points, points, weighed, cover, cells.transform.a, radii)


def mean_of_products(intensity: Intensity, radii: Floats) -> Floats:
    """Mean of the product of the intensities at two places in the study area within each radius.

    Parameters and result as for `mean_round_points`, in squares of points per square metre.
    """
    cells, cover, weighed = _lattice(intensity)
    return _ratio(weighed, cover, weighed, cover, cells.transform.a, radii)


def _lattice(intensity: Intensity) -> tuple[Cells, Floats, Floats]:
    """Cells, the area of each inside the study area, and the same times the intensity there."""
    cells = Cells.square(intensity.area)
    values = intensity.at(cells.places(PLACES).reshape(-1, 2)).reshape(len(cells), -1).mean(axis=1)
    cover, weighed = np.zeros(cells.shape), np.zeros(cells.shape)
    cover[cells.row, cells.column] = cells.areas
    weighed[cells.row, cells.column] = cells.areas * values
    return cells, cover, weighed


def _ratio(a: Floats, b: Floats, over_a: Floats, over_b: Floats, cell: float, radii: Floats) -> Floats:
    """Sum over shifts up to each radius of the correlation of `a` and `over_a`, over that of the others."""
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
    # the sums up to a ring of shifts reach half a cell beyond it, but for the one without shift
    knots = cell * (np.arange(len(sums[0])) + 0.5)
    knots[0] = 0.0
    return np.asarray(PchipInterpolator(knots, sums[0] / sums[1])(np.minimum(radii, knots[-1])))
