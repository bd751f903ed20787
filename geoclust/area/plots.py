"""Several plots at once: replicates of one process, laid side by side as one survey."""

from __future__ import annotations

from collections.abc import Sequence

import geopandas as gpd
import numpy as np
import shapely

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import UsageError, not_allowed

# between two plots lie this many sides of a plot: twice as far as the centres of clusters are looked
# for beyond a plot's boundary, and further than any pair that is studied
GAP_IN_SIDES = 2.5


def pool_surveys(surveys: Sequence[Survey], *, names: Sequence[str] | None = None) -> Survey:
    """Put several plots together as replicates of one process with common parameters.

    The plots are laid side by side, so far apart that no pair, circle or cluster reaches from
    one into another. Their union is then a survey like any other: its curves are the ratios
    of sums over plots, which are the usual pooled estimates (Diggle, Lange & Beneš 1991,
    Journal of the American Statistical Association 86: 618-625), and its likelihood is the
    product of those of the plots. Lengths that follow from the size of a study area, such as
    the largest distance studied and the prior of the scale, follow from that of one plot.

    Parameters
    ----------
    surveys
        At least one; coordinates may have nothing to do with each other. Plots without points
        belong to it: that nothing was found there is news.
    names
        One name a plot, each once; ``1``, ``2``, ... if not given.

    Returns
    -------
    Survey
        Coordinates are those of the plots laid out; its attributes tell for each point its
        `plot`, and where it is there (`easting_m`, `northing_m`).

    Raises
    ------
    UsageError
        If there is no plot, or names are not one for each.
    """
    if not surveys:
        raise UsageError("There is no plot to pool; give at least one survey.")
    labels = [str(k + 1) for k in range(len(surveys))] if names is None else [str(name) for name in names]
    if len(labels) != len(surveys) or len(set(labels)) != len(labels):
        raise not_allowed("names", f"{len(surveys)} different names, one a plot", labels)
    if any(survey.area.plots > 1 for survey in surveys):
        raise UsageError("One of the surveys is pooled already; pool all plots in one go.")
    shifts = _places(surveys) - np.array([survey.area.origin for survey in surveys])
    parts = [
        shapely.transform(part, lambda at, by=shift: at + by)
        for survey, shift in zip(surveys, shifts, strict=True)
        for part in survey.area.polygon.geoms
    ]
    area = StudyArea(shapely.MultiPolygon(parts), plots=len(surveys))
    xy = np.concatenate([survey.xy + shift for survey, shift in zip(surveys, shifts, strict=True)])
    own = np.concatenate([survey.xy for survey in surveys])
    attributes = gpd.GeoDataFrame(
        {
            "plot": np.repeat(labels, [survey.n for survey in surveys]),
            "easting_m": own[:, 0],
            "northing_m": own[:, 1],
        },
        geometry=shapely.points(xy),
    )
    return Survey(xy, area, attributes=attributes)


def _places(surveys: Sequence[Survey]) -> np.ndarray:
    """(k, 2) places for the middles of the plots: rows of a square."""
    side = float(np.sqrt(np.mean([survey.area.area for survey in surveys])))
    widest = max(survey.area.diameter for survey in surveys)
    # whole metres keep coordinates on a lattice; plots of a few centimetres may not
    step = widest + max(GAP_IN_SIDES * side, widest)
    step = float(np.ceil(step)) if step > 10.0 else step
    columns = int(np.ceil(np.sqrt(len(surveys))))
    number = np.arange(len(surveys))
    return step * np.column_stack([number % columns, number // columns])
