"""K, L and the pair correlation function, corrected for the exact shape of the study area."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.curve import Curve
from geoclust.curves.pair_sums import PairSums, class_limits, pair_sums
from geoclust.errors import InputError, not_allowed

Floats = npt.NDArray[np.float64]

EDGE_WEIGHTS = ("isotropic", "unweighted")
# bandwidth of g in mean spacings 1/sqrt(intensity) (Stoyan & Stoyan 1994, p. 285)
BANDWIDTH_FACTOR = 0.15


def k_function(
    survey: Survey, radii: npt.ArrayLike, edge_weight: str = "isotropic", *, workers: int | None = None
) -> Curve:
    """Ripley's K function.

    K(r) times the intensity is the mean number of further points within r of a
    point; under complete randomness it is the area of the disc. The squared
    intensity is estimated by n(n-1)/|W|².

    Parameters
    ----------
    survey
        Points and study area.
    radii
        (k,) increasing distances in metres.
    edge_weight
        ``isotropic`` (Ripley 1977, with the divisor of Ohser 1983) or ``unweighted``.
    workers
        Threads; one a core if not given.

    Returns
    -------
    Curve
        Values in square metres.

    Raises
    ------
    InputError
        If the survey has fewer than two points.
    UsageError
        If radii or edge weight are not allowed.
    """
    measured = SecondOrder.measure(survey, radii, None, edge_weight, workers)
    return measured.k()


def l_function(
    survey: Survey, radii: npt.ArrayLike, edge_weight: str = "isotropic", *, workers: int | None = None
) -> Curve:
    """The L function, the square root of K/pi: under complete randomness L(r) = r.

    Besag (1977), discussion of Ripley, Journal of the Royal Statistical Society B 39: 193-195.
    Parameters and errors as for `k_function`; values in metres.
    """
    return SecondOrder.measure(survey, radii, None, edge_weight, workers).l()


def pair_correlation(
    survey: Survey,
    radii: npt.ArrayLike,
    bandwidth: float | None = None,
    edge_weight: str = "isotropic",
    *,
    workers: int | None = None,
) -> Curve:
    """The pair correlation function g: how much denser than chance it is at distance r of a point.

    Epanechnikov kernel; each pair is divided by its own distance (Guan 2007,
    Biometrics 63: 1198-1207), and by the part of the kernel that lies above
    zero, so that g = 1 under complete randomness at every radius. Coincident
    pairs have no distance and are left out.

    Parameters
    ----------
    survey, radii, edge_weight, workers
        As for `k_function`.
    bandwidth
        Half width of the kernel in metres; 0.15 mean spacings if not given (Stoyan & Stoyan 1994).

    Returns
    -------
    Curve
        Values without unit, its bandwidth among its attributes.
    """
    width = default_bandwidth(survey.intensity) if bandwidth is None else bandwidth
    return SecondOrder.measure(survey, radii, width, edge_weight, workers).g()


def default_bandwidth(intensity: float) -> float:
    """Half width of the Epanechnikov kernel by the rule 0.15/sqrt(intensity), metres."""
    return float(BANDWIDTH_FACTOR / np.sqrt(intensity))


def default_radii(area: StudyArea, count: int = 100) -> Floats:
    """Distances from zero, exclusive, to a quarter of the side of the square of equal area.

    Beyond that few pairs are left in the study area (common practice).
    """
    return np.linspace(0.0, 0.25 * np.sqrt(area.area), count + 1)[1:]


@dataclass(frozen=True)
class SecondOrder:
    """Pair sums of a survey with what is needed to turn them into K, L and g."""

    sums: PairSums
    radii: Floats
    n: int
    window: Floats  # (k,) area whose points can have a neighbour at this distance, m²
    area: float
    edge_weight: str
    bandwidth: float | None

    @classmethod
    def measure(
        cls,
        survey: Survey,
        radii: npt.ArrayLike,
        bandwidth: float | None,
        edge_weight: str = "isotropic",
        workers: int | None = None,
    ) -> SecondOrder:
        """Check the arguments and run over the pairs once."""
        at = checked_radii(radii)
        if edge_weight not in EDGE_WEIGHTS:
            raise not_allowed("edge_weight", EDGE_WEIGHTS, edge_weight)
        if bandwidth is not None and not (np.isfinite(bandwidth) and bandwidth > 0):
            raise not_allowed("bandwidth", "a positive number of metres", bandwidth)
        if survey.n < 2:
            raise InputError(
                f"The survey has {survey.n} point(s); distances between points need at least two."
            )
        return cls.of_points(survey.local_xy, survey.area, at, bandwidth, edge_weight, workers)

    @classmethod
    def of_points(
        cls,
        local_xy: Floats,
        area: StudyArea,
        radii: Floats,
        bandwidth: float | None,
        edge_weight: str = "isotropic",
        workers: int | None = None,
    ) -> SecondOrder:
        """Run over the pairs of checked points in local coordinates."""
        limits = class_limits(radii, bandwidth)
        sums = pair_sums(local_xy, area, limits, edge_weight=edge_weight, workers=workers)
        window = (
            area.reached_areas(radii) if edge_weight == "isotropic" else np.full(len(radii), area.area)
        )
        return cls(sums, radii, len(local_xy), window, area.area, edge_weight, bandwidth)

    @property
    def _scale(self) -> Floats:
        """|W|² / (n (n-1) |W^(r)|); not a number where no point can have a neighbour."""
        pairs = self.n * (self.n - 1)
        reached = np.where(self.window > 0, self.window, np.nan)
        return np.asarray(self.area**2 / (pairs * reached) if pairs else np.full(len(self.radii), np.nan))

    def k_values(self) -> Floats:
        """(k,) estimate of K in square metres."""
        positive = self.radii > 0
        counted = self.sums.up_to(np.where(positive, self.radii, self.sums.edges[0]))
        if self.edge_weight == "isotropic" and np.any(self.window < self.area * (1 - 1e-12)):
            # the divisor varies with the distance, so it belongs to each class of pairs
            share = np.interp(self.sums.edges, self.radii, self.window)
            weights = self.sums.moments[:, 1] * (self.area**2 / (self.n * (self.n - 1)))
            summed = np.cumsum(weights / np.where(share > 0, share, np.nan))
            counted = summed[np.searchsorted(self.sums.edges, np.where(positive, self.radii, 0.0))]
            return np.asarray(counted)
        return np.asarray(counted * self._scale)

    def g_values(self) -> Floats:
        """(k,) estimate of g."""
        assert self.bandwidth is not None
        sums = self.sums.kernel_sums(self.radii, self.bandwidth)
        # part of the kernel over positive distances
        z = np.clip(self.radii / self.bandwidth, 0.0, 1.0)
        above = 0.5 + 0.75 * (z - z**3 / 3.0)
        return np.asarray(sums * self._scale / (2.0 * np.pi * above))

    def k(self) -> Curve:
        """K as a curve."""
        return Curve("K", self.radii, self.k_values(), np.pi * self.radii**2, "m²", self.edge_weight)

    def l(self) -> Curve:  # noqa: E743 - the function's name in the literature
        """L as a curve."""
        values = np.sqrt(self.k_values() / np.pi)
        return Curve("L", self.radii, values, self.radii.copy(), "m", self.edge_weight)

    def g(self) -> Curve:
        """g as a curve."""
        values = self.g_values()
        return Curve("g", self.radii, values, np.ones(len(self.radii)), "1", self.edge_weight, self.bandwidth)


def checked_radii(radii: npt.ArrayLike | Sequence[float]) -> Floats:
    """Radii as an increasing float64 array, or one sentence on what is wrong."""
    at = np.atleast_1d(np.asarray(radii, dtype=np.float64))
    if at.ndim != 1 or at.size == 0 or not np.all(np.isfinite(at)) or at[0] < 0 or np.any(np.diff(at) <= 0):
        raise not_allowed("radii", "increasing finite distances in metres, not negative", radii)
    if at[-1] <= 0:
        raise not_allowed("radii", "distances of which the last is positive", radii)
    return at
