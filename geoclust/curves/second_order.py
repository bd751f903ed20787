"""K, L and the pair correlation function, corrected for the exact shape of the study area."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.curve import Curve
from geoclust.curves.pair_sums import (
    EDGE_WEIGHTS,
    PairSums,
    class_limits,
    pair_sums,
)
from geoclust.errors import InputError, not_allowed

Floats = npt.NDArray[np.float64]

# bandwidth of g in mean spacings 1/sqrt(intensity) (Stoyan & Stoyan 1994, p. 285)
BANDWIDTH_FACTOR = 0.15


def k_function(
    survey: Survey,
    radii: npt.ArrayLike,
    edge_weight: str = "isotropic",
    *,
    intensity_at_points: npt.ArrayLike | None = None,
    workers: int | None = None,
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
        ``isotropic`` (Ripley 1977, with the divisor of Ohser 1983), ``translation``
        (Ohser & Stoyan 1981), ``rigid-motion`` (Ohser 1983), ``minus-sampling`` (only
        centres further than r from the boundary, over the area that is) or ``unweighted``.
    intensity_at_points
        (n,) intensity at each point, m⁻², for the inhomogeneous K function (Baddeley,
        Møller & Waagepetersen 2000, Statistica Neerlandica 54: 329-350). Pairs count
        1/(λ(x)λ(y)), divided by what these factors add up to over all pairs of points,
        over |W|, in place of |W| itself: the estimate then does not hang on the mean
        level of the intensity, and is that of the homogeneous K if it is constant.
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
        If radii, edge weight or intensity are not allowed.
    """
    return SecondOrder.measure(survey, radii, None, edge_weight, workers, intensity_at_points).k()


def l_function(
    survey: Survey,
    radii: npt.ArrayLike,
    edge_weight: str = "isotropic",
    *,
    intensity_at_points: npt.ArrayLike | None = None,
    workers: int | None = None,
) -> Curve:
    """The L function, the square root of K/pi: under complete randomness L(r) = r.

    Besag (1977), discussion of Ripley, Journal of the Royal Statistical Society B 39: 193-195.
    Parameters and errors as for `k_function`; values in metres.
    """
    return SecondOrder.measure(survey, radii, None, edge_weight, workers, intensity_at_points).l()


def pair_correlation(
    survey: Survey,
    radii: npt.ArrayLike,
    bandwidth: float | None = None,
    edge_weight: str = "isotropic",
    *,
    intensity_at_points: npt.ArrayLike | None = None,
    workers: int | None = None,
) -> Curve:
    """The pair correlation function g: how much denser than chance it is at distance r of a point.

    Epanechnikov kernel; each pair is divided by its own distance (Guan 2007,
    Biometrics 63: 1198-1207), and by the part of the kernel that lies above
    zero, so that g = 1 under complete randomness at every radius. Coincident
    pairs have no distance and are left out.

    Parameters
    ----------
    survey, radii, edge_weight, intensity_at_points, workers
        As for `k_function`.
    bandwidth
        Half width of the kernel in metres; 0.15 mean spacings if not given (Stoyan & Stoyan 1994).

    Returns
    -------
    Curve
        Values without unit, its bandwidth among its attributes.
    """
    width = default_bandwidth(survey.intensity) if bandwidth is None else bandwidth
    return SecondOrder.measure(survey, radii, width, edge_weight, workers, intensity_at_points).g()


def default_bandwidth(intensity: float) -> float:
    """Half width of the Epanechnikov kernel by the rule 0.15/sqrt(intensity), metres."""
    return float(BANDWIDTH_FACTOR / np.sqrt(intensity))


def default_radii(area: StudyArea, count: int = 100) -> Floats:
    """Distances from zero, exclusive, to a quarter of the side of the square of equal area.

    Beyond that few pairs are left in the study area (common practice).
    """
    return np.linspace(0.0, 0.25 * area.side, count + 1)[1:]


