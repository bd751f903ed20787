"""Palm likelihood and second-order composite likelihood of the distances between points.

Both compare the pairs of points that are less than R apart with those that the model
lets expect in just this study area. With g the model's pair correlation function, sums over
ordered pairs of distance d, and n points in the area |W|:

Palm likelihood (Tanaka, Ogata & Stoyan 2008, Biometrical Journal 50: 43-57), in which the other points
seen from each point count as a Poisson process,

    sum of ln(intensity g(d)) - intensity times the sum over points of
    the integral of g(r) 2 pi r s(x, r) dr from 0 to R,

with intensity = n/|W| and s(x, r) the share of the circle of radius r round x that lies in the
study area (the edge term of the paper, exact here).

Composite likelihood (Guan 2006, Journal of the American Statistical Association 101: 1502-1512),
the product of the densities of single pairs, given that they are less than R apart,

    sum of ln g(d) - pairs times ln of the integral of g(r) 2 pi r c(r) dr from 0 to R,

with c the set covariance of the study area, averaged over directions, exact.

Where the intensity varies, ln(intensity(y) g) and the integral of intensity(y) g(|x - y|) over
the places y of the study area take their place in the first, and ln(intensity(x) intensity(y) g)
and the double integral of that product in the second (Prokešová, Dvořák & Jensen 2017, Annals of
the Institute of Statistical Mathematics 69: 513-542). See `weighed_areas`.

Values are told relative to complete randomness (g = 1), which takes the constants away.

Distances are put into 4,096 classes, narrow at zero: limits at R (k/4096)². The mean distance of
its pairs stands for each class, so what is lost is of second order: with w the width
of a class, w²/24 times the second derivative of ln g, a pair. For a Thomas process with sigma = R/12 that
is below 1e-7. Coincident points have no distance and are left out.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.interpolate import CubicSpline

from geoclust.area._disc import disc_many
from geoclust.area.study_area import StudyArea, portions
from geoclust.curves.pair_sums import pair_sums
from geoclust.fitting.weighed_areas import mean_of_products, mean_round_points
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]

PALM, COMPOSITE = "palm", "composite-likelihood"
CLASSES = 4096
# radii at which the area round the points is computed, more of them round few points, whose errors do
# not cancel; between them a spline in the root of the radius
KNOTS, MOST_KNOTS, DISCS = 64, 512, 16_000


@dataclass(frozen=True, eq=False)
class LikelihoodSurface:
    """What is lost in log-likelihood over parent intensity and scale: a flat valley means "cannot tell".

    Attributes
    ----------
    parent_intensities
        (a,) per square metre, equal steps of the logarithm.
    scales
        (b,) metres, equal steps of the logarithm.
    scale_name
        Name of the scale parameter, such as ``sigma``.
    loss
        (a, b) log-likelihood at the estimate less that at each pair; not negative.
    level
        Loss within which 95 % of the bootstrap's estimates lie; None without a bootstrap. Pairs of
        points depend on each other, so no table of chi-squared tells this.
    """

    parent_intensities: Floats
    scales: Floats
    scale_name: str
    loss: Floats
    level: float | None = None


@dataclass(frozen=True, eq=False)
class PairLikelihood:
    """Log-likelihood of the distances between points, relative to complete randomness.

    Attributes
    ----------
    form
        ``palm`` or ``composite-likelihood``.
    distances, counts
        (k,) mean distance in metres and number of the ordered pairs in each class that holds any.
    nodes, expected
        (m,) radii in metres, and what complete randomness lets expect there: ordered pairs for the
        Palm likelihood, square metres of set covariance for the composite.
    limits
        (m + 1,) limits of the classes of distance, metres.
    """

    form: str
    distances: Floats
    counts: Floats
    nodes: Floats
    expected: Floats
    limits: Floats

    @property
    def r_max(self) -> float:
        """Largest distance, metres."""
        return float(self.limits[-1])

    def value(self, g_pairs: Floats, excess: float | Floats) -> Floats:
        """Log-likelihood of g at the distances (..., k), and of the sum over nodes of (g - 1) expected."""
        # a plain sum: the same bits in any thread
        gained = np.sum(np.log(g_pairs) * self.counts, axis=-1)
        if self.form == PALM:
            return np.asarray(gained - excess)
        return np.asarray(gained - self.counts.sum() * np.log1p(excess / self.expected.sum()))

    def of_model(self, model: ClusterModel) -> float:
        """Log-likelihood of a model."""
        excess = float(np.sum((model.pair_correlation(self.nodes) - 1.0) * self.expected))
        return float(self.value(model.pair_correlation(self.distances), excess))

    def up_to(self, r_max: float) -> PairLikelihood:
        """The same of the pairs that are no further apart than the class limit at or below `r_max`."""
        limits = self.limits[: max(np.searchsorted(self.limits, r_max, side="right"), 2)]
        near = self.distances <= limits[-1]
        there = slice(0, len(limits) - 1)
        return PairLikelihood(
            self.form,
            self.distances[near],
            self.counts[near],
            self.nodes[there],
            self.expected[there],
            limits,
        )

    def coarser(self) -> PairLikelihood:
        """The same with runs of classes as one: quick, and near enough to find where to search."""
        pairs = _merged(self.distances, self.counts)
        return PairLikelihood(self.form, *pairs, *_merged(self.nodes, self.expected), self.limits[[0, -1]])

    @classmethod
    def of_points(
        cls,
        form: str,
        local_xy: Floats,
        area: StudyArea,
        r_min: float,
        r_max: float,
        widest: float,
        workers: int | None = 1,
        intensity: Intensity | None = None,
    ) -> PairLikelihood:
        """Sort the pairs between `r_min` and `r_max` by distance, and integrate over the study area.

        `widest` is the largest distance that other patterns in this study area may ask for;
        `intensity` was fitted to the points, or is None if it is constant.
        """
        limits = class_limits(r_min, r_max)
        moments = pair_sums(local_xy, area, limits, edge_weight="unweighted", workers=workers).moments[1:]
        full = moments[:, 1] > 0
        counts = moments[full, 1]
        # the mean radius of each ring: what is lost is of second order
        nodes = (2.0 / 3.0) * np.diff(limits**3) / np.diff(limits**2)
        if form == PALM:
            seen = seen_areas(local_xy, area, limits, workers)
            if intensity is None:
                seen *= len(local_xy) / area.area
            else:
                seen *= mean_round_points(intensity, local_xy, limits)
            expected = np.diff(seen)
        else:
            table = area.shift_table(widest, isotropic=True, workers=workers)
            rows = np.arange(len(table.values))
            covariance = area.area * np.interp(nodes * table.row_scale, rows, table.values[:, 0])
            expected = covariance * np.pi * np.diff(limits**2)
            if intensity is not None:
                below = np.pi * limits[0] ** 2 * area.area + np.concatenate([[0.0], np.cumsum(expected)])
                expected = np.diff(below * mean_of_products(intensity, limits))
        return cls(form, moments[full, 2] / counts, counts, nodes, expected, limits)


def class_limits(r_min: float, r_max: float) -> Floats:
    """Limits of the classes of distance; below the first lie coincident points and those too near."""
    limits = r_min + (r_max - r_min) * (np.arange(CLASSES + 1) / CLASSES) ** 2
    limits[0] = max(r_min, 1e-9 * r_max)
    return np.asarray(limits)


def _merged(at: Floats, amount: Floats) -> tuple[Floats, Floats]:
    """Runs of eight: their mean place and sum."""
    first = np.arange(0, len(at), 8)
    total = np.add.reduceat(amount, first)
    return np.add.reduceat(at * amount, first) / total, total


def seen_areas(local_xy: Floats, area: StudyArea, radii: Floats, workers: int | None = 1) -> Floats:
    """Sum over the points of the area within each radius of them that lies in the study area, m².

    This is the integral over r of 2 pi r times the sum of the shares of circles. Exact at 64 to 512
    radii, between them a cubic spline of the shares of discs (relative error of integrals some 1e-6).
    """
    count = int(np.clip(DISCS // max(len(local_xy), 1), KNOTS, MOST_KNOTS))
    knots = radii[-1] * (np.arange(1, count + 1) / count) ** 2
    parts = [(k, part) for k in range(count) for part in portions(len(local_xy))]

    def work(task: tuple[int, slice]) -> float:
        k, part = task
        out = np.empty(part.stop - part.start)
        disc_many(area.grid, local_xy[part], knots[k], out)
        return float(out.sum())

    shares = np.zeros(count + 1)
    shares[0] = len(local_xy)
    for (k, _), total in zip(parts, in_order(work, parts, workers), strict=True):
        shares[k + 1] += total
    spline = CubicSpline(np.sqrt(np.concatenate([[0.0], knots])), shares)
    return np.asarray(np.pi * radii**2 * spline(np.sqrt(radii)))
