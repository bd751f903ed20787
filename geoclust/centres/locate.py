"""Find the cluster centres by posterior sampling."""

from __future__ import annotations

from collections.abc import Callable

import geopandas as gpd
import numpy as np

from geoclust.area.survey import Survey
from geoclust.centres.clusters import delineate
from geoclust.centres.prediction import predict_unsurveyed, zone_numbers
from geoclust.centres.rasters import cell_areas, centre_maps, default_cell, grid_for
from geoclust.centres.result import CentreMap
from geoclust.errors import CannotTell, UsageError, not_allowed
from geoclust.fitting.convergence import sample_until_converged
from geoclust.fitting.result import ClusterFit
from geoclust.fitting.sampling import ChainSetup
from geoclust.layers.raster import Grid
from geoclust.models.catalogue import check_sampled

Progress = Callable[[str, int, int], None]


def locate_centres(
    survey: Survey,
    fit: ClusterFit,
    *,
    cell: float | None = None,
    like: Grid | None = None,
    zones: gpd.GeoDataFrame | None = None,
    unsurveyed: gpd.GeoDataFrame | None = None,
    chains: int = 4,
    rng: np.random.Generator | int,
    workers: int | None = None,
    progress: Progress | None = None,
) -> CentreMap:
    """Sample where the cluster centres are, given the points and a fitted model.

    Centres may lie anywhere in the study area and within a few scales outside
    it. Births, deaths, displacements, splits and merges of centres are accepted
    so that the chain visits configurations in proportion to their posterior
    probability (van Lieshout & Baddeley 2002; Møller & Waagepetersen 2004). If the
    fit is itself a posterior sample of this survey, its centres are used, so that the map
    carries the uncertainty of the parameters too; otherwise they are taken as known.

    Parameters
    ----------
    survey
        Points and study area.
    fit
        A fit whose status is ``ok``.
    cell
        Cell size of the maps in metres; a round number near half a scale if not given.
    like
        Grid to follow instead (`geoclust.layers.raster.grid_like`).
    zones
        Polygons in the CRS of the study area to give numbers for.
    unsurveyed
        Polygons in that CRS that were not walked, to predict for.
    chains
        Number of chains, at least two.
    rng
        Generator or seed; the answer does not depend on `workers`.
    workers, progress
        Threads, and a function called with label, done, total.

    Returns
    -------
    CentreMap

    Raises
    ------
    CannotTell
        If the fit's status is not ``ok``: there is no map that the data could carry.
    UsageError
        If the model is none whose centres can be sampled, `cell` and `like` are both given, or fewer
        than two chains asked for.
    """
    check_sampled(type(fit.model))
    if not fit.ok:
        raise CannotTell(fit.status, f"There is no map of centres: {fit.reason}")
    if cell is not None and like is not None:
        raise UsageError("Give either cell or like, not both: a template raster has its own cells.")
    if chains < 2:
        raise not_allowed("chains", "at least 2, so that they can be compared", chains)
    area = survey.area
    if area.plots > 1:
        raise UsageError(
            "Plots laid side by side have no place on a map; locate the centres plot by plot, each with "
            "this fit."
        )
    grid = like
    if grid is None:
        scale = fit.model.scale
        grid = grid_for(area, cell if cell is not None else default_cell(scale, area))
    cover = cell_areas(grid, area)
    if not cover.any():
        raise UsageError("The template raster does not overlap the study area.")

    chain_seed, prediction_seed = np.random.default_rng(rng).spawn(2)
    sample = fit.sample
    # a fit to several plots together, say, holds no centres of this one
    if sample is None or not sample.setup.holds(survey):
        setup = ChainSetup(survey.local_xy, area, fit.model, workers=workers, intensity=fit.intensity)
        sample = sample_until_converged(
            setup, rng=chain_seed, chains=chains, workers=workers, progress=progress
        )
    draws = sample.draws
    mean, sd, probability = centre_maps(draws, area, grid, cover)
    points, clusters = delineate(draws, survey.local_xy, area)
    predicted = None
    if unsurveyed is not None:
        predicted = predict_unsurveyed(unsurveyed, sample.setup, draws, prediction_seed)
    r_hat, enough = sample.worst
    return CentreMap(
        grid=grid,
        mean=mean,
        sd=sd,
        probability=probability,
        cell_areas=cover,
        number_inside=draws.number_inside,
        number_all=draws.number_all,
        margin=sample.setup.margin,
        r_hat=r_hat,
        effective_sample_size=enough,
        converged=sample.converged,
        points=points,
        clusters=clusters,
        zones=None if zones is None else zone_numbers(zones, draws, survey.local_xy, area),
        unsurveyed=predicted,
    )
