"""Search for the parameters with the highest likelihood of pairs: a coarse grid, several starts."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np
import numpy.typing as npt
from scipy.ndimage import maximum_filter
from scipy.optimize import minimize

from geoclust.fitting.pair_likelihoods import LikelihoodSurface, PairLikelihood
from geoclust.models.base import ClusterModel

Floats = npt.NDArray[np.float64]

# peaks of the grid that are climbed, the highest first
STARTS = 6
# nodes of each parameter: intensity and scale alone; with a further one, such as a shape; of two levels
PLAIN, SHAPED, LEVELS = (61, 61), (61, 31, 7), (13, 13, 13, 13)
# each level is at least this many times wider than the next
LEAST_RATIO = 1.01
# a logarithm so near to its limit is on it
NEAR = 1e-3
# log-likelihood of parameters that are not allowed
NOTHING = -1e300


@dataclass(frozen=True, eq=False)
class Search:
    """Parameters to search over, in logarithms of what they are above their least value.

    Attributes
    ----------
    kind
        A model class.
    names
        Intensities of centres, lengths (outer levels first), further parameters.
    above
        (p,) least values, zero but for some shapes.
    low, high
        (p,) limits of the logarithms.
    lengths
        Number of lengths.
    intensity
        Points per square metre; mean offspring follows from it.
    """

    kind: type[ClusterModel]
    names: tuple[str, ...]
    above: Floats
    low: Floats
    high: Floats
    lengths: int
    intensity: float

    @classmethod
    def over(
        cls, kind: type[ClusterModel], intensity: float, area: float, narrowest: float, r_max: float
    ) -> Search:
        """All parameters but mean offspring.

        Intensities from a tenth of a centre in the study area to ten centres a point, lengths from
        `narrowest` to twice `r_max`, metres.
        """
        described = [p for p in kind.described if p.name != "mean_offspring"]
        lengths = [p for p in described if p.unit == "m"]
        further = [p for p in described if not p.per_area and p.unit != "m"]
        ordered = [p for p in described if p.per_area] + lengths + further
        limits = [
            p.search
            or ((0.1 / area, 10.0 * intensity) if p.per_area else (min(narrowest, r_max), 2.0 * r_max))
            for p in ordered
        ]
        above = np.array([p.above for p in ordered])
        low, high = (np.log(np.array([v[k] for v in limits]) - above) for k in (0, 1))
        return cls(kind, tuple(p.name for p in ordered), above, low, high, len(lengths), intensity)

    @property
    def levels(self) -> int:
        """Levels of clusters."""
        return len(self.kind.intensity_names)

    def allowed(self, theta: Floats) -> bool:
        """Whether every level is wider than the next."""
        sizes = theta[self.levels : self.levels + self.lengths]
        return bool(np.all(sizes[:-1] - sizes[1:] >= np.log(LEAST_RATIO)))

    def model_at(self, theta: Floats) -> ClusterModel:
        """The model of a vector of logarithms."""
        values = dict(zip(self.names, np.exp(theta) + self.above, strict=True))
        return self.kind.with_intensity(values, self.intensity)

    def grid(self, likelihood: PairLikelihood) -> tuple[list[Floats], Floats]:
        """Logarithms of each parameter, and the log-likelihood of all their combinations."""
        counts = PLAIN if len(self.names) == 2 else SHAPED if self.levels == 1 else LEVELS
        axes = [np.linspace(a, b, c) for a, b, c in zip(self.low, self.high, counts, strict=True)]
        rhos = np.meshgrid(*[np.exp(axis) for axis in axes[: self.levels]], indexing="ij")
        # further parameters in one row of all their combinations
        values = np.full((*counts[: self.levels], int(np.prod(counts[self.levels :]))), NOTHING)
        least = [axis[0] for axis in axes[: self.levels]]
        for k, rest in enumerate(product(*axes[self.levels :])):
            theta = np.array([*least, *rest])
            if not self.allowed(theta):
                continue
            # the density of siblings does not depend on the intensities: they are tried all at once
            g, excess = np.ones((*rhos[0].shape, len(likelihood.distances))), np.zeros(rhos[0].shape)
            for rho, level in zip(rhos, self.model_at(theta).levels, strict=True):
                g += level.sibling_density(likelihood.distances) / rho[..., None]
                excess += np.sum(level.sibling_density(likelihood.nodes) * likelihood.expected) / rho
            values[..., k] = likelihood.value(g, excess)
        return axes, values.reshape(counts)

    def best(self, likelihood: PairLikelihood, starts: list[Floats]) -> tuple[Floats, float]:
        """Logarithms with the highest log-likelihood that is found from any of the starts.

        The starts are followed on coarser classes, the best end then on all of them.
        """
        coarser = likelihood.coarser()
        ends = [self._climb(coarser, start, 1e-2, 1e-2) for start in starts]
        theta, _ = max(ends, key=lambda end: end[1])
        return self._climb(likelihood, theta, 1e-6, 1e-7)

    def _climb(
        self, likelihood: PairLikelihood, start: Floats, near: float, level: float
    ) -> tuple[Floats, float]:
        def lost(theta: Floats) -> float:
            return -likelihood.of_model(self.model_at(theta)) if self.allowed(theta) else -NOTHING

        # a simplex as wide as the steps of the grid; without derivatives, so that kinks do no harm
        step = np.diag(np.where(start + 0.1 < self.high, 0.1, -0.1))
        found = minimize(
            lost, start, method="Nelder-Mead", bounds=list(zip(self.low, self.high, strict=True)),
            options={"xatol": near, "fatol": level, "initial_simplex": np.vstack([start, start + step])},
        )  # fmt: skip
        return np.asarray(found.x), -float(found.fun)

    def on_bound(self, theta: Floats) -> tuple[str, ...]:
        """Names of the parameters that lie on a limit."""
        at = (theta - self.low < NEAR) | (self.high - theta < NEAR)
        return tuple(name for name, there in zip(self.names, at, strict=True) if there)

    @property
    def bounds(self) -> dict[str, tuple[float, float]]:
        """Limits of each parameter."""
        low, high = np.exp(self.low) + self.above, np.exp(self.high) + self.above
        return {n: (float(a), float(b)) for n, a, b in zip(self.names, low, high, strict=True)}


def peaks(values: Floats) -> list[tuple[int, ...]]:
    """Places of a grid that are highest within two nodes, the highest first."""
    found = np.argwhere((values == maximum_filter(values, size=5, mode="nearest")) & (values > NOTHING))
    order = np.argsort(-values[tuple(found.T)], kind="stable")
    return [tuple(int(k) for k in found[i]) for i in order]


@dataclass(frozen=True, eq=False)
class LikelihoodFit:
    """Result of one maximisation.

    Attributes
    ----------
    model
        The fitted model.
    value
        Log-likelihood over that of complete randomness.
    bounds
        Lower and upper bound of each searched parameter.
    on_bound
        Names of parameters that ended on a bound.
    surface
        What is lost over parent intensity and scale, further parameters the best for each pair; None
        for several levels.
    likelihood
        The pairs that it was fitted to.
    """

    model: ClusterModel
    value: float
    bounds: dict[str, tuple[float, float]]
    on_bound: tuple[str, ...]
    surface: LikelihoodSurface | None
    likelihood: PairLikelihood


def fit_likelihood(
    kind: type[ClusterModel], likelihood: PairLikelihood, intensity: float, area: float, narrowest: float
) -> LikelihoodFit:
    """Fit a model by maximising a likelihood of pairs.

    The likelihood is computed on a grid first; every peak of it, at most six, is the
    start of a search in logarithms.

    Parameters
    ----------
    kind
        A model class.
    likelihood
        The pairs.
    intensity
        Points per square metre; mean offspring follows from it.
    area
        Area of the study area, m², which bounds the parent intensity.
    narrowest
        Smallest length searched, metres; the largest is twice the largest distance.
    """
    search = Search.over(kind, intensity, area, narrowest, likelihood.r_max)
    axes, grid = search.grid(likelihood.coarser())
    starts = [np.array([axis[k] for axis, k in zip(axes, at, strict=True)]) for at in peaks(grid)[:STARTS]]
    theta, value = search.best(likelihood, starts)
    surface = None
    if search.levels == 1:
        seen = grid.reshape(*grid.shape[:2], -1).max(axis=2)
        surface = LikelihoodSurface(
            np.exp(axes[0]), np.exp(axes[1]), kind.scale_name, np.maximum(value - seen, 0.0)
        )
    return LikelihoodFit(
        search.model_at(theta), value, search.bounds, search.on_bound(theta), surface, likelihood
    )


def rough_spread(
    kind: type[ClusterModel], likelihood: PairLikelihood, intensity: float, area: float, narrowest: float
) -> float:
    """Size of the clusters at the highest node of the grid, metres: enough to choose the range by."""
    search = Search.over(kind, intensity, area, narrowest, likelihood.r_max)
    axes, grid = search.grid(likelihood.coarser())
    best = np.unravel_index(np.argmax(grid), grid.shape)
    return search.model_at(np.array([axis[k] for axis, k in zip(axes, best, strict=True)])).spread
