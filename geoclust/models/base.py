"""What every cluster model says about itself.

A model is a frozen dataclass in a file of its own: its parameters with units
and bounds, the density of an offspring round its centre and a way to draw
one, and the density h and distribution H of the distance between two
siblings. Fitting, simulation, location and report work from that alone.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
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

    `per_area` marks intensities: m⁻² inside, shown per hectare.
    """

    name: str
    unit: str
    meaning: str
    per_area: bool = False


class ClusterModel(ABC):
    """A stationary cluster process: Poisson centres, Poisson numbers of offspring round each."""

    name: ClassVar[str]
    source: ClassVar[str]
    described: ClassVar[tuple[Parameter, ...]]
    scale_name: ClassVar[str]
    # what the samplers need: the code of the kernel in their compiled loops, where they cut it
    # off, and how far outside the study area a centre may still matter, both in scales
    kernel_code: ClassVar[int]
    reach_in_scales: ClassVar[float]
    margin_in_scales: ClassVar[float]

    parent_intensity: float
    mean_offspring: float

    def __post_init__(self) -> None:
        for f in fields(self):  # type: ignore[arg-type]
            value = getattr(self, f.name)
            if not (np.isfinite(value) and value > 0):
                raise not_allowed(f.name, "a positive finite number", value)
            object.__setattr__(self, f.name, float(value))

    @property
    def parameters(self) -> dict[str, float]:
        """Parameters by name, in SI units."""
        return {p.name: getattr(self, p.name) for p in self.described}

    @property
    def intensity(self) -> float:
        """Points per square metre."""
        return self.parent_intensity * self.mean_offspring

    @classmethod
    def of(cls, parent_intensity: float, scale: float, mean_offspring: float) -> Self:
        """The model with these parameters, whatever its scale is called."""
        named = {
            "parent_intensity": parent_intensity,
            "mean_offspring": mean_offspring,
            cls.scale_name: scale,
        }
        return cls(**named)

    @property
    def scale(self) -> float:
        """The scale parameter, metres."""
        return self.parameters[self.scale_name]

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
        """Share of the offspring of centres (n, 2, local coordinates) that fall in the study area."""

    def pair_correlation(self, r: npt.ArrayLike) -> Floats:
        """g(r) = 1 + h(r)/rho."""
        return 1.0 + self.sibling_density(r) / self.parent_intensity

    def k_function(self, r: npt.ArrayLike) -> Floats:
        """K(r) = pi r² + H(r)/rho, square metres."""
        at = np.asarray(r, dtype=np.float64)
        return np.pi * at**2 + self.sibling_distribution(at) / self.parent_intensity

    def l_function(self, r: npt.ArrayLike) -> Floats:
        """L(r), the square root of K/pi, metres."""
        return np.sqrt(self.k_function(r) / np.pi)
