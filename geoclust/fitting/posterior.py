"""The posterior of a cluster model: centres, memberships and parameters sampled together."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from geoclust.area.study_area import Floats, StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import CannotTell
from geoclust.fitting import status as verdicts
from geoclust.fitting.convergence import ENOUGH, Sample, sample_until_converged
from geoclust.fitting.moments import (
    ContrastChoices,
    MomentFit,
    clustering_p_value,
    factors_of,
    fit_points,
    fitted_curve,
)
from geoclust.fitting.result import ClusterFit
from geoclust.fitting.sampling import ChainSetup, Priors
from geoclust.fitting.shares import heavy_tailed
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel

Progress = Callable[[str, int, int], None]

# the table of shares, and with it the prior, first spans this factor on both sides of the pilot's scale
TABLE_FACTOR = 1.8
# a scale this many times the one that the margin was set by makes the margin too narrow; with a
# heavy tail, what lies beyond it counts by its mean
OUTGROWN, OUTGROWN_HEAVY = 1.4, 2.0
# worse than this after all rounds is no answer
HOPELESS_R_HAT, HOPELESS_SIZE = 1.1, 50.0


def default_priors(n: int, area: StudyArea, background: bool = False) -> Priors:
    """Proper priors on the scale of the survey, wide enough to leave the answer to the data.

    Parents: Gamma with shape 1 (exponential) and mean half the density of the points. Offspring:
    Gamma with shape 2 and mean 10. Scale: log-normal round a twentieth of the side of
    the square of equal area, with a standard deviation of 1 in the logarithm, cut at a two
    thousandth and a quarter of that side. Background: exponential with a mean of a tenth of
    the prior mean of the parent intensity, in units of the mean offspring.
    """
    side = area.side
    parents = 0.5 * max(n, 1) / area.area
    return Priors(
        parent_intensity=(1.0, 1.0 / parents),
        mean_offspring=(2.0, 0.2),
        log_scale=(float(np.log(side / 20.0)), 1.0),
        scale_bounds=(side / 2000.0, side / 4.0),
        background=0.1 * parents if background else None,
    )


def fit_by_posterior(
    survey: Survey,
    kind: type[ClusterModel],
    *,
    choices: ContrastChoices,
    background: bool,
    chains: int,
    rng: np.random.Generator,
    workers: int | None = None,
    progress: Progress | None = None,
    intensity: Intensity | None = None,
) -> ClusterFit:
    """Fit by sampling the posterior; a minimum contrast fit is the starting value.

    The estimate of each parameter is its posterior median, the interval the
    middle 95 % of the draws.
    """
    test_seed, sample_seed = rng.spawn(2)
    if survey.n < verdicts.FEWEST_POINTS:
        reason = verdicts.sentence("too-few-points", n=survey.n, fewest=verdicts.FEWEST_POINTS)
        raise CannotTell("too-few-points", reason)
    pilot = fit_points(kind, survey.local_xy, survey.area, choices, workers, factors_of(intensity))
    p_value = clustering_p_value(survey, pilot.r_max, test_seed, workers, progress, intensity)
    priors = default_priors(survey.n, survey.area, background)
    facts: dict[str, object] = {
        "pilot": dict(pilot.fit.model.parameters),
        "pilot_function": pilot.contrast.function,
        "clustering_p_value": p_value,
        "r_max_m": pilot.r_max,
        "bandwidth_m": pilot.bandwidth,
        "background": background,
        "priors": _priors_in_words(priors),
    }
    if p_value > verdicts.TEST_LEVEL:
        reason = verdicts.sentence("no-clustering", p_value=p_value, r_max=pilot.r_max)
        return _without_sample(kind, survey, pilot, facts, "no-clustering", reason)
    sample = sample_posterior(
        survey.local_xy, survey.area, starting_model(pilot, survey, priors), priors,
        chains=chains, rng=sample_seed, workers=workers, progress=progress, intensity=intensity,
    )  # fmt: skip
    return _with_sample(kind, survey, pilot, facts, sample)


def sample_posterior(
    local_xy: Floats,
    area: StudyArea,
    start: ClusterModel,
    priors: Priors,
    *,
    chains: int = 4,
    enough: float = ENOUGH,
    most_rounds: int = 12,
    rng: np.random.Generator,
    workers: int | None = None,
    progress: Progress | None = None,
    intensity: Intensity | None = None,
) -> Sample:
    """Sample centres and parameters; the tabulated range of scales is widened if the chains reach its end.

    Parameters
    ----------
    local_xy
        (n, 2) points in local coordinates of the study area.
    area
        The study area.
    start
        Parameters to start from.
    priors
        Priors; the scale is cut at their bounds.
    chains, enough, most_rounds, rng, workers, progress
        As for `sample_until_converged`.
    intensity
        As for `ChainSetup`.
    """
    low, high = priors.scale_bounds
    factor = TABLE_FACTOR
    room = OUTGROWN_HEAVY if heavy_tailed(type(start)) else OUTGROWN
    # the furthest that a centre may lie depends on the scale, but has to stay fixed while it is sampled
    margin = type(start).margin_in_scales * start.scale
    for attempt, seed in enumerate(rng.spawn(3)):
        bounds = (max(low, start.scale / factor), min(high, start.scale * factor))
        cut = Priors(
            priors.parent_intensity, priors.mean_offspring, priors.log_scale, bounds, priors.background
        )
        setup = ChainSetup(
            local_xy, area, start, priors=cut, margin=margin, workers=workers, intensity=intensity
        )
        every = int(max(50, start.parent_intensity * setup.wide.area))

        def cramped(found: Sample, bounds: tuple[float, float] = bounds) -> bool:
            at = found.draws.scale
            return (bounds[0] > low and float(at.min()) < bounds[0] * 1.1) or (
                bounds[1] < high and float(at.max()) > bounds[1] / 1.1
            )

        def outgrown(found: Sample, most: float = room * start.scale) -> bool:
            return cramped(found) or float(np.median(found.draws.scale)) > most

        sample = sample_until_converged(
            setup, rng=seed, chains=chains, every=every, enough=enough, most_rounds=most_rounds,
            leave=outgrown if attempt < 2 else None, workers=workers, progress=progress,
        )  # fmt: skip
        if attempt == 2 or not outgrown(sample):
            break
        middle = float(np.median(sample.draws.scale))
        # begin again from what was found
        start = type(start).of(
            float(np.median(sample.draws.parent_intensity)),
            middle,
            float(np.median(sample.draws.mean_offspring)),
        )
        margin = type(start).margin_in_scales * middle
        factor *= 1.5 if cramped(sample) else 1.0
    return sample


def starting_model(pilot: MomentFit, survey: Survey, priors: Priors) -> ClusterModel:
    """The pilot's model, kept away from the edges of what can be sampled."""
    model = pilot.fit.model
    low, high = priors.scale_bounds
    scale = float(np.clip(model.scale, 2.0 * low, 0.5 * high))
    clusters = np.clip(model.parent_intensity * survey.area.area, 2.0, 0.7 * survey.n)
    rho = float(clusters / survey.area.area)
    return type(model).of(rho, scale, survey.intensity / rho)


