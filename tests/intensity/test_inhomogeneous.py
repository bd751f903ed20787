"""Envelopes of the inhomogeneous Poisson process, and the bandwidth of g by cross-validation."""

from __future__ import annotations

from functools import cache

import numpy as np
import pyproj
import pytest
import shapely

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.bandwidth import cross_validated_bandwidth
from geoclust.curves.envelopes import randomness_envelopes
from geoclust.curves.second_order import pair_correlation
from geoclust.errors import InputError, UsageError
from geoclust.intensity.covariates import coordinate_covariates
from geoclust.intensity.envelopes import inhomogeneous_envelopes
from geoclust.intensity.kernel import kernel_intensity
from geoclust.intensity.loglinear import fit_intensity
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

AREA = StudyArea(shapely.box(0, 0, 1000, 1000) - shapely.box(300, 300, 500, 450), pyproj.CRS("EPSG:25832"))
RADII = np.linspace(0, 120, 25)[1:]


def sloped(at: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Thin points so that they become rarer towards the east, by a factor of e² over the kilometre."""
    return at[rng.random(len(at)) < np.exp(-2.0 * at[:, 0] / 1000)]


@cache
def terrain_only() -> Survey:
    rng = np.random.default_rng(21)
    return Survey(sloped(AREA.uniform_points(800, rng), rng), AREA)


@cache
def terrain_and_clusters() -> Survey:
    rng = np.random.default_rng(22)
    model = Thomas(parent_intensity=150 / AREA.area, sigma=12.0, mean_offspring=8.0)
    return Survey(sloped(draw_pattern(model, AREA, rng).points + AREA.origin, rng), AREA)


def test_terrain_alone_is_structure_for_one_test_and_none_for_the_other():
    survey = terrain_only()
    plain = randomness_envelopes(survey, RADII, simulations=99, rng=1)
    assert plain["L"].p_value == 0.01
    intensity = fit_intensity(survey, coordinate_covariates(AREA), clustered=False, cell=10.0)
    found = inhomogeneous_envelopes(survey, intensity, RADII, simulations=99, rng=1)
    assert found["L"].p_value > 0.05
    assert found["g"].p_value > 0.05
    curve = found["g"].curve
    assert curve.intensity == "log-linear in easting_km, northing_km"
    assert "Stoyan" in repr(curve)


def test_clusters_are_seen_beyond_the_terrain():
    survey = terrain_and_clusters()
    intensity = fit_intensity(survey, coordinate_covariates(AREA), cell=10.0)
    # to the east by -2 a kilometre
    low, high = intensity.intervals()["easting_km"]
    assert low < -2.0 < high
    tests = inhomogeneous_envelopes(
        survey, intensity, RADII, simulations=99, bandwidth="cross-validation", rng=1
    )
    for name in ("L", "g"):
        assert tests[name].p_value == 0.01
        assert all(side == "above" for *_, side in tests[name].departures())
    assert tests["g"].curve.bandwidth_by == "cross-validation, Guan 2007"
    # the curve is that of the weighted estimate
    curve = tests["g"].curve
    alone = pair_correlation(
        survey, RADII, curve.bandwidth, "rigid-motion", intensity_at_points=intensity.at(survey.xy)
    )
    assert np.allclose(alone.values, curve.values, rtol=1e-9)


def test_the_errors_of_the_fit_are_in_the_envelope():
    survey = terrain_only()
    intensity = fit_intensity(survey, coordinate_covariates(AREA, 2), clustered=False, cell=20.0)
    upper = [
        inhomogeneous_envelopes(
            survey, intensity, RADII, functions=("L",), simulations=39, refit=refit, rng=3
        )["L"].curve.upper
        for refit in (True, False)
    ]
    assert not np.allclose(upper[0], upper[1], rtol=1e-3)


def test_workers_do_not_change_the_answer():
    survey = terrain_only()
    intensity = fit_intensity(survey, coordinate_covariates(AREA), form="logistic", clustered=False, rng=1)
    one, three = (
        inhomogeneous_envelopes(survey, intensity, RADII, simulations=39, rng=5, workers=w) for w in (1, 3)
    )
    for name in ("L", "g"):
        assert np.array_equal(one[name].curve.upper, three[name].curve.upper)
        assert one[name].p_value == three[name].p_value


def test_a_kernel_intensity_can_be_tested_as_well():
    survey = terrain_only()
    found = inhomogeneous_envelopes(
        survey, kernel_intensity(survey, 150.0), RADII, functions=("K",), simulations=39, rng=2
    )["K"]
    assert found.p_value > 0.05
    assert "Gaussian kernel" in str(found.curve.intensity)


def test_cross_validation_by_leaving_out_each_pair():
    """Against the definition, pair by pair, in a disc-like setting without edges."""
    rng = np.random.default_rng(4)
    wide = StudyArea(shapely.box(-1e5, -1e5, 1e5, 1e5))
    model = Thomas(parent_intensity=4e-4, sigma=6.0, mean_offspring=5.0)
    inner = StudyArea(shapely.box(-120, -120, 120, 120))
    xy = draw_pattern(model, inner, rng).points[:100]
    survey = Survey(xy, wide)
    factors = rng.uniform(0.5, 2.0, len(xy))
    r_max, tried = 40.0, np.array([2.0, 5.0, 9.0])
    found = cross_validated_bandwidth(survey, r_max, bandwidths=tried, intensity_at_points=1 / factors)

    i, j = np.nonzero(~np.eye(len(xy), dtype=bool))
    d = np.hypot(*(xy[i] - xy[j]).T)
    weight = factors[i] * factors[j]
    scale = wide.area / weight.sum()

    def kernel(z: np.ndarray, b: float) -> np.ndarray:
        return np.where(np.abs(z) < b, 0.75 / b * (1 - (z / b) ** 2), 0.0)

    def above(r: np.ndarray, b: float) -> np.ndarray:
        e = np.clip(r / b, 0, 1)
        return 2 * np.pi * (0.5 + 0.75 * (e - e**3 / 3))

    near = d <= r_max
    for b, score in zip(tried, found.scores, strict=True):
        r = (np.arange(400) + 0.5) * r_max / 400
        g = scale * (kernel(r[:, None] - d, b) @ (weight / d)) / above(r, b)
        squared = np.sum(g**2 * 2 * np.pi * r) * r_max / 400
        at = scale * (kernel(d[near][:, None] - d, b) @ (weight / d)) / above(d[near], b)
        at -= scale * 2 * weight[near] * 0.75 / b / d[near] / above(d[near], b)
        assert score == pytest.approx(squared - 2 * scale * np.sum(weight[near] * at), rel=0.01)


def test_cross_validation_takes_wider_kernels_for_wider_clusters():
    rng = np.random.default_rng(9)
    chosen = {}
    for sigma in (6.0, 40.0):
        model = Thomas(parent_intensity=100 / AREA.area, sigma=sigma, mean_offspring=8.0)
        found = [
            cross_validated_bandwidth(
                Survey(draw_pattern(model, AREA, rng).points + AREA.origin, AREA), 120.0
            )
            for _ in range(5)
        ]
        chosen[sigma] = np.median([f.bandwidth for f in found])
    assert chosen[40.0] > 1.5 * chosen[6.0]


@pytest.mark.parametrize(
    ("call", "error", "said"),
    [
        (lambda s, i: inhomogeneous_envelopes(s, i, RADII, functions=("G",), rng=1), UsageError, "functions"),
        (lambda s, i: inhomogeneous_envelopes(s, i, RADII, simulations=0, rng=1), UsageError, "simulations"),
        (lambda s, i: inhomogeneous_envelopes(s, i, RADII, bandwidth="auto", rng=1), UsageError, "bandwidth"),
        (
            lambda s, i: inhomogeneous_envelopes(Survey(s.xy[:9], AREA), i, RADII, rng=1),
            UsageError,
            "intensity must be one fitted to the 9 points",
        ),
        (lambda s, i: cross_validated_bandwidth(s, 0.0), UsageError, "r_max must be"),
        (lambda s, i: cross_validated_bandwidth(s, 9.0, bandwidths=[-1.0]), UsageError, "bandwidths must be"),
        (lambda s, i: cross_validated_bandwidth(Survey(s.xy[:2], AREA), 9.0), InputError, "at least three"),
    ],
)
def test_bad_arguments(call, error: type[Exception], said: str):
    survey = terrain_only()
    with pytest.raises(error, match=said):
        call(survey, fit_intensity(survey, clustered=False))
