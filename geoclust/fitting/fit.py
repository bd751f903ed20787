"""Fit a cluster model to a survey."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from geoclust.area.survey import Survey
from geoclust.errors import not_allowed
from geoclust.fitting.likelihood_fits import FORMS, fit_by_likelihood
from geoclust.fitting.moments import ContrastChoices, fit_by_contrast
from geoclust.fitting.posterior import fit_by_posterior
from geoclust.fitting.result import ClusterFit
from geoclust.intensity.base import Intensity
from geoclust.models.catalogue import model_by_name

Progress = Callable[[str, int, int], None]

METHODS = ("posterior", "minimum-contrast", *FORMS)


def fit_clusters(
    survey: Survey,
    model: str = "thomas",
    *,
    method: str = "posterior",
    function: str = "g",
    r_max: float | None = None,
    r_min: float | None = None,
    exponent: float | None = None,
    bandwidth: float | None = None,
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
        (of pairs of points; Guan 2006).
    function
        Curve that the contrast is taken on: ``g`` or ``K``. The posterior starts from that fit; the
        likelihoods of pairs take no curve.
    r_max, r_min
        Range of distances in metres; chosen from a first fit if not given.
    exponent
        Power of the contrast; ½ for g and ¼ for K if not given.
    bandwidth
        Half width of the kernel of g, metres; 0.15 mean spacings if not given.
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
    if method not in METHODS:
        raise not_allowed("method", METHODS, method)
    if bootstrap != 0 and bootstrap < 39:
        raise not_allowed("bootstrap", "0 or at least 39", bootstrap)
    if chains < 2:
        raise not_allowed("chains", "at least 2, so that they can be compared", chains)
    if background and method != "posterior":
        raise not_allowed("background", f"false for {method}, which cannot see it", background)
    choices = ContrastChoices(function, r_max, r_min, exponent, bandwidth)
    if method == "posterior":
        sampled = fit_by_posterior(
            survey, kind, choices=choices, background=background, chains=chains,
            rng=np.random.default_rng(rng), workers=workers, progress=progress, intensity=intensity,
        )  # fmt: skip
        return replace(sampled, seed=rng if isinstance(rng, int) else None, intensity=intensity)
    if method in FORMS:
        paired = fit_by_likelihood(
            survey, kind, method, choices=choices, bootstrap=bootstrap, rng=np.random.default_rng(rng),
            workers=workers, progress=progress, intensity=intensity,
        )  # fmt: skip
        return replace(paired, seed=rng if isinstance(rng, int) else None, intensity=intensity)
    found = fit_by_contrast(
        survey, kind, choices=choices, bootstrap=bootstrap, rng=np.random.default_rng(rng),
        workers=workers, progress=progress, intensity=intensity,
    )  # fmt: skip
    return replace(found, seed=rng if isinstance(rng, int) else None, intensity=intensity)
