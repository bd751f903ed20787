"""Fit a cluster model to a survey."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from geoclust.area.survey import Survey
from geoclust.errors import UsageError, not_allowed
from geoclust.fitting.likelihood_fits import FORMS, fit_by_likelihood
from geoclust.fitting.moments import ContrastChoices, fit_by_contrast
from geoclust.fitting.posterior import fit_by_posterior
from geoclust.fitting.result import ClusterFit
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel
from geoclust.models.catalogue import SAMPLED, model_by_name
from geoclust.models.cauchy import Cauchy

Progress = Callable[[str, int, int], None]

METHODS = ("posterior", "minimum-contrast", *FORMS)


def fit_clusters(
    survey: Survey,
    model: str = "thomas",
    *,
    method: str | None = None,
    function: str = "g",
    r_max: float | None = None,
    r_min: float | None = None,
    exponent: float | None = None,
    bandwidth: float | None = None,
    distance_weight: float = 0.0,
    level_simulations: int = 99,
    bootstrap: int = 199,
    background: bool = False,
    chains: int = 4,
    intensity: Intensity | None = None,
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
        ``posterior`` (centres, memberships and parameters sampled together; Møller &
        Waagepetersen 2004), or one of the quick looks: ``minimum-contrast`` (Diggle & Gratton
        1984), ``palm`` (Palm likelihood; Tanaka, Ogata & Stoyan 2008) or ``composite-likelihood``
        (of pairs of points; Guan 2006). ``posterior`` if not given; ``minimum-contrast`` for the
        models ``nested-thomas`` and ``variance-gamma``, which the posterior does not fit.
    function
        Curve that the contrast is taken on: ``g``, ``K`` or ``L``. The posterior starts from that fit; the
        likelihoods of pairs take no curve.
    r_max, r_min
        Range of distances in metres; chosen from a first fit if not given.
    exponent
        Power of the contrast; ½ for g, ¼ for K and 1 for L if not given.
    bandwidth
        Half width of the kernel of g, metres; 0.15 mean spacings if not given.
    distance_weight
        Each squared difference of the contrast counts its distance to this power; 0 for all alike.
    level_simulations
        Patterns with one level of clusters that tell whether the second level of ``nested-thomas``
        earns its place; 0 to leave that open, otherwise at least 39.
    bootstrap
        Patterns simulated for the intervals of all but the posterior; 0 for none, otherwise at least
        39.
    background
        Whether points may belong to no cluster (posterior only).
    chains
        Chains of the sampler, at least two.
    intensity
        Fitted to the survey on covariates: clusters are then those beyond it. Centres keep a
        constant intensity, and their offspring are thinned in proportion to it, place by place
        (Waagepetersen 2007, Biometrics 63: 252-258); mean offspring is that at the mean intensity.
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
    method = method_for(kind, method)
    if survey.area.plots > 1 and intensity is not None:
        raise UsageError("Plots laid side by side have no place among covariates; leave out one of the two.")
    if survey.area.plots > 1 and kind is Cauchy:
        raise UsageError(
            "The clusters of the model cauchy have no end and would reach from plot to plot; take another "
            "model for pooled plots, such as thomas."
        )
    if level_simulations != 0 and level_simulations < 39:
        raise not_allowed("level_simulations", "0 or at least 39", level_simulations)
    if bootstrap != 0 and bootstrap < 39:
        raise not_allowed("bootstrap", "0 or at least 39", bootstrap)
    if chains < 2:
        raise not_allowed("chains", "at least 2, so that they can be compared", chains)
    if background and method != "posterior":
        raise not_allowed("background", f"false for {method}, which cannot see it", background)
    choices = ContrastChoices(function, r_max, r_min, exponent, bandwidth, distance_weight)
    if method == "posterior":
        sampled = fit_by_posterior(
            survey, kind, choices=choices, background=background, chains=chains,
            rng=np.random.default_rng(rng), workers=workers, progress=progress, intensity=intensity,
        )  # fmt: skip
        return replace(sampled, seed=rng if isinstance(rng, int) else None, intensity=intensity)
    if method in FORMS:
        paired = fit_by_likelihood(
            survey, kind, method, choices=choices, bootstrap=bootstrap, rng=np.random.default_rng(rng),
            workers=workers, progress=progress, intensity=intensity, level_simulations=level_simulations,
        )  # fmt: skip
        return replace(paired, seed=rng if isinstance(rng, int) else None, intensity=intensity)
    found = fit_by_contrast(
        survey, kind, choices=choices, bootstrap=bootstrap, rng=np.random.default_rng(rng),
        workers=workers, progress=progress, intensity=intensity, level_simulations=level_simulations,
    )  # fmt: skip
    return replace(found, seed=rng if isinstance(rng, int) else None, intensity=intensity)


def method_for(kind: type[ClusterModel], method: str | None = None) -> str:
    """The way to fit a model: as asked, or the best that there is for it; an error if it does not fit it."""
    if method is None:
        return "posterior" if kind.sampled else "minimum-contrast"
    if method not in METHODS:
        raise not_allowed("method", METHODS, method)
    if method == "posterior" and not kind.sampled:
        raise UsageError(
            f"The model {kind.name} is fitted by {', '.join(METHODS[1:])}; the posterior is there for the "
            f"models {', '.join(SAMPLED)}."
        )
    return method