@dataclass(frozen=True)
class SecondOrder:
    """Pair sums of a survey with what is needed to turn them into K, L and g.

    Attributes
    ----------
    sums
        The pair sums.
    radii
        (k,) distances in metres.
    n
        Number of points.
    window
        (k,) part of the study area, in square metres, that can see a neighbour at each
        distance: |W^(r)| for isotropic weights, the share of directions for translation.
    area
        Square metres.
    edge_weight
        One of `EDGE_WEIGHTS`.
    bandwidth
        Half width of the kernel of g, if g is wanted.
    pairs
        What the point factors add up to over all ordered pairs; n(n-1) if all are one.
    reach
        (c,) the window at the limits of the pair sums.
    deeper
        For minus-sampling: (k,) square metres deeper than each radius, and deeper than
        each radius and the bandwidth together.
    """

    sums: PairSums
    radii: Floats
    n: int
    window: Floats
    area: float
    edge_weight: str
    bandwidth: float | None
    pairs: float
    reach: Floats | None = None
    deeper: tuple[Floats, Floats] | None = None

    @classmethod
    def measure(
        cls,
        survey: Survey,
        radii: npt.ArrayLike,
        bandwidth: float | None,
        edge_weight: str = "isotropic",
        workers: int | None = None,
        intensity_at_points: npt.ArrayLike | None = None,
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
        factors = None
        if intensity_at_points is not None:
            factors = 1.0 / checked_intensity(intensity_at_points, survey.n)
        return cls.of_points(survey.local_xy, survey.area, at, bandwidth, edge_weight, workers, factors)

    @classmethod
    def of_points(
        cls,
        local_xy: Floats,
        area: StudyArea,
        radii: Floats,
        bandwidth: float | None,
        edge_weight: str = "isotropic",
        workers: int | None = None,
        point_weights: Floats | None = None,
    ) -> SecondOrder:
        """Run over the pairs of checked points in local coordinates.

        `point_weights` are the factors of the points, one over the intensity at each.
        """
        limits = class_limits(radii, bandwidth)
        reach = _window(area, limits[-1:], edge_weight)
        varies = bool(reach[0] < area.area * (1 - 1e-12))
        if varies:
            # the divisor falls with the distance, and belongs to each pair: classes fine enough
            limits = np.union1d(limits, np.linspace(0.0, limits[-1], 129)[1:])
            reach = _window(area, limits, edge_weight)
        sums = pair_sums(
            local_xy, area, limits, edge_weight=edge_weight, point_weights=point_weights, workers=workers
        )
        n = len(local_xy)
        if point_weights is None:
            pairs = float(n * (n - 1))
        else:
            pairs = float(point_weights.sum() ** 2 - (point_weights**2).sum())
        window = np.interp(radii, limits, reach, left=area.area) if varies else np.full(len(radii), area.area)
        deeper = None
        if edge_weight == "minus-sampling":
            eroded = area.eroded_area(float(limits[-1]))
            deeper = (eroded(radii), eroded(radii + (bandwidth or 0.0)))
        return cls(
            sums, radii, n, window, area.area, edge_weight, bandwidth, pairs,
            reach if varies else None, deeper,
        )  # fmt: skip

    @property
    def _scale(self) -> float:
        """Makes K of a sum over pairs: |W| over what their factors add up to, over |W|."""
        return self.area / self.pairs if self.pairs > 0 else np.nan

    def _divided(self) -> PairSums:
        """Pair sums, each class over the part of the study area that can see that far."""
        if self.reach is None:
            return self.sums
        seen = self.reach / self.area
        moments = self.sums.moments / np.where(seen > 0, seen, np.nan)[:, None]
        # a class that nothing can reach is empty; what lies beyond it cannot be estimated
        return replace(self.sums, moments=moments)

    def k_values(self) -> Floats:
        """(k,) estimate of K in square metres."""
        sums = self._divided()
        counted = sums.up_to(np.where(self.radii > 0, self.radii, sums.edges[0]))
        if self.deeper is not None:
            deep = self.deeper[0]
            counted = counted * self.area / np.where(deep > 0, deep, np.nan)
        return np.asarray(counted * self._scale)

    def g_values(self) -> Floats:
        """(k,) estimate of g."""
        assert self.bandwidth is not None
        summed = self._divided().kernel_sums(self.radii, self.bandwidth)
        # part of the kernel over positive distances
        z = np.clip(self.radii / self.bandwidth, 0.0, 1.0)
        above = 0.5 + 0.75 * (z - z**3 / 3.0)
        values = summed * self._scale / (2.0 * np.pi * above)
        if self.deeper is not None:
            # where the kernel reaches beyond the deepest point, a part of it has no data
            values = np.where(self.deeper[1] > 0, values, np.nan)
        return np.asarray(values)

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


def checked_intensity(intensity: npt.ArrayLike, n: int) -> Floats:
    """One positive intensity a point, or one sentence on what is wrong."""
    at = np.asarray(intensity, dtype=np.float64)
    if at.shape != (n,):
        raise not_allowed("intensity_at_points", f"one value a point ({n})", at.shape)
    if not np.all(np.isfinite(at)) or np.any(at <= 0):
        wrong = at[~(np.isfinite(at) & (at > 0))]
        raise not_allowed("intensity_at_points", "positive and finite", float(wrong[0]))
    return at


def _window(area: StudyArea, radii: Floats, edge_weight: str) -> Floats:
    """Part of the study area, square metres, whose points can have a neighbour at each distance."""
    if edge_weight == "isotropic":
        return area.reached_areas(radii)
    if edge_weight == "translation":
        return area.area * area.met_directions(radii)
    return np.full(len(radii), area.area)
