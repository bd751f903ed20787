"""The posterior of a few points far from any edge, by summing over all their partitions.

Weight of a block of b siblings: rho mu^b e^(-mu) times the integral over the
centre of the product of their Gaussian densities, itself Gaussian; centres
without points are Poisson with intensity rho exp(-mu share).
"""

from __future__ import annotations

from itertools import combinations

import numpy as np
from scipy.special import ndtr

SIDE = 120.0
MARGIN = 60.0
# six points near the middle, at least 45 m from every edge of the square
POINTS = np.array([[46, 50], [60, 47], [70, 72], [50, 72], [75, 54], [61, 61.0]])


def partitions(items: list[int]):
    """All set partitions (Bell number many)."""
    if not items:
        yield []
        return
    first = items[0]
    for rest in partitions(items[1:]):
        yield [[first], *rest]
        for k in range(len(rest)):
            yield [*rest[:k], [first, *rest[k]], *rest[k + 1 :]]


def log_block(at: np.ndarray, sigma: float) -> float:
    """Log of the integral over the centre of the product of the densities of one block."""
    b, v = len(at), sigma**2
    spread = np.sum((at - at.mean(axis=0)) ** 2)
    return float(-(b - 1) * np.log(2 * np.pi * v) - np.log(b) - spread / (2 * v))


def known_parameters(rho: float, mu: float, sigma: float) -> tuple[np.ndarray, np.ndarray]:
    """Probability of 1, ..., n occupied clusters, and (n, n) probability of a common centre."""
    n = len(POINTS)
    blocks, together, total = np.zeros(n), np.zeros((n, n)), 0.0
    for split in partitions(list(range(n))):
        log_w = sum(np.log(rho) + len(q) * np.log(mu) - mu + log_block(POINTS[q], sigma) for q in split)
        w = np.exp(log_w + 60.0)
        total += w
        blocks[len(split) - 1] += w
        for q in split:
            together[np.ix_(q, q)] += w
    return blocks / total, together / total


def block_sums(sigma: float, most_alone: int = 0) -> np.ndarray:
    """(n + 1, n + 1) sums of products of block integrals, by number of blocks and of background points."""
    n = len(POINTS)
    out = np.zeros((n + 1, n + 1))
    for k in range(most_alone + 1):
        for alone in combinations(range(n), k):
            for split in partitions([i for i in range(n) if i not in alone]):
                out[len(split), k] += np.exp(sum(log_block(POINTS[q], sigma) for q in split))
    return out


def shares(sigma: float, margin: float, nodes: int = 480) -> tuple[np.ndarray, np.ndarray, float]:
    """Shares of a midpoint grid over the widened square, which nodes lie inside, and the cell area."""
    cell = (SIDE + 2 * margin) / nodes
    t = -margin + (np.arange(nodes) + 0.5) * cell
    f = ndtr((SIDE - t) / sigma) - ndtr(-t / sigma)
    inside = (t > 0) & (t < SIDE)
    return np.outer(f, f), np.outer(inside, inside), cell**2


def empty_centres(rho: float, mu: float, sigma: float) -> float:
    """Mean number of centres inside the square that have no point in it."""
    share, inside, cell = shares(sigma, 0.0)
    return float(rho * np.sum(np.exp(-mu * share) * inside) * cell)
