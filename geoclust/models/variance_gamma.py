"""The variance-gamma cluster process: a Gaussian whose variance differs from offspring to offspring.

The displacement is Gaussian with a variance drawn anew for each offspring from
a gamma distribution of shape nu' + 1 and mean 2 (nu' + 1) scale². Densities are
modified Bessel functions of the second kind; their integrals over discs are
closed, as the derivative of x^a K_a(x) is -x^a K_(a-1)(x) (Abramowitz & Stegun
1964, 9.6.28).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq
from scipy.special import gammaln, kve

from geoclust.area.study_area import StudyArea
from geoclust.models.base import ClusterModel, Floats, Parameter

# step of the trapezoid rule over the logarithm of the variance, and the share left out at either end
LOG_STEP = 0.25
LEFT_OUT = 1e-11
# so many densities are interpolated, between nodes that lie so far apart in the logarithm; beyond so
# many scales there is nothing
MANY = 1000
NODE_STEP = 0.06
FAR = 300.0


@dataclass(frozen=True)
class VarianceGamma(ClusterModel):
    """Variance-gamma cluster process.

    Centres are a Poisson process; each has a Poisson number of offspring,
    displaced from it by a variance-gamma distribution in the plane: small
    `shape` gives a dense core with wide tails, large `shape` a Gaussian. At shape
    -1/4, g is 1 plus an exponential function of the distance.

    Parameters
    ----------
    parent_intensity
        Centres per square metre.
    scale
        Scale of the kernel, metres; the standard deviation per axis is scale √(2 (shape + 1)).
    shape
        The index nu' of the kernel, above -1/2.
    mean_offspring
        Mean number of points per cluster.
    """

    parent_intensity: float
    scale: float
    shape: float
    mean_offspring: float

    name: ClassVar[str] = "variance-gamma"
    source: ClassVar[str] = (
        "Jalilian, Guan & Waagepetersen 2013, Scandinavian Journal of Statistics 40: 119-137"
    )
    described: ClassVar[tuple[Parameter, ...]] = (
        Parameter("parent_intensity", "m⁻²", "cluster centres per unit area", per_area=True),
        Parameter("scale", "m", "scale of offspring around their centre; standard deviation per axis is "
                                "scale √(2 (shape + 1))"),
        Parameter("shape", "1", "shape of a cluster: near −½ a dense core with wide tails, large a Gaussian",
                  above=-0.5, search=(-0.45, 10.0)),
        Parameter("mean_offspring", "1", "mean number of points per cluster"),
    )  # fmt: skip
    scale_name: ClassVar[str] = "scale"
    # the compiled kernels of the samplers have no shape
    sampled: ClassVar[bool] = False

    @classmethod
    def of(cls, parent_intensity: float, scale: float, mean_offspring: float) -> VarianceGamma:
        """The model with these parameters and an exponential g, shape -1/4."""
        return cls(parent_intensity, scale, -0.25, mean_offspring)

    @property
    def spread(self) -> float:
        return float(self.scale * np.sqrt(2.0 * (self.shape + 1.0)))

    def offspring_density(self, r: npt.ArrayLike) -> Floats:
        return _density(np.asarray(r, dtype=np.float64) / self.scale, self.shape) / self.scale**2

    def draw_offsets(self, count: int, rng: np.random.Generator) -> Floats:
        variance = rng.gamma(self.shape + 1.0, 2.0 * self.scale**2, count)
        return rng.standard_normal((count, 2)) * np.sqrt(variance)[:, None]

    def reach(self, share: float) -> float:
        if share >= 1:
            return 0.0

        def excess(x: float) -> float:
            return float(_log_beyond(np.asarray(x), self.shape)) - float(np.log(share))

        high = 1.0
        while excess(high) > 0:
            high *= 2.0
        return self.scale * float(brentq(excess, 0.0, high, xtol=1e-12))

    # the difference of two siblings has twice the gamma variable: index 2 nu' + 1
    def sibling_density(self, r: npt.ArrayLike) -> Floats:
        at = np.asarray(r, dtype=np.float64) / self.scale
        return _quick_density(at, 2.0 * self.shape + 1.0) / self.scale**2

    def sibling_distribution(self, r: npt.ArrayLike) -> Floats:
        at = np.asarray(r, dtype=np.float64) / self.scale
        return np.asarray(-np.expm1(_log_beyond(at, 2.0 * self.shape + 1.0)))

    @staticmethod
    def area_shares(area: StudyArea, centres: Floats, scale: float) -> Floats:
        return VarianceGamma.of(1.0, scale, 1.0).shares_inside(area, centres)

    def shares_inside(self, area: StudyArea, centres: Floats) -> Floats:
        # the gamma distribution over the logarithm of the variance, in units of its own scale
        a = self.shape + 1.0
        low = (np.log(LEFT_OUT) + gammaln(a + 1.0)) / a
        logs = np.arange(low, np.log(3.0 * a + 40.0), LOG_STEP)
        weights = np.exp(a * logs - np.exp(logs))
        out = np.zeros(len(centres))
        for log, weight in zip(logs, weights / weights.sum(), strict=True):
            sigma = float(np.sqrt(2.0 * np.exp(log)) * self.scale)
            out += weight * area.gaussian_shares(centres + area.origin, sigma, workers=1)
        return out


def _quick_density(x: Floats, index: float) -> Floats:
    """The same for many distances: cubic in logarithms between some hundred nodes, off by less than 1e-5."""
    if x.size < MANY:
        return _density(x, index)
    low, high = float(np.min(x, where=x > 0, initial=1.0)), min(float(x.max()), FAR)
    if not low < high:
        return _density(x, index)
    count = int(np.ceil(np.log(high / low) / NODE_STEP)) + 2
    nodes = np.linspace(np.log(low), np.log(high), count)
    spline = CubicSpline(nodes, np.log(_density(np.exp(nodes), index)))
    inside = (x > 0) & (x <= high)
    value = np.exp(spline(np.log(np.where(inside, x, high))))
    return np.asarray(np.where(inside, value, np.where(x > 0, 0.0, _density(np.zeros(1), index))))


def _density(x: Floats, index: float) -> Floats:
    """x^index K_index(x) / (pi 2^(index + 1) Gamma(index + 1)), the density at distance x in scales."""
    constant = -gammaln(index + 1.0) - (index + 1.0) * np.log(2.0) - np.log(np.pi)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        value = np.exp(constant + index * np.log(x) + _log_bessel(x, index))
    peak = 1.0 / (4.0 * np.pi * index) if index > 0 else np.inf
    # so near the centre that the Bessel function overflows, the density is that of the centre
    return np.asarray(np.where(np.isfinite(value) & (x > 0), value, peak))


def _log_beyond(x: Floats, index: float) -> Floats:
    """Logarithm of the share beyond x scales: x^a K_a(x) / (2^(a-1) Gamma(a)) with a = index + 1."""
    a = index + 1.0
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        value = a * np.log(x) + _log_bessel(x, a) - (a - 1.0) * np.log(2.0) - gammaln(a)
    return np.asarray(np.where(np.isfinite(value), np.minimum(value, 0.0), np.where(x > 1.0, -np.inf, 0.0)))


def _log_bessel(x: Floats, index: float) -> Floats:
    """Logarithm of K_index(x); infinite where it overflows, near zero.

    From index 30 on by the expansion for large orders (Abramowitz & Stegun 1964, 9.7.8), whose fifth
    term is below 1e-7 there: the function itself would overflow far from zero.
    """
    if index < 30.0:
        return np.asarray(np.log(kve(index, x)) - x)
    root = np.sqrt(1.0 + (x / index) ** 2)
    p = 1.0 / root
    terms = (
        (3 * p - 5 * p**3) / 24,
        (81 * p**2 - 462 * p**4 + 385 * p**6) / 1152,
        (30375 * p**3 - 369603 * p**5 + 765765 * p**7 - 425425 * p**9) / 414720,
    )
    series = 1.0 - terms[0] / index + terms[1] / index**2 - terms[2] / index**3
    decay = index * (root + np.log(x / index / (1.0 + root)))
    return np.asarray(0.5 * np.log(0.5 * np.pi / index) - decay - 0.5 * np.log(root) + np.log(series))
