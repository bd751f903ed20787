"""A survey of the sample layers with real curves and a real fit, and a map of centres filled by hand."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from scipy.cluster.hierarchy import fcluster, linkage

from geoclust.area.survey import Survey
from geoclust.centres.result import CentreMap
from geoclust.curves.envelopes import EnvelopeTest, randomness_envelopes
from geoclust.fitting.fit import fit_clusters
from geoclust.fitting.result import ClusterFit
from geoclust.layers.raster import grid_over
from geoclust.layers.survey_layers import read_polygons
from geoclust.workflow import read_survey

RESERVE = Path(__file__).parents[2] / "sample_layers" / "reserve.gpkg"


@dataclass(frozen=True)
class Example:
    survey: Survey
    envelopes: dict[str, EnvelopeTest]
    fit: ClusterFit
    centres: CentreMap


@pytest.fixture(scope="session")
def example() -> Example:
    survey = read_survey(RESERVE, RESERVE, points_layer="mounds", area_layer="reserve")
    radii = np.linspace(0, 300, 41)[1:]
    envelopes = randomness_envelopes(survey, radii, simulations=39, rng=1)
    fit = fit_clusters(survey, method="minimum-contrast", bootstrap=39, rng=1)
    zones = read_polygons(RESERVE, layer="zones", crs=survey.area.crs)
    unwalked = read_polygons(RESERVE, layer="unwalked", crs=survey.area.crs)
    return Example(survey, envelopes, fit, centres_by_hand(survey, fit, zones, unwalked))


def centres_by_hand(
    survey: Survey, fit: ClusterFit, zones: gpd.GeoDataFrame, unwalked: gpd.GeoDataFrame
) -> CentreMap:
    """A map of centres of the right shape: clusters by distance, a bump of intensity on each."""
    rng = np.random.default_rng(3)
    sigma = fit.parameters["sigma"]
    group = fcluster(linkage(survey.xy, "average"), 2.2 * sigma, "distance")
    sizes = np.bincount(group)[1:]
    rank = np.empty(len(sizes), int)
    rank[np.argsort(-sizes, kind="stable")] = np.arange(1, len(sizes) + 1)
    cluster = rank[group - 1]
    sizes = np.bincount(cluster)[1:]
    several = int((sizes > 1).sum())
    cluster = np.where(cluster > several, 0, cluster)
    members = [survey.xy[cluster == k] for k in range(1, several + 1)]
    middles = np.array([m.mean(axis=0) for m in members])

    grid = grid_over(survey.area.bounds, 20.0, survey.area.crs)
    cover = survey.area.cell_areas(grid.transform, grid.shape)
    x, y = np.meshgrid(grid.x, grid.y)
    mean = np.zeros(grid.shape)
    for (e, n), m in zip(middles, members, strict=True):
        spread = 100 + sigma**2 / len(m)
        mean += np.exp(-((x - e) ** 2 + (y - n) ** 2) / (2 * spread)) / (2 * np.pi * spread) * 1e4
    mean = np.where(cover > 0, np.round(mean, 2), np.nan)
    draws = rng.poisson(np.nansum(mean * cover) / 1e4, (4, 250)).astype(np.int64)

    sure = rng.beta(8, 1.2, survey.n)
    shapes = [shapely.MultiPoint(m).convex_hull.buffer(0.5 * sigma) for m in members]
    outlines = gpd.GeoDataFrame(
        {
            "cluster": np.arange(1, several + 1),
            "points": [len(m) for m in members],
            "centre_e_m": middles[:, 0],
            "centre_n_m": middles[:, 1],
            "centre_sd_m": [sigma / np.sqrt(len(m)) for m in members],
            "centre_inside": survey.area.contains(middles),
            "membership_probability": [sure[cluster == k].mean() for k in range(1, several + 1)],
            "area_m2": [s.area for s in shapes],
        },
        geometry=shapes,
        crs=survey.area.crs,
    )
    points = pd.DataFrame(
        {
            "cluster": cluster,
            "membership_probability": np.where(cluster > 0, sure, np.nan),
            "background_probability": np.where(cluster > 0, 0.02, 0.7),
        }
    )
    return CentreMap(
        grid=grid,
        mean=mean,
        sd=np.sqrt(mean),
        probability=1 - np.exp(-mean * cover / 1e4),
        cell_areas=cover,
        number_inside=draws,
        number_all=draws + 20,
        margin=80.0,
        r_hat=1.004,
        effective_sample_size=812.0,
        converged=True,
        points=points,
        clusters=outlines,
        zones=_numbered(zones, points=[200, 180, 260, 200, 48]),
        unsurveyed=_numbered(unwalked),
    )


def _numbered(polygons: gpd.GeoDataFrame, points: list[int] | None = None) -> gpd.GeoDataFrame:
    out = polygons.copy()
    hectares = polygons.area.to_numpy() / 1e4
    out["area_ha"] = hectares
    if points is not None:
        out["points"] = points
    for name, rate in (("centres", 0.9),) if points is not None else (("points", 4.5), ("centres", 0.9)):
        out[f"{name}_mean"] = rate * hectares
        out[f"{name}_low"] = np.floor(0.7 * rate * hectares)
        out[f"{name}_high"] = np.ceil(1.3 * rate * hectares)
    return out
