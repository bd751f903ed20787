"""Does a fitted model reproduce the survey? A balanced two-stage test by simulation."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.curve import Curve
from geoclust.curves.envelopes import EnvelopeTest, extreme_rank_lengths
from geoclust.curves.nearest import NearestDistances, Places, beyond
from geoclust.curves.randomness import loosmore_ford
from geoclust.errors import CannotTell, InputError, UsageError, not_allowed
from geoclust.fitting.moments import ContrastChoices, factors_of, fit_points
from geoclust.fitting.result import ClusterFit
from geoclust.fitting.status import FEWEST_POINTS
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel
from geoclust.models.patterns import draw_pattern, simple_surroundings
from geoclust.workers import in_order

if TYPE_CHECKING:
    import pandas as pd

Floats = npt.NDArray[np.float64]
Progress = Callable[[str, int, int], None]

FUNCTIONS = ("G", "F", "J")
STATISTICS = ("extreme-rank-length", "squared-deviation")
# patterns in every first stage; the test is balanced, so the survey has as many
FIRST_STAGE = 39
LEVEL = 0.95
# radii of each function, crowded where points are near each other
RADII = 40
# test places of F and J
PLACES = 2_000
# a simulated pattern with too few points for a fit is drawn again
TRIES = 200
NAMES = {
    "G": "distances from points to the next point",
    "F": "distances from places to the next point",
    "J": "distances to the next point, from points and from places",
}


@dataclass(frozen=True, eq=False)
class Assessment:
    """How well a fitted model reproduces curves that it was not fitted on.

    Attributes
    ----------
    p_value
        Chance, if the model is right, of a survey that departs from its own fit at least as much;
        a multiple of 1/(simulations + 1).
    curves
        The survey's functions by name, each with its part of one global envelope.
    statistic
        ``extreme-rank-length`` or ``squared-deviation``.
    two_stage
        Whether the p-value allows for the parameters having been fitted. If not, it is too large
        (conservative): the model was made to resemble the survey.
    simulations
        Patterns of the model that the survey is ranked among.
    first_stage
        Patterns behind each first-stage p-value; without a second stage, all of them.
    first_p_values
        Those of the survey and, with a second stage, of each simulated pattern about its own fit.
    model
        The model that was simulated.
    fitted_by
        How the survey, and with a second stage every pattern, was fitted for this test, in words.
    """

    p_value: float
    curves: dict[str, Curve]
    statistic: str
    two_stage: bool
    simulations: int
    first_stage: int
    first_p_values: Floats
    model: ClusterModel
    fitted_by: str

    @property
    def curve(self) -> Curve:
        """The first of the functions, with its envelope."""
        return next(iter(self.curves.values()))

    @property
    def conservative(self) -> bool:
        """Whether the p-value is too large, as parameters were fitted and that is not allowed for."""
        return not self.two_stage

    @property
    def reproduced(self) -> bool:
        """Whether the test, at 5 %, has nothing against the model."""
        return self.p_value > 1.0 - LEVEL + 1e-9

    def departures(self) -> dict[str, list[tuple[float, float, str]]]:
        """Ranges of distance, in metres, where each function leaves the envelope, and on which side."""
        return {
            name: EnvelopeTest(curve, self.p_value, self.first_stage, LEVEL, "different").departures()
            for name, curve in self.curves.items()
        }

    def sentence(self) -> str:
        """The finding for someone who decides about land.

        Examples
        --------
        The fitted model reproduces the distances from points to the next point (p = 0.41).
        """
        what = " and the ".join(NAMES[name] for name in self.curves)
        p = f"p = {self.p_value:.2g}" + (", on the safe side for the model" if self.conservative else "")
        if self.reproduced:
            return f"The fitted model reproduces the {what} ({p})."
        where = []
        for name, ranges in self.departures().items():
            where += [_where(name, *r) for r in ranges]
        at = f": there are {'; '.join(where)}" if where else ""
        return f"The fitted model does not reproduce the {what} ({p}){at}."

    def frames(self) -> list[pd.DataFrame]:
        """The functions as tables, named as those of the assessment."""
        name = "assessment of the fit"
        return [c.to_frame().assign(function=f"{c.function}, {name}") for c in self.curves.values()]

    def record(self) -> dict[str, object]:
        """The finding as plain values."""
        return {
            "p_value": self.p_value,
            "functions": list(self.curves),
            "statistic": self.statistic,
            "two_stage": self.two_stage,
            "conservative": self.conservative,
            "simulations": self.simulations,
            "first_stage": self.first_stage,
            "fitted_by": self.fitted_by,
            "parameters": dict(self.model.parameters),
            "departures_m": {k: [list(d) for d in v] for k, v in self.departures().items()},
            "sentence": self.sentence(),
        }

    def __repr__(self) -> str:
        stages = (
            f"{self.first_stage} patterns about each fit" if self.two_stage else "one stage, conservative"
        )
        return (
            f"<Assessment of {self.model.name} on {', '.join(self.curves)}: p = {self.p_value:.3g} "
            f"({self.simulations} simulations, {stages})>"
        )


def _where(name: str, start: float, end: float, side: str) -> str:
    at = f"{start:.3g} m" if start == end else f"{start:.3g} to {end:.3g} m"
    if name == "J":
        return f"{'more' if side == 'above' else 'less'} isolated points than expected at {at}"
    of = "points with a neighbour" if name == "G" else "places with a point"
    return f"{'more' if side == 'above' else 'fewer'} {of} within {at} than expected"


def assess_fit(
    survey: Survey,
    fit: ClusterFit,
    *,
    simulations: int = 399,
    functions: tuple[str, ...] = ("G",),
    statistic: str = "extreme-rank-length",
    two_stage: bool = True,
    first_stage: int = FIRST_STAGE,
    rng: np.random.Generator | int,
    workers: int | None = None,
    progress: Progress | None = None,
) -> Assessment:
    """Test whether the fitted model reproduces functions other than the fitted one.

    A model fitted to a survey resembles it more than it resembles other patterns of the true
    process, so a plain test against patterns of the fit hardly ever rejects. The balanced
    two-stage test (Baddeley, Hardegen, Lawrence, Milne, Nair & Rakshit 2017, Computational
    Statistics & Data Analysis 114: 75-87) allows for it. First stage: the survey is ranked among
    `first_stage` patterns of its fit. Second stage: each of `simulations` further patterns of
    the fit is itself fitted, and ranked among `first_stage` patterns of its own fit. The p-value
    is the rank of the survey's first-stage p-value among theirs. Equal ones, of which there are
    many as they are multiples of 1/(first_stage + 1), are ordered by how far the curve lies from
    the mean of its first stage: largest distance in standard deviations for the envelope,
    deviation relative to the mean deviation otherwise.

    Refits are by minimum contrast, on the survey's own range of distances and with its
    bandwidth. If the fit itself is by another method, such as the posterior, the survey is
    refitted in the same way for the test, which is then about the family of models rather
    than about the estimate: a full posterior fit of every pattern would take hours. Points that
    belong to no cluster are not part of that family.

    With the default this is 400 refits and 16,000 simulated patterns: about a minute on two cores
    for 500 points.

    Parameters
    ----------
    survey
        The survey that was fitted.
    fit
        Its fit; the status must be ``ok``.
    simulations
        Patterns that the survey is ranked among, at least 19: further patterns of the second stage,
        or without it, patterns of the fit.
    functions
        Names among ``G`` (nearest neighbour), ``F`` (empty space) and ``J``, Kaplan-Meier estimates.
        Several are joined into one test.
    statistic
        ``extreme-rank-length`` (global envelope, Myllymäki et al. 2017) or ``squared-deviation``
        (Loosmore & Ford 2006; one function only).
    two_stage
        False for the quick one-stage envelope of the fit itself, which is conservative.
    first_stage
        Patterns in every first stage, at least 19.
    rng
        Generator or seed; the answer does not depend on `workers`.
    workers, progress
        Threads, and a function called with label, done, total.

    Returns
    -------
    Assessment
        Its envelope is adjusted as well: it is drawn so that the survey leaves it if p <= 0.05.

    Raises
    ------
    CannotTell
        If there is no fitted model to assess.
    UsageError
        If an argument is not allowed.
    InputError
        If the fit belongs to another survey.
    """
    _check(functions, statistic, simulations, first_stage)
    if not fit.ok:
        raise CannotTell(fit.status, f"There is no fitted model to assess: {fit.reason}")
    if fit.intensity is not None and len(fit.intensity.at_own_points()) != survey.n:
        raise InputError("The fit's intensity belongs to other points; assess a fit with its own survey.")
    refit = Refit.like(survey, fit)
    summaries = Summary.of_model(survey, fit.model, functions)
    seeds = np.random.default_rng(rng)
    if not two_stage:
        words = f"{fit.method}; not repeated"
        return _one_stage(survey, fit, summaries, statistic, simulations, seeds, words, workers, progress)
    return two_stage_test(
        survey, refit, summaries, statistic=statistic, simulations=simulations, first_stage=first_stage,
        rng=seeds, workers=workers, progress=progress,
    )  # fmt: skip


def _check(functions: tuple[str, ...], statistic: str, simulations: int, first_stage: int) -> None:
    if isinstance(functions, str) or not functions or len(set(functions)) != len(functions):
        raise not_allowed("functions", "a tuple of different names", functions)
    for name in functions:
        if name not in FUNCTIONS:
            raise not_allowed("functions", FUNCTIONS, name)
    if statistic not in STATISTICS:
        raise not_allowed("statistic", STATISTICS, statistic)
    if statistic == "squared-deviation" and len(functions) > 1:
        raise UsageError("The squared deviation is of one function; give one, or the extreme rank length.")
    for name, value in (("simulations", simulations), ("first_stage", first_stage)):
        if value < 19:
            raise not_allowed(name, "at least 19", value)


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


def two_stage_test(
    survey: Survey,
    refit: Refit,
    summary: Summary,
    *,
    statistic: str,
    simulations: int,
    first_stage: int,
    rng: np.random.Generator,
    workers: int | None = None,
    progress: Progress | None = None,
) -> Assessment:
    """The test itself, whatever the verdict of the survey's fit was."""
    model = refit.of_survey(survey)
    own = simple_surroundings(model, survey.area, refit.intensity)

    def about(
        points: Floats, fitted: ClusterModel, intensity: Intensity | None, seed: np.random.Generator
    ) -> Floats:
        """The pattern's row, and those of the patterns of its fit."""
        wide = own if fitted is model else simple_surroundings(fitted, survey.area, intensity)
        rows = [summary.row(points)]
        rows += [summary.row(_enough(fitted, survey.area, seed, intensity, wide)) for _ in range(first_stage)]
        return np.vstack(rows)

    def one(seed: np.random.Generator) -> tuple[float, float]:
        points = _enough(model, survey.area, seed, refit.intensity, own)
        return evidence(about(points, *refit.of(points, seed), seed), summary.radii, statistic)

    own_seed, other = rng.spawn(2)
    observed = about(survey.local_xy, model, refit.intensity, own_seed)
    found = [evidence(observed, summary.radii, statistic)]
    for k, pair in enumerate(in_order(one, other.spawn(simulations), workers)):
        found.append(pair)
        if progress is not None:
            progress("assessment of the fit", k + 1, simulations)
    table = np.array(found)
    limits = adjusted_limits(observed, table, statistic)
    words = f"adjusted {LEVEL:.0%} envelope of {first_stage} patterns of the fitted {model.name} model"
    curves = _with_limits(summary.curves(survey.local_xy), limits, words)
    return Assessment(
        adjusted_p_value(table), curves, statistic, True, simulations, first_stage, table[:, 0], model,
        refit.words,
    )  # fmt: skip