def _with_sample(
    kind: type[ClusterModel], survey: Survey, pilot: MomentFit, facts: dict[str, object], sample: Sample
) -> ClusterFit:
    draws = sample.draws
    values = {
        "parent_intensity": draws.parent_intensity.ravel(),
        kind.scale_name: draws.scale.ravel(),
        "mean_offspring": draws.mean_offspring.ravel(),
    }
    medians = {name: float(np.median(v)) for name, v in values.items()}
    model = kind.of(medians["parent_intensity"], medians[kind.scale_name], medians["mean_offspring"])
    if sample.setup.target.with_background:
        values["background_intensity"] = draws.background.ravel()
    intervals = {
        name: (float(np.quantile(v, 0.025)), float(np.quantile(v, 0.975))) for name, v in values.items()
    }
    facts |= {
        "chains": int(draws.scale.shape[0]),
        "draws_per_chain": int(draws.scale.shape[1]),
        "moves_per_chain": sample.moves,
        "acceptance": draws.acceptance,
        "diagnostics": {
            name: {"r_hat": r, "effective_sample_size": e} for name, (r, e) in sample.diagnostics.items()
        },
        "converged": sample.converged,
        "margin_m": sample.setup.margin,
    }
    status, reason = _verdict(survey, pilot, model, intervals, sample)
    curve, _ = fitted_curve(pilot)
    return ClusterFit(
        model=model,
        intervals=intervals,
        status=status,
        reason=reason,
        method="posterior",
        choices=facts,
        curve=curve,
        fitted=pilot.contrast.curve_of(model),
        surface=pilot.fit.surface,
        draws=values,
        sample=sample,
    )


def _without_sample(
    kind: type[ClusterModel],
    survey: Survey,
    pilot: MomentFit,
    facts: dict[str, object],
    status: str,
    reason: str,
) -> ClusterFit:
    curve, fitted = fitted_curve(pilot)
    return ClusterFit(
        model=pilot.fit.model, intervals={}, status=status, reason=reason, method="posterior", choices=facts,
        curve=curve, fitted=fitted, surface=pilot.fit.surface,
    )  # fmt: skip


def _verdict(
    survey: Survey,
    pilot: MomentFit,
    model: ClusterModel,
    intervals: dict[str, tuple[float, float]],
    sample: Sample,
) -> tuple[str, str]:
    r_hat, size = sample.worst
    if r_hat > HOPELESS_R_HAT or size < HOPELESS_SIZE:
        return _named("not-converged", r_hat=r_hat, size=size)
    widest = 0.25 * survey.area.side
    if model.scale > 0.5 * widest:
        return _named("sigma-beyond-range", scale=model.scale, r_max=widest)
    clusters = float(np.mean(sample.draws.number_inside))
    if clusters < verdicts.FEWEST_CLUSTERS:
        return _named("few-clusters", clusters=clusters, fewest=verdicts.FEWEST_CLUSTERS)
    return verdicts.flat_valley(model, intervals)


def _named(status: str, **figures: object) -> tuple[str, str]:
    return status, verdicts.sentence(status, **figures)


def _priors_in_words(priors: Priors) -> dict[str, str]:
    out = {}
    if priors.parent_intensity is not None:
        shape, rate = priors.parent_intensity
        out["parent_intensity"] = f"Gamma with shape {shape:g} and mean {shape / rate * 1e4:.4g} per ha"
    if priors.mean_offspring is not None:
        shape, rate = priors.mean_offspring
        out["mean_offspring"] = f"Gamma with shape {shape:g} and mean {shape / rate:g}"
    mean, sd = priors.log_scale
    low, high = priors.scale_bounds
    out["scale"] = (
        f"log-normal with median {np.exp(mean):.4g} m and standard deviation {sd:g} of the logarithm, "
        f"cut at {low:.4g} m and {high:.4g} m"
    )
    if priors.background is not None:
        out["background"] = (
            f"exponential with mean {priors.background * 1e4:.4g} points per ha and unit of mean offspring"
        )
    return out
