"""Several plots at once: pooled sums, common parameters, groups compared."""

from __future__ import annotations

import numpy as np
import pytest
import shapely

from geoclust.area.plots import pool_surveys
from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.centres.locate import locate_centres
from geoclust.curves.second_order import k_function, pair_correlation
from geoclust.errors import UsageError
from geoclust.fitting.fit import fit_clusters
from geoclust.fitting.groups import compare_groups
from geoclust.models.patterns import draw_pattern
from geoclust.models.thomas import Thomas

SHAPES = (
    shapely.box(0, 0, 150, 150),
    shapely.Polygon([(0, 0), (180, 20), (150, 140), (60, 90), (10, 150)]),
    shapely.box(0, 0, 120, 190) - shapely.box(40, 40, 70, 70),
)


def plots(model: Thomas, count: int, seed: int) -> list[Survey]:
    """Plots in coordinates that all begin at zero, as plots in the field do."""
    out = []
    for k, rng in enumerate(np.random.default_rng(seed).spawn(count)):
        area = StudyArea(SHAPES[k % 3])
        out.append(Survey(draw_pattern(model, area, rng).points + area.origin, area))
    return out


@pytest.mark.parametrize("edge_weight", ["translation", "isotropic", "rigid-motion"])
def test_pooled_k_is_the_ratio_of_sums_over_plots(edge_weight):
    """Diggle, Lange & Beneš 1991: K of the plots, weighted.

    With n(n - 1) K / |W|² the sum of weighted pairs of one plot (translation), the pooled sum is that of
    the plots for weights that are sums too; for the other two it is the definition of the estimate.
    """
    surveys = plots(Thomas(3e-4, 5.0, 6.0), 5, 1)
    pooled = pool_surveys(surveys)
    radii = np.linspace(2.0, 30.0, 15)
    n, area = pooled.n, pooled.area.area
    assert n == sum(s.n for s in surveys)
    assert area == pytest.approx(sum(s.area.area for s in surveys), rel=1e-12)
    found = k_function(pooled, radii, edge_weight=edge_weight).values
    if edge_weight == "isotropic":
        # every pair is weighted by circles in its own plot, whatever lies beside it
        weighted = [s.n * (s.n - 1) * k_function(s, radii).values / s.area.area for s in surveys]
        expected = area / (n * (n - 1)) * np.sum(weighted, axis=0)
    else:
        expected = np.zeros(len(radii))
        for s in surveys:
            apart = s.xy[:, None, :] - s.xy[None, :, :]
            distance = np.hypot(*np.moveaxis(apart, 2, 0))
            i, j = np.nonzero((distance > 0) & (distance <= radii[-1]))
            if edge_weight == "translation":
                overlap = sum(other.area.set_covariance(apart[i, j]) for other in surveys)
            else:
                overlap = sum(other.area.isotropic_set_covariance(distance[i, j]) for other in surveys)
            expected += [(1.0 / overlap)[distance[i, j] <= r].sum() for r in radii]
        expected *= area**2 / (n * (n - 1))
    np.testing.assert_allclose(found, expected, rtol=2e-5)


def test_one_plot_pooled_is_itself():
    survey = plots(Thomas(3e-4, 5.0, 6.0), 2, 3)[1]
    radii = np.linspace(2.0, 30.0, 15)
    np.testing.assert_allclose(
        pair_correlation(pool_surveys([survey]), radii).values,
        pair_correlation(survey, radii).values,
        rtol=1e-9,
    )


def test_no_plot_reaches_another():
    surveys = plots(Thomas(3e-4, 5.0, 6.0), 7, 4)
    pooled = pool_surveys(surveys, names="abcdefg")
    parts = list(pooled.area.polygon.geoms)
    side = pooled.area.side
    apart = min(a.distance(b) for k, a in enumerate(parts) for b in parts[:k])
    # centres are looked for 4.5 scales beyond each boundary, scales up to a quarter of a side
    assert apart > 2 * 4.5 * 0.25 * side
    assert apart > max(s.area.diameter for s in surveys)
    assert list(pooled.attributes["plot"].value_counts().sort_index()) == [s.n for s in surveys]
    own = np.concatenate([s.xy for s in surveys])
    np.testing.assert_array_equal(pooled.attributes[["easting_m", "northing_m"]].to_numpy(), own)


def test_empty_plots_count():
    surveys = plots(Thomas(3e-4, 5.0, 6.0), 3, 5)
    nothing = Survey(np.empty((0, 2)), StudyArea(SHAPES[0]))
    assert pool_surveys([*surveys, nothing]).intensity < pool_surveys(surveys).intensity


def test_common_parameters_are_found_in_all_plots_together():
    """Twelve small plots: each alone says little, together the 95 % intervals hold the truth."""
    truth = Thomas(3e-4, 5.0, 6.0)
    surveys = plots(truth, 12, 6)
    fit = fit_clusters(pool_surveys(surveys), rng=1)
    assert fit.status == "ok"
    for name, (low, high) in fit.intervals.items():
        assert low < truth.parameters[name] < high, name
    # the range follows from one plot, not from all
    assert fit.choices["r_max_m"] <= 0.25 * pool_surveys(surveys).area.side + 1e-9
    centres = locate_centres(surveys[0], fit, cell=5.0, rng=2)
    number = draw_number(centres)
    assert 0.4 < number / (truth.parent_intensity * surveys[0].area.area) < 2.5
    with pytest.raises(UsageError, match="plot by plot"):
        locate_centres(pool_surveys(surveys), fit, rng=2)


def draw_number(centres) -> float:
    return float(centres.number_inside.mean())


def test_groups_differ_where_they_do():
    """Clusters twice as wide: the interval of the ratio of sigma holds one half, not one."""
    groups = {"grazed": plots(Thomas(3e-4, 4.0, 6.0), 9, 7), "mown": plots(Thomas(3e-4, 8.0, 6.0), 9, 8)}
    found = compare_groups(groups, method="minimum-contrast", bootstrap=99, rng=1)
    assert list(found.fits) == ["grazed", "mown"]
    row = found.differences.set_index("parameter").loc["sigma"]
    assert row["ratio_low"] < 0.5 < row["ratio_high"] < 1.0
    assert row["difference_low"] < -4.0 < row["difference_high"] < 0.0
    assert any(line.startswith("sigma, grazed over mown") for line in found.lines())


def test_what_cannot_be_pooled_is_refused():
    surveys = plots(Thomas(3e-4, 5.0, 6.0), 3, 9)
    with pytest.raises(UsageError, match="at least one"):
        pool_surveys([])
    with pytest.raises(UsageError, match="different names"):
        pool_surveys(surveys, names=["a", "b", "a"])
    with pytest.raises(UsageError, match="pooled already"):
        pool_surveys([pool_surveys(surveys), surveys[0]])
    with pytest.raises(UsageError, match="from plot to plot"):
        fit_clusters(pool_surveys(surveys), "cauchy", rng=1)
    with pytest.raises(UsageError, match="only one group"):
        compare_groups({"all": surveys}, rng=1)
