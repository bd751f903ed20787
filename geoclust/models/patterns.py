"""Draw patterns of a model, or of complete randomness, inside a study area."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol, runtime_checkable

import numpy as np
import numpy.typing as npt
import shapely

from geoclust.area.study_area import Floats, StudyArea
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel

# expected number of points missed because their centre lies too far outside
MISSED = 1e-9
# the widening, as parts of the radius of the disc round the study area, that the cheapest is chosen from
WIDENINGS = 2.0 ** -np.arange(9)


@runtime_checkable
class HeavyTailed(Protocol):
    """A model whose offspring density falls so slowly that no widening catches all."""

    @property
    def cubic_tail(self) -> float:
        """A, metres, such that the offspring density at distance r is at most A / r³."""


@dataclass(frozen=True, eq=False)
class Pattern:
    """A drawn pattern with the centres behind it; local coordinates of the study area.

    Attributes
    ----------
    points
        (n, 2) inside the study area.
    centres
        (m, 2) all centres drawn, those outside the boundary included. With a heavy tail: all in the
        widened study area, and those further out that have a point.
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
    offspring beyond that distance. With a heavy tail nothing is missed:
    centres further out are drawn given that they have a point in the study
    area (Brix & Kendall 2002, Advances in Applied Probability 34: 267-280).

    Where many models are drawn from a few times each, `wide` may be the `simple_surroundings`
    of the study area, which are quicker to make.
    """
    mean_offspring = model.mean_offspring * _surplus(intensity)
    distance = _furthest(model, area, intensity)
    if wide is None:
        wide = area.dilated(distance)
    centres = model.draw_centres(wide, _missed(model) / mean_offspring, rng) + (wide.origin - area.origin)
    number = len(centres)
    sizes = rng.poisson(mean_offspring, number)
    cluster = np.repeat(np.arange(number), sizes)
    points = centres[cluster] + model.draw_offsets(len(cluster), rng)
    kept = area.local_contains(points)
    points, cluster = points[kept], cluster[kept]

    def thinned(at: Floats) -> npt.NDArray[np.bool_]:
        if intensity is None:
            return np.ones(len(at), bool)
        return rng.random(len(at)) < intensity.at(at + area.origin) / intensity.highest

    kept = thinned(points)
    points, cluster = points[kept], cluster[kept]
    if isinstance(model, HeavyTailed):
        theirs, whose = _from_far(model, model.cubic_tail, area, wide, distance, mean_offspring, rng)
        kept = thinned(theirs)
        others, row = np.unique(whose[kept], axis=0, return_inverse=True)
        centres, points = np.concatenate([centres, others]), np.concatenate([points, theirs[kept]])
        cluster = np.concatenate([cluster, number + row.reshape(-1)])
    return Pattern(np.ascontiguousarray(points), centres, cluster)


def simple_surroundings(
    model: ClusterModel, area: StudyArea, intensity: Intensity | None = None
) -> StudyArea:
    """A convex area that holds the study area widened as far as `draw_pattern` needs it."""
    return StudyArea(area.polygon.convex_hull.buffer(1.02 * _furthest(model, area, intensity), quad_segs=8))


def _furthest(model: ClusterModel, area: StudyArea, intensity: Intensity | None) -> float:
    """Distance from the study area beyond which centres may be left out, or are drawn apart; metres."""
    if isinstance(model, HeavyTailed):
        return _widening(area, model.cubic_tail)
    expected = model.intensity * _surplus(intensity) * area.area
    return model.reach(min(_missed(model) / max(expected, MISSED), 0.5))


def _missed(model: ClusterModel) -> float:
    """Points that may be missed on account of each level."""
    return MISSED / len(model.levels)


def _surplus(intensity: Intensity | None) -> float:
    """As many more offspring as thinning to the mean takes away."""
    return 1.0 if intensity is None else intensity.highest / intensity.mean


def _radius(area: StudyArea) -> float:
    """Radius of a disc round the local origin that holds the study area."""
    return float(np.hypot(*area._starts.T).max())


def _widening(area: StudyArea, tail: float) -> float:
    """How far to widen the study area for the least work in drawing a heavy-tailed model, metres."""
    radius = _radius(area)
    boxes = shapely.bounds(area.polygon.geoms)
    width, height = boxes[:, 2] - boxes[:, 0], boxes[:, 3] - boxes[:, 1]
    costs = []
    for d in radius * WIDENINGS:
        each = width * height + 2.0 * d * (width + height) + np.pi * d * d
        inner = min(float(each.sum()), np.pi * (radius + d) ** 2)
        costs.append(inner + area.area * 4.0 * np.pi * radius**2 * tail / d**3)
    return float(radius * WIDENINGS[int(np.argmin(costs))])


def _from_far(
    model: ClusterModel, tail: float, area: StudyArea, wide: StudyArea, distance: float,
    mean_offspring: float, rng: np.random.Generator,
) -> tuple[Floats, Floats]:  # fmt: skip
    """Points with a centre outside the widened study area, and the centre of each.

    With k bounded by A / u³, u the least distance of a centre from the study area W, its
    offspring in W are a thinned Poisson number of mean m = mu |W| A / u³, uniform in W. Centres
    with any before thinning have the intensity rho (1 - exp(-m)), at most rho m. Within the disc of
    twice the radius round W, u is bounded by the widening; beyond, rho m has a finite integral
    whose radial part is the sum of two powers, drawn by inversion.
    """
    rho, radius = model.parent_intensity, _radius(area)
    # arcs of the widened boundary are polygons, a little nearer than the full distance
    near = 0.99 * distance
    mass = mean_offspring * area.area * tail
    number = int(rng.poisson(-np.expm1(-mass / near**3) * rho * 4.0 * np.pi * radius**2))
    turn = rng.uniform(0.0, 2.0 * np.pi, number)
    from_middle = 2.0 * radius * np.sqrt(rng.random(number))
    inner = np.column_stack([from_middle * np.cos(turn), from_middle * np.sin(turn)])
    # beyond the disc: u^-2 and radius u^-3, two thirds and one third of the integral over u > radius
    number = int(rng.poisson(2.0 * np.pi * rho * mass * 1.5 / radius))
    power = np.where(rng.random(number) < 2.0 / 3.0, 1.0, 0.5)
    u = radius * (1.0 - rng.random(number)) ** -power
    m = mass / u**3
    kept = rng.random(number) * m < -np.expm1(-m)
    u, turn = u[kept], rng.uniform(0.0, 2.0 * np.pi, int(kept.sum()))
    outer = (u + radius)[:, None] * np.column_stack([np.cos(turn), np.sin(turn)])

    centres = np.concatenate([inner, outer])
    least = np.concatenate([np.full(len(inner), near), u])
    beyond = ~wide.local_contains(centres + (area.origin - wide.origin))
    centres, least = centres[beyond], least[beyond]
    m = mass / least**3
    # at least one: the first of a Poisson process before m, and those after it
    first = -np.log1p(rng.random(len(m)) * np.expm1(-m))
    sizes = 1 + rng.poisson(np.maximum(m - first, 0.0))
    which = np.repeat(np.arange(len(centres)), sizes)
    points = area.local_uniform_points(len(which), rng)
    density = model.offspring_density(np.hypot(*(points - centres[which]).T))
    kept = rng.random(len(which)) * tail / least[which] ** 3 < density
    return points[kept], centres[which[kept]]


def draw_random_points(intensity: float, area: StudyArea, rng: np.random.Generator) -> Floats:
    """Draw a completely random pattern (Poisson number of points), local coordinates."""
    return area.local_uniform_points(int(rng.poisson(intensity * area.area)), rng)
