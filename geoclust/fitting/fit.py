"""Fit a cluster model to a survey."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from geoclust.area.survey import Survey
from geoclust.errors import not_allowed
from geoclust.fitting.moments import ContrastChoices, fit_by_contrast
from geoclust.fitting.result import ClusterFit
from geoclust.models.catalogue import model_by_name

Progress = Callable[[str, int, int], None]

METHODS = ("minimum-contrast",)


def fit_clusters(
    survey: Survey,
    model: str = "thomas",
    *,
    method: str = "minimum-contrast",
    function: str = "g",
    r_max: float | None = None,
    r_min: float | None = None,
    exponent: float | None = None,
    bandwidth: float | None = None,
    bootstrap: int = 199,
    rng: np.random.Generator | int,
    workers: int | None = None,
    progress: Progress | None = None,
) -> ClusterFit:
    """Fit a cluster model, with 95 % intervals and a verdict whether the data can tell.

    Parameters
    ----------
    survey
        Points and study area.
    model
        Name of the model, such as ``thomas``.
    method
        ``minimum-contrast`` (Diggle & Gratton 1984).
    function
        Curve that the contrast is taken on: ``g`` or ``K``.
    r_max, r_min
        Range of distances in metres; chosen from a first fit if not given.
    exponent
        Power of the contrast; ½ for g and ¼ for K if not given.
    bandwidth
        Half width of the kernel of g, metres; 0.15 mean spacings if not given.
    bootstrap
        Patterns simulated for the intervals; 0 for none, otherwise at least 39.
    rng
        Generator or seed; the answer does not depend on `workers`.
    workers, progress
        Threads, and a function called with label, done, total.

    Returns
    -------
    ClusterFit

    Raises
    ------
    CannotTell
        If the survey has too few points for any fit.
    UsageError
        If an argument is not allowed.
    """
    kind = model_by_name(model)
    if method not in METHODS:
        raise not_allowed("method", METHODS, method)
    if bootstrap != 0 and bootstrap < 39:
        raise not_allowed("bootstrap", "0 or at least 39", bootstrap)
    choices = ContrastChoices(function, r_max, r_min, exponent, bandwidth)
    found = fit_by_contrast(
        survey, kind, choices=choices, bootstrap=bootstrap, rng=np.random.default_rng(rng),
        workers=workers, progress=progress,
    )  # fmt: skip
    return replace(found, seed=rng if isinstance(rng, int) else None)
