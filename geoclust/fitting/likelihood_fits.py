"""Fit of a survey by Palm or composite likelihood, with its bootstrap and its verdict."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.curve import Curve
from geoclust.curves.second_order import SecondOrder, default_bandwidth
from geoclust.errors import CannotTell, not_allowed
from geoclust.fitting import status as verdicts
from geoclust.fitting.bootstrap import bootstrap_draws, percentile_intervals
from geoclust.fitting.contrast import NARROWEST, Contrast
from geoclust.fitting.likelihood_search import LikelihoodFit, fit_likelihood, rough_spread
from geoclust.fitting.moments import (
    NODES,
    ContrastChoices,
    clustering_p_value,
    factors_of,
    measured_contrast,
    second_level_of,
)
from geoclust.fitting.moments import RANGE_IN_SCALES as CURVE_RANGE
from geoclust.fitting.pair_likelihoods import COMPOSITE, PALM, PairLikelihood
from geoclust.fitting.result import ClusterFit
from geoclust.fitting.second_level import SecondLevel
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel

Floats = npt.NDArray[np.float64]
Progress = Callable[[str, int, int], None]

FORMS = (PALM, COMPOSITE)
# the range follows the clusters: of 2 to 12 scales, 3 and 6 had about the smallest errors in simulated Thomas
# surveys (tests/studies/pair_ranges.py). The Palm likelihood gains nothing from pairs that are hardly ever
# siblings; the composite likelihood needs them, as what it divides by has to tell clusters from randomness
RANGE_IN_SCALES = {PALM: 3.0, COMPOSITE: 6.0}


def fit_pairs(
    kind: type[ClusterModel],
    form: str,
    local_xy: Floats,
    area: StudyArea,
    choices: ContrastChoices,
    workers: int | None = 1,
    along: Intensity | None = None,
) -> LikelihoodFit:
    """Fit a model to points in local coordinates; the range follows the clusters unless it is set.

    Parameters
    ----------
    kind
        A model class.
    form
        ``palm`` or ``composite-likelihood``.
    local_xy
        (n, 2) local coordinates of the study area, metres.
    area
        The study area.
    choices
        Of which `r_min` and `r_max` count.
    workers
        Threads; the answer does not depend on it.
    along
        Intensity fitted to the points, or None if it is constant.

    Raises
    ------
    UsageError
        If the range does not fit the study area.
    """
    widest, r_min = choices.range_within(area)
    intensity = len(local_xy) / area.area
    width = default_bandwidth(intensity)

    r_max = widest if choices.r_max is None else choices.r_max
    pairs = PairLikelihood.of_points(form, local_xy, area, r_min, r_max, max(widest, r_max), workers, along)
    fixed = (intensity, area.area, width / NARROWEST)
    if choices.r_max is None:
        shorter = RANGE_IN_SCALES[form] * rough_spread(kind, pairs, *fixed)
        if shorter < 0.8 * widest:
            pairs = pairs.up_to(max(shorter, 4.0 * width, 2.0 * r_min))
    return fit_likelihood(kind, pairs, *fixed)


def fit_by_likelihood(
    survey: Survey,
    kind: type[ClusterModel],
    form: str,
    *,
    choices: ContrastChoices,
    bootstrap: int,
    rng: np.random.Generator,
    workers: int | None = None,
    progress: Progress | None = None,
    intensity: Intensity | None = None,
    level_simulations: int = 99,
) -> ClusterFit:
    """Fit by a likelihood of pairs, with a parametric bootstrap interval and a verdict.

    The bootstrap draws patterns from the fit in the same study area and repeats the whole
    procedure, choice of range included. Whether a second level earns its place is
    told as for the contrast on g, whatever the fit: `level_simulations` patterns of one level.
    """
    if choices.function != "g":
        raise not_allowed("function", f"left out for {form}, which is fitted on no curve", choices.function)
    if choices.exponent is not None:
        raise not_allowed("exponent", f"left out for {form}, which has no power", choices.exponent)
    if choices.distance_weight != 0:
        raise not_allowed("distance_weight", f"left out for {form}", choices.distance_weight)
    test_seed, boot_seed, level_seed = rng.spawn(3)
    if survey.n < verdicts.FEWEST_POINTS:
        reason = verdicts.sentence("too-few-points", n=survey.n, fewest=verdicts.FEWEST_POINTS)
        raise CannotTell("too-few-points", reason)
    found = fit_pairs(kind, form, survey.local_xy, survey.area, choices, workers, intensity)
    p_value = clustering_p_value(survey, found.likelihood.r_max, test_seed, workers, progress, intensity)

    def fit_again(points: Floats, again: Intensity | None) -> ClusterModel:
        return fit_pairs(kind, form, points, survey.area, choices, along=again).model

    second: SecondLevel | None = None
    if len(kind.intensity_names) > 1 and level_simulations and p_value <= verdicts.TEST_LEVEL:
        widest = 0.25 * survey.area.side
        far = max(found.likelihood.r_max, min(widest, CURVE_RANGE["g"] * found.model.spread))
        plain = ContrastChoices(r_max=far, bandwidth=choices.bandwidth)
        contrast, _ = measured_contrast(
            kind, survey.local_xy, survey.area, plain, far, workers, factors_of(intensity)
        )
        second = second_level_of(
            kind, contrast, survey.local_xy, survey.area, plain, level_simulations, level_seed, workers,
            progress, intensity,
        )  # fmt: skip
    refused = second is not None and second.p_value > verdicts.TEST_LEVEL
    draws = bootstrap_draws(
        found.model, survey.area, fit_again, 0 if refused else bootstrap, boot_seed, workers=workers,
        progress=progress, intensity=intensity,
    )  # fmt: skip
    intervals = percentile_intervals(draws)
    status, reason = verdicts.moment_verdict(
        found.model, survey.area.area, r_max=found.likelihood.r_max, on_bound=found.on_bound,
        bounds=found.bounds, p_value=p_value, intervals=intervals,
    )  # fmt: skip
    width = choices.bandwidth if choices.bandwidth is not None else default_bandwidth(survey.intensity)
    if second is not None and refused:
        status, reason = verdicts.named("one-level", p_value=second.p_value)
    surface = found.surface
    if surface is not None and intervals:
        surface = replace(surface, level=_level(kind, found, draws))
    curve, fitted = seen_through_kernel(survey, found, width, choices.r_min, workers, intensity)
    return ClusterFit(
        model=found.model,
        intervals=intervals,
        status=status,
        reason=reason,
        method=form,
        choices={
            "r_min_m": choices.r_min or 0.0,
            "r_max_m": found.likelihood.r_max,
            "range_chosen_by": "user" if choices.r_max is not None else "first fit",
            "bandwidth_m": width,
            "bounds": {k: list(v) for k, v in found.bounds.items()},
            "pairs": int(found.likelihood.counts.sum()) // 2,
            "log_likelihood_over_randomness": found.value,
            "bootstrap": bootstrap,
            "clustering_p_value": p_value,
            **({} if second is None else second.record()),
        },
        curve=curve,
        fitted=fitted,
        surface=surface,
        draws=draws,
    )


def seen_through_kernel(
    survey: Survey,
    found: LikelihoodFit,
    width: float,
    r_min: float | None,
    workers: int | None,
    intensity: Intensity | None,
) -> tuple[Curve, Floats]:
    """The survey's g over the range of the fit, and the model's, smoothed with the same kernel."""
    low = min(0.5 * width, 0.5 * found.likelihood.r_max) if r_min is None else r_min
    radii = np.linspace(low, found.likelihood.r_max, NODES + 1)
    radii = radii[1:] if radii[0] == 0 else radii
    measured = SecondOrder.of_points(
        survey.local_xy, survey.area, radii, width, workers=workers, point_weights=factors_of(intensity)
    )
    contrast = Contrast("g", radii, measured.g_values(), 1.0, width)
    curve = Curve("g", radii, contrast.values, np.ones_like(radii), "1", "isotropic", width)
    return curve, contrast.curve_of(found.model)


def _level(kind: type[ClusterModel], found: LikelihoodFit, draws: dict[str, Floats]) -> float:
    """Loss of log-likelihood that 95 % of the bootstrap's estimates do not exceed."""
    rows = np.column_stack([draws[p.name] for p in kind.described])
    names = [p.name for p in kind.described]
    losses = [
        found.value - found.likelihood.of_model(kind(**dict(zip(names, row, strict=True)))) for row in rows
    ]
    return float(max(np.quantile(losses, 0.95), 0.0))
