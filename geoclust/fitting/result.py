"""The result of a fit: parameters, intervals, and whether the data can tell."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from geoclust.curves.curve import Curve
from geoclust.fitting.contrast import ContrastSurface, LevelSurface
from geoclust.fitting.convergence import Sample
from geoclust.fitting.pair_likelihoods import LikelihoodSurface
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class ClusterFit:
    """A cluster model fitted to a survey.

    Attributes
    ----------
    model
        The fitted model.
    intervals
        95 % interval of each parameter, SI units; empty if none was computed.
    status
        ``ok``, or the reason why the data cannot tell (`geoclust.fitting.status.REASONS`).
    reason
        That reason as a sentence with its figures; empty if the status is ``ok``.
    method
        How it was fitted.
    choices
        Every choice made on the way, by name, with units in the names.
    curve
        The survey's curve that was fitted, and at the same radii
    fitted
        the model's.
    surface
        Contrast, or loss of log-likelihood, over parent intensity and scale.
    draws
        Bootstrap or posterior draws of each parameter, (m,) each.
    seed
        What the random numbers started from.
    sample
        The posterior sample, centres and memberships included; None for moment fits.
    intensity
        What the clusters are thinned by, place by place; None where it is taken as constant.
    """

    model: ClusterModel
    intervals: dict[str, tuple[float, float]]
    status: str
    reason: str
    method: str
    choices: dict[str, object]
    curve: Curve
    fitted: Floats
    surface: ContrastSurface | LevelSurface | LikelihoodSurface | None = None
    draws: dict[str, Floats] = field(default_factory=dict, repr=False)
    seed: int | None = None
    sample: Sample | None = field(default=None, repr=False)
    intensity: Intensity | None = field(default=None, repr=False)

    @property
    def parameters(self) -> dict[str, float]:
        """Fitted parameters by name, SI units."""
        return self.model.parameters

    @property
    def ok(self) -> bool:
        """Whether the data can tell."""
        return self.status == "ok"

    def __repr__(self) -> str:
        lines = [f"<ClusterFit {self.model.name} by {self.method}: {self.status}"]
        for p in self.model.described:
            value = self.parameters[p.name]
            factor, unit = (1e4, "ha⁻¹") if p.per_area else (1.0, p.unit)
            text = f"  {p.name} {value * factor:.4g} {unit}".rstrip("1").rstrip() if unit == "1" else (
                f"  {p.name} {value * factor:.4g} {unit}")  # fmt: skip
            if p.name in self.intervals:
                lo, hi = self.intervals[p.name]
                text += f" (95 %: {lo * factor:.4g} to {hi * factor:.4g})"
            lines.append(text)
        if self.reason:
            lines.append(f"  {self.reason}")
        return "\n".join(lines) + ">"
