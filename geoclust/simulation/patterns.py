"""Simulated patterns as layers."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Protocol

import geopandas as gpd
import numpy as np

from geoclust.area.study_area import Floats, StudyArea
from geoclust.errors import CannotTell, UsageError, not_allowed
from geoclust.fitting.result import ClusterFit
from geoclust.intensity.base import Intensity
from geoclust.models.base import ClusterModel
from geoclust.models.patterns import draw_pattern, draw_random_points
from geoclust.workers import in_order

Progress = Callable[[str, int, int], None]


class PatternSink(Protocol):
    """Takes patterns one by one, such as `geoclust.layers.package.PatternWriter`."""

    def append(self, pattern: int, xy: Floats) -> None:
        """Add the points of one pattern."""


def stream_patterns(
    source: ClusterFit | ClusterModel | float,
    area: StudyArea,
    count: int,
    *,
    rng: np.random.Generator | int,
    workers: int | None = None,
    progress: Progress | None = None,
) -> Iterator[tuple[int, Floats]]:
    """Draw patterns one after the other; memory does not grow with their number.

    Parameters
    ----------
    source
        A fit, a model, or a number: the intensity per m² of complete randomness.
    area
        Where; offspring of centres outside it are included: all with a heavy tail, otherwise save for
        fewer than 1e-9 points expected.
    count
        Number of patterns.
    rng
        Generator or seed; the answer does not depend on `workers`.

    Yields
    ------
    pattern : int
        1, 2, ... `count`.
    xy : ndarray, (n, 2)
        Metres.
    """
    if count < 1:
        raise not_allowed("count", "a positive whole number", count)
    intensity: Intensity | None = None
    if isinstance(source, ClusterFit):
        if not source.ok:
            raise CannotTell(source.status, f"There is no model to simulate from: {source.reason}")
        intensity = source.intensity
        source = source.model
    if not isinstance(source, ClusterModel) and not (np.isfinite(source) and source > 0):
        raise not_allowed("the intensity of complete randomness", "a positive number per m²", source)
    drawn_from = source

    def one(seed: np.random.Generator) -> Floats:
        if isinstance(drawn_from, ClusterModel):
            return draw_pattern(drawn_from, area, seed, intensity).points
        return draw_random_points(drawn_from, area, seed)

    # seeds are made as they are needed, so that a million patterns cost no more than one
    root = np.random.default_rng(rng)
    seeds = (root.spawn(1)[0] for _ in range(count))
    for k, local in enumerate(in_order(one, seeds, workers)):
        yield k + 1, local + area.origin
        if progress is not None:
            progress("simulated patterns", k + 1, count)


def simulate_patterns(
    source: ClusterFit | ClusterModel | float,
    area: StudyArea,
    count: int = 39,
    *,
    rng: np.random.Generator | int,
    sink: PatternSink | None = None,
    workers: int | None = None,
    progress: Progress | None = None,
) -> gpd.GeoDataFrame | None:
    """Simulate patterns of a fit, a model or complete randomness in a study area.

    Parameters
    ----------
    source, area, count, rng
        As for `stream_patterns`.
    sink
        Where to stream the patterns; nothing is kept in memory then.
    workers, progress
        Threads, and a function called with label, done, total.

    Returns
    -------
    GeoDataFrame or None
        Points with a column `pattern`, in the CRS of the study area; None with a `sink`.

    Raises
    ------
    CannotTell
        If the fit's status is not ``ok``.
    UsageError
        If `count` or an intensity is not positive.
    """
    stream = stream_patterns(source, area, count, rng=rng, workers=workers, progress=progress)
    if sink is not None:
        for number, xy in stream:
            sink.append(number, xy)
        return None
    parts = list(stream)
    if not parts:
        raise UsageError("There is nothing to simulate.")
    everything = np.concatenate([xy for _, xy in parts])
    numbers = np.repeat([k for k, _ in parts], [len(xy) for _, xy in parts])
    return gpd.GeoDataFrame(
        {"pattern": numbers}, geometry=gpd.points_from_xy(everything[:, 0], everything[:, 1]), crs=area.crs
    )
