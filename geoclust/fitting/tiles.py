"""The study area cut into compact tiles of about the same area, and tiles into folds."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import shapely
from scipy.cluster.vq import kmeans2
from scipy.spatial import cKDTree

from geoclust.area.study_area import StudyArea
from geoclust.curves.nearest import Places

Floats = npt.NDArray[np.float64]

# places that stand for the area of the tiles
PLACES = 6_000
# slivers of the cut that count as nothing, as a part of the study area
SLIVER = 1e-9


@dataclass(frozen=True, eq=False)
class Tiles:
    """Tiles of a study area.

    Attributes
    ----------
    area
        The study area.
    areas
        The tiles, as study areas; they share edges and make up the whole.
    middles
        (t, 2) local coordinates of the study area; a place belongs to the tile of the nearest one.
    fold
        (t,) tiles of the same fold are held out together.
    """

    area: StudyArea
    areas: list[StudyArea]
    middles: Floats
    fold: npt.NDArray[np.int64]

    def find(self, local_xy: Floats) -> npt.NDArray[np.int64]:
        """(n,) tile of each place in the study area."""
        return np.asarray(cKDTree(self.middles).query(local_xy)[1], dtype=np.int64)

    def without(self, held: npt.NDArray[np.int64]) -> StudyArea:
        """The study area without some of the tiles."""
        taken = shapely.union_all([self.areas[k].polygon for k in held])
        left = _polygons(shapely.difference(self.area.polygon, taken), SLIVER * self.area.area)
        return StudyArea(left, self.area.crs)


def cut_into_tiles(area: StudyArea, count: int, folds: int) -> Tiles:
    """Cut a study area into tiles: the nearest of middles that are spread evenly over it.

    The middles are those of k-means over places on a lattice, always the same for a study area.

    Parameters
    ----------
    area
        The study area.
    count
        Number of tiles.
    folds
        Number of folds; the tiles of each lie far apart, and their numbers differ by one at most.
    """
    places = Places.over(area, 1.0, PLACES).xy
    middles, _ = kmeans2(places, count, iter=100, minit="++", seed=1993)
    frame = shapely.box(*area.bounds).buffer(0.1 * area.diameter)
    at = middles + area.origin
    cells = shapely.voronoi_polygons(shapely.MultiPoint(at), extend_to=frame)
    found = shapely.STRtree(shapely.points(at)).query(shapely.get_parts(cells), predicate="contains")
    of_middle = {int(m): shapely.get_parts(cells)[c] for c, m in found.T}
    tiles = [
        StudyArea(_polygons(shapely.intersection(area.polygon, of_middle[k]), SLIVER * area.area), area.crs)
        for k in range(count)
    ]
    return Tiles(area, tiles, np.asarray(middles), _folds(middles, folds))


def _folds(middles: Floats, folds: int) -> npt.NDArray[np.int64]:
    """Deal the tiles out in equal numbers, then swap as long as tiles of a fold get further apart."""
    count = len(middles)
    fold = np.arange(count) % folds
    near = np.hypot(*(middles[:, None] - middles[None]).transpose(2, 0, 1))
    np.fill_diagonal(near, np.inf)
    # neighbours weigh most; what is far away hardly counts
    push = (near.min() / near) ** 4
    for _ in range(count):
        swapped = False
        for i in range(count):
            # push on every tile from every fold
            theirs = np.array([push[:, fold == f].sum(axis=1) for f in range(folds)])
            own = theirs[fold, np.arange(count)]
            change = theirs[fold, i] + theirs[fold[i]] - own[i] - own - 2.0 * push[i]
            change[fold == fold[i]] = 0.0
            j = int(np.argmin(change))
            if change[j] < -1e-12:
                fold[i], fold[j] = fold[j], fold[i]
                swapped = True
        if not swapped:
            break
    return fold.astype(np.int64)


def _polygons(geometry: shapely.Geometry, least: float) -> shapely.MultiPolygon:
    """The polygons of a geometry that are no slivers."""
    parts = shapely.get_parts(shapely.get_parts(geometry))
    return shapely.MultiPolygon([p for p in parts if p.geom_type == "Polygon" and p.area > least])
