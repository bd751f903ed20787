"""What the assessment of a fit is made of: refits, functions of a pattern, and ranks of two stages."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.curve import Curve
from geoclust.curves.envelopes import extreme_rank_lengths
from geoclust.curves.nearest import NearestDistances, Places, beyond
from geoclust.curves.randomness import loosmore_ford
from geoclust.fitting.moments import ContrastChoices, factors_of, fit_points
from geoclust.fitting.result import ClusterFit
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel

Floats = npt.NDArray[np.float64]

FUNCTIONS = ("G", "F", "J")
STATISTICS = ("extreme-rank-length", "squared-deviation")
LEVEL = 0.95
# radii of each function, crowded where points are near each other
RADII = 40
# test places of F and J
PLACES = 2_000


@dataclass(frozen=True, eq=False)
class Refit:
    """How every pattern is fitted: always the same way, survey included.

    Attributes
    ----------
    kind
        The model.
    area
        The study area.
    choices
        Curve, range, power and bandwidth, all fixed.
    intensity
        Refitted to every pattern as well; None if it is constant.
    """

    kind: type[ClusterModel]
    area: StudyArea
    choices: ContrastChoices
    intensity: Intensity | None = None

    @classmethod
    def like(cls, survey: Survey, fit: ClusterFit) -> Refit:
        """The contrast of the fit, or the one on g that another method started from."""
        contrast = fit.method == "minimum-contrast"
        curve = fit.curve
        given = fit.choices.get("exponent") if contrast else None
        exponent = float(given) if isinstance(given, int | float) else None
        choices = ContrastChoices(
            curve.function, float(curve.radii[-1]), float(curve.radii[0]), exponent, curve.bandwidth
        )
        return cls(type(fit.model), survey.area, choices, fit.intensity)

    def of_survey(self, survey: Survey) -> ClusterModel:
        """The fit of the survey."""
        factors = factors_of(self.intensity)
        return fit_points(self.kind, survey.local_xy, self.area, self.choices, 1, factors).fit.model

    def of(self, points: Floats, rng: np.random.Generator) -> tuple[ClusterModel, Intensity | None]:
        """The fit of a pattern, intensity included."""
        intensity = None if self.intensity is None else self.intensity.refit(points, rng)
        found = fit_points(self.kind, points, self.area, self.choices, 1, factors_of(intensity))
        return found.fit.model, intensity

    @property
    def words(self) -> str:
        """For the record."""
        c = self.choices
        return f"minimum contrast on {c.function}, {c.r_min:.4g} to {c.r_max:.4g} m"


@dataclass(frozen=True, eq=False)
class Summary:
    """Nearest-neighbour functions of a pattern, in one row.

    Attributes
    ----------
    area
        The study area.
    functions
        Their names.
    radii
        (k,) distances in metres, the same for all.
    places
        Test places of F and J, or None.
    """

    area: StudyArea
    functions: tuple[str, ...]
    radii: Floats
    places: Places | None

    @classmethod
    def of_model(cls, survey: Survey, model: ClusterModel, functions: tuple[str, ...]) -> Summary:
        """Radii that reach as far as the model's functions rise."""
        spacing = 1.0 / np.sqrt(survey.intensity)
        furthest = 1.5 * spacing
        if "F" in functions:
            # open ground between clusters is wider than between points
            centres = float(getattr(model, model.intensity_names[0]))
            furthest = float(np.clip(1.2 / np.sqrt(centres), furthest, 3.0 * spacing))
        radii = furthest * (np.arange(1, RADII + 1) / RADII) ** 1.5
        places = None
        if {"F", "J"} & set(functions):
            places = Places.over(survey.area, beyond(radii), PLACES)
        return cls(survey.area, functions, radii, places)

    def row(self, points: Floats) -> Floats:
        """(functions · k,) the functions of a pattern, one after the other."""
        found = self._measured(points)
        takes = {"G": found.g_values, "F": found.f_values, "J": found.j_values}
        return np.concatenate([takes[name]() for name in self.functions])

    def curves(self, points: Floats) -> dict[str, Curve]:
        """The same as curves."""
        found = self._measured(points)
        takes: dict[str, Callable[[], Curve]] = {"G": found.g, "F": found.f, "J": found.j}
        return {name: takes[name]() for name in self.functions}

    def _measured(self, points: Floats) -> NearestDistances:
        return NearestDistances.of_points(points, self.area, self.radii, "kaplan-meier", self.places)


def evidence(rows: Floats, radii: Floats, statistic: str) -> tuple[float, float]:
    """First-stage p-value of the first row among all, and how far it lies from the others.

    Parameters
    ----------
    rows
        (s + 1, functions · k) a pattern's functions, then those of s patterns of its fit.
    radii
        (k,) distances in metres.
    statistic
        One of `STATISTICS`.

    Returns
    -------
    p_value : float
        A multiple of 1/(s + 1).
    distance : float
        Orders patterns with the same p-value; larger is further off.
    """
    if statistic == "squared-deviation":
        deviations, p = loosmore_ford(rows, radii)
        mean = float(deviations[1:].mean())
        return p, float(deviations[0]) / mean if mean > 0 else 0.0
    position = extreme_rank_lengths(rows)
    usable = rows[:, np.isfinite(rows).all(axis=0)]
    spread = usable[1:].std(axis=0)
    varies = spread > 1e-9
    away = np.abs(usable[0] - usable[1:].mean(axis=0))[varies] / spread[varies]
    return float((position <= position[0]).mean()), float(away.max(initial=0.0))


def adjusted_p_value(found: Floats) -> float:
    """Rank of the first among all: the share whose first-stage evidence is at least as strong.

    Parameters
    ----------
    found
        (m + 1, 2) first-stage p-value and distance of the survey, then of m patterns.
    """
    p, distance = found[:, 0], found[:, 1]
    stronger = (p < p[0]) | ((p == p[0]) & (distance >= distance[0]))
    return float(stronger.mean())


def adjusted_limits(observed: Floats, found: Floats, statistic: str) -> tuple[Floats, Floats]:
    """Envelope of the survey's first stage that it leaves if its adjusted p-value is at most 5 %.

    By extreme rank length, a row leaves the hull of those with larger first-stage p-values exactly
    if its own is not larger; the critical one is that of the pattern that would just be rejected.
    """
    rejected = max(int(np.floor((1.0 - LEVEL) * len(found) + 1e-9)), 1)
    critical = np.sort(found[1:, 0])[rejected - 1] if rejected <= len(found) - 1 else 1.0
    # never so many that fewer than a third of the rows are left
    most = int(np.floor(min(critical, 2.0 / 3.0) * len(observed) + 1e-9))
    return hull(observed, max(most, 1))


def hull(rows: Floats, most: int) -> tuple[Floats, Floats]:
    """Hull of all rows but those whose p-value is at most `most` over their number."""
    position = extreme_rank_lengths(rows)
    # the share of rows at least as extreme, in rows
    up_to = np.array([(position <= p).sum() for p in position])
    kept = rows[up_to > most]
    if len(kept) == 0:
        kept = rows[position == position.max()]
    return kept.min(axis=0), kept.max(axis=0)
