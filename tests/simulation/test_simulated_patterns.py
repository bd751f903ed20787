"""Simulated patterns: reproducible, streamed without being kept, honest about what cannot be simulated."""

from __future__ import annotations

import fiona
import numpy as np
import pytest
import shapely
from pyproj import CRS

from geoclust.area.study_area import StudyArea
from geoclust.curves.curve import Curve
from geoclust.errors import CannotTell, UsageError
from geoclust.fitting.result import ClusterFit
from geoclust.layers.package import PatternWriter
from geoclust.models.thomas import Thomas
from geoclust.simulation.patterns import simulate_patterns, stream_patterns

# an odd shape far from the origin, with a hole
SHAPE = shapely.Polygon(
    [(500_000, 5_000_000), (500_400, 5_000_050), (500_300, 5_000_300), (500_050, 5_000_250)],
    [[(500_200, 5_000_100), (500_250, 5_000_100), (500_250, 5_000_160)]],
)
MODEL = Thomas(parent_intensity=2e-4, sigma=8.0, mean_offspring=5.0)


class Listener:
    """Keeps what it is told, and how many patterns it was told of at a time."""

    def __init__(self) -> None:
        self.heard: list[tuple[int, np.ndarray]] = []

    def append(self, pattern: int, xy: np.ndarray) -> None:
        self.heard.append((pattern, xy))


@pytest.fixture(scope="module")
def area() -> StudyArea:
    return StudyArea(SHAPE, "EPSG:25832")


@pytest.mark.parametrize("source", [MODEL, 1e-3], ids=["model", "randomness"])
def test_same_seed_same_patterns_for_any_number_of_workers(area, source):
    runs = [list(stream_patterns(source, area, 12, rng=5, workers=w)) for w in (1, 2, 3)]
    for run in runs[1:]:
        assert [k for k, _ in run] == list(range(1, 13))
        assert all(np.array_equal(a, b) for (_, a), (_, b) in zip(runs[0], run, strict=True))
    other = list(stream_patterns(source, area, 12, rng=6, workers=1))
    assert not any(np.array_equal(a, b) for (_, a), (_, b) in zip(runs[0], other, strict=True))


def test_streamed_equals_in_memory(area, tmp_path):
    """The sink, the frame and the layer on disk hold the same points in the same order."""
    frame = simulate_patterns(MODEL, area, 7, rng=8)
    listener = Listener()
    assert simulate_patterns(MODEL, area, 7, rng=8, sink=listener) is None
    path = tmp_path / "patterns.gpkg"
    with PatternWriter(path, "simulated_points", area.crs, into_package=False) as sink:
        simulate_patterns(MODEL, area, 7, rng=8, sink=sink)
    told = np.concatenate([xy for _, xy in listener.heard])
    assert np.array_equal(told, shapely.get_coordinates(frame.geometry))
    assert np.array_equal(np.repeat([k for k, _ in listener.heard], [len(p) for _, p in listener.heard]),
                          frame["pattern"])  # fmt: skip
    with fiona.open(path, layer="simulated_points") as layer:
        on_disk = np.array([f.geometry.coordinates for f in layer])
        number = [f.properties["pattern"] for f in layer]
        assert CRS.from_wkt(layer.crs_wkt).to_epsg() == 25832
    assert np.array_equal(on_disk, told)
    assert number == frame["pattern"].tolist()


def test_frame_has_the_system_of_the_area_and_points_inside(area):
    frame = simulate_patterns(MODEL, area, 5, rng=1)
    assert frame.crs == area.crs
    assert sorted(frame["pattern"].unique()) == [1, 2, 3, 4, 5]
    assert frame.within(shapely.buffer(SHAPE, 1e-6)).all()


def test_patterns_are_drawn_as_they_are_asked_for(area):
    """A million patterns cost nothing until they are taken."""
    stream = stream_patterns(MODEL, area, 1_000_000, rng=1, workers=1)
    assert next(stream)[0] == 1
    stream.close()


@pytest.mark.parametrize(
    ("source", "count", "said"),
    [(MODEL, 0, "count"), (MODEL, -3, "count"), (0.0, 5, "intensity"), (np.nan, 5, "intensity")],
)
def test_bad_arguments(area, source, count, said):
    with pytest.raises(UsageError, match=said):
        simulate_patterns(source, area, count, rng=1)


def test_no_patterns_of_a_fit_that_cannot_tell(area):
    one = np.ones(3)
    fit = ClusterFit(
        model=MODEL, intervals={}, status="few-clusters", reason="Too few.", method="minimum-contrast",
        choices={}, curve=Curve("g", np.arange(1.0, 4.0), one, one, "1", "isotropic"), fitted=one,
    )  # fmt: skip
    with pytest.raises(CannotTell, match="Too few"):
        simulate_patterns(fit, area, 3, rng=1)
