"""Area of the points of the study area that are deeper than a distance."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import shapely
from scipy.interpolate import CubicHermiteSpline

if TYPE_CHECKING:
    from geoclust.area.study_area import StudyArea

Floats = npt.NDArray[np.float64]
# erosions that are drawn; between them the area is interpolated with its exact slope
NODES = 48
# segments per quarter of a circle round a re-entrant corner
QUARTER = 64


class ErodedArea:
    """Area of W eroded by any distance up to a largest one.

    Drawn at some distances; in between by a cubic whose slope is minus the length
    of the drawn boundary, which is the derivative of the area.
    """

    def __init__(self, area: StudyArea, largest: float) -> None:
        polygon = area.polygon
        end = largest
        if shapely.buffer(polygon, -largest).is_empty:
            # the depth of the deepest point, where the area ends with a slope of zero
            low, high = 0.0, largest
            while high - low > 1e-6 * largest:
                middle = 0.5 * (low + high)
                low, high = (low, middle) if shapely.buffer(polygon, -middle).is_empty else (middle, high)
            end = high
        # denser where the area vanishes, which counts relative to what is left
        at = end * (1.0 - np.linspace(1.0, 0.0, NODES) ** 2)
        drawn = [shapely.buffer(polygon, -d, quad_segs=QUARTER) for d in at[1:]]
        values = np.array([area.area, *(p.area for p in drawn)])
        slopes = -np.array([area.perimeter, *(p.length for p in drawn)])
        self.deepest = end if end < largest else np.inf
        self._end = end
        self._curve = CubicHermiteSpline(at, values, slopes)

    def __call__(self, distances: npt.ArrayLike) -> Floats:
        """Area in square metres at each distance up to the largest."""
        d = np.asarray(distances, dtype=np.float64)
        values = np.maximum(self._curve(np.minimum(d, self._end)), 0.0)
        return np.where(d >= self.deepest, 0.0, values)
