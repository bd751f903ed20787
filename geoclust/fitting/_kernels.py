"""Compiled offspring kernels, written so that the compiler can do four points at a time."""

from __future__ import annotations

import numpy as np
from numba import njit

GAUSSIAN, DISC, CAUCHY = 0, 1, 2


@njit(nogil=True, cache=True, inline="always")
def half_exp(z):
    """exp(-z / 2) for 0 <= z <= 36, to 2e-12 of the value and without a branch.

    The 64th part of the exponent lies within 0.15 of its middle, where eight
    terms of the Taylor series do; six squarings bring it back.
    """
    t = 0.140625 - z * 0.0078125
    p = 1.0 + t * (1.0 + t * (1.0 / 2 + t * (1.0 / 6 + t * (1.0 / 24 + t * (1.0 / 120 + t * (
        1.0 / 720 + t * (1.0 / 5040 + t * (1.0 / 40320))))))))  # fmt: skip
    p = p * 0.8688150562628432  # exp(-0.140625)
    p = p * p
    p = p * p
    p = p * p
    p = p * p
    p = p * p
    return p * p


@njit(nogil=True, cache=True)
def add_shapes(kernel, x, y, cx, cy, per, most, sign, out):
    """Add `sign` times the kernel round (cx, cy), relative to its centre, at points x, y to `out`.

    `per` is one over the squared scale, `most` the squared reach in scales, beyond which the
    kernel counts as nothing. The three arrays are slices of equal length, counted from zero:
    only then does the compiler know that no index wraps round, and takes four points at once.
    """
    if kernel == GAUSSIAN:
        for k in range(x.size):
            dx, dy = x[k] - cx, y[k] - cy
            z = (dx * dx + dy * dy) * per
            value = sign * half_exp(z if z < 36.0 else 36.0)
            out[k] += value if z <= most else 0.0
    elif kernel == DISC:
        for k in range(x.size):
            dx, dy = x[k] - cx, y[k] - cy
            out[k] += sign if (dx * dx + dy * dy) * per <= 1.0 else 0.0
    else:
        for k in range(x.size):
            dx, dy = x[k] - cx, y[k] - cy
            z = (dx * dx + dy * dy) * per
            root = 1.0 / np.sqrt(1.0 + z)
            value = sign * root * root * root
            out[k] += value if z <= most else 0.0


@njit(nogil=True, cache=True)
def kernel_shape(kernel, z, most):
    """The same for one squared distance in squared scales."""
    if z > most:
        return 0.0
    if kernel == GAUSSIAN:
        return half_exp(z)
    if kernel == DISC:
        return 1.0
    root = 1.0 / np.sqrt(1.0 + z)
    return root * root * root


@njit(nogil=True, cache=True, inline="always")
def kernel_peak(kernel, scale):
    """Density of an offspring at its centre, per square metre."""
    return 1.0 / (np.pi * scale * scale) if kernel == DISC else 1.0 / (2.0 * np.pi * scale * scale)


@njit(nogil=True, cache=True, inline="always")
def kernel_width(kernel, scale):
    """What moves are measured by: the standard deviation per axis, or the scale of a kernel that has none."""
    return 0.5 * scale if kernel == DISC else scale


@njit(nogil=True, cache=True)
def draw_offset(kernel, scale, rng):
    """Draw one offset from the kernel."""
    if kernel == GAUSSIAN:
        return scale * rng.standard_normal(), scale * rng.standard_normal()
    turn = 2.0 * np.pi * rng.random()
    u = rng.random()
    if kernel == DISC:
        r = scale * np.sqrt(u)
    else:
        r = scale * np.sqrt(1.0 / ((1.0 - u) * (1.0 - u)) - 1.0)
    return r * np.cos(turn), r * np.sin(turn)
