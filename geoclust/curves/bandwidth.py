"""Bandwidth of the pair correlation function by cross-validation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.area.survey import Survey
from geoclust.curves.pair_sums import pair_sums
from geoclust.curves.second_order import BANDWIDTH_FACTOR, checked_intensity
from geoclust.errors import InputError, not_allowed

Floats = npt.NDArray[np.float64]

BY_RULE = f"{BANDWIDTH_FACTOR:g} mean spacings, Stoyan & Stoyan 1994"
BY_CROSS_VALIDATION = "cross-validation, Guan 2007"
GIVEN = "given"

CLASSES = 1_500
# candidates in mean spacings, round the rule of 0.15
CANDIDATES = np.geomspace(0.03, 1.0, 24)


@dataclass(frozen=True, eq=False)
class CrossValidation:
    """Bandwidths that were tried, and how well they did.

    Attributes
    ----------
    bandwidth
        The best of them, metres.
    bandwidths, scores
        (b,) all, and their scores: the estimated integrated squared error up to a constant.
    on_the_edge
        Whether the best is the smallest or the largest of them.
    """

    bandwidth: float
    bandwidths: Floats
    scores: Floats

    @property
    def on_the_edge(self) -> bool:
        return self.bandwidth in (self.bandwidths[0], self.bandwidths[-1])


def cross_validated_bandwidth(
    survey: Survey,
    r_max: float,
    *,
    bandwidths: npt.ArrayLike | None = None,
    intensity_at_points: npt.ArrayLike | None = None,
    workers: int | None = None,
) -> CrossValidation:
    """Choose the bandwidth of g by least-squares cross-validation.

    Minimises an estimate of the integral of (ĝ - g)² 2 pi r up to `r_max`: that of ĝ²,
    less twice the sum over pairs of ĝ without the pair itself, weighted as in K (Guan
    2007, Statistics & Probability Letters 77: 1722-1729). Pairs are summed in 1,500
    classes of distance, and a pair's own weight is taken as the mean of its class.

    Parameters
    ----------
    survey
        Points and study area; at least three points.
    r_max
        Largest distance at which g is wanted, metres.
    bandwidths
        (b,) half widths to try, metres; 24 from 0.03 to 1 mean spacings if not given, those
        below a quarter of `r_max`.
    intensity_at_points
        (n,) intensity at each point, m⁻², if it varies.
    workers
        Threads; one a core if not given.

    Raises
    ------
    InputError
        If there are too few points.
    UsageError
        If distance or bandwidths are not positive.
    """
    if not (np.isfinite(r_max) and r_max > 0):
        raise not_allowed("r_max", "a positive number of metres", r_max)
    if survey.n < 3:
        raise InputError(f"The survey has {survey.n} point(s); cross-validation needs at least three.")
    if bandwidths is None:
        tried = CANDIDATES / np.sqrt(survey.intensity)
        few = tried[tried <= 0.25 * r_max]
        tried = few if len(few) else tried[:1]
    else:
        tried = np.unique(np.asarray(bandwidths, dtype=np.float64))
        if tried.size == 0 or not np.all(np.isfinite(tried)) or tried[0] <= 0:
            raise not_allowed("bandwidths", "positive distances in metres", bandwidths)
    factors = np.ones(survey.n)
    if intensity_at_points is not None:
        factors = 1.0 / checked_intensity(intensity_at_points, survey.n)
    pairs = float(factors.sum() ** 2 - (factors**2).sum())
    scale = survey.area.area / pairs
    limits = np.linspace(0.0, r_max + tried[-1], CLASSES + 1)[1:]
    weighed = pair_sums(survey.local_xy, survey.area, limits, point_weights=factors, workers=workers)
    counted = pair_sums(survey.local_xy, survey.area, limits, edge_weight="unweighted", workers=workers)
    summed, number = weighed.moments, counted.moments[:, 1]
    scores = np.array([_score(float(b), limits, summed, number, scale, r_max) for b in tried])
    return CrossValidation(float(tried[np.argmin(scores)]), tried, scores)


def _score(
    bandwidth: float, limits: Floats, summed: Floats, number: Floats, scale: float, r_max: float
) -> float:
    step = limits[0]
    middle = limits - 0.5 * step
    inside = middle <= r_max
    r = middle[inside]
    # ĝ at the middle of every class: the kernel over the distance is a quadratic in it, so three
    # running sums give it, up to the classes that the ends of the kernel cut, where it is nearly zero
    running = np.vstack([np.zeros(3), np.cumsum(summed, axis=0)])
    low = np.clip(np.round((r - bandwidth) / step), 0, len(limits)).astype(np.int64)
    high = np.clip(np.round((r + bandwidth) / step), 0, len(limits)).astype(np.int64)
    m = running[high] - running[low]
    b2 = bandwidth**2
    kernel = 0.75 / bandwidth * ((1.0 - r**2 / b2) * m[:, 0] + 2.0 * r / b2 * m[:, 1] - m[:, 2] / b2)
    edge = np.clip(r / bandwidth, 0.0, 1.0)
    above = 2.0 * np.pi * (0.5 + 0.75 * (edge - edge**3 / 3.0))
    g = scale * kernel / above
    own_weight = summed[inside, 1] / np.maximum(number[inside], 1.0)
    # both orders of the pair
    own = scale * 2.0 * own_weight * 0.75 / bandwidth / (r * above)
    squared = float(np.sum(g**2 * 2.0 * np.pi * r) * step)
    crossed = float(scale * np.sum(summed[inside, 1] * (g - own)))
    return squared - 2.0 * crossed
