"""Log-linear intensity on covariates: Poisson likelihood or logistic form, two kinds of standard errors."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import numpy.typing as npt
from scipy.spatial import cKDTree
from scipy.special import ndtri

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.errors import InputError, not_allowed
from geoclust.intensity.base import Intensity
from geoclust.intensity.cells import Cells
from geoclust.intensity.clustering import Clustering, excess_matrix, fit_clustering
from geoclust.intensity.covariates import Covariate, lattice_of
from geoclust.intensity.regression import Regression, Scaling, logistic_regression, poisson_regression

Floats = npt.NDArray[np.float64]

METHODS = ("poisson", "logistic")
ERRORS = ("clustered", "naive")
# largest share of the points, and of the area, that may lie where a covariate has no value
NODATA_SHARE = 0.05
# dummy points per point in the logistic form (Baddeley et al. 2014)
DUMMIES = 4.0


@dataclass(frozen=True, eq=False)
class Quadrature:
    """Cells of the study area with the covariates in them.

    Attributes
    ----------
    cells
        The cells.
    covariates
        What was measured in them.
    values
        (m, p) cell means; where a covariate has none, those of the nearest cell that has all.
    share
        (m,) share of the cell's part inside the study area that has a value of every covariate.
    """

    cells: Cells
    covariates: tuple[Covariate, ...]
    values: Floats
    share: Floats

    @classmethod
    def over(cls, area: StudyArea, covariates: Sequence[Covariate], cell: float | None = None) -> Quadrature:
        """Measure the covariates in cells.

        The cells are those of the finest raster that lies in the system of the study
        area, so that its values are taken as they are; else about 40,000 squares.
        """
        names = [c.name for c in covariates]
        for name in names:
            if names.count(name) > 1 or name == "intercept":
                raise not_allowed("covariates", "of different names, none of them 'intercept'", name)
        lattice = lattice_of(list(covariates), area) if cell is None else None
        cells = Cells.square(area, cell) if lattice is None else Cells.on_lattice(area, lattice)
        values = np.empty((len(cells), len(covariates)))
        share = np.ones(len(cells))
        for k, covariate in enumerate(covariates):
            values[:, k], known = covariate.cell_means(cells)
            share = np.minimum(share, known)
        covered = share > 0
        if not covered.any():
            raise InputError(
                f"No part of the study area has a value of {', '.join(names)}; are they from elsewhere?"
            )
        if not covered.all():
            nearest = cKDTree(cells.centres[covered]).query(cells.centres[~covered])[1]
            values[~covered] = values[covered][nearest]
        return cls(cells, tuple(covariates), values, share)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the covariates."""
        return tuple(c.name for c in self.covariates)

    @property
    def uncovered_area(self) -> float:
        """Square metres of the study area where a covariate has no value."""
        return float(self.cells.areas @ (1.0 - self.share))

    @property
    def covered(self) -> npt.NDArray[np.bool_]:
        """(m,) whether any part of the cell has a value of every covariate."""
        return self.share > 0

    @property
    def exposure(self) -> Floats:
        """(m,) square metres of each cell that count."""
        return self.cells.areas * self.share

    def measured(self, xy: Floats) -> Floats:
        """(n, p) covariates at positions in metres, not a number where there is none."""
        out = np.empty((len(xy), len(self.covariates)))
        for k, covariate in enumerate(self.covariates):
            out[:, k] = covariate.at(xy)
        return out


