"""Posterior samples made by hand, so that every map and number can be worked out."""

from __future__ import annotations

import numpy as np
import shapely

from geoclust.area.study_area import StudyArea
from geoclust.curves.curve import Curve
from geoclust.fitting.result import ClusterFit
from geoclust.fitting.sampling import Draws
from geoclust.models.thomas import Thomas

# an L with a hole, in UTM 32 N
SHAPE = shapely.Polygon(
    [(600_003, 5_700_002), (600_127, 5_700_002), (600_127, 5_700_064), (600_066, 5_700_064),
     (600_066, 5_700_131), (600_003, 5_700_131)],
    [[(600_020, 5_700_020), (600_031, 5_700_020), (600_031, 5_700_043), (600_020, 5_700_043)]],
)  # fmt: skip


def area() -> StudyArea:
    return StudyArea(SHAPE, "EPSG:25832")


def draws_of(area: StudyArea, chains: list[list[np.ndarray]], owner: np.ndarray, sigma: float = 8.0) -> Draws:
    """A sample from local centres per chain and draw, and owners (chains, draws, n)."""
    shape = (len(chains), len(chains[0]))
    inside = np.array([[int(area.local_contains(c).sum()) for c in chain] for chain in chains])
    everywhere = np.array([[len(c) for c in chain] for chain in chains])
    return Draws(
        inside, everywhere, np.full(shape, sigma), np.zeros(shape), np.full(shape, 1e-3),
        np.full(shape, 4.0), chains, owner.astype(np.int32),
    )  # fmt: skip


def scattered_draws(area: StudyArea, seed: int = 3, draws: int = 40, n: int = 12) -> Draws:
    """Two chains of centres anywhere in and round the area, owners at random, some background."""
    rng = np.random.default_rng(seed)
    wide = area.dilated(20.0)
    chains, owner = [], np.empty((2, draws, n), np.int32)
    for a in range(2):
        chain = []
        for b in range(draws):
            number = int(rng.integers(6, 25))
            chain.append(wide.local_uniform_points(number, rng) + wide.origin - area.origin)
            owner[a, b] = rng.integers(-1, number, n)
        chains.append(chain)
    return draws_of(area, chains, owner)


def fit_of(model: Thomas, status: str = "ok", reason: str = "") -> ClusterFit:
    """A fit at known parameters."""
    one = np.ones(3)
    curve = Curve("g", np.arange(1.0, 4.0), one, one, "1", "isotropic")
    return ClusterFit(
        model=model, intervals={}, status=status, reason=reason, method="minimum-contrast", choices={},
        curve=curve, fitted=one,
    )  # fmt: skip
