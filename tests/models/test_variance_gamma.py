"""The variance-gamma process against closed forms of special shapes and against its Fourier transform.

Jalilian, Guan & Waagepetersen (2013), Scandinavian Journal of Statistics 40: 119-137: at shape -1/4
the pair correlation function is one plus an exponential function of the distance.
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest
import shapely
from scipy.integrate import quad
from scipy.special import j0, k0, kve

from geoclust.area.study_area import StudyArea
from geoclust.errors import UsageError
from geoclust.models.thomas import Thomas
from geoclust.models.variance_gamma import VarianceGamma, _density, _log_bessel, _quick_density

SCALE = 12.0


def of(shape: float, scale: float = SCALE) -> VarianceGamma:
    return VarianceGamma(1e-4, scale, shape, 6.0)


def test_exponential_pair_correlation():
    r = np.array([0.0, 1e-6, 0.5, 7.0, 30.0, 200.0])
    x = r / SCALE
    excess = np.exp(-x) / (2 * np.pi * SCALE**2)
    np.testing.assert_allclose(of(-0.25).sibling_density(r), excess, rtol=1e-10)
    np.testing.assert_allclose(of(-0.25).pair_correlation(r), 1 + excess / 1e-4, rtol=1e-10)
    # its integral over discs
    np.testing.assert_allclose(
        of(-0.25).sibling_distribution(r), -np.expm1(-x) - x * np.exp(-x), rtol=1e-9, atol=1e-15
    )
    assert VarianceGamma.of(1e-4, SCALE, 6.0) == of(-0.25)


def test_exponential_and_bessel_kernels():
    """At shape 1/2 offspring fall off exponentially; at shape 0 as the Bessel function K0."""
    r = np.array([0.01, 2.0, 15.0, 80.0])
    np.testing.assert_allclose(
        of(0.5).offspring_density(r), np.exp(-r / SCALE) / (2 * np.pi * SCALE**2), rtol=1e-12
    )
    np.testing.assert_allclose(
        of(0.0).offspring_density(r), k0(r / SCALE) / (2 * np.pi * SCALE**2), rtol=1e-12
    )


@pytest.mark.parametrize("shape", [0.25, 0.75, 2.0, 6.0])
def test_densities_by_their_fourier_transform(shape):
    """The kernel has the transform (1 + scale² t²)^-(shape + 1) (Kotz, Kozubowski & Podgórski 2001,
    The Laplace Distribution and Generalizations); siblings differ by two of it, so theirs is its square.
    """
    model = of(shape)

    def back(power: float, r: float) -> float:
        # in pieces of five units of 1/scale: the Bessel function oscillates
        cuts = np.linspace(0.0, 400.0, 81) / SCALE
        pieces = [
            quad(lambda t: j0(t * r) * t / (1 + (SCALE * t) ** 2) ** power, a, b, limit=200)[0]
            for a, b in itertools.pairwise(cuts)
        ]
        return sum(pieces) / (2 * np.pi)

    for r in (6.0, 20.0, 45.0):
        peak = float(model.sibling_density(1.0))
        assert model.sibling_density(r) == pytest.approx(back(2 * (shape + 1), r), abs=1e-5 * peak)
        assert model.offspring_density(r) == pytest.approx(back(shape + 1, r), abs=2e-3 * peak)


def test_large_shapes_are_gaussian():
    """The excess kurtosis of the kernel is 3/(shape + 1): at 500 curves differ by half a per cent at most.

    There the Bessel function comes from its expansion; it meets scipy's at the order where it takes over.
    """
    r = np.linspace(0.0, 40.0, 41)
    sigma = 10.0
    wide = of(500.0, sigma / np.sqrt(2 * 501.0))
    assert wide.spread == pytest.approx(sigma)
    np.testing.assert_allclose(
        wide.sibling_density(r), Thomas(1e-4, sigma, 6.0).sibling_density(r), rtol=5e-3, atol=1e-7
    )
    x = np.geomspace(0.5, 200.0, 50)
    np.testing.assert_allclose(_log_bessel(x, 30.0), np.log(kve(30.0, x)) - x, rtol=1e-7, atol=1e-7)
    assert wide.reach(0.05) == pytest.approx(2.4477 * sigma, rel=5e-3)


@pytest.mark.parametrize("shape", [-0.45, -0.25, 0.5, 4.0])
def test_moments_of_the_drawn_offsets(shape):
    """Variance 2 (shape + 1) scale² per axis, kurtosis 3 + 3/(shape + 1); within five standard errors."""
    offsets = of(shape).draw_offsets(40_000, np.random.default_rng(63))
    spread = of(shape).spread
    squares = offsets.ravel() ** 2
    # the two axes share a variance: they are dependent, so the errors are of 40,000 means of two
    pairs = squares.reshape(-1, 2).mean(axis=1)
    assert pairs.mean() == pytest.approx(spread**2, abs=5 * pairs.std() / 200)
    fourths = (squares**2).reshape(-1, 2).mean(axis=1)
    assert fourths.mean() == pytest.approx((3 + 3 / (shape + 1)) * spread**4, abs=5 * fourths.std() / 200)


@pytest.mark.parametrize("shape", [-0.45, 0.0, 3.0])
def test_shares_in_a_strip_and_a_quadrant(shape):
    """Half a plane holds half, a quadrant a quarter, whatever the shape; far out, all."""
    model = of(shape)
    side = 4e4
    area = StudyArea(shapely.box(0, 0, side, side))
    centres = np.array([[0.0, 0.0], [side / 2, 0.0], [side / 2, side / 2]]) - area.origin
    np.testing.assert_allclose(model.shares_inside(area, centres), [0.25, 0.5, 1.0], atol=1e-9)


@pytest.mark.parametrize("index", [0.05, 0.5, 1.0, 7.0])
def test_many_densities_at_once(index):
    x = np.concatenate([[0.0], np.geomspace(1e-6, 1e4, 4000)])
    exact = _density(x, index)
    np.testing.assert_allclose(_quick_density(x, index), exact, rtol=1e-5, atol=1e-9 * exact.max())


def test_shape_has_a_lower_limit():
    for bad in (-0.5, -1.0, np.nan):
        with pytest.raises(UsageError, match=r"shape must be a finite number above -0\.5"):
            of(bad)
