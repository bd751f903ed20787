"""Parametric bootstrap of any fit that turns points into a model."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel
from geoclust.models.patterns import draw_pattern
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]
Progress = Callable[[str, int, int], None]

# fewer draws than this have no 2.5 % and 97.5 % points
FEWEST_DRAWS = 39


def bootstrap_draws(
    model: ClusterModel,
    area: StudyArea,
    fit_again: Callable[[Floats, Intensity | None], ClusterModel],
    count: int,
    rng: np.random.Generator,
    *,
    workers: int | None = None,
    progress: Progress | None = None,
    intensity: Intensity | None = None,
) -> dict[str, Floats]:
    """Draw patterns of a fitted model in the same study area and fit each anew.

    Parameters
    ----------
    model
        The fitted model.
    area
        The study area.
    fit_again
        Repeats the whole fit, choice of range included: takes points in local coordinates and
        the intensity fitted to them (None if it is constant), and returns the model.
    count
        Number of patterns.
    rng
        Each pattern gets a generator spawned from it, so the draws do not depend on `workers`.
    workers, progress
        Threads, and a function called with label, done, total.
    intensity
        Patterns are thinned in proportion to it, and it is fitted to each of them anew.

    Returns
    -------
    dict
        Refitted values of each parameter, (m,) each; patterns with fewer than two points are left out.
    """

    def one(seed: np.random.Generator) -> dict[str, float] | None:
        points = draw_pattern(model, area, seed, intensity).points
        if len(points) < 2:
            return None
        again = None if intensity is None else intensity.refit(points, seed)
        return fit_again(points, again).parameters

    kept: list[dict[str, float]] = []
    for k, parameters in enumerate(in_order(one, rng.spawn(count), workers)):
        if parameters is not None:
            kept.append(parameters)
        if progress is not None:
            progress("bootstrap", k + 1, count)
    return {p.name: np.array([v[p.name] for v in kept]) for p in model.described} if kept else {}


def percentile_intervals(draws: dict[str, Floats]) -> dict[str, tuple[float, float]]:
    """The middle 95 % of the draws of each parameter; none where there are too few draws."""
    return {
        name: (float(np.quantile(v, 0.025)), float(np.quantile(v, 0.975)))
        for name, v in draws.items()
        if len(v) >= FEWEST_DRAWS
    }
