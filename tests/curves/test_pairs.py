"""Pair sums against scipy's counts and direct evaluation."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import shapely
from known_areas import HERE, NAMED
from scipy.spatial import cKDTree

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.pair_sums import class_limits, pair_sums

SQUARE = StudyArea(shapely.box(0, 0, 1000, 1000))


def counts_by_scipy(xy: np.ndarray, radii: np.ndarray) -> np.ndarray:
    tree = cKDTree(xy)
    # ordered pairs, without a point's pair with itself
    return tree.count_neighbors(tree, radii) - len(xy)


@pytest.mark.parametrize("seed", range(3))
def test_raw_counts_equal_scipy(seed: int):
    rng = np.random.default_rng(seed)
    # dense clumps, empty stretches and coincident points
    xy = np.vstack([rng.uniform(0, 1000, (1500, 2)), rng.normal(500, 8, (800, 2)), np.full((5, 2), 321.5)])
    radii = np.sort(rng.uniform(0.5, 260, 70))
    found = pair_sums(SQUARE.local(xy), SQUARE, radii, edge_weight="unweighted").up_to(radii)
    assert np.array_equal(found, counts_by_scipy(SQUARE.local(xy), radii))


def test_raw_counts_on_a_lattice_equal_scipy():
    # every distance is shared by many pairs, and the radii are distances of the lattice:
    # a pair as far apart as the radius counts
    x, y = np.meshgrid(np.arange(0, 1000, 25.0), np.arange(0, 1000, 25.0))
    xy = SQUARE.local(np.column_stack([x.ravel(), y.ravel()]))
    radii = np.array([25, 25 * np.sqrt(2), 50, 25 * np.sqrt(5), 75, 100, 125, 250.0])
    found = pair_sums(xy, SQUARE, radii, edge_weight="unweighted").up_to(radii)
    assert np.array_equal(found, counts_by_scipy(xy, radii))
    # by hand: 40 x 40 nodes have 2 * 40 * 39 pairs of direct neighbours, each counted both ways
    assert found[0] == 2 * 2 * 40 * 39
    assert found[1] - found[0] == 2 * 2 * 39 * 39


def test_counts_at_radii_below_every_distance():
    xy = SQUARE.local([[0, 0], [300, 400], [1000, 1000]])
    radii = np.array([1.0, 499.9999, 500.0, 1500.0])
    assert pair_sums(xy, SQUARE, radii, edge_weight="unweighted").up_to(radii).tolist() == [0, 0, 2, 6]


@pytest.mark.parametrize("name", ["sample reserve", "ragged reserve", "finland"])
def test_isotropic_sums_against_direct_evaluation(name: str):
    area = StudyArea(NAMED[name]())
    xy = area.uniform_points(600, 5)
    radii = np.sqrt(area.area) * np.linspace(0.01, 0.4, 25)
    limits = class_limits(radii, 0.01 * np.sqrt(area.area))
    sums = pair_sums(area.local(xy), area, limits)
    local = area.local(xy)
    first, second = np.nonzero(~np.eye(len(xy), dtype=bool))
    d = np.hypot(*(local[first] - local[second]).T)
    near = d <= limits[-1]
    first, d = first[near], d[near]
    weight = 1 / area.circle_shares(xy[first], d)
    for moment, power in enumerate((-1, 0, 1)):
        direct = np.array([np.sum((weight * d**power)[d <= r]) for r in limits])
        assert np.allclose(np.cumsum(sums.moments[:, moment]), direct, rtol=1e-9)


def test_same_bits_for_any_number_of_workers():
    area = StudyArea(NAMED["ragged reserve"]())
    xy = area.local(area.uniform_points(60_000, 6))
    limits = np.linspace(1, 20, 40)
    for weight in ("isotropic", "unweighted"):
        one = pair_sums(xy, area, limits, edge_weight=weight, workers=1).moments
        for workers in (2, 5):
            assert np.array_equal(
                one, pair_sums(xy, area, limits, edge_weight=weight, workers=workers).moments
            )


def test_point_weights():
    rng = np.random.default_rng(1)
    xy = rng.uniform(0, 1000, (300, 2))
    v = rng.uniform(0.5, 2, 300)
    limits = np.array([50.0, 200.0])
    local = SQUARE.local(xy)
    d = np.hypot(*(local[:, None] - local[None]).transpose(2, 0, 1))
    np.fill_diagonal(d, np.inf)
    found = pair_sums(local, SQUARE, limits, edge_weight="unweighted", point_weights=v).up_to(limits)
    assert np.allclose(found, [np.sum(np.outer(v, v)[d <= r]) for r in limits], rtol=1e-12)
    share = SQUARE.circle_shares(np.repeat(xy, 300, axis=0), np.where(np.isfinite(d), d, 0).ravel())
    e = np.outer(v, v) / np.where(share > 0, share, np.inf).reshape(d.shape)
    found = pair_sums(local, SQUARE, limits, point_weights=v).up_to(limits)
    assert np.allclose(found, [np.sum(e[d <= r]) for r in limits], rtol=1e-9)


def test_few_points():
    assert pair_sums(np.empty((0, 2)), SQUARE, np.array([5.0])).moments.tolist() == [[0, 0, 0]]
    assert pair_sums(np.zeros((1, 2)), SQUARE, np.array([5.0])).moments.tolist() == [[0, 0, 0]]
    # coincident points in one place: pairs of distance zero have a place in K alone
    assert pair_sums(np.zeros((3, 2)), SQUARE, np.array([5.0])).moments.tolist() == [[0, 6, 0]]


def test_surveys_with_ties_of_real_data():
    rows = pd.read_csv(HERE / "data" / "nyc_zip_centres_epsg2263.csv")
    xy = rows[["x", "y"]].to_numpy()
    minx, miny = xy.min(0) - 1
    maxx, maxy = xy.max(0) + 1
    survey = Survey(xy, StudyArea(shapely.box(minx, miny, maxx, maxy)))
    radii = np.linspace(0, 40_000, 41)[1:]
    found = pair_sums(survey.local_xy, survey.area, radii, edge_weight="unweighted").up_to(radii)
    assert np.array_equal(found, counts_by_scipy(survey.local_xy, radii))