def _one_stage(
    survey: Survey,
    fit: ClusterFit,
    summary: Summary,
    statistic: str,
    simulations: int,
    rng: np.random.Generator,
    fitted_by: str,
    workers: int | None,
    progress: Progress | None,
) -> Assessment:
    wide = simple_surroundings(fit.model, survey.area, fit.intensity)

    def one(seed: np.random.Generator) -> Floats:
        return summary.row(_enough(fit.model, survey.area, seed, fit.intensity, wide))

    rows = [summary.row(survey.local_xy)]
    for k, row in enumerate(in_order(one, rng.spawn(simulations), workers)):
        rows.append(row)
        if progress is not None:
            progress("assessment of the fit", k + 1, simulations)
    table = np.vstack(rows)
    p, _ = evidence(table, summary.radii, statistic)
    limits = _hull(table, int(np.floor((1.0 - LEVEL) * len(table) + 1e-9)))
    words = (
        f"conservative {LEVEL:.0%} envelope of {simulations} patterns of the fitted {fit.model.name} model"
    )
    return Assessment(
        p, _with_limits(summary.curves(survey.local_xy), limits, words), statistic, False, simulations,
        simulations, np.array([p]), fit.model, fitted_by,
    )  # fmt: skip


def _enough(
    model: ClusterModel,
    area: StudyArea,
    rng: np.random.Generator,
    intensity: Intensity | None,
    wide: StudyArea | None,
) -> Floats:
    """Points of a pattern that has enough of them for a fit, as the survey has."""
    most = np.empty((0, 2))
    for _ in range(TRIES):
        points = draw_pattern(model, area, rng, intensity, wide).points
        if len(points) > len(most):
            most = points
        if len(most) >= FEWEST_POINTS:
            break
    return most


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
    return _hull(observed, max(most, 1))


def _hull(rows: Floats, most: int) -> tuple[Floats, Floats]:
    """Hull of all rows but those whose p-value is at most `most` over their number."""
    position = extreme_rank_lengths(rows)
    # the share of rows at least as extreme, in rows
    up_to = np.array([(position <= p).sum() for p in position])
    kept = rows[up_to > most]
    if len(kept) == 0:
        kept = rows[position == position.max()]
    return kept.min(axis=0), kept.max(axis=0)


def _with_limits(curves: dict[str, Curve], limits: tuple[Floats, Floats], words: str) -> dict[str, Curve]:
    low, high = (np.split(limit, len(curves)) for limit in limits)
    return {
        name: replace(curve, lower=a, upper=b, interval=words)
        for (name, curve), a, b in zip(curves.items(), low, high, strict=True)
    }
