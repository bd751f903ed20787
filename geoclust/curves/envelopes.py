"""Global envelopes and tests of complete randomness by simulation in the real study area."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.area.survey import Survey
from geoclust.curves.curve import Curve
from geoclust.curves.simulated import Drawn, Progress, Summaries, simulated_curves, uniform_draw
from geoclust.errors import not_allowed

Floats = npt.NDArray[np.float64]

ALTERNATIVES = ("different", "clustered", "regular")


@dataclass(frozen=True, eq=False)
class EnvelopeTest:
    """A global envelope round simulated curves and the p-value that goes with it.

    Attributes
    ----------
    curve
        The survey's curve with the envelope as its limits.
    p_value
        Chance under the null model of a curve at least as extreme as the survey's.
    simulations
        Number of simulated curves; the p-value is a multiple of 1/(simulations + 1).
    level
        Coverage of the envelope.
    alternative
        ``different``, ``clustered`` (only large values are extreme) or ``regular`` (only small ones).
    """

    curve: Curve
    p_value: float
    simulations: int
    level: float
    alternative: str

    def departures(self) -> list[tuple[float, float, str]]:
        """Ranges of distance, in metres, where the curve leaves the envelope, and on which side."""
        c = self.curve
        assert c.lower is not None
        assert c.upper is not None
        with np.errstate(invalid="ignore"):
            side = np.where(c.values > c.upper, 1, np.where(c.values < c.lower, -1, 0))
        out = []
        start = 0
        for k in range(1, len(side) + 1):
            if k == len(side) or side[k] != side[start]:
                if side[start]:
                    name = "above" if side[start] > 0 else "below"
                    out.append((float(c.radii[start]), float(c.radii[k - 1]), name))
                start = k
        return out


def extreme_rank_lengths(curves: Floats, alternative: str = "different") -> npt.NDArray[np.int64]:
    """Order curves from the most extreme (0) to the least by extreme rank length.

    Each curve is ranked at every radius, from the extreme side or sides; curves
    are then compared by their sorted ranks, the smallest first (Myllymäki et al.
    2017, Journal of the Royal Statistical Society B 79: 381-404). Tied values
    share the mean of their ranks, as published, and curves whose ranks are all
    the same share their position.

    Parameters
    ----------
    curves
        (s, k) one curve a row; columns that are not finite in any row are ignored.
    alternative
        One of ``different``, ``clustered``, ``regular``.

    Returns
    -------
    ndarray of int, (s,)
        For each curve, the number of curves that are strictly more extreme.
    """
    if alternative not in ALTERNATIVES:
        raise not_allowed("alternative", ALTERNATIVES, alternative)
    usable = curves[:, np.isfinite(curves).all(axis=0)]
    s = len(usable)
    if usable.shape[1] == 0:
        return np.zeros(s, dtype=np.int64)
    ordered = np.sort(usable, axis=0)
    ranks = np.empty(usable.shape, dtype=np.int64)
    for k in range(usable.shape[1]):
        # twice the mean rank of the values tied with each, so that ranks stay whole
        below = np.searchsorted(ordered[:, k], usable[:, k], side="left")
        up_to = np.searchsorted(ordered[:, k], usable[:, k], side="right")
        down = below + up_to + 1
        up = 2 * (s + 1) - down
        ranks[:, k] = {"clustered": up, "regular": down, "different": np.minimum(up, down)}[alternative]
    ranks.sort(axis=1)
    order = np.lexsort(ranks.T[::-1])
    position = np.empty(s, dtype=np.int64)
    start = 0
    for a in range(s):
        if a and np.any(ranks[order[a]] != ranks[order[a - 1]]):
            start = a
        position[order[a]] = start
    return position


def global_envelope(
    observed: Curve, simulated: Floats, *, level: float = 0.95, alternative: str = "different"
) -> EnvelopeTest:
    """Build the global envelope and test by extreme rank length.

    Parameters
    ----------
    observed
        The survey's curve.
    simulated
        (s, k) curves of patterns from the null model at the same radii.
    level
        Coverage of the envelope over all radii together.
    alternative
        Which departures count.

    Raises
    ------
    UsageError
        If there are too few simulations for the level, or the level is not between 0 and 1.
    """
    s = len(simulated)
    if not 0 < level < 1:
        raise not_allowed("level", "between 0 and 1", level)
    if (1 - level) * (s + 1) < 1 - 1e-9:
        least = int(np.ceil(1 / (1 - level) - 1e-9)) - 1
        raise not_allowed("simulations", f"at least {least} for a level of {level:g}", s)
    curves = np.vstack([observed.values, simulated])
    position = extreme_rank_lengths(curves, alternative)
    p = (position <= position[0]).mean()
    # the hull of all curves but the most extreme ones; tied curves stay or go together, so that
    # a curve is left out exactly if its p-value does not exceed 1 - level
    allowed = position[position <= int(np.floor((1 - level) * (s + 1) + 1e-9))]
    kept = curves[position >= allowed.max()]
    lower, upper = kept.min(axis=0), kept.max(axis=0)
    if alternative == "clustered":
        lower = np.full_like(lower, -np.inf)
    if alternative == "regular":
        upper = np.full_like(upper, np.inf)
    words = f"{level:.0%} global envelope of {s} simulations"
    return EnvelopeTest(observed.with_limits(lower, upper, words), float(p), s, level, alternative)


def randomness_envelopes(
    survey: Survey,
    radii: npt.ArrayLike,
    *,
    simulations: int = 999,
    bandwidth: float | None = None,
    level: float = 0.95,
    alternative: str = "different",
    edge_weight: str = "rigid-motion",
    functions: tuple[str, ...] = ("L", "g"),
    rng: np.random.Generator | int,
    workers: int | None = None,
    progress: Progress | None = None,
) -> dict[str, EnvelopeTest]:
    """Test complete randomness with L and g, or other curves, simulating in the real study area.

    The simulated patterns have the number of points of the survey, drawn
    uniformly in its study area; all curves come from the same patterns.

    Parameters
    ----------
    survey
        Points and study area; at least two points.
    radii
        (k,) increasing distances in metres.
    simulations
        Number of simulated patterns.
    bandwidth
        Of g, in metres; 0.15 mean spacings if not given.
    level, alternative
        As for `global_envelope`.
    edge_weight
        As for `k_function`. Rigid-motion weights, which cost nothing a pair at any distance, unless given.
    functions
        Names among ``K``, ``L``, ``g``, ``G``, ``F``, ``J``; the last three are Kaplan-Meier estimates.
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
    summaries = Summaries.of_survey(survey, functions, radii, bandwidth=bandwidth, edge_weight=edge_weight)
    observed = summaries.curves(Drawn(survey.local_xy), workers)
    found = simulated_curves(
        summaries, uniform_draw(survey.area, survey.n), np.random.default_rng(rng).spawn(simulations),
        workers=workers, progress=progress, label="complete randomness",
    )  # fmt: skip
    return {
        name: global_envelope(curve, found[name], level=level, alternative=alternative)
        for name, curve in observed.items()
    }
