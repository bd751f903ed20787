"""Minimum contrast fit of a survey, with its bootstrap and its verdict."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.curve import Curve
from geoclust.curves.envelopes import global_envelope
from geoclust.curves.second_order import SecondOrder, default_bandwidth
from geoclust.errors import CannotTell, not_allowed
from geoclust.fitting import status as verdicts
from geoclust.fitting.bootstrap import bootstrap_draws, percentile_intervals
from geoclust.fitting.contrast import EXPONENTS, Contrast, ContrastFit, checked_function
from geoclust.fitting.result import ClusterFit
from geoclust.fitting.search import fit_contrast
from geoclust.fitting.second_level import SecondLevel, second_level_test
from geoclust.intensity.base import Intensity
from geoclust.intensity.envelopes import inhomogeneous_envelopes
from geoclust.models.base import ClusterModel
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]
Progress = Callable[[str, int, int], None]

NODES = 128
# K and L gather the noise of all shorter distances, so their range follows the clusters closely; g does
# not, and hardly cares (tests/studies/contrast_defaults.py)
RANGE_IN_SCALES = {"K": 4.0, "g": 12.0, "L": 3.0}
# with two levels the tail of the large clusters has to tell them from randomness
LEVELS_IN_SCALES = {"K": 6.0, "g": 12.0, "L": 6.0}


@dataclass(frozen=True)
class ContrastChoices:
    """How a contrast is taken: the curve, its range, power and weights, the bandwidth of g.

    Attributes
    ----------
    function
        ``g``, ``K`` or ``L``.
    r_max
        Largest distance in metres; found from a first fit if None.
    r_min
        Smallest distance in metres; half the bandwidth for g, zero for K and L if None.
    exponent
        Power of the curve; that of `EXPONENTS` if None.
    bandwidth
        Half width of the kernel of g in metres; 0.15 mean spacings if None.
    distance_weight
        Each squared difference counts its distance to this power; 0 for all alike.
    """

    function: str = "g"
    r_max: float | None = None
    r_min: float | None = None
    exponent: float | None = None
    bandwidth: float | None = None
    distance_weight: float = 0.0

    def __post_init__(self) -> None:
        checked_function(self.function)
        for name in ("r_max", "exponent", "bandwidth"):
            value = getattr(self, name)
            if value is not None and not (np.isfinite(value) and value > 0):
                raise not_allowed(name, "a positive number", value)
        if self.r_min is not None and not 0 <= self.r_min < (self.r_max or np.inf):
            raise not_allowed("r_min", "not negative and below r_max", self.r_min)
        if not np.isfinite(self.distance_weight):
            raise not_allowed("distance_weight", "a finite number", self.distance_weight)

    def range_within(self, area: StudyArea) -> tuple[float, float]:
        """Widest range to take by itself, a quarter of the side, and the smallest distance, metres.

        Raises
        ------
        UsageError
            If the range does not fit the study area.
        """
        widest, r_min = 0.25 * area.side, self.r_min or 0.0
        if self.r_max is not None and self.r_max > area.diameter:
            raise not_allowed(
                "r_max", f"at most the width of the study area, {area.diameter:.4g} m", self.r_max
            )
        if self.r_max is None and r_min > 0.5 * widest:
            raise not_allowed("r_min", f"at most {0.5 * widest:.4g} m here, unless r_max is given too", r_min)
        return widest, r_min


@dataclass(frozen=True, eq=False)
class MomentFit:
    """A contrast fit with the curve it was fitted on."""

    fit: ContrastFit
    contrast: Contrast
    bandwidth: float
    r_max: float


def fit_points(
    kind: type[ClusterModel],
    local_xy: Floats,
    area: StudyArea,
    choices: ContrastChoices,
    workers: int | None = 1,
    factors: Floats | None = None,
) -> MomentFit:
    """Fit a model to points in local coordinates; the range follows the clusters unless it is set.

    `factors` are one over the intensity at each point, for the weighted curve, or None.
    """
    widest, r_min = choices.range_within(area)
    r_max = choices.r_max if choices.r_max is not None else widest
    intensity = len(local_xy) / area.area
    contrast, width = measured_contrast(kind, local_xy, area, choices, r_max, workers, factors)
    fit = fit_contrast(kind, contrast, intensity, area.area)
    if choices.r_max is None:
        levels = len(kind.intensity_names)
        shorter = (RANGE_IN_SCALES if levels == 1 else LEVELS_IN_SCALES)[choices.function] * fit.model.spread
        if shorter < 0.8 * widest:
            r_max = max(shorter, 4.0 * width, 2.0 * r_min)
            if levels > 1:
                contrast = contrast.up_to(r_max)
                r_max = float(contrast.radii[-1])
            else:
                contrast, _ = measured_contrast(kind, local_xy, area, choices, r_max, workers, factors)
            fit = fit_contrast(kind, contrast, intensity, area.area)
    return MomentFit(fit, contrast, width, r_max)


def measured_contrast(
    kind: type[ClusterModel],
    local_xy: Floats,
    area: StudyArea,
    choices: ContrastChoices,
    r_max: float,
    workers: int | None = 1,
    factors: Floats | None = None,
) -> tuple[Contrast, float]:
    """Measure the curve of points up to a distance; returns the contrast and the bandwidth of g.

    For models of several levels the radii crowd at short distances, where the smallest clusters
    are, so that the same curve serves for shorter ranges too.
    """
    intensity = len(local_xy) / area.area
    width = choices.bandwidth if choices.bandwidth is not None else default_bandwidth(intensity)
    g = choices.function == "g"
    if choices.r_min is not None:
        r_min = choices.r_min
    else:
        r_min = min(0.5 * width, 0.5 * r_max) if g else 0.0
    if len(kind.intensity_names) > 1:
        radii = r_min + (r_max - r_min) * np.linspace(0.0, 1.0, NODES + 1) ** 2
    else:
        radii = np.linspace(r_min, r_max, NODES + 1)
    radii = radii[1:] if radii[0] == 0 else radii
    measured = SecondOrder.of_points(
        local_xy, area, radii, width if g else None, workers=workers, point_weights=factors
    )
    if g:
        values = measured.g_values()
    else:
        k = measured.k_values()
        values = k if choices.function == "K" else np.sqrt(k / np.pi)
    exponent = choices.exponent if choices.exponent is not None else EXPONENTS[choices.function]
    contrast = Contrast(
        choices.function, radii, values, exponent, width if g else None, choices.distance_weight
    )
    return contrast, width


def fit_by_contrast(
    survey: Survey,
    kind: type[ClusterModel],
    *,
    choices: ContrastChoices,
    bootstrap: int,
    rng: np.random.Generator,
    workers: int | None = None,
    progress: Progress | None = None,
    intensity: Intensity | None = None,
    level_simulations: int = 99,
) -> ClusterFit:
    """Fit by minimum contrast, with a parametric bootstrap interval and a verdict.

    The bootstrap draws patterns from the fit in the same study area and repeats
    the whole procedure, choice of range included; the interval of each
    parameter is that of the middle 95 % of the refitted values. With an intensity the curve
    is weighted by it, and the patterns are thinned and their intensity fitted anew.

    For a nested process `level_simulations` patterns of the one-level fit tell whether the
    second level earns its place (0 leaves that out); if it does not, there are no intervals.
    """
    test_seed, boot_seed, level_seed = rng.spawn(3)
    if survey.n < verdicts.FEWEST_POINTS:
        reason = verdicts.sentence("too-few-points", n=survey.n, fewest=verdicts.FEWEST_POINTS)
        raise CannotTell("too-few-points", reason)
    found = fit_points(kind, survey.local_xy, survey.area, choices, workers, factors_of(intensity))
    p_value = clustering_p_value(survey, found.r_max, test_seed, workers, progress, intensity)

    def fit_again(points: Floats, again: Intensity | None) -> ClusterModel:
        return fit_points(kind, points, survey.area, choices, factors=factors_of(again)).fit.model

    second: SecondLevel | None = None
    if len(kind.intensity_names) > 1 and level_simulations and p_value <= verdicts.TEST_LEVEL:
        second = second_level_of(
            kind, found.contrast, survey.local_xy, survey.area, choices, level_simulations, level_seed,
            workers, progress, intensity,
        )  # fmt: skip
    refused = second is not None and second.p_value > verdicts.TEST_LEVEL
    draws = bootstrap_draws(
        found.fit.model, survey.area, fit_again, 0 if refused else bootstrap, boot_seed,
        workers=workers, progress=progress, intensity=intensity,
    )  # fmt: skip
    intervals = percentile_intervals(draws)
    status, reason = verdicts.moment_verdict(
        found.fit.model, survey.area.area, r_max=found.r_max, on_bound=found.fit.on_bound,
        bounds=found.fit.bounds, p_value=p_value, intervals=intervals,
    )  # fmt: skip
    if second is not None and refused:
        status, reason = verdicts.named("one-level", p_value=second.p_value)
    contrast = found.contrast
    curve, fitted = fitted_curve(found)
    return ClusterFit(
        model=found.fit.model,
        intervals=intervals,
        status=status,
        reason=reason,
        method="minimum-contrast",
        choices={
            "function": contrast.function,
            "exponent": contrast.exponent,
            "distance_weight": contrast.distance_weight,
            "r_min_m": float(contrast.radii[0]),
            "r_max_m": float(contrast.radii[-1]),
            "range_chosen_by": "user" if choices.r_max is not None else "first fit",
            "bandwidth_m": found.bandwidth,
            "bounds": {k: list(v) for k, v in found.fit.bounds.items()},
            "contrast": found.fit.value,
            "bootstrap": bootstrap,
            "clustering_p_value": p_value,
            **({} if second is None else second.record()),
        },
        curve=curve,
        fitted=fitted,
        surface=found.fit.surface,
        draws=draws,
    )


def second_level_of(
    kind: type[ClusterModel],
    contrast: Contrast,
    local_xy: Floats,
    area: StudyArea,
    choices: ContrastChoices,
    simulations: int,
    rng: np.random.Generator,
    workers: int | None = None,
    progress: Progress | None = None,
    intensity: Intensity | None = None,
) -> SecondLevel:
    """Whether the second level of a nested process earns its place, by the contrast of the survey's curve."""

    def measure(points: Floats, r_max: float, again: Intensity | None) -> Contrast:
        own = replace(choices, r_max=r_max)
        return measured_contrast(kind, points, area, own, r_max, factors=factors_of(again))[0]

    return second_level_test(
        contrast, local_xy, area, measure, simulations, rng, workers=workers, progress=progress,
        intensity=intensity,
    )  # fmt: skip


