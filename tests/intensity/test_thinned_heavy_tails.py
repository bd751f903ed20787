"""Heavy-tailed clusters beyond terrain: shares of thinned offspring, and the posterior that uses them."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from test_thinned_clusters import AREA, UTM, gradient, truth

import geoclust as gc
from geoclust.fitting._table import share_at
from geoclust.fitting.posterior import default_priors, sample_posterior
from geoclust.fitting.shares import far_densities, share_table
from geoclust.intensity.loglinear import fit_intensity
from geoclust.models.cauchy import Cauchy
from geoclust.models.patterns import draw_pattern

OMEGA = 8.0
MODEL = Cauchy(parent_intensity=3e-4, omega=4.0, mean_offspring=7.0)


def places(step: float) -> np.ndarray:
    """Middles of squares over the study area."""
    across = np.arange(0, 800, step) + step / 2
    at = np.stack(np.meshgrid(across, across), axis=-1).reshape(-1, 2)
    return at[AREA.contains(at)]


def test_shares_are_those_of_the_thinned_offspring():
    """Against sums of the kernel times the relative intensity over the whole study area, tails included."""
    scales = (4.0, 16.0)
    table = share_table(Cauchy, AREA, 64.0, scales, intensity=truth())
    at = places(2.0)
    relative = truth().relative(at - AREA.origin)
    model = Cauchy(1.0, OMEGA, 1.0)
    for x, y in (
        (400.0, 600.0),
        (5.0, 120.0),
        (-40.0, 300.0),
        (302.0, 350.0),
        (795.0, 799.0),
        (850.0, 400.0),
    ):
        expected = 4.0 * np.sum(relative * model.offspring_density(np.hypot(*(at - [x, y]).T)))
        found = share_at(table, x - AREA.origin[0], y - AREA.origin[1], OMEGA)
        assert found == pytest.approx(expected, rel=0.03, abs=1e-3)


def test_what_comes_from_outside():
    """At each point one minus the sum of the kernel over the widened area; its integral with the thinning."""
    wide = AREA.dilated(60.0)
    points = np.array([[400.0, 250.0], [3.0, 3.0], [700.0, 790.0]])
    densities, shares = far_densities(AREA, wide, points - AREA.origin, (OMEGA, OMEGA), truth())
    model = Cauchy(1.0, OMEGA, 1.0)
    across = np.arange(-60, 860, 2.0) + 1.0
    at = np.stack(np.meshgrid(across, across), axis=-1).reshape(-1, 2)
    at = at[wide.contains(at)]
    near = np.array([4.0 * model.offspring_density(np.hypot(*(at - p).T)).sum() for p in points])
    assert densities.shape == (1, 3)
    assert densities[0] * wide.area == pytest.approx(1 - near, rel=0.02)
    # the integral over the study area from the same densities at a few hundred places
    some = places(40.0)
    there, _ = far_densities(AREA, wide, some - AREA.origin, (OMEGA, OMEGA))
    expected = np.mean(there[0] * truth().relative(some - AREA.origin)) * AREA.area
    assert shares[0, 0] == pytest.approx(expected, rel=0.05)
    constant = fit_intensity(gc.Survey(AREA.uniform_points(200, 2), AREA), clustered=False)
    plain = [far_densities(AREA, wide, some - AREA.origin, (4.0, 16.0), i)[1] for i in (None, constant)]
    assert np.allclose(plain[0], plain[1], rtol=1e-9)
    assert np.all(np.diff(plain[0][:, 0]) > 0)


def test_posterior_of_thinned_clusters():
    part = gc.StudyArea(shapely.box(0, 0, 400, 300), UTM)
    pattern = draw_pattern(MODEL, AREA, np.random.default_rng(8), truth())
    xy = pattern.points + AREA.origin
    survey = gc.Survey(xy[part.contains(xy)], part)
    intensity = fit_intensity(survey, [gradient()], clustered=False)
    draws = sample_posterior(
        survey.local_xy, part, MODEL, default_priors(survey.n, part), chains=2, enough=20.0, most_rounds=1,
        rng=np.random.default_rng(3), intensity=intensity,
    ).draws  # fmt: skip
    medians = [np.median(v) for v in (draws.parent_intensity, draws.scale, draws.mean_offspring)]
    # offspring are told relative to the mean intensity, which is higher in this part
    offspring = MODEL.mean_offspring * truth().at(part.uniform_points(20_000, 1)).mean() / truth().mean
    assert medians == pytest.approx([MODEL.parent_intensity, MODEL.omega, offspring], rel=0.4)
