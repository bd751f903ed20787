"""Posterior fits of small surveys with heavy-tailed and hard-edged clusters: they converge, with sense."""

from __future__ import annotations

from functools import cache

import geopandas as gpd
import numpy as np
import pytest
import shapely

from geoclust.area.study_area import StudyArea
from geoclust.centres.prediction import predict_unsurveyed
from geoclust.fitting.convergence import Sample
from geoclust.fitting.posterior import default_priors, sample_posterior
from geoclust.models.base import ClusterModel
from geoclust.models.cauchy import Cauchy
from geoclust.models.matern_cluster import MaternCluster
from geoclust.models.patterns import Pattern, draw_pattern

PLOT = StudyArea(shapely.box(0, 0, 260, 200))
TRUTHS = {
    "cauchy": Cauchy(parent_intensity=5e-4, omega=2.5, mean_offspring=6.0),
    "matern-cluster": MaternCluster(parent_intensity=5e-4, radius=7.0, mean_offspring=6.0),
}


@cache
def fitted(name: str) -> tuple[Pattern, Sample]:
    """Chains of one survey, until the effective sample size of every quantity is above 150."""
    truth = TRUTHS[name]
    pattern = draw_pattern(truth, PLOT, np.random.default_rng(23))
    sample = sample_posterior(
        pattern.points, PLOT, truth, default_priors(len(pattern.points), PLOT), enough=150.0,
        rng=np.random.default_rng(24),
    )  # fmt: skip
    return pattern, sample


@pytest.fixture(scope="module", params=sorted(TRUTHS))
def fit(request: pytest.FixtureRequest) -> tuple[ClusterModel, Pattern, Sample]:
    return TRUTHS[request.param], *fitted(request.param)


def test_chains_agree(fit):
    _, pattern, sample = fit
    assert sample.converged, sample.diagnostics
    assert 100 < len(pattern.points) < 250


def test_parameters_lie_where_they_should(fit):
    """Truth within the middle 99 % of the draws (two false alarms in a hundred surveys, of three parameters).

    The survey is seeded, so it does or does not for good.
    """
    truth, pattern, sample = fit
    draws = sample.draws
    for name, values in (
        ("parent_intensity", draws.parent_intensity),
        (truth.scale_name, draws.scale),
        ("mean_offspring", draws.mean_offspring),
    ):
        low, high = np.quantile(values, [0.005, 0.995])
        assert low < truth.parameters[name] < high, name
        assert high < 4 * low
    # intensities agree with the number of points: rho mu |W| is n, give or take what the clusters allow
    expected = draws.parent_intensity * draws.mean_offspring * PLOT.area
    assert np.quantile(expected, 0.02) < len(pattern.points) < np.quantile(expected, 0.98)


def test_every_point_has_its_centre(fit):
    truth, pattern, sample = fit
    draws = sample.draws
    apart = []
    for b in range(0, draws.scale.shape[1], 10):
        owner, centres = draws.owner[0, b], draws.centres[0][b]
        held = owner >= 0
        apart.append(np.hypot(*(pattern.points[held] - centres[owner[held]]).T) / draws.scale[0, b])
        assert sample.setup.wide.contains(centres + PLOT.origin).all()
    alone = float((draws.owner < 0).mean())
    ratio = np.concatenate(apart)
    if truth.name == "cauchy":
        # some points come from beyond the margin, and far points are no rarity
        assert 0.0 < alone < 0.1
        assert ratio.max() > 10.0
    else:
        assert alone == 0.0
        assert ratio.max() <= 1.0 + 1e-12


def test_far_polygons_hold_as_much_as_the_mean_intensity_says(fit):
    """Where no centre was sampled, the expected number is intensity times area, tails from afar included."""
    _, _, sample = fit
    draws = sample.draws
    far = gpd.GeoDataFrame(geometry=[shapely.box(5000, 0, 5150, 120)])
    found = predict_unsurveyed(far, sample.setup, draws, np.random.default_rng(5))
    intensity = (draws.parent_intensity * draws.mean_offspring).ravel() * 150 * 120
    count = intensity.size
    # the spread of one prediction over the root of their number, and one part in a thousand for quadrature
    spread = (found["points_high"] - found["points_low"]).iloc[0] / 3.92
    assert found["points_mean"].iloc[0] == pytest.approx(
        intensity.mean(), abs=3.5 * spread / np.sqrt(count) + 1e-3 * intensity.mean()
    )


def test_margin_of_a_heavy_tail_does_not_matter():
    """Centres beyond eight scales counted by their mean, or sampled up to twenty-five: the same posterior.

    Differences of means within 3.5 standard errors from the effective sample sizes.
    """

    class Wider(Cauchy):
        margin_in_scales = 25.0

    pattern, near = fitted("cauchy")
    far = sample_posterior(
        pattern.points, PLOT, Wider(**TRUTHS["cauchy"].parameters), default_priors(len(pattern.points), PLOT),
        enough=100.0, rng=np.random.default_rng(24),
    )  # fmt: skip
    assert far.setup.margin > 2.5 * near.setup.margin
    for name in ("parent_intensity", "scale", "mean_offspring", "number_inside"):
        a, b = (np.log(getattr(s.draws, name)) for s in (near, far))
        error = np.sqrt(a.var() / 150.0 + b.var() / 100.0)
        assert abs(a.mean() - b.mean()) < 3.5 * error, name
    # fewer points have a centre beyond the wider margin
    assert (far.draws.owner < 0).mean() < 0.9 * (near.draws.owner < 0).mean()
