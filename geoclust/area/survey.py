"""The survey: mapped individuals in the study area in which they were looked for."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from geoclust.area.study_area import Floats, StudyArea, checked_points
from geoclust.errors import InputError

if TYPE_CHECKING:
    import geopandas as gpd
    from pyproj import CRS

    from geoclust.layers.audit import Audit


@dataclass(frozen=True, eq=False)
class Survey:
    """Points and study area in one metric coordinate reference system.

    Parameters
    ----------
    xy
        (n, 2) easting and northing in metres, inside the study area.
    area
        The study area.
    attributes
        Columns of the point layer, row k belonging to point k, with geometry as it came.
    audit
        What was found and done when the layers were read.

    Raises
    ------
    InputError
        If a point lies outside the study area.
    UsageError
        If the coordinates are not a finite (n, 2) array.

    Examples
    --------
    >>> import shapely
    >>> survey = Survey([[10, 10], [20, 30]], StudyArea(shapely.box(0, 0, 100, 100)))
    >>> survey.n, survey.intensity
    (2, 0.0002)
    """

    xy: Floats
    area: StudyArea
    attributes: gpd.GeoDataFrame | None = field(default=None, repr=False)
    audit: Audit | None = field(default=None, repr=False)

    def __post_init__(self) -> None:
        at = checked_points(self.xy)
        object.__setattr__(self, "xy", at)
        outside = ~self.area.contains(at)
        if outside.any():
            # on the boundary, to the millimetre, counts as inside
            outside[outside] = self.area.distance_to_boundary(at[outside], 1.0) > 1e-3
        if outside.any():
            raise InputError(
                f"{int(outside.sum())} of {len(at)} points lie outside the study area; "
                "drop them or widen the study area to what was really searched."
            )

    def __repr__(self) -> str:
        return f"<Survey of {self.n:,} points, {self.intensity * 1e4:.3g} per ha, in {self.area!r}>"

    @property
    def n(self) -> int:
        """Number of points."""
        return len(self.xy)

    @property
    def intensity(self) -> float:
        """Points per square metre."""
        return self.n / self.area.area

    @property
    def points_crs(self) -> CRS | None:
        """Coordinate reference system in which the points came."""
        if self.attributes is not None and self.attributes.crs is not None:
            return self.attributes.crs
        return self.area.crs

    @property
    def local_xy(self) -> npt.NDArray[np.float64]:
        """(n, 2) coordinates from the local origin of the study area."""
        return self.area.local(self.xy)
