"""The Cauchy cluster process: offspring round their centre with a tail so long that it has no variance."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from geoclust.area._cauchy import cauchy_many
from geoclust.area.study_area import StudyArea, portions
from geoclust.models.base import ClusterModel, Floats, Parameter

# of the share per chain of edges taken together, some tens of them: 1e-10 in all
TOLERANCE = 1e-12


@dataclass(frozen=True)
class Cauchy(ClusterModel):
    """Cauchy cluster process.

    Centres are a Poisson process; each has a Poisson number of offspring,
    displaced from it by a bivariate Cauchy distribution of scale `omega`:
    half of them lie within 1.73 omega, but one in ten further out than 10 omega.

    Parameters
    ----------
    parent_intensity
        Centres per square metre.
    omega
        Scale, metres: the density of offspring falls to 35 % of its peak at this distance.
    mean_offspring
        Mean number of points per cluster.
    """

    parent_intensity: float
    omega: float
    mean_offspring: float

    name: ClassVar[str] = "cauchy"
    source: ClassVar[str] = (
        "Jalilian, Guan & Waagepetersen 2013, Scandinavian Journal of Statistics 40: 119-137"
    )
    described: ClassVar[tuple[Parameter, ...]] = (
        Parameter("parent_intensity", "m⁻²", "cluster centres per unit area", per_area=True),
        Parameter("omega", "m", "scale of offspring around their centre; half of them lie within 1.73 omega"),
        Parameter("mean_offspring", "1", "mean number of points per cluster"),
    )
    scale_name: ClassVar[str] = "omega"
    kernel_code: ClassVar[int] = 2
    # the kernel is cut nowhere: this is further than any study area reaches
    reach_in_scales: ClassVar[float] = 1e6
    # centres further out count by their mean; see `far_densities` in `fitting/shares.py`
    margin_in_scales: ClassVar[float] = 8.0

    def offspring_density(self, r: npt.ArrayLike) -> Floats:
        z = (np.asarray(r, dtype=np.float64) / self.omega) ** 2
        return np.asarray((1.0 + z) ** -1.5 / (2.0 * np.pi * self.omega**2))

    @property
    def cubic_tail(self) -> float:
        """The offspring density at distance r is nowhere above this over r³, and tends to it; metres."""
        return self.omega / (2.0 * np.pi)

    def draw_offsets(self, count: int, rng: np.random.Generator) -> Floats:
        # beyond r lie 1 / sqrt(1 + r²/omega²)
        beyond = 1.0 - rng.random(count)
        distance = self.omega * np.sqrt((1.0 - beyond) * (1.0 + beyond)) / beyond
        turn = rng.uniform(0.0, 2.0 * np.pi, count)
        return np.column_stack([distance * np.cos(turn), distance * np.sin(turn)])

    def reach(self, share: float) -> float:
        return float(self.omega * np.sqrt(1.0 / share**2 - 1.0)) if share < 1 else 0.0

    def sibling_density(self, r: npt.ArrayLike) -> Floats:
        z = (np.asarray(r, dtype=np.float64) / (2.0 * self.omega)) ** 2
        return np.asarray((1.0 + z) ** -1.5 / (8.0 * np.pi * self.omega**2))

    def sibling_distribution(self, r: npt.ArrayLike) -> Floats:
        # 1 - (1 + z)^(-1/2), without cancellation
        z = (np.asarray(r, dtype=np.float64) / (2.0 * self.omega)) ** 2
        return np.asarray(-np.expm1(-0.5 * np.log1p(z)))

    @staticmethod
    def area_shares(area: StudyArea, centres: Floats, scale: float) -> Floats:
        at = np.ascontiguousarray(centres)
        out = np.empty(len(at))
        for s in portions(len(at), 2_000):
            cauchy_many(area.chains, at[s], float(scale), TOLERANCE, out[s])
        return out
