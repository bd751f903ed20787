"""Tests of complete randomness against open data, published values and their own definitions."""

from __future__ import annotations

from functools import cache

import numpy as np
import pandas as pd
import pytest
import shapely
from known_areas import HERE, ragged_reserve, sample_reserve
from scipy.stats import chisquare, rankdata

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.curve import Curve
from geoclust.curves.envelopes import extreme_rank_lengths, global_envelope, randomness_envelopes
from geoclust.curves.quadrats import Quadrats, chi_squares, dispersion, quadrat_test
from geoclust.curves.randomness import clark_evans_test, loosmore_ford, loosmore_ford_test
from geoclust.errors import InputError, UsageError


def brambles(age: int) -> Survey:
    rows = pd.read_csv(HERE / "data" / "brambles.csv")
    # unit square standing for a plot of 9 m
    return Survey(9 * rows.loc[rows["age"] == age, ["x", "y"]].to_numpy(), StudyArea(shapely.box(0, 0, 9, 9)))


def nuclei() -> Survey:
    rows = pd.read_csv(HERE / "data" / "nuclei_px512.csv")
    return Survey(rows[["x", "y"]].to_numpy(), StudyArea(shapely.box(0, 0, 512, 512)))


def caveolae() -> Survey:
    rows = pd.read_csv(HERE / "data" / "caveolae.csv")
    return Survey(rows[["x", "y"]].to_numpy(), StudyArea(shapely.box(0, 0, 500, 500)))


SURVEYS = {
    "brambles 0": (lambda: brambles(0), "clustered"),
    "brambles 1": (lambda: brambles(1), "clustered"),
    "brambles 2": (lambda: brambles(2), "clustered"),
    "nuclei": (nuclei, "regular"),
    "caveolae": (caveolae, "regular"),
}


@pytest.mark.parametrize("name", list(SURVEYS))
def test_open_data_depart_from_randomness_as_known(name: str):
    """Brambles are aggregated at each age (Diggle 1983, from memory), nuclei and caveolae are regular."""
    make, side = SURVEYS[name]
    survey = make()
    spacing = 1 / np.sqrt(survey.intensity)
    radii = np.linspace(0, 1.5 * spacing, 31)[1:]
    other = "regular" if side == "clustered" else "clustered"
    for function, test in randomness_envelopes(survey, radii, simulations=199, rng=1).items():
        assert test.p_value <= 0.05, function
        departures = test.departures()
        assert {d[2] for d in departures} == {"above" if side == "clustered" else "below"}
    assert loosmore_ford_test(survey, radii, simulations=199, rng=2).p_value <= 0.05
    clark_evans = clark_evans_test(survey, simulations=199, alternative=side, rng=3)
    assert clark_evans.p_value == 1 / 200
    assert (clark_evans.statistic < 1) == (side == "clustered")
    assert clark_evans_test(survey, simulations=199, alternative=other, rng=3).p_value > 0.9
    quadrats = quadrat_test(survey, simulations=999, alternative=side, rng=4)
    # regularity at the scale of the spacing hardly shows in counts of four
    assert quadrats.p_value <= (0.001 if side == "clustered" else 0.5)
    assert (quadrats.figures["variance_to_mean"] > 1) == (side == "clustered")


def test_fir_seedlings():
    """50 quadrats (Davison & Hinkley 1997): variance/mean 1.1255, chi-square 55.15 on 49 df (computed)."""
    counts = pd.read_csv(HERE / "data" / "fir_quadrats.csv")["count"].to_numpy()
    assert counts.sum() == 107
    found = dispersion(counts)
    assert found.variance_to_mean == pytest.approx(1.1255, abs=5e-5)
    assert found.chi_square == pytest.approx(55.15, abs=5e-3)
    assert found.degrees_of_freedom == 49
    # scipy's test of goodness of fit
    assert found.chi_square == pytest.approx(chisquare(counts).statistic, rel=1e-12)
    assert found.p_more == pytest.approx(chisquare(counts).pvalue, rel=1e-10)
    assert found.variance_to_mean == pytest.approx(np.var(counts, ddof=1) / counts.mean(), rel=1e-12)


