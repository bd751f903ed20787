"""Which individuals belong together: the partition of least expected Binder loss."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from hand_made import area as hand_made_area
from hand_made import draws_of, scattered_draws

from geoclust.centres.clusters import delineate


def partitions(items: list[int]):
    if not items:
        yield []
        return
    first = items[0]
    for rest in partitions(items[1:]):
        yield [[first], *rest]
        for k in range(len(rest)):
            yield [*rest[:k], [first, *rest[k]], *rest[k + 1 :]]


def loss(labels: np.ndarray, together: np.ndarray) -> float:
    """Expected Binder (1978) loss: pairs wrongly together or wrongly apart, equal costs."""
    same = labels[:, None] == labels[None, :]
    upper = np.triu_indices(len(labels), 1)
    return float(np.sum(np.where(same, 1 - together, together)[upper]))


def least_loss(together: np.ndarray) -> float:
    n = len(together)
    best = np.inf
    for split in partitions(list(range(n))):
        labels = np.empty(n, int)
        for k, block in enumerate(split):
            labels[block] = k
        best = min(best, loss(labels, together))
    return best


def common(owner: np.ndarray) -> np.ndarray:
    """(n, n) share of draws with a common centre; background points have none."""
    flat = owner.reshape(-1, owner.shape[-1])
    same = (flat[:, :, None] == flat[:, None, :]) & (flat[:, :, None] >= 0)
    out = same.mean(axis=0)
    np.fill_diagonal(out, 1.0)
    return out


def noisy_sample(seed: int, n: int = 7):
    """Owners that follow three groups, each point straying in about a third of the draws."""
    area = hand_made_area()
    rng = np.random.default_rng(seed)
    groups = np.array([0, 0, 0, 1, 1, 2, 2])[:n]
    owner = np.where(rng.random((2, 60, n)) < 0.35, rng.integers(-1, 5, (2, 60, n)), groups)
    centres = [[area.local_uniform_points(5, rng) for _ in range(60)] for _ in range(2)]
    points = area.local_uniform_points(n, rng)
    return area, draws_of(area, centres, owner), points


@pytest.mark.parametrize("seed", range(8))
def test_partition_has_the_least_loss_of_all(seed):
    """Brute force over the 877 partitions of seven points."""
    area, draws, points = noisy_sample(seed)
    found, _ = delineate(draws, points, area)
    together = common(draws.owner)
    labels = found["cluster"].to_numpy().copy()
    # points of no cluster stand alone
    alone = labels == 0
    labels[alone] = labels.max() + 1 + np.arange(alone.sum())
    assert loss(labels, together) == pytest.approx(least_loss(together), abs=1e-9)


def test_background_and_membership_probabilities():
    """Three points by hand: 0 and 1 share a centre in three of four draws, 2 is background in three."""
    area = hand_made_area()
    centre = area.local([[600_050.0, 5_700_050.0], [600_100.0, 5_700_030.0]])
    owner = np.array([[[0, 0, -1], [0, 0, -1]], [[0, 0, -1], [0, 1, 1]]])
    draws = draws_of(area, [[centre, centre], [centre, centre]], owner)
    points = area.local([[600_052.0, 5_700_050.0], [600_049.0, 5_700_052.0], [600_090.0, 5_700_030.0]])
    found, clusters = delineate(draws, points, area)
    assert found["cluster"].tolist() == [1, 1, 0]
    assert found["background_probability"].tolist() == [0.0, 0.0, 0.75]
    assert found["membership_probability"][:2].tolist() == [0.75, 0.75]
    assert np.isnan(found["membership_probability"][2])
    assert len(clusters) == 1
    row = clusters.iloc[0]
    assert (row["cluster"], row["points"], row["centre_inside"]) == (1, 2, True)
    assert row["membership_probability"] == pytest.approx(0.75)
    assert (row["centre_e_m"], row["centre_n_m"]) == (600_050.0, 5_700_050.0)
    assert row["centre_sd_m"] == pytest.approx(0.0, abs=1e-6)


def test_clusters_as_polygons():
    area = hand_made_area()
    draws = scattered_draws(area)
    points = area.local_uniform_points(12, np.random.default_rng(4))
    found, clusters = delineate(draws, points, area)
    assert list(found.columns) == ["cluster", "membership_probability", "background_probability"]
    assert list(clusters.columns) == [
        "cluster", "points", "centre_e_m", "centre_n_m", "centre_sd_m", "centre_inside",
        "membership_probability", "area_m2", "geometry",
    ]  # fmt: skip
    assert clusters.crs == area.crs
    assert clusters["cluster"].tolist() == list(range(1, len(clusters) + 1))
    sizes = clusters["points"].to_numpy()
    assert np.all(np.diff(sizes) <= 0)
    assert np.array_equal(sizes, np.bincount(found["cluster"], minlength=len(clusters) + 1)[1:])
    for row in clusters.itertuples():
        held = points[found["cluster"] == row.cluster] + area.origin
        assert shapely.contains_xy(row.geometry, held[:, 0], held[:, 1]).all()
        assert row.area_m2 == pytest.approx(row.geometry.area)
    np.testing.assert_allclose(found["background_probability"], (draws.owner < 0).mean(axis=(0, 1)))
