"""Tests of complete randomness that end in one number: Loosmore & Ford, Clark & Evans."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from geoclust.area.survey import Survey
from geoclust.curves.envelopes import ALTERNATIVES
from geoclust.curves.nearest import neighbour_distances
from geoclust.curves.simulated import Drawn, Progress, Summaries, simulated_curves, uniform_draw
from geoclust.errors import InputError, not_allowed
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class RandomnessTest:
    """A test of complete randomness by simulation.

    Attributes
    ----------
    method
        Who published it.
    statistic
        Its value for the survey.
    p_value
        Chance under complete randomness of a value at least as extreme; a multiple of
        1/(simulations + 1).
    simulations
        Number of simulated patterns.
    alternative
        ``different``, ``clustered`` or ``regular``.
    figures
        Other numbers that the test came by, by name.
    """

    method: str
    statistic: float
    p_value: float
    simulations: int
    alternative: str
    figures: dict[str, float] = field(default_factory=dict)

    def __repr__(self) -> str:
        return (
            f"<{self.method}: {self.statistic:.4g}, p = {self.p_value:.3g} "
            f"({self.alternative}, {self.simulations} simulations)>"
        )


def loosmore_ford(curves: Floats, radii: Floats) -> tuple[Floats, float]:
    """Squared deviation of each curve from the mean of all others, and the first one's p-value.

    Loosmore & Ford (2006), Ecology 87: 1925-1931. Curves that deviate as much as the
    first one count against it.

    Parameters
    ----------
    curves
        (s + 1, k) the survey's curve, then the simulated ones; columns that are not finite
        in any row are ignored.
    radii
        (k,) increasing distances in metres.

    Returns
    -------
    deviations : ndarray, (s + 1,)
        Sum over the radii of the squared difference times the step of distance.
    p_value : float
    """
    usable = np.isfinite(curves).all(axis=0)
    step = np.diff(radii, prepend=0.0)[usable]
    rows = curves[:, usable]
    s = len(rows) - 1
    # a curve minus the mean of the others is (s + 1)/s times the curve minus the mean of all
    difference = (rows - rows.mean(axis=0)) * ((s + 1) / s)
    deviations = np.asarray((difference**2) @ step)
    return deviations, _share_at_least(deviations)


def loosmore_ford_test(
    survey: Survey,
    radii: npt.ArrayLike,
    *,
    function: str = "L",
    simulations: int = 999,
    bandwidth: float | None = None,
    edge_weight: str = "rigid-motion",
    rng: np.random.Generator | int,
    workers: int | None = None,
    progress: Progress | None = None,
) -> RandomnessTest:
    """Test complete randomness by the squared deviation of a curve over all distances.

    Parameters
    ----------
    survey
        Points and study area; at least two points.
    radii
        (k,) increasing distances in metres.
    function
        ``K``, ``L``, ``g``, ``G``, ``F`` or ``J``.
    simulations
        Patterns of as many uniform points in the study area.
    bandwidth, edge_weight
        As for `randomness_envelopes`; G, F and J are Kaplan-Meier estimates.
    rng
        Generator or seed; the answer does not depend on `workers`.
    workers
        Threads; one a core if not given.
    progress
        Called with a label, patterns done and patterns in all.
    """
    _checked_simulations(simulations)
    summaries = Summaries.of_survey(survey, (function,), radii, bandwidth=bandwidth, edge_weight=edge_weight)
    observed = summaries.curves(Drawn(survey.local_xy), workers)[function]
    found = simulated_curves(
        summaries, uniform_draw(survey.area, survey.n), np.random.default_rng(rng).spawn(simulations),
        workers=workers, progress=progress, label="complete randomness",
    )  # fmt: skip
    deviations, p = loosmore_ford(np.vstack([observed.values, found[function]]), summaries.radii)
    return RandomnessTest(
        f"Loosmore & Ford (2006) on {function}", float(deviations[0]), p, simulations, "different",
        {"r_max_m": float(summaries.radii[-1])},
    )  # fmt: skip


def clark_evans_test(
    survey: Survey,
    *,
    simulations: int = 999,
    alternative: str = "different",
    rng: np.random.Generator | int,
    workers: int | None = None,
    progress: Progress | None = None,
) -> RandomnessTest:
    """Test complete randomness by the mean distance to the nearest neighbour.

    Clark & Evans (1954), Ecology 35: 445-453. Neighbours beyond the boundary are not
    known, which makes the mean too large; as the simulated patterns lie in the same
    study area, so is theirs, and the p-value needs no correction.

    Parameters
    ----------
    survey
        Points and study area; at least two points.
    simulations, rng, workers, progress
        As for `loosmore_ford_test`.
    alternative
        ``different``, ``clustered`` (only short distances are extreme) or ``regular``.

    Returns
    -------
    RandomnessTest
        The statistic is the ratio of the mean distance to its mean over the simulated
        patterns: 1 under complete randomness, below it for clusters. Among its figures
        the ratio to 1/(2 sqrt(intensity)), as published, and the mean in metres.
    """
    _checked_simulations(simulations)
    if alternative not in ALTERNATIVES:
        raise not_allowed("alternative", ALTERNATIVES, alternative)
    if survey.n < 2:
        raise InputError(f"The survey has {survey.n} point(s); distances between points need at least two.")
    draw = uniform_draw(survey.area, survey.n)

    def one(seed: np.random.Generator) -> float:
        return float(neighbour_distances(draw(seed).points).mean())

    means = np.empty(simulations + 1)
    means[0] = neighbour_distances(survey.local_xy).mean()
    seeds = np.random.default_rng(rng).spawn(simulations)
    for k, mean in enumerate(in_order(one, seeds, workers)):
        means[k + 1] = mean
        if progress is not None:
            progress("complete randomness", k + 1, simulations)
    ratio = float(means[0] / means[1:].mean())
    return RandomnessTest(
        "Clark & Evans (1954)", ratio, one_sided_or_both(means, alternative, -1.0), simulations, alternative,
        {
            "ratio_without_edges": float(2.0 * means[0] * np.sqrt(survey.intensity)),
            "mean_distance_m": float(means[0]),
        },
    )  # fmt: skip


def one_sided_or_both(values: Floats, alternative: str, clustered_sign: float) -> float:
    """p-value of the first value among all; twice the smaller tail if both sides count.

    `clustered_sign` is 1 if clusters make the value large, -1 if they make it small.
    """
    clustered = _share_at_least(clustered_sign * values)
    regular = _share_at_least(-clustered_sign * values)
    both = min(2.0 * min(clustered, regular), 1.0)
    return {"clustered": clustered, "regular": regular, "different": both}[alternative]


def _share_at_least(values: Floats) -> float:
    """Share of the values, the first included, that are not smaller than the first."""
    return float(np.mean(values >= values[0]))


def _checked_simulations(simulations: int) -> None:
    if simulations < 19:
        raise not_allowed("simulations", "at least 19", simulations)
