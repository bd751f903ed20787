"""The sampler with heavy-tailed and with hard-edged kernels against sums over all partitions.

As for the Gaussian (`exact_posterior`), the weight of a block of siblings is rho mu^b times the
integral over the centre of exp(-mu share) and the product of their densities; here by sums over a fine
grid of centres. Limits as in `test_sampler_exact`: three Monte Carlo standard errors, kept over all
comparisons of a test (Bonferroni).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import chain, combinations

import numpy as np
import pytest
import shapely
from exact_posterior import partitions
from test_sampler_exact import departures, limit, occupied, posterior_means, sampled

from geoclust.area.study_area import StudyArea
from geoclust.fitting._disc_moves import smallest_circle
from geoclust.fitting.sampling import ChainSetup, Priors
from geoclust.models.base import ClusterModel
from geoclust.models.cauchy import Cauchy
from geoclust.models.matern_cluster import MaternCluster

# one point near a corner, so that shares differ from place to place
SQUARE = StudyArea(shapely.box(0, 0, 60, 50))
POINTS = np.array([[20.0, 22.0], [31.0, 27.0], [36.0, 18.0], [8.0, 41.0]])
N = len(POINTS)
SUBSETS = list(chain.from_iterable(combinations(range(N), k) for k in range(1, N + 1)))
CAUCHY, DISC = Cauchy(6e-4, 6.0, 2.5), MaternCluster(1.2e-3, 11.0, 2.5)
# margin in metres, cell of the grid of centres
# (the sum over an even grid converges exponentially for the smooth kernel)
WIDE = {"cauchy": (100.0, 1.5), "matern-cluster": (18.0, 0.3)}
BOTH = pytest.mark.parametrize("model", [CAUCHY, DISC], ids=lambda m: m.name)


@dataclass
class Places:
    """A grid of centres over the widened square: shares, densities at the points, what is missed outside."""

    share: np.ndarray
    density: np.ndarray
    inside: np.ndarray
    cell: float
    wide_area: float
    outside: np.ndarray  # (n,) share of the centres of each point that lies outside the grid

    @classmethod
    def of(cls, model: ClusterModel) -> Places:
        margin, step = WIDE[model.name]
        wide = SQUARE.dilated(margin)
        minx, miny, maxx, maxy = wide.bounds
        x, y = np.arange(minx + step / 2, maxx, step), np.arange(miny + step / 2, maxy, step)
        at = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
        at = at[wide.contains(at)]
        share = type(model).area_shares(SQUARE, at - SQUARE.origin, model.scale)
        density = np.array([model.offspring_density(np.hypot(*(at - p).T)) for p in POINTS])
        outside = 1 - density.sum(axis=1) * step * step if model.name == "cauchy" else np.zeros(N)
        return cls(share, density, SQUARE.contains(at), step * step, wide.area, outside)

    @cached_property
    def products(self) -> np.ndarray:
        """(blocks, places) product of the densities of the members of each block."""
        return np.array([np.prod(self.density[list(members)], axis=0) for members in SUBSETS])

    def standing_in(self) -> Places:
        """Every centre stands for those further out too, evenly."""
        # points in the square whose centre lies outside the grid, per unit of intensity
        missed = SQUARE.area - self.share.sum() * self.cell if self.outside.any() else 0.0
        return Places(
            self.share + missed / self.wide_area, self.density + self.outside[:, None] / self.wide_area,
            self.inside, self.cell, self.wide_area, np.zeros(N),
        )  # fmt: skip

    def blocks(self, mu: float) -> tuple[dict, dict]:
        """Integral of each block, over all places and over those in the square; without rho mu^b."""
        empty = np.exp(-mu * self.share) * self.cell
        every, inner = self.products @ empty, self.products @ (empty * self.inside)
        return dict(zip(SUBSETS, every, strict=True)), dict(zip(SUBSETS, inner, strict=True))


@BOTH
def test_partitions_at_known_parameters(model):
    """Points of centres outside the widened square, if the tail is heavy, stand on their own."""
    rho, mu = model.parent_intensity, model.mean_offspring
    places = Places.of(model)
    every, inner = places.blocks(mu)
    blocks, far, inside, total = np.zeros(N + 1), 0.0, 0.0, 0.0
    together = np.zeros((N, N))
    for alone in chain([()], SUBSETS):
        for split in partitions([i for i in range(N) if i not in alone]):
            parts = [tuple(b) for b in split]
            w = np.prod([rho * mu ** len(b) * every[b] for b in parts])
            w *= np.prod([rho * mu * places.outside[i] for i in alone])
            total += w
            blocks[len(parts)] += w
            far += w * len(alone)
            inside += w * sum(inner[b] / every[b] for b in parts if every[b] > 0)
            for b in parts:
                together[np.ix_(b, b)] += w
    setup = ChainSetup(SQUARE.local(POINTS), SQUARE, model, margin=WIDE[model.name][0])
    draws = sampled(setup, 1500, 50)
    found = occupied(draws)
    empty = rho * np.sum(np.exp(-mu * places.share[places.inside])) * places.cell
    quantities = {f"{k} clusters": (found == k, blocks[k] / total) for k in range(N + 1)}
    for i, j in combinations(range(N), 2):
        same = (draws.owner[:, :, i] == draws.owner[:, :, j]) & (draws.owner[:, :, i] >= 0)
        quantities[f"{i} with {j}"] = (same, together[i, j] / total)
    quantities["centres inside"] = (draws.number_inside, inside / total + empty)
    quantities["points from outside"] = ((draws.owner < 0).sum(axis=2), far / total)
    errors = departures(quantities)
    assert max(np.abs(list(errors.values()))) < limit(len(errors)), errors
    # the check is not idle: more than one number of clusters is common
    assert np.sort(np.bincount(found.ravel()))[-2] > 500
    assert (far > 0.01 * total) == (model.name == "cauchy")


@BOTH
def test_unknown_intensities(model):
    """Posterior of rho and mu by quadrature; with a heavy tail each centre stands for those further out."""
    rho_0, mu_0 = model.parent_intensity, model.mean_offspring
    rho_prior, mu_prior = (4.0, 4.0 / rho_0), (4.0, 4.0 / mu_0)
    priors = Priors(rho_prior, mu_prior, (np.log(model.scale), 0.3), (model.scale, model.scale))
    setup = ChainSetup(SQUARE.local(POINTS), SQUARE, model, margin=WIDE[model.name][0], priors=priors)
    draws = sampled(setup, 1500, 60)

    places = Places.of(model).standing_in()
    rho = np.exp(np.linspace(np.log(rho_0 / 20), np.log(rho_0 * 8), 50))
    mu = np.exp(np.linspace(np.log(mu_0 / 20), np.log(mu_0 * 8), 50))
    likelihood, inside = np.zeros((50, 50)), np.zeros((50, 50))
    empty, nonempty = np.zeros(50), np.zeros(50)
    for m, mean in enumerate(mu):
        every, inner = places.blocks(mean)
        empty[m] = np.exp(-mean * places.share[places.inside]).sum() * places.cell
        nonempty[m] = -np.expm1(-mean * places.share).sum() * places.cell
        for split in partitions(list(range(N))):
            parts = [tuple(b) for b in split]
            w = rho ** len(parts) * mean**N * np.prod([every[b] for b in parts])
            likelihood[:, m] += w
            inside[:, m] += w * sum(inner[b] / every[b] for b in parts if every[b] > 0)
    log_weight = (
        np.log(likelihood) - rho[:, None] * nonempty
        + rho_prior[0] * np.log(rho)[:, None] - rho_prior[1] * rho[:, None]
        + mu_prior[0] * np.log(mu) - mu_prior[1] * mu
    )  # fmt: skip
    exact = posterior_means(
        log_weight, log_rho=np.log(rho)[:, None], log_mu=np.log(mu)[None, :],
        inside=inside / likelihood + rho[:, None] * empty,
    )  # fmt: skip
    errors = departures(
        {
            "log rho": (np.log(draws.parent_intensity), exact["log_rho"]),
            "log mu": (np.log(draws.mean_offspring), exact["log_mu"]),
            "centres inside": (draws.number_inside, exact["inside"]),
        }
    )
    assert max(np.abs(list(errors.values()))) < limit(len(errors)), errors


def test_radius_of_discs_with_their_centres():
    """The joint move of radius and centres: posterior of the radius by quadrature, intensities known."""
    rho, mu = DISC.parent_intensity, DISC.mean_offspring
    log_radius, bounds = (np.log(10.0), 0.3), (6.0, 16.0)
    priors = Priors(None, None, log_radius, bounds)
    setup = ChainSetup(SQUARE.local(POINTS), SQUARE, DISC, margin=WIDE[DISC.name][0], priors=priors)
    draws = sampled(setup, 1500, 60, every=4)

    radius = np.exp(np.linspace(*np.log(bounds), 21))
    likelihood, two, inside, nonempty = (np.zeros(21) for _ in range(4))
    for k, r in enumerate(radius):
        places = Places.of(MaternCluster(rho, r, mu))
        every, inner = places.blocks(mu)
        empty = rho * np.exp(-mu * places.share[places.inside]).sum() * places.cell
        nonempty[k] = -rho * np.expm1(-mu * places.share).sum() * places.cell
        for split in partitions(list(range(N))):
            parts = [tuple(b) for b in split]
            w = np.prod([rho * mu ** len(b) * every[b] for b in parts])
            likelihood[k] += w
            two[k] += w * (len(parts) == 2)
            inside[k] += w * (sum(inner[b] / every[b] for b in parts if every[b] > 0) + empty)
    z = (np.log(radius) - log_radius[0]) / log_radius[1]
    log_weight = np.log(likelihood) - nonempty - 0.5 * z * z
    # half weight at the ends of the bounded radius
    log_weight[[0, -1]] -= np.log(2.0)
    exact = posterior_means(
        log_weight, log_r=np.log(radius), two=two / likelihood, inside=inside / likelihood,
    )  # fmt: skip
    errors = departures(
        {
            "log radius": (np.log(draws.scale), exact["log_r"]),
            "two clusters": (occupied(draws) == 2, exact["two"]),
            "centres inside": (draws.number_inside, exact["inside"]),
        }
    )
    assert max(np.abs(list(errors.values()))) < limit(len(errors)), errors
    assert 0.1 < draws.acceptance["scale"] < 0.9


def test_smallest_circle_against_shapely():
    rng = np.random.default_rng(1991)
    for n in (1, 2, 3, 5, 40):
        for _ in range(20):
            at = np.round(rng.normal(size=(n, 2)), 2)
            x, y, r = smallest_circle(np.ascontiguousarray(at[:, 0]), np.ascontiguousarray(at[:, 1]))
            assert r == pytest.approx(shapely.minimum_bounding_radius(shapely.MultiPoint(at)), abs=1e-9)
            assert np.hypot(at[:, 0] - x, at[:, 1] - y).max() <= r + 1e-9
