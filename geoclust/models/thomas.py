"""The Thomas process: offspring scattered round their centre as a Gaussian."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.models.base import ClusterModel, Floats, Parameter


@dataclass(frozen=True)
class Thomas(ClusterModel):
    """Thomas process.

    Centres are a Poisson process; each has a Poisson number of offspring,
    displaced from it by a Gaussian with standard deviation `sigma` per axis.

    Parameters
    ----------
    parent_intensity
        Centres per square metre.
    sigma
        Standard deviation per axis, metres.
    mean_offspring
        Mean number of points per cluster.

    Examples
    --------
    >>> model = Thomas(parent_intensity=1e-4, sigma=15.0, mean_offspring=6.0)
    >>> round(float(model.pair_correlation(0.0)), 4)
    4.5368
    """

    parent_intensity: float
    sigma: float
    mean_offspring: float

    name: ClassVar[str] = "thomas"
    source: ClassVar[str] = "Thomas 1949, Biometrika 36: 18-25; Diggle 1983"
    described: ClassVar[tuple[Parameter, ...]] = (
        Parameter("parent_intensity", "m⁻²", "cluster centres per unit area", per_area=True),
        Parameter("sigma", "m", "standard deviation of offspring around their centre, per axis"),
        Parameter("mean_offspring", "1", "mean number of points per cluster"),
    )

    scale_name: ClassVar[str] = "sigma"
    kernel_code: ClassVar[int] = 0
    # beyond 4.5 sigma lie 4e-5 of the offspring
    reach_in_scales: ClassVar[float] = 4.5
    # and so far outside a centre still matters
    margin_in_scales: ClassVar[float] = 4.5

    def offspring_density(self, r: npt.ArrayLike) -> Floats:
        s2 = self.sigma**2
        return np.exp(-(np.asarray(r, dtype=np.float64) ** 2) / (2 * s2)) / (2 * np.pi * s2)

    def draw_offsets(self, count: int, rng: np.random.Generator) -> Floats:
        return rng.normal(0.0, self.sigma, (count, 2))

    def reach(self, share: float) -> float:
        return float(self.sigma * np.sqrt(-2.0 * np.log(share))) if share < 1 else 0.0

    def sibling_density(self, r: npt.ArrayLike) -> Floats:
        s2 = self.sigma**2
        return np.exp(-(np.asarray(r, dtype=np.float64) ** 2) / (4 * s2)) / (4 * np.pi * s2)

    def sibling_distribution(self, r: npt.ArrayLike) -> Floats:
        return -np.expm1(-(np.asarray(r, dtype=np.float64) ** 2) / (4 * self.sigma**2))

    @staticmethod
    def area_shares(area: StudyArea, centres: Floats, scale: float) -> Floats:
        return area.gaussian_shares(centres + area.origin, scale, workers=1)
