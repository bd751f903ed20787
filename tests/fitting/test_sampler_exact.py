"""The sampler of centres against exact posteriors, by three Monte Carlo standard errors.

Each test makes several comparisons at once. One comparison at three standard
errors has a false alarm in 0.27 % of all cases; the limit used for m of them is
the normal quantile that keeps this chance for all together (Bonferroni). Monte
Carlo errors come from arviz' effective sample size of each quantity.
"""

from __future__ import annotations

import warnings

import numpy as np
import pytest
import shapely
from exact_posterior import (
    MARGIN,
    POINTS,
    SIDE,
    block_sums,
    empty_centres,
    known_parameters,
    shares,
)
from known_areas import sample_reserve
from scipy import stats

from geoclust.area.study_area import StudyArea
from geoclust.fitting._table import share_at
from geoclust.fitting.sampling import ChainSetup, Draws, Priors, collect, run_chains
from geoclust.fitting.shares import share_table
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

with warnings.catch_warnings():
    # the library announces its next release at import
    warnings.simplefilter("ignore")
    import arviz

SQUARE = StudyArea(shapely.box(0, 0, SIDE, SIDE))
RHO, MU, SIGMA = 3e-4, 3.0, 6.0
MODEL = Thomas(RHO, SIGMA, MU)


def sampled(setup: ChainSetup, draws: int, moves: int, every: int = 10**9, seed: int = 1, workers=None):
    chains = run_chains(
        setup, chains=4, warm_up=300, draws=draws, moves_per_draw=moves, every=every,
        rng=np.random.default_rng(seed), workers=workers,
    )  # fmt: skip
    return collect(setup, chains, np.random.default_rng(seed + 1))


def departures(quantities: dict[str, tuple[np.ndarray, float]]) -> dict[str, float]:
    """Distance of each sampled mean from its exact value, in Monte Carlo standard errors."""
    out = {}
    for name, (draws, exact) in quantities.items():
        values = np.asarray(draws, float)
        if np.ptp(values) == 0:
            out[name] = 0.0 if abs(values.flat[0] - exact) < 1e-3 else np.inf
            continue
        # the exact spread of an indicator keeps rare ones from looking too sure
        sd = np.sqrt(exact * (1 - exact)) if set(np.unique(values)) <= {0.0, 1.0} else values.std()
        out[name] = float((values.mean() - exact) / (sd / np.sqrt(arviz.ess(values))))
    return out


def limit(comparisons: int) -> float:
    return float(stats.norm.isf(0.0027 / 2 / comparisons))


def occupied(draws: Draws) -> np.ndarray:
    """(chains, draws) clusters with at least one point."""
    return np.array([[len(np.unique(o[o >= 0])) for o in chain] for chain in draws.owner])


def against_exact(draws: Draws) -> dict[str, float]:
    """Number of clusters, common centres of all pairs, centres inside: sampled against the exact values."""
    blocks, together = known_parameters(RHO, MU, SIGMA)
    found = occupied(draws)
    quantities = {f"{k} clusters": (found == k, blocks[k - 1]) for k in range(1, 7)}
    for i in range(6):
        for j in range(i):
            quantities[f"{i} with {j}"] = (draws.owner[:, :, i] == draws.owner[:, :, j], together[i, j])
    mean = float(blocks @ np.arange(1, 7)) + empty_centres(RHO, MU, SIGMA)
    quantities["centres inside"] = (draws.number_inside, mean)
    return departures(quantities)


def test_partitions_of_six_points_at_known_parameters():
    setup = ChainSetup(SQUARE.local(POINTS), SQUARE, MODEL, margin=MARGIN)
    draws = sampled(setup, 2500, 60)
    found = against_exact(draws)
    assert max(np.abs(list(found.values()))) < limit(len(found)), found
    # the check is not idle: the spread over numbers of clusters is real
    assert np.bincount(occupied(draws).ravel(), minlength=7)[1:5].min() > 100
    assert all(0.02 < rate < 0.98 for rate in draws.acceptance.values()), draws.acceptance


@pytest.mark.parametrize("wrong", [{"rho": 1.25 * RHO}, {"mu": 0.8 * MU}], ids=str)
def test_a_chain_with_another_target_is_found_out(wrong):
    """Negative control: the same check must fail if the acceptance ratio is that of something else.

    Intensity of centres 25 % too high, mean offspring 20 % too low.
    """
    setup = ChainSetup(SQUARE.local(POINTS), SQUARE, MODEL, margin=MARGIN)
    setup.target = setup.target._replace(**wrong)
    found = against_exact(sampled(setup, 2500, 60))
    assert max(np.abs(list(found.values()))) > limit(len(found))


def test_number_of_centres_without_points_is_poisson():
    """Nothing found: centres inside are Poisson with mean the integral of rho exp(-mu share)."""
    mu = 1.5
    setup = ChainSetup(np.empty((0, 2)), SQUARE, Thomas(8e-4, SIGMA, mu), margin=30.0)
    draws = sampled(setup, 2000, 100)
    mean = empty_centres(8e-4, mu, SIGMA)
    assert 2.0 < mean < 4.0
    law = stats.poisson(mean)
    quantities = {"mean": (draws.number_inside, mean)}
    for k in range(8):
        quantities[f"{k} centres"] = (draws.number_inside == k, float(law.pmf(k)))
    found = departures(quantities)
    assert max(np.abs(list(found.values()))) < limit(len(found)), found


