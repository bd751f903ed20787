"""Is there structure beyond what the intensity explains: envelopes of the inhomogeneous Poisson process."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from geoclust.area.survey import Survey
from geoclust.curves.bandwidth import BY_CROSS_VALIDATION, BY_RULE, GIVEN, cross_validated_bandwidth
from geoclust.curves.envelopes import EnvelopeTest, global_envelope
from geoclust.curves.simulated import PAIRED, Drawn, Progress, Summaries, simulated_curves
from geoclust.errors import InputError, not_allowed
from geoclust.intensity.base import Intensity

Floats = npt.NDArray[np.float64]

CROSS_VALIDATION = "cross-validation"
# a simulated pattern for which the fit has no best value is drawn again
TRIES = 20


def inhomogeneous_envelopes(
    survey: Survey,
    intensity: Intensity,
    radii: npt.ArrayLike,
    *,
    functions: tuple[str, ...] = ("L", "g"),
    simulations: int = 999,
    bandwidth: float | str | None = None,
    level: float = 0.95,
    alternative: str = "different",
    edge_weight: str = "rigid-motion",
    refit: bool = True,
    rng: np.random.Generator | int,
    workers: int | None = None,
    progress: Progress | None = None,
) -> dict[str, EnvelopeTest]:
    """Test whether the fitted intensity alone explains the pattern.

    The curves are weighted by the intensity (Baddeley, Møller & Waagepetersen 2000). Each
    simulated pattern has as many points as the survey, independent and with the fitted
    intensity; the intensity is then fitted to it anew, as it was to the survey, so that
    both sides carry the errors of a fit and the test keeps its size.

    Parameters
    ----------
    survey
        Points and study area; at least two points.
    intensity
        Fitted to the survey.
    radii
        (k,) increasing distances in metres.
    functions
        Names among ``K``, ``L``, ``g``.
    simulations
        Number of simulated patterns.
    bandwidth
        Of g in metres, or ``cross-validation``; 0.15 mean spacings if not given.
    level, alternative
        As for `global_envelope`.
    edge_weight
        As for `k_function`.
    refit
        Whether the intensity is fitted anew to every simulated pattern.
    rng
        Generator or seed; the answer does not depend on `workers`.
    workers
        Threads; one a core if not given.
    progress
        Called with a label, patterns done and patterns in all.

    Returns
    -------
    dict
        `EnvelopeTest` under the name of each function.
    """
    if simulations < 1:
        raise not_allowed("simulations", "a positive whole number", simulations)
    for name in functions:
        if name not in PAIRED:
            raise not_allowed("functions", PAIRED, name)
    factors = 1.0 / intensity.at_own_points()
    if len(factors) != survey.n:
        raise not_allowed("intensity", f"one fitted to the {survey.n} points of the survey", intensity)
    chosen_by = BY_RULE if bandwidth is None else GIVEN
    if isinstance(bandwidth, str):
        if bandwidth != CROSS_VALIDATION:
            raise not_allowed("bandwidth", f"a positive number of metres or '{CROSS_VALIDATION}'", bandwidth)
        furthest = float(np.max(np.asarray(radii, dtype=np.float64)))
        bandwidth = cross_validated_bandwidth(
            survey, furthest, intensity_at_points=1.0 / factors, workers=workers
        ).bandwidth
        chosen_by = BY_CROSS_VALIDATION
    summaries = Summaries.of_survey(survey, functions, radii, bandwidth=bandwidth, edge_weight=edge_weight)
    observed = {
        name: replace(
            curve, intensity=intensity.method, bandwidth_by=chosen_by if curve.bandwidth is not None else None
        )
        for name, curve in summaries.curves(Drawn(survey.local_xy, factors), workers).items()
    }

    def draw(seed: np.random.Generator) -> Drawn:
        for _ in range(TRIES):
            points = intensity.draw(survey.n, seed)
            if not refit:
                return Drawn(points, 1.0 / intensity.at(points + survey.area.origin))
            try:
                return Drawn(points, 1.0 / intensity.refit(points, seed).at_own_points())
            except InputError as error:
                last = error
        raise last

    found = simulated_curves(
        summaries, draw, np.random.default_rng(rng).spawn(simulations), workers=workers,
        progress=progress, label="patterns of the intensity alone",
    )  # fmt: skip
    return {
        name: global_envelope(curve, found[name], level=level, alternative=alternative)
        for name, curve in observed.items()
    }