@dataclass(frozen=True, eq=False, repr=False)
class LogLinearIntensity(Intensity):
    """An intensity whose logarithm is linear in covariates; constant without any.

    It is constant in each cell of its quadrature.

    Attributes
    ----------
    area
        The study area.
    quadrature
        The cells with the covariates.
    coefficients
        By name, ``intercept`` first: the logarithm of points per square metre where all
        covariates are zero, then its change per unit of each covariate.
    covariances
        (p, p) covariance matrix of the coefficients under ``naive``, as if points were
        independent, and under ``clustered``, allowing for clusters, if it was asked for.
    clustering
        How points cluster beyond the intensity, if that was asked for.
    points
        (n, 2) points it was fitted to, local coordinates.
    points_without_value
        Number of points where a covariate has no value; they were left out.
    form
        ``poisson`` or ``logistic``.
    """

    area: StudyArea
    quadrature: Quadrature
    coefficients: dict[str, float]
    covariances: dict[str, Floats]
    clustering: Clustering | None
    points: Floats
    points_without_value: int
    form: str

    @property
    def method(self) -> str:
        """How it was estimated, in words."""
        names = self.quadrature.names
        told = f"log-linear in {', '.join(names)}" if names else "constant"
        return told + (" (logistic form)" if self.form == "logistic" else "")

    def __repr__(self) -> str:
        figures = ", ".join(f"{name} {value:.4g}" for name, value in self.coefficients.items())
        return f"<Intensity {self.method}: {figures}>"

    @cached_property
    def cell_values(self) -> Floats:
        """(m,) points per square metre in each cell of the quadrature."""
        return self._of(self.quadrature.values)

    def _of(self, values: Floats) -> Floats:
        beta = np.array(list(self.coefficients.values()))
        return np.asarray(np.exp(beta[0] + values @ beta[1:]))

    def at(self, xy: npt.ArrayLike) -> Floats:
        """(n,) points per square metre: that of the cell, and beyond the cells that of the covariates there.

        Where these have no value, that of the nearest cell.
        """
        at = self.area.local(xy) + self.area.origin
        cell = self.quadrature.cells.find(at, nearest=False)
        out = self.cell_values[cell]
        beyond = np.flatnonzero(cell < 0)
        if len(beyond):
            values = self.quadrature.measured(at[beyond])
            known = np.isfinite(values).all(axis=1)
            out[beyond[known]] = self._of(values[known])
            lost = beyond[~known]
            out[lost] = self.cell_values[self.quadrature.cells.find(at[lost])]
        return out

    @cached_property
    def _mean_and_highest(self) -> tuple[float, float]:
        # simulations ask for them over and over
        mean = float(self.cell_values @ self.quadrature.cells.areas / self.quadrature.cells.areas.sum())
        return mean, float(self.cell_values.max())

    @property
    def mean(self) -> float:
        return self._mean_and_highest[0]

    @property
    def highest(self) -> float:
        return self._mean_and_highest[1]

    def at_own_points(self) -> Floats:
        return self.at(self.points + self.area.origin)

    def draw(self, count: int, rng: np.random.Generator) -> Floats:
        return self.quadrature.cells.draw(self.cell_values, count, rng)

    def refit(self, local_xy: Floats, rng: np.random.Generator) -> LogLinearIntensity:
        regression, lost = _regression(self.quadrature, local_xy, self.form, rng)
        named = dict(zip(self.coefficients, regression.coefficients.tolist(), strict=True))
        return replace(
            self, coefficients=named, covariances={}, clustering=None, points=local_xy,
            points_without_value=lost,
        )  # fmt: skip

    @property
    def standard_errors(self) -> dict[str, dict[str, float]]:
        """Of each coefficient, under ``naive`` and ``clustered``."""
        return {
            kind: dict(zip(self.coefficients, np.sqrt(np.diag(matrix)).tolist(), strict=True))
            for kind, matrix in self.covariances.items()
        }

    def intervals(self, level: float = 0.95, errors: str = "clustered") -> dict[str, tuple[float, float]]:
        """Interval of each coefficient, by the normal distribution.

        Parameters
        ----------
        level
            Coverage.
        errors
            ``clustered`` or ``naive``.
        """
        if not 0 < level < 1:
            raise not_allowed("level", "between 0 and 1", level)
        if errors not in self.covariances:
            raise not_allowed("errors", tuple(self.covariances), errors)
        z = float(ndtri(0.5 + 0.5 * level))
        return {
            name: (self.coefficients[name] - z * e, self.coefficients[name] + z * e)
            for name, e in self.standard_errors[errors].items()
        }

    def record(self) -> dict[str, object]:
        cells = self.quadrature.cells
        errors = self.standard_errors
        return {
            "method": self.method,
            "form": self.form,
            "coefficients": [
                {"name": name, "value": value}
                | {f"standard_error_{kind}": errors[kind][name] for kind in errors}
                | {f"interval_{kind}": list(self.intervals(errors=kind)[name]) for kind in errors}
                for name, value in self.coefficients.items()
            ],
            "clustering": None if self.clustering is None else vars(self.clustering).copy(),
            "cells": len(cells),
            "cell_size_m": [cells.transform.a, -cells.transform.e],
            "covariates": [c.record(cells) for c in self.quadrature.covariates],
            "points": len(self.points),
            "points_without_value": self.points_without_value,
            "area_without_value_m2": self.quadrature.uncovered_area,
            "where_there_is_no_value": "left out of the fit; mapped with the values of the nearest cell",
        }

    def notes(self) -> list[str]:
        """What a person has to know about points and area without a value."""
        lost, out = self.points_without_value, self.quadrature.uncovered_area
        if lost == 0 and out == 0:
            return []
        return [
            f"{lost} of {len(self.points)} points and {out / self.area.area:.2%} of the study area lie where "
            "a covariate has no value: they are left out of the fit of the intensity, and mapped with the "
            "values of the nearest cell."
        ]


