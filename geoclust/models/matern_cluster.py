"""The Matérn cluster process: offspring uniform in a disc round their centre."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from geoclust.area._disc import disc_many
from geoclust.area.study_area import StudyArea
from geoclust.models.base import ClusterModel, Floats, Parameter


@dataclass(frozen=True)
class MaternCluster(ClusterModel):
    """Matérn cluster process.

    Centres are a Poisson process; each has a Poisson number of offspring,
    uniform in the disc of radius `radius` round it.

    Parameters
    ----------
    parent_intensity
        Centres per square metre.
    radius
        Radius of the disc, metres.
    mean_offspring
        Mean number of points per cluster.
    """

    parent_intensity: float
    radius: float
    mean_offspring: float

    name: ClassVar[str] = "matern-cluster"
    source: ClassVar[str] = "Matérn 1960, Spatial Variation"
    described: ClassVar[tuple[Parameter, ...]] = (
        Parameter("parent_intensity", "m⁻²", "cluster centres per unit area", per_area=True),
        Parameter("radius", "m", "radius of a cluster"),
        Parameter("mean_offspring", "1", "mean number of points per cluster"),
    )
    scale_name: ClassVar[str] = "radius"
    kernel_code: ClassVar[int] = 1
    reach_in_scales: ClassVar[float] = 1.0
    # no centre further out than its radius can have offspring inside; the rest is room for the radius to grow
    margin_in_scales: ClassVar[float] = 1.5

    def offspring_density(self, r: npt.ArrayLike) -> Floats:
        at = np.asarray(r, dtype=np.float64)
        return np.where(at <= self.radius, 1.0 / (np.pi * self.radius**2), 0.0)

    def draw_offsets(self, count: int, rng: np.random.Generator) -> Floats:
        distance = self.radius * np.sqrt(rng.random(count))
        turn = rng.uniform(0.0, 2.0 * np.pi, count)
        return np.column_stack([distance * np.cos(turn), distance * np.sin(turn)])

    def reach(self, share: float) -> float:
        return float(self.radius * np.sqrt(max(1.0 - share, 0.0)))

    def sibling_density(self, r: npt.ArrayLike) -> Floats:
        z = np.minimum(np.asarray(r, dtype=np.float64) / (2.0 * self.radius), 1.0)
        return 2.0 / (np.pi * self.radius) ** 2 * (np.arccos(z) - z * np.sqrt(1.0 - z * z))

    def sibling_distribution(self, r: npt.ArrayLike) -> Floats:
        # integral of 2 pi r h, with z = r / 2R; complete at z = 1
        z = np.minimum(np.asarray(r, dtype=np.float64) / (2.0 * self.radius), 1.0)
        root = np.sqrt(1.0 - z * z)
        return 2.0 + ((8.0 * z * z - 4.0) * np.arccos(z) - 2.0 * np.arcsin(z) + 4.0 * z * root**3
                      - 6.0 * z * root) / np.pi  # fmt: skip

    @staticmethod
    def area_shares(area: StudyArea, centres: Floats, scale: float) -> Floats:
        out = np.empty(len(centres))
        disc_many(area.grid, np.ascontiguousarray(centres), scale, out)
        return out
