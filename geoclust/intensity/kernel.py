"""Kernel estimate of the intensity with exact edge mass, and its bandwidth."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

from geoclust.area.study_area import StudyArea, portions
from geoclust.area.survey import Survey
from geoclust.curves.nearest import sorted_with_order
from geoclust.errors import InputError, not_allowed
from geoclust.intensity import _kernel
from geoclust.intensity.base import Intensity
from geoclust.intensity.cells import Cells
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]


def kernel_sums(
    local_xy: Floats,
    places: Floats,
    bandwidth: float,
    weights: Floats | None = None,
    workers: int | None = None,
) -> Floats:
    """(n,) sum of Gaussian kernels round the points, at each place; local coordinates, m⁻²."""
    points, order = sorted_with_order(local_xy)
    weight = np.ones(len(local_xy)) if weights is None else np.ascontiguousarray(weights[order])
    x, y = (np.ascontiguousarray(v) for v in places.T)
    out = np.empty(len(places))

    def work(part: slice) -> None:
        _kernel.gaussian_sums(points, weight, x[part], y[part], bandwidth, out[part])

    for _ in in_order(work, portions(len(places), 1_000), workers):
        pass
    return out


def cronie_van_lieshout_bandwidth(local_xy: Floats, area: StudyArea, workers: int | None = 1) -> float:
    """Bandwidth at which the inverse intensities at the points add up to the study area.

    By Campbell's formula they do in expectation for the true intensity; the estimate is
    taken without edge correction and with each point's own kernel (Cronie & van
    Lieshout 2018, Biometrika 105: 455-462).

    Raises
    ------
    InputError
        If there are fewer than two points.
    """
    if len(local_xy) < 2:
        raise InputError(f"The survey has {len(local_xy)} point(s); a bandwidth needs at least two.")

    def surplus(log_bandwidth: float) -> float:
        values = kernel_sums(local_xy, local_xy, float(np.exp(log_bandwidth)), workers=workers)
        return float(np.log(np.sum(1.0 / values) / area.area))

    # alone in its own kernel a point claims 2 pi h²; all in one kernel claim that area together
    low = 0.5 * np.log(area.area / (2.0 * np.pi * len(local_xy)))
    high = low
    step = 0.25
    if surplus(low) < 0:
        while surplus(high) < 0:
            low, high = high, high + step
    else:
        while surplus(low) > 0:
            low, high = low - step, low
    return float(np.exp(brentq(surplus, low, high, xtol=1e-4)))


@dataclass(frozen=True, eq=False, repr=False)
class KernelIntensity(Intensity):
    """Gaussian kernel estimate, divided by the exact mass of the kernel in the study area.

    Diggle (1985), Applied Statistics 34: 138-147.

    Attributes
    ----------
    area
        The study area.
    points
        (n, 2) local coordinates.
    bandwidth
        Standard deviation of the kernel, metres.
    bandwidth_by
        How the bandwidth was found.
    """

    area: StudyArea
    points: Floats
    bandwidth: float
    bandwidth_by: str

    @property
    def method(self) -> str:
        """How it was estimated, in words."""
        return f"Gaussian kernel, standard deviation {self.bandwidth:.4g} m ({self.bandwidth_by})"

    def __repr__(self) -> str:
        return f"<Intensity by {self.method}, {len(self.points)} points>"

    def at(self, xy: npt.ArrayLike) -> Floats:
        local = self.area.local(xy)
        mass = self.area.gaussian_shares(local + self.area.origin, self.bandwidth)
        return kernel_sums(self.points, local, self.bandwidth) / mass

    def at_own_points(self) -> Floats:
        """(n,) intensity at each point from all others, so that no point raises its own.

        A point further than six bandwidths from all others has none of their mass; it is
        given a hundredth of its own kernel.
        """
        own = 1.0 / (2.0 * np.pi * self.bandwidth**2)
        mass = self.area.gaussian_shares(self.points + self.area.origin, self.bandwidth)
        others = kernel_sums(self.points, self.points, self.bandwidth) - own
        return np.maximum(others, 0.01 * own) / mass

    @cached_property
    def _cells(self) -> Cells:
        return Cells.square(self.area, max(0.25 * self.bandwidth, float(np.sqrt(self.area.area / 40_000))))

    @cached_property
    def _cell_values(self) -> Floats:
        return self.at(self._cells.centres)

    @cached_property
    def _mean_and_highest(self) -> tuple[float, float]:
        # simulations ask for them over and over
        mean = float(self._cell_values @ self._cells.areas / self._cells.areas.sum())
        return mean, float(self._cell_values.max())

    @property
    def mean(self) -> float:
        return self._mean_and_highest[0]

    @property
    def highest(self) -> float:
        return self._mean_and_highest[1]

    def draw(self, count: int, rng: np.random.Generator) -> Floats:
        return self._cells.draw(self._cell_values, count, rng)

    def refit(self, local_xy: Floats, rng: np.random.Generator) -> KernelIntensity:
        chosen = self.bandwidth
        if self.bandwidth_by != "given":
            chosen = cronie_van_lieshout_bandwidth(local_xy, self.area)
        return KernelIntensity(self.area, local_xy, chosen, self.bandwidth_by)

    def record(self) -> dict[str, object]:
        return {
            "method": self.method,
            "bandwidth_m": self.bandwidth,
            "bandwidth_by": self.bandwidth_by,
            "points": len(self.points),
        }


def kernel_intensity(survey: Survey, bandwidth: float | None = None) -> KernelIntensity:
    """Estimate the intensity by a Gaussian kernel.

    Parameters
    ----------
    survey
        Points and study area.
    bandwidth
        Standard deviation of the kernel in metres; by Cronie & van Lieshout (2018) if not given.

    Raises
    ------
    UsageError
        If the bandwidth is not positive.
    InputError
        If there are too few points.
    """
    if bandwidth is not None and not (np.isfinite(bandwidth) and bandwidth > 0):
        raise not_allowed("bandwidth", "a positive number of metres", bandwidth)
    if survey.n == 0:
        raise InputError("There are no points to estimate an intensity from.")
    if bandwidth is not None:
        return KernelIntensity(survey.area, survey.local_xy, float(bandwidth), "given")
    chosen = cronie_van_lieshout_bandwidth(survey.local_xy, survey.area, None)
    return KernelIntensity(survey.area, survey.local_xy, chosen, "Cronie & van Lieshout 2018")
