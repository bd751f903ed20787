"""Draw patterns of a model, or of complete randomness, inside a study area."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import Floats, StudyArea
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel

# expected number of points missed because their centre lies too far outside
MISSED = 1e-9


@dataclass(frozen=True, eq=False)
class Pattern:
    """A drawn pattern with the centres behind it; local coordinates of the study area.

    Attributes
    ----------
    points
        (n, 2) inside the study area.
    centres
        (m, 2) all centres drawn, those outside the boundary included.
    cluster
        (n,) row of the centre of each point.
    """

    points: Floats
    centres: Floats
    cluster: npt.NDArray[np.int64]


def draw_pattern(
    model: ClusterModel,
    area: StudyArea,
    rng: np.random.Generator,
    intensity: Intensity | None = None,
    wide: StudyArea | None = None,
) -> Pattern:
    """Draw one pattern, offspring of centres outside the study area included.

    With an intensity, points are thinned in proportion to it, centres are not
    (Waagepetersen 2007, Biometrics 63: 252-258): the mean number of offspring is then
    that of a centre whose surroundings have the mean intensity.

    Centres are drawn in the study area widened so far that fewer than 1e-9
    points are expected to be missed: the expected number of points with a
    centre further out is at most intensity times area times the share of
    offspring beyond that distance. Where many models are drawn from a few times each,
    `wide` may be the `simple_surroundings` of the study area, which are quicker to make.
    """
    surplus = _surplus(intensity)
    if wide is None:
        wide = area.dilated(_furthest(model, area, intensity))
    number = int(rng.poisson(model.parent_intensity * wide.area))
    centres = wide.local_uniform_points(number, rng) + (wide.origin - area.origin)
    sizes = rng.poisson(model.mean_offspring * surplus, number)
    cluster = np.repeat(np.arange(number), sizes)
    points = centres[cluster] + model.draw_offsets(len(cluster), rng)
    kept = area.local_contains(points)
    if intensity is not None:
        inside = np.flatnonzero(kept)
        chance = intensity.at(points[inside] + area.origin) / intensity.highest
        kept[inside] = rng.random(len(inside)) < chance
    return Pattern(np.ascontiguousarray(points[kept]), centres, cluster[kept])


def simple_surroundings(
    model: ClusterModel, area: StudyArea, intensity: Intensity | None = None
) -> StudyArea:
    """A convex area that holds the study area widened as far as `draw_pattern` needs it."""
    return StudyArea(area.polygon.convex_hull.buffer(1.02 * _furthest(model, area, intensity), quad_segs=8))


def _furthest(model: ClusterModel, area: StudyArea, intensity: Intensity | None) -> float:
    """Distance from the study area beyond which centres may be left out, metres."""
    expected = model.intensity * _surplus(intensity) * area.area
    return model.reach(min(MISSED / max(expected, MISSED), 0.5))


def _surplus(intensity: Intensity | None) -> float:
    """As many more offspring as thinning to the mean takes away."""
    return 1.0 if intensity is None else intensity.highest / intensity.mean


def draw_random_points(intensity: float, area: StudyArea, rng: np.random.Generator) -> Floats:
    """Draw a completely random pattern (Poisson number of points), local coordinates."""
    return area.local_uniform_points(int(rng.poisson(intensity * area.area)), rng)
