"""A small survey as a GeoPackage: clusters that are plain to see."""

from __future__ import annotations

from pathlib import Path

import geopandas as gpd
import numpy as np
import pytest
import shapely
from pyproj import CRS

from geoclust.area.study_area import StudyArea
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

WEST, SOUTH = 604_000.0, 5_737_000.0


@pytest.fixture(scope="session")
def survey_file(tmp_path_factory) -> Path:
    """Layers mounds, reserve, zones and random (as many points at random), EPSG:25832."""
    crs = CRS("EPSG:25832")
    box = shapely.box(WEST, SOUTH, WEST + 300, SOUTH + 300)
    area = StudyArea(box, crs)
    pattern = draw_pattern(Thomas(4e-4, 6.0, 6.0), area, np.random.default_rng(8))
    path = tmp_path_factory.mktemp("survey") / "survey.gpkg"

    def write(layer: str, **columns: object) -> None:
        gpd.GeoDataFrame(columns, crs=crs).to_file(path, layer=layer)

    xy = pattern.points + area.origin
    write("mounds", note=[f"m{k}" for k in range(len(xy))], geometry=shapely.points(xy))
    write("reserve", name=["all"], geometry=[box])
    halves = [shapely.box(WEST + a, SOUTH, WEST + a + 150, SOUTH + 300) for a in (0, 150)]
    write("zones", name=["west", "east"], geometry=halves)
    write("random", geometry=shapely.points(area.uniform_points(len(xy), 5)))
    return path
