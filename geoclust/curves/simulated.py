"""Curves of simulated patterns: the loop under every test by simulation."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.curve import Curve
from geoclust.curves.nearest import NearestDistances, Places, beyond
from geoclust.curves.second_order import EDGE_WEIGHTS, SecondOrder, checked_radii, default_bandwidth
from geoclust.errors import InputError, not_allowed
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]
Progress = Callable[[str, int, int], None]

PAIRED = ("K", "L", "g")
NEAREST = ("G", "F", "J")
FUNCTIONS = PAIRED + NEAREST


@dataclass(frozen=True, eq=False)
class Drawn:
    """A pattern with the factors of its points, one over the intensity there, if they vary.

    Attributes
    ----------
    points
        (n, 2) local coordinates of the study area.
    factors
        (n,) square metres, or None where the intensity is constant.
    """

    points: Floats
    factors: Floats | None = None


@dataclass(frozen=True, eq=False)
class Summaries:
    """Which curves are taken of a pattern, and how.

    Attributes
    ----------
    area
        The study area.
    functions
        Names among `FUNCTIONS`.
    radii
        (k,) distances in metres.
    bandwidth
        Of g, in metres.
    edge_weight
        Of K, L and g; G, F and J are Kaplan-Meier estimates.
    places
        Test places of F, if F or J is wanted.
    """

    area: StudyArea
    functions: tuple[str, ...]
    radii: Floats
    bandwidth: float | None
    edge_weight: str
    places: Places | None

    @classmethod
    def of_survey(
        cls,
        survey: Survey,
        functions: Iterable[str],
        radii: npt.ArrayLike,
        *,
        bandwidth: float | None = None,
        edge_weight: str = "isotropic",
    ) -> Summaries:
        """Check the choices for a survey; the bandwidth of g is 0.15 mean spacings if not given."""
        wanted = tuple(dict.fromkeys(functions))
        for name in wanted:
            if name not in FUNCTIONS:
                raise not_allowed("function", FUNCTIONS, name)
        if edge_weight not in EDGE_WEIGHTS:
            raise not_allowed("edge_weight", EDGE_WEIGHTS, edge_weight)
        if bandwidth is not None and not (np.isfinite(bandwidth) and bandwidth > 0):
            raise not_allowed("bandwidth", "a positive number of metres", bandwidth)
        at = checked_radii(radii)
        if survey.n < 2:
            raise InputError(
                f"The survey has {survey.n} point(s); distances between points need at least two."
            )
        width = None
        if "g" in wanted:
            width = default_bandwidth(survey.intensity) if bandwidth is None else float(bandwidth)
        places = Places.over(survey.area, beyond(at)) if {"F", "J"} & set(wanted) else None
        return cls(survey.area, wanted, at, width, edge_weight, places)

    def curves(self, drawn: Drawn, workers: int | None = 1) -> dict[str, Curve]:
        """The curves of a pattern, by name."""
        out: dict[str, Curve] = {}
        if set(PAIRED) & set(self.functions):
            pairs = SecondOrder.of_points(
                drawn.points, self.area, self.radii, self.bandwidth, self.edge_weight, workers, drawn.factors
            )
            takes: dict[str, Callable[[], Curve]] = {"K": pairs.k, "L": pairs.l, "g": pairs.g}
            out |= {name: takes[name]() for name in PAIRED if name in self.functions}
        if set(NEAREST) & set(self.functions):
            near = NearestDistances.of_points(
                drawn.points, self.area, self.radii, "kaplan-meier", self.places
            )
            takes = {"G": near.g, "F": near.f, "J": near.j}
            out |= {name: takes[name]() for name in NEAREST if name in self.functions}
        return {name: out[name] for name in self.functions}


def simulated_curves(
    summaries: Summaries,
    draw: Callable[[np.random.Generator], Drawn],
    seeds: Sequence[np.random.Generator],
    *,
    workers: int | None = None,
    progress: Progress | None = None,
    label: str = "simulated patterns",
) -> dict[str, Floats]:
    """Draw one pattern a seed and take its curves.

    Parameters
    ----------
    summaries
        Which curves.
    draw
        Draws a pattern; called in threads.
    seeds
        One generator a pattern, so that the answer does not depend on `workers`.
    workers
        Threads; one a core if not given.
    progress
        Called with the label, patterns done and patterns in all.

    Returns
    -------
    dict
        (patterns, k) values under the name of each function.
    """

    def one(seed: np.random.Generator) -> list[Floats]:
        return [curve.values for curve in summaries.curves(draw(seed)).values()]

    count = len(seeds)
    out = {name: np.empty((count, len(summaries.radii))) for name in summaries.functions}
    for k, rows in enumerate(in_order(one, seeds, workers)):
        for name, values in zip(summaries.functions, rows, strict=True):
            out[name][k] = values
        if progress is not None:
            progress(label, k + 1, count)
    return out


def uniform_draw(area: StudyArea, n: int) -> Callable[[np.random.Generator], Drawn]:
    """Draws n uniform points: complete randomness, given their number."""

    def draw(seed: np.random.Generator) -> Drawn:
        return Drawn(area.local_uniform_points(n, seed))

    return draw