def fitted_curve(found: MomentFit) -> tuple[Curve, Floats]:
    """The curve that was fitted, and the model's values at its radii."""
    contrast = found.contrast
    theory, unit = {
        "g": (np.ones_like(contrast.radii), "1"),
        "K": (np.pi * contrast.radii**2, "m²"),
        "L": (contrast.radii.copy(), "m"),
    }[contrast.function]
    curve = Curve(
        contrast.function,
        contrast.radii,
        contrast.values,
        theory,
        unit,
        "isotropic",
        contrast.bandwidth,
    )
    return curve, contrast.curve_of(found.fit.model)


def factors_of(intensity: Intensity | None) -> Floats | None:
    """One over the intensity at the points it was fitted to, or None if it is constant."""
    return None if intensity is None else 1.0 / intensity.at_own_points()


def clustering_p_value(
    survey: Survey,
    r_max: float,
    rng: np.random.Generator,
    workers: int | None,
    progress: Progress | None,
    intensity: Intensity | None = None,
) -> float:
    """One-sided test for clustering: extreme rank length of L over the fitted range, 199 simulations."""
    count = 199
    radii = np.linspace(0.0, r_max, 51)[1:]
    if intensity is not None:
        return inhomogeneous_envelopes(
            survey, intensity, radii, functions=("L",), simulations=count, alternative="clustered",
            rng=rng, workers=workers, progress=progress,
        )["L"].p_value  # fmt: skip
    observed = SecondOrder.measure(survey, radii, None, "isotropic", workers).l()

    def one(seed: np.random.Generator) -> Floats:
        points = survey.area.local_uniform_points(survey.n, seed)
        return SecondOrder.of_points(points, survey.area, radii, None, workers=1).l().values

    curves = np.empty((count, len(radii)))
    for k, values in enumerate(in_order(one, rng.spawn(count), workers)):
        curves[k] = values
        if progress is not None:
            progress("test for clustering", k + 1, count)
    return global_envelope(observed, curves, alternative="clustered").p_value