def fit_intensity(
    survey: Survey,
    covariates: Sequence[Covariate] = (),
    *,
    form: str = "poisson",
    cell: float | None = None,
    nodata_share: float = NODATA_SHARE,
    clustered: bool = True,
    excess: tuple[Callable[[Floats], Floats], float] | None = None,
    rng: np.random.Generator | int | None = None,
) -> LogLinearIntensity:
    """Fit an intensity whose logarithm is linear in covariates.

    The intensity is taken as constant in each cell, with covariates averaged over the
    cell, so that the likelihood of the Poisson process is exactly that of a Poisson
    regression of the counts in cells on their exact areas (Berman & Turner 1992,
    Applied Statistics 41: 31-38, with cells for weights). The standard errors that
    allow for clustering are those of Waagepetersen (2007), Biometrics 63: 252-258.

    Parameters
    ----------
    survey
        Points and study area.
    covariates
        Rasters, distances, coordinates; a constant intensity without any.
    form
        ``poisson``, or ``logistic`` (Baddeley, Coeurjolly, Rubak & Waagepetersen 2014,
        Biometrika 101: 377-392: points against a Poisson number of dummy points, four
        for each point, with covariates at the points themselves; needs `rng`).
    cell
        Side of the cells in metres; those of the finest raster in the system of the
        study area if not given, else about 40,000 in all.
    nodata_share
        Largest share of points, and of area, where a covariate may have no value.
    clustered
        Whether to estimate standard errors that allow for clustering.
    excess
        g(r) - 1 of a fitted model and the distance beyond which it is zero; estimated
        from the weighted K if not given.
    rng
        Generator or seed of the dummy points.

    Returns
    -------
    LogLinearIntensity

    Raises
    ------
    InputError
        If too many points or too much area have no value, a covariate is constant or
        follows from others, or there is no best fit.
    UsageError
        If an argument is not allowed.
    """
    if form not in METHODS:
        raise not_allowed("form", METHODS, form)
    if not 0 <= nodata_share < 1:
        raise not_allowed("nodata_share", "from 0 to below 1", nodata_share)
    if form == "logistic" and rng is None:
        raise not_allowed("rng", "a generator or a seed for the dummy points", rng)
    area = survey.area
    quadrature = Quadrature.over(area, covariates, cell)
    local_xy = survey.local_xy
    if survey.n <= len(covariates):
        raise InputError(
            f"The survey has {survey.n} point(s), too few for an intensity on {len(covariates)} covariate(s)."
        )
    regression, lost = _regression(quadrature, local_xy, form, np.random.default_rng(rng))
    _check_nodata(quadrature, lost, survey.n, nodata_share)
    names = ("intercept", *quadrature.names)
    found = LogLinearIntensity(
        area, quadrature, dict(zip(names, regression.coefficients.tolist(), strict=True)), {}, None, local_xy,
        lost, form,
    )  # fmt: skip
    clustering = None
    if clustered and excess is None and survey.n >= 2:
        clustering = fit_clustering(local_xy, area, 1.0 / found.at_own_points())
        excess = (clustering.excess, clustering.reach)
    covariances = _covariances(found, excess if clustered else None)
    return replace(found, covariances=covariances, clustering=clustering)


