"""When the data cannot tell: the reasons, one sentence each."""

from __future__ import annotations

from geoclust.models.base import ClusterModel

# fewer points than this carry no answer about clusters (common practice)
FEWEST_POINTS = 20
# fewer clusters than about ten in the study area give no usable spread of sizes and distances
FEWEST_CLUSTERS = 10.0
# an interval whose ends differ by more than this factor is no answer
WIDEST_INTERVAL = 20.0
# chance of a false alarm of the test for clustering
TEST_LEVEL = 0.05

REASONS: dict[str, str] = {
    "too-few-points": (
        "The survey holds {n} points; at least {fewest} are needed before anything can be said "
        "about clusters."
    ),
    "no-clustering": (
        "The points are not more clustered than chance alone would make them (p = {p_value:.2g} over "
        "distances up to {r_max:.4g} m), so there are no clusters to measure."
    ),
    "on-bound": (
        "The best value of {names} lies at the limit of the search ({bounds}), so the data do not fix it."
    ),
    "one-level": (
        "One level of clusters describes the points as well as two (p = {p_value:.2g} for the second level), "
        "so there is no nesting to measure; fit the Thomas process (model thomas)."
    ),
    "sigma-beyond-range": (
        "The fitted spread of a cluster ({scale:.4g} m) is more than half of the largest distance studied "
        "({r_max:.4g} m); the study area is too small to see whole clusters, or the density drifts across it."
    ),
    "few-clusters": (
        "Only about {clusters:.1f} clusters fall into the study area; fewer than {fewest:.0f} cannot tell "
        "how clusters differ from each other."
    ),
    "flat-valley": (
        "Very different values of the {names} fit almost equally well: the 95 % interval reaches from "
        "{low:.3g} to {high:.3g} {unit}."
    ),
    "not-converged": (
        "The chains of the sampler still disagree after all rounds (R-hat {r_hat:.3g}, effective sample size "
        "{size:.0f}), so their draws are no answer; another seed or more chains may help."
    ),
}


def moment_verdict(
    model: ClusterModel,
    area: float,
    *,
    r_max: float,
    on_bound: tuple[str, ...],
    bounds: dict[str, tuple[float, float]],
    p_value: float,
    intervals: dict[str, tuple[float, float]],
) -> tuple[str, str]:
    """Status and sentence of a fit by moments, the gravest reason first.

    Parameters
    ----------
    model
        The fitted model.
    area
        Of the study area, m².
    r_max
        Largest distance used, metres.
    on_bound, bounds
        Names of the parameters that ended on a limit of the search, and the limits of each.
    p_value
        Of the one-sided test for clustering.
    intervals
        95 % interval of each parameter; may be empty.
    """
    if p_value > TEST_LEVEL:
        return named("no-clustering", p_value=p_value, r_max=r_max)
    if model.spread > 0.5 * r_max:
        return named("sigma-beyond-range", scale=model.spread, r_max=r_max)
    if on_bound:
        name = on_bound[0]
        described = next(p for p in model.described if p.name == name)
        unit = "" if described.unit == "1" else described.unit
        factor, unit = (1e4, "ha⁻¹") if described.per_area else (1.0, unit)
        low, high = bounds[name]
        return named("on-bound", names=name.replace("_", " "),
                     bounds=f"{low * factor:.3g} to {high * factor:.3g} {unit}".rstrip())  # fmt: skip
    clusters = model.parameters[model.intensity_names[0]] * area
    if clusters < FEWEST_CLUSTERS:
        return named("few-clusters", clusters=clusters, fewest=FEWEST_CLUSTERS)
    return flat_valley(model, intervals)


def named(status: str, **figures: object) -> tuple[str, str]:
    """A status with its sentence."""
    return status, sentence(status, **figures)


def flat_valley(model: ClusterModel, intervals: dict[str, tuple[float, float]]) -> tuple[str, str]:
    """Status and sentence if an interval is too wide to be an answer; otherwise ``ok``."""
    for p in model.described:
        low, high = intervals.get(p.name, (1.0, 1.0))
        # the ends of a shape that may be negative have no ratio
        if p.above == 0 and high > WIDEST_INTERVAL * low:
            factor, unit = (1e4, "ha⁻¹") if p.per_area else (1.0, "" if p.unit == "1" else p.unit)
            figures = {"names": p.meaning, "low": low * factor, "high": high * factor, "unit": unit}
            return "flat-valley", sentence("flat-valley", **figures)
    return "ok", ""


def sentence(status: str, **figures: object) -> str:
    """The sentence of a status with its figures filled in; empty for ``ok``."""
    return "" if status == "ok" else REASONS[status].format(**figures)
