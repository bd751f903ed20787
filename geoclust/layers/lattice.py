"""Finding out that coordinates were rounded, and to what.

Rounded coordinates put points on a lattice: distances below its spacing are not
real, and points coincide that did not in the field. The lattice is looked for in
the numbers as they were recorded, along each axis by itself, because reprojection
hides it.

A lattice is called only where chance cannot have made it: all values (or, for a
mixture, many more than by accident) lie on multiples of a spacing that is at least
`MARGIN` times coarser than the rounding of the floating-point numbers themselves.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

MINIMUM_VALUES = 10
MARGIN = 1000.0
# A share of the points on a coarser lattice than the rest is named from here on.
MIXED_SHARE = 0.1
_ULPS = 8.0
_SEXAGESIMAL = tuple(
    1 / parts for parts in (1, 2, 4, 12, 60, 120, 240, 360, 600, 3600, 6000, 36000, 60000, 360000)
)
_FEET = (0.3048, 1200 / 3937)
_LINEAR = tuple(foot * multiple for foot in _FEET for multiple in (100, 10, 1, 0.1)) + tuple(
    multiple / foot for foot in _FEET for multiple in (100, 10, 1, 0.1)
)


@dataclass(frozen=True)
class Lattice:
    """Coordinates along one axis that lie on a lattice.

    Attributes
    ----------
    axis
        "x" or "y".
    spacing
        Spacing in units of the CRS of the input.
    share
        Share of the points on it; below 1 in a mixture.
    """

    axis: str
    spacing: float
    share: float


def find_lattices(xy: np.ndarray, *, geographic: bool) -> tuple[Lattice, ...]:
    """Lattices of recorded coordinates.

    Parameters
    ----------
    xy
        (n, 2) finite coordinates as recorded.
    geographic
        True if they are degrees, which are often rounded in minutes or seconds.

    Returns
    -------
    tuple of Lattice
        Coarsest first within an axis; empty where coordinates are of full precision, or
        fewer than `MINIMUM_VALUES` different values make it impossible to tell.
    """
    xy = np.asarray(xy, dtype=float)
    found: list[Lattice] = []
    for column, axis in enumerate("xy"):
        for spacing, share in axis_lattices(xy[:, column], geographic=geographic):
            found.append(Lattice(axis, spacing, share))
    return tuple(found)


def axis_lattices(values: np.ndarray, *, geographic: bool) -> list[tuple[float, float]]:
    """Spacings and shares along one axis, coarsest first."""
    distinct = np.unique(values)
    if len(distinct) < MINIMUM_VALUES:
        return []
    noise = _ULPS * np.finfo(float).eps * max(abs(distinct[0]), abs(distinct[-1]))
    common = _decimal_spacing(distinct, noise) or _real_spacing(distinct, noise)
    if common is not None:
        common = _behind_rounding(distinct, common, noise, geographic) or common
    found = _mixture(values, common, noise)
    return [*found, (common, 1.0)] if common is not None else found


def _decimal_spacing(distinct: np.ndarray, noise: float) -> float | None:
    """Spacing of values that all are decimal numbers of few places: 0.001, 5, 0.009."""
    for places in range(16):
        scale = 10.0**places
        if noise * scale * MARGIN > 1:
            return None
        scaled = distinct * scale
        whole = np.rint(scaled)
        if np.all(np.abs(scaled - whole) <= noise * scale + 1e-12):
            if np.abs(whole).max() >= 2**62:
                return None
            steps = np.diff(whole.astype(np.int64))
            return float(np.gcd.reduce(steps)) / scale
    return None


def _real_spacing(distinct: np.ndarray, noise: float) -> float | None:
    """Spacing of any other size, such as whole feet written in metres: an approximate common divisor."""
    gaps = np.sort(np.diff(distinct))
    floor = MARGIN * noise
    gaps = gaps[gaps > floor]
    if len(gaps) < MINIMUM_VALUES - 1:
        return None
    spacing = gaps[0]
    for gap in gaps[: 20 * MINIMUM_VALUES]:
        a, b = gap, spacing
        while b > floor:
            a, b = b, abs(a - b * round(a / b))
        spacing = a
        if spacing < floor:
            return None
    refined = _refine(distinct - distinct[0], spacing)
    off = _remainder(distinct - distinct[0], refined)
    return refined if np.all(off <= max(4 * noise, 1e-9 * refined)) and refined > floor else None


def _refine(offsets: np.ndarray, spacing: float) -> float:
    """Improve a spacing by longer and longer spans that it still counts safely."""
    reach = 100.0
    while True:
        near = offsets[(offsets > 0) & (offsets <= reach * spacing)]
        if len(near):
            counts = np.rint(near / spacing)
            used = counts > 0
            if used.any():
                spacing = float((near[used] @ counts[used]) / (counts[used] @ counts[used]))
        if reach * spacing >= offsets[-1]:
            return spacing
        reach *= 30.0


def _behind_rounding(distinct: np.ndarray, common: float, noise: float, geographic: bool) -> float | None:
    """A coarser lattice in another unit that was then rounded to `common`: seconds of arc, feet."""
    blur = 0.5 * common + noise
    for spacing in _SEXAGESIMAL if geographic else sorted(_LINEAR, reverse=True):
        # by chance a value lies this near to the lattice with probability 2 blur / spacing
        chance = 2 * blur / spacing
        if chance > 0.2 or chance ** len(distinct) > 1e-9:
            continue
        if np.all(_remainder(distinct, spacing) <= blur * (1 + 1e-6)):
            return spacing
    return None


def _mixture(values: np.ndarray, common: float | None, noise: float) -> list[tuple[float, float]]:
    """Coarser lattices that hold a share of the values well above what chance puts there."""
    steps = _coarser_steps(values, common, noise)
    remaining = np.ones(len(values), dtype=bool)
    on = {step: _remainder(values, step) <= 2 * noise for step in steps}
    found: list[tuple[float, float]] = []
    for position, step in enumerate(steps):
        left = int(remaining.sum())
        if left < MINIMUM_VALUES:
            break
        count = int((on[step] & remaining).sum())
        # what finer lattices put on this one by chance
        expected = (common or 0.0) / step * left
        for finer in steps[position + 1 :]:
            expected = max(expected, finer / step * int((on[finer] & remaining).sum()))
        excess = count - expected
        different = len(np.unique(values[on[step] & remaining]))
        if (
            different >= MINIMUM_VALUES
            and excess >= MIXED_SHARE * len(values)
            and excess > 5 * math.sqrt(expected + 1)
        ):
            found.append((step, count / len(values)))
            remaining &= ~on[step]
    return found


def _coarser_steps(values: np.ndarray, common: float | None, noise: float) -> list[float]:
    """Steps 1, 2, 5 · 10^k (times the common spacing), coarsest first, finer than the extent."""
    extent = float(np.ptp(values))
    base = common if common is not None else 1.0
    finest = 1.5 * common if common is not None else MARGIN * noise
    low, high = (
        math.floor(math.log10(finest / base)) - 1,
        math.ceil(math.log10(max(extent / base, finest / base))),
    )
    steps = [base * digit * 10.0**power for power in range(low, high + 1) for digit in (1, 2, 5)]
    return sorted((step for step in steps if finest <= step <= extent), reverse=True)


def _remainder(values: np.ndarray, spacing: float) -> np.ndarray:
    """Distance of values to the nearest multiple of a spacing."""
    return np.abs(values - spacing * np.rint(values / spacing))