def posterior_means(log_weight: np.ndarray, **quantities: np.ndarray) -> dict[str, float]:
    w = np.exp(log_weight - log_weight.max())
    w /= w.sum()
    return {name: float(np.sum(w * np.broadcast_to(v, w.shape))) for name, v in quantities.items()}


def test_unknown_intensities_and_scale():
    """Posterior of rho, mu and sigma together, by quadrature over all three.

    The likelihood is the sum over partitions, grouped by their number of
    blocks, times exp(-rho integral(1 - exp(-mu share))).
    """
    rho_prior, mu_prior, log_scale, bounds = (
        (4.0, 4.0 / RHO),
        (4.0, 4.0 / MU),
        (np.log(6.0), 0.3),
        (3.5, 10.0),
    )
    priors = Priors(rho_prior, mu_prior, log_scale, bounds)
    setup = ChainSetup(SQUARE.local(POINTS), SQUARE, MODEL, margin=MARGIN, priors=priors)
    draws = sampled(setup, 3000, 60, every=6)

    rho = np.exp(np.linspace(np.log(2e-5), np.log(1.6e-3), 40))[:, None, None]
    mu = np.exp(np.linspace(np.log(0.2), np.log(16.0), 40))[None, :, None]
    sigma = np.exp(np.linspace(*np.log(bounds), 25))
    n = len(POINTS)
    likelihood = np.zeros((40, 40, 25))
    by_blocks = np.zeros((n + 1, 40, 40, 25))
    empty = np.zeros((40, 25))
    nonempty = np.zeros((40, 25))
    for s, value in enumerate(sigma):
        share, inside, cell = shares(value, MARGIN, 120)
        near = share > 1e-12
        for m, mean in enumerate(mu.ravel()):
            nonempty[m, s] = -np.sum(np.expm1(-mean * share[near])) * cell
            empty[m, s] = np.sum(np.exp(-mean * share[inside])) * cell
        sums = block_sums(value)[:, 0]
        for b in range(1, n + 1):
            by_blocks[b, :, :, s] = sums[b] * (rho * np.exp(-mu))[:, :, 0] ** b
    likelihood = by_blocks.sum(axis=0)
    z = (np.log(sigma) - log_scale[0]) / log_scale[1]
    # priors in the logarithms, in which the grid is even
    log_weight = (
        np.log(likelihood) + n * np.log(mu) - rho * nonempty
        + rho_prior[0] * np.log(rho) - rho_prior[1] * rho + mu_prior[0] * np.log(mu) - mu_prior[1] * mu
        - 0.5 * z * z
    )  # fmt: skip
    # half weight at the ends of the bounded scale
    log_weight[:, :, [0, -1]] -= np.log(2.0)
    share_of = by_blocks / likelihood
    blocks = sum(b * share_of[b] for b in range(1, n + 1))
    exact = posterior_means(
        log_weight, log_rho=np.log(rho), log_mu=np.log(mu), log_sigma=np.log(sigma),
        inside=blocks + rho * empty, two=share_of[2], three=share_of[3],
    )  # fmt: skip
    found = departures(
        {
            "log rho": (np.log(draws.parent_intensity), exact["log_rho"]),
            "log mu": (np.log(draws.mean_offspring), exact["log_mu"]),
            "log sigma": (np.log(draws.scale), exact["log_sigma"]),
            "centres inside": (draws.number_inside, exact["inside"]),
            "two clusters": (occupied(draws) == 2, exact["two"]),
            "three clusters": (occupied(draws) == 3, exact["three"]),
        }
    )
    assert max(np.abs(list(found.values()))) < limit(len(found)), found


