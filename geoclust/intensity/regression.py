"""Poisson and logistic regression by Newton's method: arrays in, arrays out."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from geoclust.errors import InputError

Floats = npt.NDArray[np.float64]

STEPS = 100
TOLERANCE = 1e-11


@dataclass(frozen=True, eq=False)
class Regression:
    """A fit: coefficients, and the information matrix at them.

    Attributes
    ----------
    coefficients
        (p,) intercept first.
    information
        (p, p) negative second derivative of the log-likelihood.
    log_likelihood
        Up to a constant of the data.
    """

    coefficients: Floats
    information: Floats
    log_likelihood: float


class Scaling:
    """Covariates shifted and scaled to mean 0 and deviation 1, and the way back."""

    def __init__(self, values: Floats, weights: Floats, names: tuple[str, ...]) -> None:
        share = weights / weights.sum()
        self.mean = share @ values
        self.spread = np.sqrt(share @ (values - self.mean) ** 2)
        for name, spread, mean in zip(names, self.spread, self.mean, strict=True):
            if spread <= 1e-9 * max(abs(mean), 1e-300) or spread == 0.0:
                raise InputError(f"Covariate {name} is the same everywhere in the study area; leave it out.")
        self.design = np.column_stack([np.ones(len(values)), (values - self.mean) / self.spread])
        within = self.design.T @ (self.design * share[:, None])
        if np.linalg.cond(within) > 1e10:
            raise InputError(
                f"One of the covariates {', '.join(names)} follows from the others; leave one out."
            )

    @property
    def back(self) -> Floats:
        """(p, p) matrix that turns scaled coefficients into those of the covariates as they are."""
        p = len(self.mean) + 1
        out = np.zeros((p, p))
        out[0, 0] = 1.0
        out[0, 1:] = -self.mean / self.spread
        out[np.arange(1, p), np.arange(1, p)] = 1.0 / self.spread
        return out


def poisson_regression(
    values: Floats, counts: Floats, exposure: Floats, names: tuple[str, ...]
) -> Regression:
    """Fit counts with mean exposure·exp(intercept + values·coefficients).

    Parameters
    ----------
    values
        (m, p - 1) covariates.
    counts
        (m,) points in each cell.
    exposure
        (m,) area of each cell, square metres.
    names
        Of the covariates, for messages.

    Raises
    ------
    InputError
        If a covariate is constant or follows from others, there are no points, or the
        likelihood has no maximum.
    """
    total = float(counts.sum())
    if total == 0:
        raise InputError("There are no points to fit an intensity to.")
    scaling = Scaling(values, exposure, names)
    x = scaling.design
    offset = np.log(exposure)
    start = np.zeros(x.shape[1])
    start[0] = np.log(total / exposure.sum())

    def told(beta: Floats) -> tuple[float, Floats, Floats]:
        linear = x @ beta
        mean = np.exp(np.minimum(linear + offset, 700.0))
        return float(counts @ linear - mean.sum()), x.T @ (counts - mean), x.T @ (x * mean[:, None])

    return _climbed(told, start, scaling, names)


def logistic_regression(
    values: Floats, observed: npt.NDArray[np.bool_], dummy_intensity: float, names: tuple[str, ...]
) -> Regression:
    """Fit points against dummy points with odds exp(intercept + values·coefficients)/dummy_intensity.

    The estimating function of Baddeley, Coeurjolly, Rubak & Waagepetersen (2014),
    Biometrika 101: 377-392; arguments as for `poisson_regression`.
    """
    if not observed.any():
        raise InputError("There are no points to fit an intensity to.")
    scaling = Scaling(values, np.ones(len(values)), names)
    x = scaling.design
    start = np.zeros(x.shape[1])
    start[0] = np.log(observed.sum() / max((~observed).sum(), 1) * dummy_intensity)
    shift = -np.log(dummy_intensity)

    def told(beta: Floats) -> tuple[float, Floats, Floats]:
        linear = x @ beta + shift
        chance = 1.0 / (1.0 + np.exp(-np.clip(linear, -700, 700)))
        likelihood = float(linear[observed].sum() - np.logaddexp(0.0, linear).sum())
        score = x.T @ (observed - chance)
        return likelihood, score, x.T @ (x * (chance * (1.0 - chance))[:, None])

    return _climbed(told, start, scaling, names)


def _climbed(
    told: Callable[[Floats], tuple[float, Floats, Floats]],
    start: Floats,
    scaling: Scaling,
    names: tuple[str, ...],
) -> Regression:
    """Newton's method from a start; `told` gives value, score and information."""
    beta = start
    value, score, information = told(beta)
    for _ in range(STEPS):
        try:
            step = np.linalg.solve(information, score)
        except np.linalg.LinAlgError:
            break
        # a concave function: a shorter step always climbs
        for _ in range(40):
            tried = beta + step
            higher, new_score, new_information = told(tried)
            if np.isfinite(higher) and higher >= value - 1e-9 * abs(value):
                break
            step = 0.5 * step
        small = float(np.abs(step).max()) < TOLERANCE
        beta, value, score, information = tried, higher, new_score, new_information
        if np.abs(beta[1:]).max(initial=0.0) > 50.0:
            break
        if small:
            back = scaling.back
            # the information of transformed coefficients
            there = np.linalg.inv(back)
            return Regression(back @ beta, there.T @ information @ there, value)
    raise InputError(
        f"The intensity has no best fit on {', '.join(names) or 'a constant'}: all points lie where a "
        "covariate is extreme, or too few cells have a value; leave a covariate out."
    )
