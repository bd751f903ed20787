"""Does the second level of clusters earn its place? A test by simulation from the best single level.

A nested process has two more parameters than a Thomas process and always comes nearer to the
curve. How much nearer by chance alone is seen in patterns of the Thomas process that fits best: both are
fitted to each of them, and the relative drop of the contrast from one level to two is compared with
the survey's. Distances are those up to four scales of each pattern's own best single level: much
further out the curve hangs on where few large clusters happen to lie, a second level follows that as
well, and it hides whether the inside of a cluster has parts; much nearer, groups round the clusters
cannot be seen. Simulation stops early once enough patterns have reached the survey's drop, which keeps
the chance of a false alarm (Besag & Clifford 1991, Biometrika 78: 301-304).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import StudyArea
from geoclust.fitting.contrast import Contrast
from geoclust.fitting.search import CurvesByScale, Limits, OneLevel, best_single_level, search_two_levels
from geoclust.intensity.base import Intensity
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas
from geoclust.workers import in_order

Floats = npt.NDArray[np.float64]
Progress = Callable[[str, int, int], None]

# range that the best single level is looked for in, and range of the test, in its scales; the least
# range in bandwidths of g
REACH_IN_SCALES = 6.0
RANGE_IN_SCALES = 4.0
RANGE_IN_BANDWIDTHS = 6.0
# patterns that have to reach the survey's drop before the rest are left out
ENOUGH = 10


@dataclass(frozen=True)
class SecondLevel:
    """Whether two levels describe a survey better than one.

    Attributes
    ----------
    drop
        Part of the contrast of the best single level that the second one takes away.
    p_value
        Chance of such a drop in patterns with a single level.
    simulations
        Patterns that were drawn.
    single
        The best single level.
    r_max
        Largest distance of the test, metres.
    """

    drop: float
    p_value: float
    simulations: int
    single: OneLevel
    r_max: float

    def record(self) -> dict[str, object]:
        """The test among the choices of a fit."""
        return {
            "second_level_p_value": self.p_value,
            "second_level_contrast_drop": self.drop,
            "second_level_simulations": self.simulations,
            "second_level_r_max_m": self.r_max,
            "one_level": {"parent_intensity": self.single.parent_intensity, "sigma": self.single.scale},
        }


def drop_of(contrast: Contrast, intensity: float, area: float) -> tuple[float, OneLevel, float]:
    """Relative drop of the contrast from one level to two, the single level, and the range of the drop."""
    limits = Limits.of(contrast, intensity, area)
    single = best_single_level(contrast, limits, CurvesByScale(contrast, limits))
    r_max = _reach(contrast, RANGE_IN_SCALES * single.scale)
    near = contrast.up_to(r_max)
    limits = Limits.of(near, intensity, area)
    curves = CurvesByScale(near, limits)
    one, two = best_single_level(near, limits, curves), search_two_levels(near, limits, curves)
    return 1.0 - two.value / one.value, single, r_max


def _reach(contrast: Contrast, distance: float) -> float:
    """A distance, at least some bandwidths of g and well beyond the first radius, at most the range."""
    least = max(RANGE_IN_BANDWIDTHS * (contrast.bandwidth or 0.0), 2.0 * float(contrast.radii[0]))
    return min(max(distance, least), float(contrast.radii[-1]))


def second_level_test(
    contrast: Contrast,
    local_xy: Floats,
    area: StudyArea,
    measure: Callable[[Floats, float, Intensity | None], Contrast],
    simulations: int,
    rng: np.random.Generator,
    *,
    workers: int | None = None,
    progress: Progress | None = None,
    intensity: Intensity | None = None,
) -> SecondLevel:
    """Test the second level of a nested fit.

    Parameters
    ----------
    contrast
        The survey's, over the range of its fit.
    local_xy
        (n, 2) its points, local coordinates.
    area
        The study area.
    measure
        Measures the curve of points in local coordinates in the same way up to a distance, given the
        intensity fitted to them (None if it is constant).
    simulations
        Patterns to draw at most.
    rng
        Each pattern gets a generator spawned from it, so the answer does not depend on `workers`.
    workers, progress
        Threads, and a function called with label, done, total.
    intensity
        Patterns are thinned in proportion to it, and it is fitted to each of them anew.
    """
    density = len(local_xy) / area.area
    limits = Limits.of(contrast, density, area.area)
    first = best_single_level(contrast, limits, CurvesByScale(contrast, limits))
    reach = _reach(contrast, REACH_IN_SCALES * first.scale)
    drop, single, r_max = drop_of(measure(local_xy, reach, intensity), density, area.area)
    model = Thomas(single.parent_intensity, single.scale, density / single.parent_intensity)

    def one(seed: np.random.Generator) -> float:
        points = draw_pattern(model, area, seed, intensity).points
        if len(points) < 2:
            return 1.0
        again = None if intensity is None else intensity.refit(points, seed)
        return drop_of(measure(points, reach, again), len(points) / area.area, area.area)[0]

    reached = done = 0
    for value in in_order(one, rng.spawn(simulations), workers):
        done += 1
        reached += value >= drop
        if progress is not None:
            progress("test of the second level", done, simulations)
        if reached == ENOUGH:
            return SecondLevel(drop, reached / done, done, single, r_max)
    return SecondLevel(drop, (1 + reached) / (1 + done), done, single, r_max)