def test_unknown_intensities_and_background():
    """Posterior with points that belong to no cluster: subsets of the points and partitions of the rest."""
    rho_prior, mu_prior, eta_mean = (4.0, 4.0 / RHO), (4.0, 4.0 / MU), 1e-4
    priors = Priors(rho_prior, mu_prior, (np.log(SIGMA), 0.3), (SIGMA, SIGMA), background=eta_mean)
    setup = ChainSetup(SQUARE.local(POINTS), SQUARE, MODEL, margin=MARGIN, priors=priors)
    draws = sampled(setup, 3000, 60, every=6)

    rho = np.exp(np.linspace(np.log(2e-5), np.log(1.6e-3), 50))[:, None, None]
    mu = np.exp(np.linspace(np.log(0.2), np.log(16.0), 50))[None, :, None]
    eta = np.exp(np.linspace(np.log(1e-9), np.log(2e-3), 70))[None, None, :]
    n = len(POINTS)
    share, inside, cell = shares(SIGMA, MARGIN, 120)
    nonempty = np.array([-np.sum(np.expm1(-m * share)) * cell for m in mu.ravel()])[None, :, None]
    empty = np.array([np.sum(np.exp(-m * share[inside])) * cell for m in mu.ravel()])[None, :, None]
    sums = block_sums(SIGMA, n)
    likelihood, blocks, lonely = (np.zeros((50, 50, 70)) for _ in range(3))
    for b in range(n + 1):
        for k in range(n + 1):
            if sums[b, k] > 0:
                term = sums[b, k] * (rho * np.exp(-mu)) ** b * eta**k
                likelihood, blocks, lonely = likelihood + term, blocks + b * term, lonely + k * term
    log_weight = (
        np.log(likelihood) + n * np.log(mu) - rho * nonempty - mu * eta * SIDE**2
        + rho_prior[0] * np.log(rho) - rho_prior[1] * rho + mu_prior[0] * np.log(mu) - mu_prior[1] * mu
        + np.log(eta) - eta / eta_mean
    )  # fmt: skip
    exact = posterior_means(
        log_weight, log_rho=np.log(rho), log_mu=np.log(mu), epsilon=mu * eta,
        inside=blocks / likelihood + rho * empty, lonely=lonely / likelihood,
    )  # fmt: skip
    found = departures(
        {
            "log rho": (np.log(draws.parent_intensity), exact["log_rho"]),
            "log mu": (np.log(draws.mean_offspring), exact["log_mu"]),
            "background": (draws.background, exact["epsilon"]),
            "centres inside": (draws.number_inside, exact["inside"]),
            "background points": ((draws.owner < 0).sum(axis=2), exact["lonely"]),
        }
    )
    assert max(np.abs(list(found.values()))) < limit(len(found)), found
    assert exact["lonely"] > 0.3


def test_same_draws_for_any_number_of_workers():
    pattern = draw_pattern(MODEL, SQUARE, np.random.default_rng(5))
    priors = Priors((1.0, 1 / RHO), (2.0, 0.4), (np.log(6.0), 1.0), (2.0, 18.0), background=1e-5)
    setup = ChainSetup(pattern.points, SQUARE, MODEL, priors=priors)
    one, three = (sampled(setup, 40, 100, every=20, seed=9, workers=w) for w in (1, 3))
    for name in ("number_inside", "number_all", "scale", "background", "parent_intensity", "mean_offspring",
                 "owner"):  # fmt: skip
        assert np.array_equal(getattr(one, name), getattr(three, name)), name
    assert all(
        np.array_equal(a, b)
        for first, second in zip(one.centres, three.centres, strict=True)
        for a, b in zip(first, second, strict=True)
    )
    assert one.acceptance == three.acceptance


def test_every_draw_is_a_possible_state():
    """All points have a centre within reach, centres lie in the widened area, numbers agree."""
    pattern = draw_pattern(MODEL, SQUARE, np.random.default_rng(6))
    setup = ChainSetup(pattern.points, SQUARE, MODEL)
    draws = sampled(setup, 50, 100)
    for a in range(4):
        for b in range(50):
            centres, owner = draws.centres[a][b], draws.owner[a, b]
            assert len(centres) == draws.number_all[a, b]
            assert owner.min() >= 0
            apart = np.hypot(*(pattern.points - centres[owner]).T)
            assert apart.max() <= Thomas.reach_in_scales * SIGMA * (1 + 1e-12)
            assert setup.wide.contains(centres + SQUARE.origin).all()
            assert SQUARE.contains(centres + SQUARE.origin).sum() == draws.number_inside[a, b]


@pytest.mark.parametrize("scales", [(15.0, 15.0), (12.0, 36.0)], ids=["one scale", "range of scales"])
def test_share_table_in_the_ragged_reserve(scales):
    """Interpolated shares are within 3e-4 of the exact Gaussian share, in and around 900 m of the reserve.

    1,500 places uniform in the widened area and 1,500 near the boundary.
    """
    whole = sample_reserve()
    x, y = whole.representative_point().coords[0]
    piece = shapely.intersection(whole, shapely.box(x - 450, y - 450, x + 450, y + 450))
    area = StudyArea(piece)
    margin = 4.5 * scales[1]
    table = share_table(Thomas, area, margin, scales)
    rng = np.random.default_rng(15)
    wide = area.dilated(margin)
    edge = area.polygon.boundary
    near = [p.coords[0] for p in shapely.line_interpolate_point(
        rng.choice(shapely.get_parts(edge), 1500), rng.uniform(size=1500), normalized=True)]  # fmt: skip
    at = np.vstack([wide.uniform_points(1500, rng), np.array(near) + rng.normal(0, scales[1], (1500, 2))])
    at = at[wide.contains(at)]
    sigma = np.exp(rng.uniform(*np.log(scales), len(at))) if scales[0] < scales[1] else np.full(len(at), 15.0)
    exact = area.gaussian_shares(at, sigma)
    found = [share_at(table, x, y, s) for (x, y), s in zip(at - area.origin, sigma, strict=True)]
    assert np.max(np.abs(found - exact)) < 3e-4
    assert np.sqrt(np.mean((found - exact) ** 2)) < 1e-4
    assert np.mean((exact > 0.01) & (exact < 0.99)) > 0.2