def test_brambles_in_six_by_six_quadrats():
    """Age 0: variance/mean 3.90 (computed, stated with the data)."""
    survey = brambles(0)
    found = quadrat_test(survey, cell=1.5, simulations=99, rng=1)
    assert found.figures["quadrats"] == 36
    assert found.figures["variance_to_mean"] == pytest.approx(3.90, abs=5e-3)


def test_counts_and_areas_of_clipped_quadrats():
    area = StudyArea(ragged_reserve())
    survey = Survey(area.uniform_points(500, 3), area)
    side = 150.0
    quadrats = Quadrats.over(area, side, 0.25 * side**2)
    assert quadrats.areas.sum() == pytest.approx(area.area, rel=1e-12)
    assert quadrats.areas.min() >= 0.25 * side**2
    assert quadrats.joined > 5
    counts = quadrats.counts(survey.xy)
    assert counts.sum() == survey.n
    # a whole quadrat and its points, by shapely
    whole = np.flatnonzero(np.isclose(quadrats.areas, side**2, rtol=1e-9))
    corners = np.floor(survey.xy / side)
    in_cell = pd.Series(counts[whole])
    boxes = {
        tuple(c): int(np.all(corners == c, axis=1).sum())
        for c in np.unique(corners, axis=0)
        if area.polygon.contains(shapely.box(*(side * c), *(side * (c + 1))))
    }
    assert set(boxes.values()) <= set(in_cell)
    direct = chisquare(counts, survey.n * quadrats.areas / area.area).statistic
    assert chi_squares(counts[None], quadrats.areas)[0] == pytest.approx(direct, rel=1e-9)


def test_a_point_on_the_outermost_boundary_has_a_quadrat():
    area = StudyArea(shapely.box(0, 0, 30, 30))
    quadrats = Quadrats.over(area, 10.0, 25.0)
    assert quadrats.counts(np.array([[30.0, 30.0], [0.0, 0.0], [30.0, 0.0], [15.0, 15.0]])).sum() == 4


@cache
def curves_of_noise(s: int, k: int, ties: bool) -> np.ndarray:
    rng = np.random.default_rng(s + k)
    rows = np.cumsum(rng.normal(size=(s, k)), axis=1)
    return np.round(rows) if ties else rows


@pytest.mark.parametrize("ties", [False, True])
@pytest.mark.parametrize("alternative", ["different", "clustered", "regular"])
def test_extreme_rank_lengths_by_their_definition(alternative: str, ties: bool):
    """Ranks by scipy, the mean for ties, then compared in order (Myllymäki et al. 2017)."""
    rows = curves_of_noise(60, 15, ties)
    down = rankdata(rows, method="average", axis=0)
    up = rankdata(-rows, method="average", axis=0)
    ranks = {"different": np.minimum(down, up), "clustered": up, "regular": down}[alternative]
    vectors = [tuple(sorted(r)) for r in ranks]
    expected = [sum(v < u for v in vectors) for u in vectors]
    assert extreme_rank_lengths(rows, alternative).tolist() == expected


def curve(values: np.ndarray) -> Curve:
    at = np.arange(1.0, len(values) + 1)
    return Curve("L", at, values, at, "m", "isotropic")


@pytest.mark.parametrize("ties", [False, True])
@pytest.mark.parametrize("alternative", ["different", "clustered", "regular"])
def test_the_envelope_is_left_exactly_if_the_p_value_says_so(alternative: str, ties: bool):
    rows = curves_of_noise(100, 12, ties)
    left = 0
    for k in range(100):
        others = np.delete(rows, k, axis=0)
        test = global_envelope(curve(rows[k]), others, level=0.9, alternative=alternative)
        assert (test.p_value * 100) == pytest.approx(round(test.p_value * 100))
        # without ties the two are the same (ibid.); with ties a curve may touch the envelope
        outside = len(test.departures()) > 0
        assert outside <= (test.p_value <= 0.1)
        if not ties:
            assert outside == (test.p_value <= 0.1)
        left += test.p_value <= 0.1
    # exactly one in ten without ties, no more with them
    assert left == 10 if not ties else left <= 10


def test_curves_that_are_all_the_same_are_no_departure():
    test = global_envelope(curve(np.ones(5)), np.ones((99, 5)))
    assert test.p_value == 1.0
    assert test.departures() == []


