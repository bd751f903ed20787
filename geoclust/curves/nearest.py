"""Nearest-neighbour G, empty-space F, and J, by minus-sampling and Kaplan-Meier."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.area import _edges
from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves import _nearest, _pairs
from geoclust.curves.curve import Curve
from geoclust.curves.second_order import checked_radii
from geoclust.errors import InputError, not_allowed

Floats = npt.NDArray[np.float64]

# test places of F: a square grid with about this many of them inside the study area
PLACES = 10_000


def nearest_neighbour_function(
    survey: Survey, radii: npt.ArrayLike, edge_weight: str = "kaplan-meier"
) -> Curve:
    """The nearest-neighbour function G: how likely the next point is not further than r.

    Parameters
    ----------
    survey
        Points and study area; at least two points.
    radii
        (k,) increasing distances in metres.
    edge_weight
        ``kaplan-meier`` (Baddeley & Gill 1997, Annals of Statistics 25: 263-292: the
        distance to the boundary censors that to the next point), ``minus-sampling``
        (only points further than r from the boundary) or ``unweighted``.

    Returns
    -------
    Curve
        Not a number at distances that no point can tell about.

    Raises
    ------
    InputError
        If the survey has fewer than two points.
    UsageError
        If radii or edge weight are not allowed.
    """
    return NearestDistances.measure(survey, radii, edge_weight, places=False).g()


def empty_space_function(survey: Survey, radii: npt.ArrayLike, edge_weight: str = "kaplan-meier") -> Curve:
    """The empty-space function F: how likely a place has a point not further than r.

    The places are the nodes of a fixed square grid, about 10,000 of them in the study
    area. Parameters and errors as for `nearest_neighbour_function`.
    """
    return NearestDistances.measure(survey, radii, edge_weight).f()


def j_function(survey: Survey, radii: npt.ArrayLike, edge_weight: str = "kaplan-meier") -> Curve:
    """The J function, (1 - G)/(1 - F): 1 under complete randomness, below 1 for clusters.

    Van Lieshout & Baddeley (1996), Statistica Neerlandica 50: 344-361. Parameters and
    errors as for `nearest_neighbour_function`.
    """
    return NearestDistances.measure(survey, radii, edge_weight).j()


@dataclass(frozen=True, eq=False)
class Places:
    """Fixed test places in a study area and how deep in it they lie.

    Attributes
    ----------
    xy
        (m, 2) local coordinates.
    depth
        (m,) distance to the boundary in metres, capped at `limit`.
    limit
        The cap.
    """

    xy: Floats
    depth: Floats
    limit: float

    @classmethod
    def over(cls, area: StudyArea, limit: float, count: int = PLACES) -> Places:
        """Centres of the cells of a square grid, about `count` of them inside the study area."""
        cell = float(np.sqrt(area.area / count))
        minx, miny, maxx, maxy = np.array(area.bounds) - np.tile(area.origin, 2)
        x = np.arange(minx + 0.5 * cell, maxx, cell)
        y = np.arange(miny + 0.5 * cell, maxy, cell)
        xy = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
        xy = np.ascontiguousarray(xy[area.local_contains(xy)])
        return cls(xy, _depths(area, xy, limit), limit)


@dataclass(frozen=True, eq=False)
class NearestDistances:
    """Distances to the nearest point and to the boundary, of points and of places.

    Attributes
    ----------
    radii
        (k,) distances in metres at which the functions are wanted.
    between, depth
        (n,) each: of each point to its nearest neighbour and to the boundary.
    empty, places
        Distances of the test places to the nearest point, and the places; None without.
    intensity
        Points per square metre.
    edge_weight
        How the boundary is allowed for.
    """

    radii: Floats
    between: Floats
    depth: Floats
    empty: Floats | None
    places: Places | None
    intensity: float
    edge_weight: str

    @classmethod
    def measure(
        cls, survey: Survey, radii: npt.ArrayLike, edge_weight: str = "kaplan-meier", *, places: bool = True
    ) -> NearestDistances:
        """Check the arguments and search the neighbours once."""
        at = checked_radii(radii)
        if edge_weight not in ESTIMATORS:
            raise not_allowed("edge_weight", ESTIMATORS, edge_weight)
        if survey.n < 2:
            raise InputError(
                f"The survey has {survey.n} point(s); distances between points need at least two."
            )
        where = Places.over(survey.area, beyond(at)) if places else None
        return cls.of_points(survey.local_xy, survey.area, at, edge_weight, where)

    @classmethod
    def of_points(
        cls, local_xy: Floats, area: StudyArea, radii: Floats, edge_weight: str, places: Places | None
    ) -> NearestDistances:
        """Search the neighbours of checked points in local coordinates."""
        limit = beyond(radii)
        points = sorted_points(local_xy)
        between = np.empty(len(local_xy))
        _nearest.nearest_distances(points, points.x, points.y, limit, True, between)
        empty = None
        if places is not None:
            empty = np.empty(len(places.xy))
            x, y = (np.ascontiguousarray(v) for v in places.xy.T)
            _nearest.nearest_distances(points, x, y, limit, False, empty)
        depth = _depths(area, np.column_stack([points.x, points.y]), limit)
        return cls(radii, between, depth, empty, places, len(local_xy) / area.area, edge_weight)

    def g_values(self) -> Floats:
        """(k,) estimate of G."""
        return ESTIMATORS[self.edge_weight](self.between, self.depth, self.radii)

    def f_values(self) -> Floats:
        """(k,) estimate of F."""
        assert self.places is not None
        assert self.empty is not None
        return ESTIMATORS[self.edge_weight](self.empty, self.places.depth, self.radii)

    def j_values(self) -> Floats:
        """(k,) estimate of J; not a number where F has reached one."""
        empty = 1.0 - self.f_values()
        return (1.0 - self.g_values()) / np.where(empty > 0, empty, np.nan)

    def g(self) -> Curve:
        """G as a curve."""
        return Curve("G", self.radii, self.g_values(), self._random(), "1", self.edge_weight)

    def f(self) -> Curve:
        """F as a curve."""
        return Curve("F", self.radii, self.f_values(), self._random(), "1", self.edge_weight)

    def j(self) -> Curve:
        """J as a curve."""
        return Curve("J", self.radii, self.j_values(), np.ones(len(self.radii)), "1", self.edge_weight)

    def _random(self) -> Floats:
        return -np.expm1(-self.intensity * np.pi * self.radii**2)


def nearest_radii(intensity: float, count: int = 100) -> Floats:
    """Distances up to one and a half mean spacings: under randomness 99.9 % of neighbours are nearer."""
    return np.linspace(0.0, 1.5 / np.sqrt(intensity), count + 1)[1:]


def beyond(radii: Floats) -> float:
    """A distance just above the largest radius: neighbours further away need not be told apart."""
    return float(radii[-1] * (1 + 1e-9) + 1e-9)


def sorted_points(local_xy: Floats, per_cell: float = 2.0) -> _nearest.CellPoints:
    """Points in the order of square cells with a few points each."""
    return sorted_with_order(local_xy, per_cell)[0]


def sorted_with_order(
    local_xy: Floats, per_cell: float = 2.0
) -> tuple[_nearest.CellPoints, npt.NDArray[np.int32]]:
    """Points in the order of square cells, and the row that each of them came from."""
    x, y = np.ascontiguousarray(local_xy[:, 0]), np.ascontiguousarray(local_xy[:, 1])
    n = len(x)
    left, bottom = (float(x.min()), float(y.min())) if n else (0.0, 0.0)
    width, height = (float(np.ptp(x)), float(np.ptp(y))) if n else (0.0, 0.0)
    # points on a line: as many cells along it as points
    cell = max(np.sqrt(width * height * per_cell / max(n, 1)), max(width, height) / max(n, 1), 1e-9)
    columns, rows = int(width / cell) + 1, int(height / cell) + 1
    order, first = _pairs.cell_order(x, y, left, bottom, cell, columns, rows)
    points = _nearest.CellPoints(x[order], y[order], first, left, bottom, float(cell), columns, rows)
    return points, order


def neighbour_distances(local_xy: Floats) -> Floats:
    """(n,) distance of each point to its nearest neighbour, in the order of the cells."""
    points = sorted_points(local_xy)
    out = np.empty(len(local_xy))
    spread = float(np.hypot(*np.ptp(local_xy, axis=0))) if len(local_xy) else 0.0
    _nearest.nearest_distances(points, points.x, points.y, 2.0 * spread + 1.0, True, out)
    return out


def _depths(area: StudyArea, local_xy: Floats, limit: float) -> Floats:
    out = np.empty(len(local_xy))
    _edges.distance_many(area.grid, np.ascontiguousarray(local_xy), limit, out)
    return out


def _minus_sampling(distance: Floats, depth: Floats, radii: Floats) -> Floats:
    """Share of near ones among those at least r from the boundary."""
    deep = np.sort(depth)
    kept = len(deep) - np.searchsorted(deep, radii, side="left")
    # near counts from d on, and no longer counts beyond the depth
    told = distance <= depth
    begins, ends = np.sort(distance[told]), np.sort(depth[told])
    near = np.searchsorted(begins, radii, side="right") - np.searchsorted(ends, radii, side="left")
    return near / np.where(kept > 0, kept, np.nan)


def _kaplan_meier(distance: Floats, depth: Floats, radii: Floats) -> Floats:
    """Product-limit estimate: the depth censors the distance."""
    told = distance <= depth
    seen = np.sort(np.minimum(distance, depth))
    at, number = np.unique(distance[told], return_counts=True)
    at_risk = len(seen) - np.searchsorted(seen, at, side="left")
    left = np.concatenate([[1.0], np.cumprod(1.0 - number / at_risk)])
    values = 1.0 - left[np.searchsorted(at, radii, side="right")]
    # beyond the last of all nothing is known
    return np.where(radii <= (seen[-1] if len(seen) else -1.0), values, np.where(left[-1] > 0, np.nan, 1.0))


def _unweighted(distance: Floats, depth: Floats, radii: Floats) -> Floats:
    """Share of near ones, the boundary ignored."""
    return np.searchsorted(np.sort(distance), radii, side="right") / len(distance)


ESTIMATORS: dict[str, Callable[[Floats, Floats, Floats], Floats]] = {
    "kaplan-meier": _kaplan_meier,
    "minus-sampling": _minus_sampling,
    "unweighted": _unweighted,
}
