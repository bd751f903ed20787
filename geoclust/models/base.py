"""What every cluster model says about itself.

A model is a frozen dataclass in a file of its own: its parameters with units
and bounds, the density of an offspring round its centre and a way to draw
one, and the density h and distribution H of the distance between two
siblings. Fitting, simulation, location and report work from that alone. A
process of several levels names them, each as a model of one level.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping
from dataclasses import dataclass, fields
from typing import ClassVar, Self

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.errors import not_allowed

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Parameter:
    """Name, unit and meaning of one parameter of a model.

    `per_area` marks intensities: m⁻² inside, shown per hectare. Every allowed value is greater than
    `above`; `search` are the limits of a search where they do not follow from the survey.
    """

    name: str
    unit: str
    meaning: str
    per_area: bool = False
    above: float = 0.0
    search: tuple[float, float] | None = None


class ClusterModel(ABC):
    """A stationary cluster process: Poisson centres, Poisson numbers of offspring round each."""

    name: ClassVar[str]
    source: ClassVar[str]
    described: ClassVar[tuple[Parameter, ...]]
    scale_name: ClassVar[str]
    # intensities of the centres of each level, the outermost first; points belong to the last
    intensity_names: ClassVar[tuple[str, ...]] = ("parent_intensity",)
    # whether centres and parameters can be sampled together (posterior, location)
    sampled: ClassVar[bool] = True
    # what the samplers need: the code of the kernel in their compiled loops, where they cut it
    # off, and how far outside the study area a centre may still matter, both in scales
    kernel_code: ClassVar[int]
    reach_in_scales: ClassVar[float]
    margin_in_scales: ClassVar[float]

    parent_intensity: float
    mean_offspring: float
    # the scale parameter under any name, metres; with several levels that of the points round their centre
    scale: float

    def __post_init__(self) -> None:
        above = {p.name: p.above for p in self.described}
        for f in fields(self):  # type: ignore[arg-type]
            value, least = getattr(self, f.name), above[f.name]
            if not (np.isfinite(value) and value > least):
                allowed = "a positive finite number" if least == 0 else f"a finite number above {least:g}"
                raise not_allowed(f.name, allowed, value)
            object.__setattr__(self, f.name, float(value))
        if self.scale_name != "scale":
            object.__setattr__(self, "scale", getattr(self, self.scale_name))

    @property
    def parameters(self) -> dict[str, float]:
        """Parameters by name, in SI units."""
        return {p.name: getattr(self, p.name) for p in self.described}

    @property
    def intensity(self) -> float:
        """Points per square metre."""
        return self.centre_intensity * self.mean_offspring

    @property
    def centre_intensity(self) -> float:
        """Centres that points belong to per square metre: those of the innermost level."""
        return float(getattr(self, self.intensity_names[-1]))

    @classmethod
    def of(cls, parent_intensity: float, scale: float, mean_offspring: float) -> Self:
        """The model with these parameters, whatever its scale is called."""
        named = {
            "parent_intensity": parent_intensity,
            "mean_offspring": mean_offspring,
            cls.scale_name: scale,
        }
        return cls(**named)

    @classmethod
    def with_intensity(cls, values: Mapping[str, float], intensity: float) -> Self:
        """The model with these parameters, and as many offspring as make up the intensity of the points."""
        named = {**values, "mean_offspring": intensity / values[cls.intensity_names[-1]]}
        return cls(**named)

    @property
    def spread(self) -> float:
        """Size of the largest clusters, metres: what the range of distances of a fit follows."""
        return self.scale

    @property
    def levels(self) -> tuple[ClusterModel, ...]:
        """One model of one level for each level, outermost first: their excesses over randomness add up."""
        return (self,)

    @abstractmethod
    def offspring_density(self, r: npt.ArrayLike) -> Floats:
        """Density of an offspring at distance r of its centre, per square metre."""

    @abstractmethod
    def draw_offsets(self, count: int, rng: np.random.Generator) -> Floats:
        """Draw (count, 2) offsets of offspring from their centre, metres."""

    @abstractmethod
    def reach(self, share: float) -> float:
        """Distance from the centre beyond which less than `share` of the offspring fall, metres."""

    @abstractmethod
    def sibling_density(self, r: npt.ArrayLike) -> Floats:
        """h(r): density of the difference of two siblings at distance r, per square metre."""

    @abstractmethod
    def sibling_distribution(self, r: npt.ArrayLike) -> Floats:
        """H(r): probability that two siblings are at most r apart."""

    @staticmethod
    @abstractmethod
    def area_shares(area: StudyArea, centres: Floats, scale: float) -> Floats:
        """Share of the offspring of centres (n, 2, local coordinates) that fall in the study area.

        The kernel is that of `of` with this scale.
        """

    def shares_inside(self, area: StudyArea, centres: Floats) -> Floats:
        """The same shares for this model."""
        return type(self).area_shares(area, centres, self.scale)

    def draw_centres(self, area: StudyArea, missed: float, rng: np.random.Generator) -> Floats:
        """Draw the centres that lie in an area, local coordinates; a Poisson process with one level.

        Of centres that have centres of their own, fewer than `missed` are expected to be left out.
        """
        return area.local_uniform_points(int(rng.poisson(self.parent_intensity * area.area)), rng)

    def pair_correlation(self, r: npt.ArrayLike) -> Floats:
        """g(r): one plus h(r)/rho, summed over the levels."""
        return 1.0 + sum_of_levels(self, lambda level: level.sibling_density(r))

    def k_function(self, r: npt.ArrayLike) -> Floats:
        """K(r): pi r² plus H(r)/rho, summed over the levels; square metres."""
        at = np.asarray(r, dtype=np.float64)
        return np.pi * at**2 + sum_of_levels(self, lambda level: level.sibling_distribution(at))

    def l_function(self, r: npt.ArrayLike) -> Floats:
        """L(r), the square root of K/pi, metres."""
        return np.sqrt(self.k_function(r) / np.pi)


def sum_of_levels(model: ClusterModel, curve: Callable[[ClusterModel], Floats]) -> Floats:
    """A curve of each level over the intensity of its centres, summed."""
    parts = [curve(level) / level.parent_intensity for level in model.levels]
    return np.asarray(sum(parts[1:], parts[0]))
