"""K, L and g against direct evaluation and complete randomness."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from known_areas import NAMED, share_in_rectangle
from scipy.integrate import quad
from scipy.stats import t as student_t

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.second_order import (
    SecondOrder,
    default_bandwidth,
    default_radii,
    k_function,
    l_function,
    pair_correlation,
)
from geoclust.errors import InputError, UsageError

WIDE = StudyArea(shapely.box(0, 0, 200, 100))


def clumps(seed: int, n: int = 150) -> Survey:
    rng = np.random.default_rng(seed)
    at = np.vstack([rng.uniform((0, 0), (200, 100), (n, 2)), rng.normal((60, 50), 6, (n // 2, 2))])
    return Survey(at[WIDE.contains(at)], WIDE)


def pairs(survey: Survey) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """First and second point and distance of all ordered pairs."""
    i, j = np.nonzero(~np.eye(survey.n, dtype=bool))
    return i, j, np.hypot(*(survey.xy[i] - survey.xy[j]).T)


def test_k_and_g_by_direct_evaluation_with_the_closed_form_weight():
    survey = clumps(1)
    i, _, d = pairs(survey)
    weight = np.array(
        [
            1 / share_in_rectangle(*survey.xy[a], r, 200, 100) if r < 48 else 0.0
            for a, r in zip(i, d, strict=True)
        ]
    )
    scale = WIDE.area / (survey.n * (survey.n - 1))
    radii = np.linspace(2, 45, 30)
    direct = np.array([scale * weight[d <= r].sum() for r in radii])
    curve = k_function(survey, radii)
    assert np.allclose(curve.values, direct, rtol=1e-10)
    assert np.allclose(l_function(survey, radii).values, np.sqrt(direct / np.pi), rtol=1e-10)
    b = 2.5
    kernel = [np.where(np.abs(r - d) < b, 0.75 / b * (1 - ((r - d) / b) ** 2), 0.0) for r in radii]
    # the kernel's part over positive distances
    above = [quad(lambda t: 0.75 / b * (1 - (t / b) ** 2), max(-b, -r), b)[0] for r in radii]
    direct = [scale * np.sum(weight * k / d) / (2 * np.pi * a) for k, a in zip(kernel, above, strict=True)]
    assert np.allclose(pair_correlation(survey, radii, b).values, direct, rtol=1e-8)


def test_g_is_the_slope_of_k():
    survey = clumps(2, 600)
    radii = np.linspace(0.25, 40, 160)
    b = 4.0
    g = pair_correlation(survey, radii, b).values
    k = k_function(survey, radii).values
    slope = np.gradient(k, radii) / (2 * np.pi * radii)
    # both averaged over ten metres
    box = np.ones(41) / 41
    smooth = [np.convolve(v, box, "valid") for v in (g, slope)]
    assert np.allclose(smooth[0][20:], smooth[1][20:], rtol=0.06)


@pytest.mark.parametrize(("name", "runs"), [("ragged reserve", 60), ("finland", 20)])
def test_complete_randomness(name: str, runs: int):
    area = StudyArea(NAMED[name]())
    radii = default_radii(area, 12)
    n = 300
    rng = np.random.default_rng(14)
    b = 0.3 * np.sqrt(area.area / n)
    k, g = np.empty((runs, 12)), np.empty((runs, 12))
    for s in range(runs):
        measured = SecondOrder.of_points(area.local_uniform_points(n, rng), area, radii, b)
        k[s], g[s] = measured.k_values(), measured.g_values()
    for values, expected in ((k, np.pi * radii**2), (g, np.ones(12))):
        error = (values.mean(0) - expected) / (values.std(0, ddof=1) / np.sqrt(runs))
        # 12 correlated comparisons of Student's t: one false alarm in a hundred at most
        assert np.abs(error).max() < student_t.isf(0.005 / 12, runs - 1)


def test_radius_zero():
    survey = Survey([[10, 10], [10, 10], [50, 50]], WIDE)
    k = k_function(survey, [0.0, 10.0]).values
    # the coincident pair counts in K from the start
    assert k[0] == k[1] == pytest.approx(WIDE.area / 6 * 2)
    g = pair_correlation(survey, [0.0, 10.0], 3.0).values
    assert g.tolist() == [0.0, 0.0]


def test_frame_and_attributes():
    curve = pair_correlation(clumps(3), [5.0, 10.0])
    assert curve.bandwidth == default_bandwidth(clumps(3).intensity)
    assert curve.edge_weight == "isotropic"
    frame = curve.to_frame()
    assert list(frame.columns) == ["function", "r_m", "estimate", "theory", "lower", "upper"]
    assert frame["theory"].tolist() == [1.0, 1.0]
    assert frame["lower"].isna().all()


@pytest.mark.parametrize(
    ("call", "said"),
    [
        (lambda s: k_function(s, [3.0, 2.0]), "radii must be increasing finite distances"),
        (lambda s: k_function(s, []), "radii must be increasing finite distances"),
        (lambda s: k_function(s, [-1.0, 2.0]), "radii must be increasing finite distances"),
        (lambda s: k_function(s, [0.0]), "radii must be distances of which the last is positive"),
        (lambda s: k_function(s, [1.0], "none"), "edge_weight must be one of isotropic"),
        (lambda s: pair_correlation(s, [1.0], 0.0), "bandwidth must be a positive number of metres"),
    ],
)
def test_bad_arguments(call, said: str):
    with pytest.raises(UsageError, match=said):
        call(clumps(4))


def test_one_point_has_no_distances():
    with pytest.raises(InputError, match="at least two"):
        k_function(Survey([[1, 1]], WIDE), [5.0])
