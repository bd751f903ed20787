"""Does the second level of clusters earn its place? A test by simulation from the best single level.

A nested process has two more parameters than a Thomas process and always comes nearer to the
curve. How much nearer by chance alone is seen in patterns of the Thomas process that fits best: both are
fitted to each of them, and the relative drop of the contrast from one level to two is compared with
the survey's. That is done over two ranges, in scales of each pattern's own best single level. The short
one tells whether a cluster has parts: further out the curve hangs on where few large clusters happen to
lie, and a second level follows that as well. The long one tells whether clusters lie in groups. The
p-value is twice the smaller of the two (Bonferroni). Simulation stops early once enough patterns have
reached the survey's drops, which keeps the chance of a false alarm (Besag & Clifford 1991, Biometrika 78:
301-304).
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

# both ranges in scales of the best single level, the range that this is looked for in, and the least
# range in bandwidths of g
RANGES_IN_SCALES = (4.0, 10.0)
REACH_IN_SCALES = 12.0
RANGE_IN_BANDWIDTHS = 6.0
# patterns that have to reach a drop of the survey before the rest are left out
ENOUGH = 10


@dataclass(frozen=True)
class SecondLevel:
    """Whether two levels describe a survey better than one.

    Attributes
    ----------
    drops
        Part of the contrast of the best single level that the second one takes away, over each range.
    p_value
        Chance of such drops in patterns with a single level.
    simulations
        Patterns that were drawn.
    single
        The best single level.
    ranges
        Largest distance of each range, metres.
    """

    drops: tuple[float, ...]
    p_value: float
    simulations: int
    single: OneLevel
    ranges: tuple[float, ...]

    def record(self) -> dict[str, object]:
        """The test among the choices of a fit."""
        return {
            "second_level_p_value": self.p_value,
            "second_level_contrast_drops": list(self.drops),
            "second_level_ranges_m": list(self.ranges),
            "second_level_simulations": self.simulations,
            "one_level": {"parent_intensity": self.single.parent_intensity, "sigma": self.single.scale},
        }


def drops_of(
    contrast: Contrast, intensity: float, area: float
) -> tuple[tuple[float, ...], OneLevel, tuple[float, ...]]:
    """Relative drop of the contrast from one level to two over both ranges, the single level, the ranges."""
    limits = Limits.of(contrast, intensity, area)
    single = best_single_level(contrast, limits, CurvesByScale(contrast, limits))
    drops, ranges = [], []
    for scales in RANGES_IN_SCALES:
        near = contrast.up_to(_reach(contrast, scales * single.scale))
        limits = Limits.of(near, intensity, area)
        curves = CurvesByScale(near, limits)
        one, two = best_single_level(near, limits, curves), search_two_levels(near, limits, curves)
        drops.append(1.0 - two.value / one.value)
        ranges.append(float(near.radii[-1]))
    return tuple(drops), single, tuple(ranges)


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
    drops, single, ranges = drops_of(measure(local_xy, reach, intensity), density, area.area)
    model = Thomas(single.parent_intensity, single.scale, density / single.parent_intensity)

    def one(seed: np.random.Generator) -> tuple[float, ...]:
        points = draw_pattern(model, area, seed, intensity).points
        if len(points) < 2:
            return (1.0,) * len(drops)
        again = None if intensity is None else intensity.refit(points, seed)
        return drops_of(measure(points, reach, again), len(points) / area.area, area.area)[0]

    reached, done = [0] * len(drops), 0
    p_values = [1.0] * len(drops)
    for found in in_order(one, rng.spawn(simulations), workers):
        done += 1
        for k, (value, own) in enumerate(zip(found, drops, strict=True)):
            # each range stops by itself
            if reached[k] < ENOUGH:
                reached[k] += value >= own
                p_values[k] = reached[k] / done if reached[k] == ENOUGH else (1 + reached[k]) / (1 + done)
        if progress is not None:
            progress("test of the second level", done, simulations)
        if min(reached) == ENOUGH:
            break
    return SecondLevel(drops, min(1.0, len(drops) * min(p_values)), done, single, ranges)
