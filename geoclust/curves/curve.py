"""A summary function as an object: radii, values, what theory says, and how it was estimated."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Curve:
    """A summary function of a point pattern.

    Attributes
    ----------
    function
        ``K``, ``L``, ``g``, ``G``, ``F`` or ``J``.
    radii
        (k,) distances in metres.
    values
        (k,) the estimate; not a number where nothing can be estimated.
    theory
        (k,) the value under complete randomness.
    unit
        Unit of the values: ``m²``, ``m`` or ``1``.
    edge_weight
        How pairs were weighted for the boundary, or how it was allowed for.
    bandwidth
        Half width of the kernel in metres, where there is one.
    lower, upper
        (k,) limits, where there are any.
    interval
        What the limits are, in words.
    bandwidth_by
        How the bandwidth was chosen, in words.
    intensity
        What the pairs are weighted by, in words; None where the intensity is taken as constant.
    """

    function: str
    radii: Floats
    values: Floats
    theory: Floats
    unit: str
    edge_weight: str
    bandwidth: float | None = None
    lower: Floats | None = None
    upper: Floats | None = None
    interval: str | None = None
    bandwidth_by: str | None = None
    intensity: str | None = None

    def __repr__(self) -> str:
        parts = [f"{len(self.radii)} radii to {self.radii[-1]:.4g} m", _boundary(self.edge_weight)]
        if self.bandwidth is not None:
            chosen = "" if self.bandwidth_by is None else f" ({self.bandwidth_by})"
            parts.append(f"bandwidth {self.bandwidth:.4g} m{chosen}")
        if self.intensity is not None:
            parts.append(f"weighted by the intensity: {self.intensity}")
        if self.interval is not None:
            parts.append(self.interval)
        return f"<Curve {self.function}(r) in {self.unit}: {', '.join(parts)}>"

    def with_limits(self, lower: Floats, upper: Floats, interval: str) -> Curve:
        """The same curve with limits round it."""
        return replace(self, lower=lower, upper=upper, interval=interval)

    def to_frame(self) -> pd.DataFrame:
        """Columns function, r_m, estimate, theory, lower, upper; one row a radius."""
        import pandas as pd

        nothing = np.full(len(self.radii), np.nan)
        return pd.DataFrame(
            {
                "function": self.function,
                "r_m": self.radii,
                "estimate": self.values,
                "theory": self.theory,
                "lower": nothing if self.lower is None else self.lower,
                "upper": nothing if self.upper is None else self.upper,
            }
        )

    def plot(self, ax: Axes | None = None, **line: Any) -> Axes:
        """Draw the curve with its limits and what complete randomness would give.

        Parameters
        ----------
        ax
            Matplotlib axes to draw on; new ones if not given.
        **line
            Passed on to the line of the estimate.
        """
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(6, 4), layout="constrained").add_subplot()
        # L is flat under randomness once r is taken off, so departures are easier to see
        off = self.radii if self.function == "L" else np.zeros_like(self.radii)
        name = "L(r) − r" if self.function == "L" else f"{self.function}(r)"
        if self.lower is not None and self.upper is not None:
            ax.fill_between(
                self.radii, self.lower - off, self.upper - off, color="#c9c2b4", linewidth=0,
                label=self.interval or "limits",
            )  # fmt: skip
        ax.plot(self.radii, self.theory - off, color="#6b6459", linewidth=1, linestyle=(0, (4, 3)),
                label="complete randomness")  # fmt: skip
        style: dict[str, Any] = {"color": "#1f4e5f", "linewidth": 1.8, "label": "survey"}
        ax.plot(self.radii, self.values - off, **{**style, **line})
        ax.set_xlabel("distance r (m)")
        ax.set_ylabel(name if self.unit == "1" else f"{name} ({self.unit})")
        ax.margins(x=0)
        return ax


def _boundary(edge_weight: str) -> str:
    """How the boundary was allowed for, in words."""
    return "Kaplan-Meier estimate" if edge_weight == "kaplan-meier" else f"{edge_weight} edge weight"