def _check_nodata(quadrature: Quadrature, lost: int, n: int, allowed: float) -> None:
    cells = quadrature.cells
    out = quadrature.uncovered_area / cells.area.area
    if lost > allowed * n or out > allowed:
        shares = [
            f"{c.name} {1.0 - c.cell_means(cells)[1] @ cells.areas / cells.area.area:.1%}"
            for c in quadrature.covariates
        ]
        raise InputError(
            f"{lost} of {n} points and {out:.1%} of the study area lie where a covariate has no value (more "
            f"than the {allowed:.0%} allowed); area without one: {', '.join(shares)}. Give a raster that "
            "covers the study area, or allow a larger share."
        )


def _regression(
    quadrature: Quadrature, local_xy: Floats, form: str, rng: np.random.Generator
) -> tuple[Regression, int]:
    """Fit, and the number of points that have no value."""
    cells, covered = quadrature.cells, quadrature.covered
    at = local_xy + cells.area.origin
    known = np.isfinite(quadrature.measured(at)).all(axis=1) & covered[cells.find(at)]
    lost = int(np.count_nonzero(~known))
    if form == "poisson":
        counts = cells.counts(at[known])
        found = poisson_regression(
            quadrature.values[covered], counts[covered], quadrature.exposure[covered], quadrature.names
        )
        return found, lost
    intensity = DUMMIES * max(len(at), 1) / cells.area.area
    dummies = cells.area.local_uniform_points(int(rng.poisson(intensity * cells.area.area)), rng)
    everything = np.vstack([at, dummies + cells.area.origin])
    values = quadrature.measured(everything)
    told = np.isfinite(values).all(axis=1)
    observed = np.arange(len(everything)) < len(at)
    return logistic_regression(values[told], observed[told], intensity, quadrature.names), lost


def _covariances(
    intensity: LogLinearIntensity, excess: tuple[Callable[[Floats], Floats], float] | None
) -> dict[str, Floats]:
    """Inverse information, and with clusters A⁻¹ + A⁻¹ B A⁻¹ (Waagepetersen 2007).

    A is the integral of z z' w λ, B the double integral of z z' w w λ λ (g - 1); w is
    one for the Poisson likelihood and δ/(λ + δ) for the logistic form.
    """
    quadrature = intensity.quadrature
    cells, covered = quadrature.cells, quadrature.covered
    scaling = Scaling(quadrature.values[covered], quadrature.exposure[covered], quadrature.names)
    values = intensity.cell_values[covered]
    mass = values * quadrature.exposure[covered]
    if intensity.form == "logistic":
        dummy = DUMMIES * len(intensity.points) / intensity.area.area
        mass = mass * dummy / (values + dummy)
    inverse = np.linalg.inv(scaling.design.T @ (scaling.design * mass[:, None]))
    back = scaling.back
    out = {"naive": back @ inverse @ back.T}
    if excess is not None:
        masses = np.zeros((len(cells), scaling.design.shape[1]))
        masses[covered] = scaling.design * mass[:, None]
        more = excess_matrix(cells, masses, excess[0], excess[1])
        out["clustered"] = back @ (inverse + inverse @ more @ inverse) @ back.T
    return out
