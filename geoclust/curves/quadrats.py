"""Dispersion of counts in quadrats clipped to the study area."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from affine import Affine
from scipy.spatial import cKDTree
from scipy.stats import chi2

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.envelopes import ALTERNATIVES
from geoclust.curves.randomness import RandomnessTest, one_sided_or_both
from geoclust.errors import InputError, not_allowed

Floats = npt.NDArray[np.float64]
Counts = npt.NDArray[np.int64]

# points expected in a whole quadrat if its side is not given
EXPECTED = 4.0
# a quadrat that the boundary leaves so small that fewer are expected joins its neighbour
LEAST_EXPECTED = 1.0


@dataclass(frozen=True)
class Dispersion:
    """Index of dispersion of counts.

    Fisher, Thornton & Mackenzie (1922), Annals of Applied Biology 9: 325-359.

    Attributes
    ----------
    chi_square, degrees_of_freedom
        Sum of (count - expected)²/expected over the quadrats, and their number less one.
    variance_to_mean
        Their ratio: of quadrats of equal area, the variance of the counts over the mean.
    p_more, p_less
        Chance under complete randomness of a chi-square at least as large, and at most as
        large, by the chi-square distribution.
    """

    chi_square: float
    degrees_of_freedom: int
    variance_to_mean: float
    p_more: float
    p_less: float


def dispersion(counts: npt.ArrayLike, areas: npt.ArrayLike | None = None) -> Dispersion:
    """Index of dispersion of counts in quadrats.

    Parameters
    ----------
    counts
        (m,) points in each quadrat.
    areas
        (m,) area of each; equal if not given.

    Raises
    ------
    UsageError
        If there are fewer than two quadrats, or a count or an area is not allowed.
    InputError
        If there are no points.

    Examples
    --------
    >>> dispersion([2, 0, 4, 2]).chi_square
    4.0
    """
    found = np.asarray(counts, dtype=np.float64)
    if found.ndim != 1 or len(found) < 2 or np.any(found < 0) or np.any(found != np.round(found)):
        raise not_allowed("counts", "whole numbers, not negative, of two or more quadrats", counts)
    size = np.ones(len(found)) if areas is None else np.asarray(areas, dtype=np.float64)
    if size.shape != found.shape or not np.all(np.isfinite(size)) or np.any(size <= 0):
        raise not_allowed("areas", "a positive area for every quadrat", areas)
    if found.sum() == 0:
        raise InputError("There are no points in the quadrats; their dispersion cannot be told.")
    value = float(chi_squares(found[None, :], size)[0])
    freedom = len(found) - 1
    return Dispersion(
        value, freedom, value / freedom, float(chi2.sf(value, freedom)), float(chi2.cdf(value, freedom))
    )


def chi_squares(counts: npt.NDArray[np.generic], areas: Floats) -> Floats:
    """(s,) sum of (count - expected)²/expected of each row of (s, m) counts."""
    rows = np.asarray(counts, dtype=np.float64)
    expected = rows.sum(axis=1, keepdims=True) * (areas / areas.sum())
    return np.asarray(((rows - expected) ** 2 / expected).sum(axis=1))


@dataclass(frozen=True, eq=False)
class Quadrats:
    """Square quadrats clipped to a study area, small ones joined to their neighbour.

    Attributes
    ----------
    areas
        (m,) square metres inside the study area.
    joined
        Number of clipped quadrats that joined another one.
    cell
        Side in metres.
    """

    areas: Floats
    joined: int
    cell: float
    _transform: Affine
    _label: Counts

    @classmethod
    def over(cls, area: StudyArea, cell: float, least: float) -> Quadrats:
        """Lay quadrats whose edges fall on multiples of their side.

        A clipped quadrat smaller than `least` square metres joins the nearest one that is not.
        """
        west, south, east, north = area.bounds
        left, bottom = int(np.floor(west / cell)), int(np.floor(south / cell))
        shape = (int(np.ceil(north / cell)) - bottom, int(np.ceil(east / cell)) - left)
        if shape[0] * shape[1] > 4_000_000:
            raise not_allowed("cell", "a side that gives at most 4,000,000 quadrats", cell)
        transform = Affine(cell, 0.0, left * cell, 0.0, -cell, (bottom + shape[0]) * cell)
        inside = area.cell_areas(transform, shape).ravel()
        places = np.column_stack(np.unravel_index(np.arange(inside.size), shape)).astype(np.float64)
        large = np.flatnonzero(inside >= least)
        if len(large) < 2:
            raise not_allowed("cell", "a side that leaves two or more quadrats in the study area", cell)
        # every cell, empty ones included: a point on the boundary may fall into one
        label: Counts = np.asarray(cKDTree(places[large]).query(places)[1], dtype=np.int64)
        label[large] = np.arange(len(large))
        areas = np.asarray(np.bincount(label, weights=inside, minlength=len(large)), dtype=np.float64)
        joined = int(np.count_nonzero((inside > 0) & (inside < least)))
        return cls(areas, joined, cell, transform, label.reshape(shape))

    def counts(self, xy: Floats) -> Counts:
        """(m,) points in each quadrat, easting and northing in metres."""
        t = self._transform
        rows, columns = self._label.shape
        i = np.clip(((xy[:, 0] - t.c) / t.a).astype(np.intp), 0, columns - 1)
        j = np.clip(((xy[:, 1] - t.f) / t.e).astype(np.intp), 0, rows - 1)
        return np.bincount(self._label[j, i], minlength=len(self.areas))


def quadrat_test(
    survey: Survey,
    *,
    cell: float | None = None,
    simulations: int = 999,
    alternative: str = "different",
    rng: np.random.Generator | int,
) -> RandomnessTest:
    """Test complete randomness by the dispersion of counts in quadrats.

    The quadrats are cells of a square grid clipped to the study area; expected counts
    are in proportion to their exact areas. As many expected counts are small, the
    p-value is that of simulated counts, given the number of points; the one of the
    chi-square distribution is among the figures.

    Parameters
    ----------
    survey
        Points and study area.
    cell
        Side of a quadrat in metres; such that a whole one is expected to hold four points
        if not given.
    simulations, rng
        Simulated sets of counts; generator or seed.
    alternative
        ``different``, ``clustered`` (more dispersed) or ``regular`` (less).

    Raises
    ------
    InputError
        If the survey has fewer than eight points and `cell` is not given.
    UsageError
        If the side leaves fewer than two quadrats, or another argument is not allowed.
    """
    if alternative not in ALTERNATIVES:
        raise not_allowed("alternative", ALTERNATIVES, alternative)
    if simulations < 19:
        raise not_allowed("simulations", "at least 19", simulations)
    if cell is None and survey.n < 2 * EXPECTED:
        raise InputError(
            f"The survey has {survey.n} point(s), too few for quadrats of {EXPECTED:g} points each; "
            "give the side of a quadrat."
        )
    if survey.n == 0:
        raise InputError("The survey has no points; their dispersion cannot be told.")
    side = float(np.sqrt(EXPECTED / survey.intensity)) if cell is None else float(cell)
    if not (np.isfinite(side) and side > 0):
        raise not_allowed("cell", "a positive number of metres", cell)
    # no more than a quarter of a whole quadrat, or small quadrats would leave none
    least = min(LEAST_EXPECTED / survey.intensity, 0.25 * side**2)
    quadrats = Quadrats.over(survey.area, side, least)
    counts = quadrats.counts(survey.xy)
    told = dispersion(counts, quadrats.areas)
    shares = quadrats.areas / quadrats.areas.sum()
    drawn = np.random.default_rng(rng).multinomial(survey.n, shares, simulations)
    values = np.concatenate([[told.chi_square], chi_squares(drawn, quadrats.areas)])
    # equal counts in another order differ by rounding alone: they are ties
    values = np.round(values, 9)
    p_chi = {
        "clustered": told.p_more,
        "regular": told.p_less,
        "different": min(2.0 * min(told.p_more, told.p_less), 1.0),
    }[alternative]
    return RandomnessTest(
        "quadrat dispersion", told.chi_square, one_sided_or_both(values, alternative, 1.0), simulations,
        alternative,
        {
            "variance_to_mean": told.variance_to_mean,
            "degrees_of_freedom": float(told.degrees_of_freedom),
            "p_value_chi_square": p_chi,
            "quadrats": float(len(counts)),
            "quadrats_joined": float(quadrats.joined),
            "side_m": side,
        },
    )  # fmt: skip