def test_columns_without_a_value_are_ignored():
    rows = curves_of_noise(50, 10, False).copy()
    expected = extreme_rank_lengths(rows[:, :7])
    rows[3, 7:] = np.nan
    assert extreme_rank_lengths(rows).tolist() == expected.tolist()


def test_loosmore_ford_by_its_definition():
    rows = curves_of_noise(40, 12, False)
    radii = np.geomspace(1, 9, 12)
    step = np.diff(radii, prepend=0)
    expected = [
        np.sum((rows[i] - np.delete(rows, i, axis=0).mean(axis=0)) ** 2 * step) for i in range(len(rows))
    ]
    found, p = loosmore_ford(rows, radii)
    assert np.allclose(found, expected, rtol=1e-10)
    assert p == np.mean(np.array(expected) >= expected[0])


def test_clark_evans_far_from_any_boundary():
    """Mean distance 1/(2 sqrt(lambda)), standard error 0.26136/sqrt(n lambda) (Clark & Evans 1954)."""
    area = StudyArea(shapely.box(0, 0, 1000, 1000))
    ratios, z = [], []
    for seed in range(40):
        survey = Survey(area.uniform_points(4000, seed), area)
        found = clark_evans_test(survey, simulations=19, rng=seed)
        ratios.append(found.statistic)
        expected = 1 / (2 * np.sqrt(survey.intensity))
        error = 0.26136 / np.sqrt(survey.n * survey.intensity)
        z.append((found.figures["mean_distance_m"] - expected) / error)
    # neighbours beyond the boundary are missing: the mean distance is about 1 % too large
    assert 0.5 < np.mean(z) < 4
    assert np.std(z) == pytest.approx(1.0, abs=0.35)
    # the simulated null lies in the same square: no bias; 40 ratios of standard deviation 0.0085
    assert np.mean(ratios) == pytest.approx(1.0, abs=4 * 0.0085 / np.sqrt(40))


def test_the_answer_does_not_depend_on_workers():
    area = StudyArea(sample_reserve())
    survey = Survey(area.uniform_points(150, 8), area)
    radii = [20.0, 60.0, 120.0]
    told: list[tuple[int, int]] = []
    for function in ("L", "J"):
        found = [
            loosmore_ford_test(
                survey, radii, function=function, simulations=39, rng=5, workers=w,
                progress=lambda label, done, total: told.append((done, total)),
            )
            for w in (1, 3)
        ]  # fmt: skip
        assert found[0] == found[1]
    assert told[:39] == [(k, 39) for k in range(1, 40)]
    assert "Loosmore" in repr(found[0])
    one, three = (clark_evans_test(survey, simulations=39, rng=5, workers=w) for w in (1, 3))
    assert one == three


@pytest.mark.parametrize(
    ("call", "error", "said"),
    [
        (lambda s: loosmore_ford_test(s, [1.0], simulations=3, rng=1), UsageError, "simulations must be at"),
        (
            lambda s: loosmore_ford_test(s, [1.0], function="k", rng=1),
            UsageError,
            "function must be one of K",
        ),
        (lambda s: clark_evans_test(s, alternative="both", rng=1), UsageError, "alternative must be one of"),
        (lambda s: quadrat_test(s, rng=1), InputError, "too few for quadrats of 4 points"),
        (lambda s: quadrat_test(s, cell=500.0, rng=1), UsageError, "cell must be a side that leaves two"),
        (lambda s: quadrat_test(s, cell=-1.0, rng=1), UsageError, "cell must be a positive number"),
        (lambda s: quadrat_test(s, cell=1e-3, rng=1), UsageError, "cell must be a side that gives at most"),
        (lambda s: dispersion([1, 2.5]), UsageError, "counts must be whole numbers"),
        (lambda s: dispersion([1, 2], [1.0, 0.0]), UsageError, "areas must be a positive area"),
        (lambda s: dispersion([0, 0]), InputError, "no points in the quadrats"),
    ],
)
def test_bad_arguments(call, error: type[Exception], said: str):
    survey = Survey([[1, 1], [50, 20], [90, 80]], StudyArea(shapely.box(0, 0, 100, 100)))
    with pytest.raises(error, match=said):
        call(survey)
