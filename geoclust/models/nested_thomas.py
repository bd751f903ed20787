"""The nested Thomas process: small clusters round centres that are themselves clustered."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.errors import not_allowed
from geoclust.models.base import ClusterModel, Floats, Parameter
from geoclust.models.thomas import Thomas


@dataclass(frozen=True)
class NestedThomas(ClusterModel):
    """Nested Thomas process.

    Outer centres are a Poisson process. Each has a Poisson number of inner
    centres, displaced from it by a Gaussian with standard deviation
    `outer_sigma` per axis; each inner centre has a Poisson number of points,
    displaced by a Gaussian with `inner_sigma`. With N(r; v) the Gaussian density
    of variance v per axis, g(r) = 1 + N(r; 2 inner²)/inner_intensity
    + N(r; 2 outer² + 2 inner²)/outer_intensity.

    Parameters
    ----------
    outer_intensity
        Outer centres per square metre.
    outer_sigma
        Standard deviation of inner centres round their outer centre, per axis, metres; the larger one.
    inner_intensity
        Inner centres per square metre, over all outer centres.
    inner_sigma
        Standard deviation of points round their inner centre, per axis, metres.
    mean_offspring
        Mean number of points per inner centre.

    Examples
    --------
    >>> model = NestedThomas(
    ...     outer_intensity=5e-5, outer_sigma=60.0, inner_intensity=4e-4, inner_sigma=15.0, mean_offspring=5.0
    ... )
    >>> model.inner_per_outer, round(float(model.pair_correlation(0.0)), 4)
    (8.0, 2.3003)
    """

    outer_intensity: float
    outer_sigma: float
    inner_intensity: float
    inner_sigma: float
    mean_offspring: float

    name: ClassVar[str] = "nested-thomas"
    source: ClassVar[str] = "Stoyan & Stoyan 1996; Thomas 1949"
    described: ClassVar[tuple[Parameter, ...]] = (
        Parameter("outer_intensity", "m⁻²", "outer centres per unit area", per_area=True),
        Parameter("outer_sigma", "m", "standard deviation of inner centres around their outer centre, "
                                      "per axis"),
        Parameter("inner_intensity", "m⁻²", "inner centres per unit area", per_area=True),
        Parameter("inner_sigma", "m", "standard deviation of points around their inner centre, per axis"),
        Parameter("mean_offspring", "1", "mean number of points per inner centre"),
    )  # fmt: skip
    scale_name: ClassVar[str] = "inner_sigma"
    intensity_names: ClassVar[tuple[str, ...]] = ("outer_intensity", "inner_intensity")
    # its centres are no Poisson process, which is what the samplers take them for
    sampled: ClassVar[bool] = False

    def __post_init__(self) -> None:
        super().__post_init__()
        if not self.outer_sigma > self.inner_sigma:
            raise not_allowed("outer_sigma", f"above inner_sigma ({self.inner_sigma:g} m)", self.outer_sigma)

    @property
    def inner_per_outer(self) -> float:
        """Mean number of inner centres round an outer centre."""
        return self.inner_intensity / self.outer_intensity

    @property
    def spread(self) -> float:
        return float(np.hypot(self.outer_sigma, self.inner_sigma))

    @property
    def levels(self) -> tuple[ClusterModel, ...]:
        return (
            Thomas(self.outer_intensity, self.spread, self.inner_per_outer * self.mean_offspring),
            self._inner,
        )

    @property
    def _inner(self) -> Thomas:
        return Thomas(self.inner_intensity, self.inner_sigma, self.mean_offspring)

    def offspring_density(self, r: npt.ArrayLike) -> Floats:
        return self._inner.offspring_density(r)

    def draw_offsets(self, count: int, rng: np.random.Generator) -> Floats:
        return self._inner.draw_offsets(count, rng)

    def reach(self, share: float) -> float:
        return self._inner.reach(share)

    def sibling_density(self, r: npt.ArrayLike) -> Floats:
        return self._inner.sibling_density(r)

    def sibling_distribution(self, r: npt.ArrayLike) -> Floats:
        return self._inner.sibling_distribution(r)

    @staticmethod
    def area_shares(area: StudyArea, centres: Floats, scale: float) -> Floats:
        return Thomas.area_shares(area, centres, scale)

    def draw_centres(self, area: StudyArea, missed: float, rng: np.random.Generator) -> Floats:
        around = Thomas(self.outer_intensity, self.outer_sigma, self.inner_per_outer)
        expected = self.inner_intensity * area.area
        wide = area.dilated(around.reach(min(missed / max(expected, missed), 0.5)))
        outer = around.draw_centres(wide, missed, rng) + (wide.origin - area.origin)
        each = rng.poisson(self.inner_per_outer, len(outer))
        inner = np.repeat(outer, each, axis=0) + around.draw_offsets(int(each.sum()), rng)
        return np.ascontiguousarray(inner[area.local_contains(inner)])
