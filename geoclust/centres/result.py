"""Where the cluster centres are: rasters, delineated clusters, numbers, and how sure they are."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from geoclust.layers.raster import Grid, write_bands

if TYPE_CHECKING:
    import geopandas as gpd
    import pandas as pd
    from affine import Affine
    from pyproj import CRS

Floats = npt.NDArray[np.float64]

UNITS = {
    "centres_per_ha_mean": "ha-1",
    "centres_per_ha_sd": "ha-1",
    "probability_any_centre": "1",
}


@dataclass(frozen=True, eq=False)
class CentreMap:
    """The posterior distribution of the cluster centres, on the map.

    Attributes
    ----------
    grid
        The raster grid of the three maps.
    mean, sd
        (rows, columns) expected centres per hectare and their standard deviation, of the part
        of each cell inside the study area; not a number outside.
    probability
        (rows, columns) probability of at least one centre in that part.
    cell_areas
        (rows, columns) area of that part, m².
    number_inside
        (chains, draws) posterior draws of the number of centres inside the study area.
    number_all
        (chains, draws) the same with those within `margin` outside it.
    margin
        How far outside the study area centres were looked for, metres.
    r_hat, effective_sample_size
        Convergence diagnostics of the number of centres inside.
    converged
        Whether the chains agree (R-hat below 1.01 and effective sample size above 400).
    points
        One row a point: `cluster` (0 for none), `membership_probability`, `background_probability`.
    clusters
        Delineated clusters: `cluster`, `points`, `centre_e_m`, `centre_n_m`, `centre_sd_m`,
        `centre_inside`, `membership_probability` (mean over its points), `area_m2`, polygon.
    zones, unsurveyed
        Polygons as given with numbers added, or None: `centres_mean`, `centres_low`, `centres_high`
        and `points_mean`, `points_low`, `points_high` (95 %), `area_ha`.
    """

    grid: Grid
    mean: Floats
    sd: Floats
    probability: Floats
    cell_areas: Floats
    number_inside: npt.NDArray[np.int64]
    number_all: npt.NDArray[np.int64]
    margin: float
    r_hat: float
    effective_sample_size: float
    converged: bool
    points: pd.DataFrame
    clusters: gpd.GeoDataFrame
    zones: gpd.GeoDataFrame | None = None
    unsurveyed: gpd.GeoDataFrame | None = None

    @property
    def transform(self) -> Affine:
        """Affine transform of the rasters."""
        return self.grid.transform

    @property
    def crs(self) -> CRS:
        """Coordinate reference system of the rasters."""
        return self.grid.crs

    def interval_inside(self, level: float = 0.95) -> tuple[float, float, float]:
        """Mean, lower and upper limit of the number of centres inside the study area."""
        tail = 0.5 * (1 - level)
        low, high = np.quantile(self.number_inside, [tail, 1 - tail])
        return float(self.number_inside.mean()), float(low), float(high)

    def bands(self) -> dict[str, Floats]:
        """The three maps by band name."""
        return {
            "centres_per_ha_mean": self.mean,
            "centres_per_ha_sd": self.sd,
            "probability_any_centre": self.probability,
        }

    def write(self, path: str | Path) -> None:
        """Write the three maps as a cloud-optimised GeoTIFF."""
        write_bands(path, self.grid, self.bands(), units=UNITS)

    def __repr__(self) -> str:
        mean, low, high = self.interval_inside()
        sure = "" if self.converged else "; NOT CONVERGED"
        return (
            f"<CentreMap {self.grid.shape[0]} x {self.grid.shape[1]} cells: {mean:.1f} centres inside "
            f"(95 %: {low:.0f} to {high:.0f}), {len(self.clusters)} clusters{sure}>"
        )
