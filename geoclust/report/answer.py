"""The answer in plain sentences: what a manager reads first.

Sentences mark their figures with two asterisks on either side; the page turns
these into bold type.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from geoclust.layers.audit import area_text
from geoclust.report import words

if TYPE_CHECKING:
    from geoclust.area.survey import Survey
    from geoclust.centres.result import CentreMap
    from geoclust.curves.envelopes import EnvelopeTest
    from geoclust.fitting.result import ClusterFit

# below this, a test speaks against complete randomness
LEVEL = 0.05
# from this membership probability a point counts as surely in its cluster
SURE = 0.8

ADVICE: dict[str, tuple[str, ...]] = {
    "too-few-points": (
        "Map more ground of the same kind, or add an earlier survey of the same area, until there are some "
        "hundred points; twenty is the least with which an answer is tried.",
        "Check in the data audit below that no points were dropped by mistake, for instance outside the "
        "study area.",
    ),
    "no-clustering": (
        "If you expected clusters, check the data audit below: a study area drawn far wider than the ground "
        "that was searched, or coordinates rounded coarsely, can hide or feign them.",
        "If the clusters are larger than the distances studied here, a larger study area is needed to see "
        "them.",
    ),
    "on-bound": (
        "Look at the figure of the contrast: where it is low along a whole edge, the data do not choose.",
        "More points, or a larger study area, fix the values better. If the density plainly drifts across "
        "the "
        "area, analyse parts of it that are alike.",
    ),
    "one-level": (
        "Run it again with --model thomas: its clusters are what these points can tell.",
        "A second level shows only where there are some tens of large clusters, each with several small "
        "ones; if you expect that here, survey a larger area.",
    ),
    "sigma-beyond-range": (
        "Survey a larger area, several times as wide as the clusters that you expect.",
        "If the density drifts across the area, with the terrain for instance, analyse parts of it that are "
        "alike.",
    ),
    "few-clusters": (
        "Survey a larger area of the same kind: some tens of clusters are needed to say how large and how "
        "dense "
        "they are in general.",
        "Single clusters may well be plain to see on the map of the points; what cannot be told is the rule "
        "behind them.",
    ),
    "not-converged": (
        "Run it again with another seed (--seed); if that does not help either, the model does not suit the "
        "pattern.",
        "If the density plainly drifts across the area, analyse parts of it that are alike.",
    ),
    "flat-valley": (
        "Look at the figure of the contrast: every place in the long valley fits about equally well.",
        "More points, or a larger study area, narrow it down.",
    ),
}

_ANY_ADVICE = ("Look through the data audit below, and survey a larger area if you can.",)


@dataclass(frozen=True)
class Tile:
    """One key figure: what it is, the value, and how sure it is."""

    label: str
    value: str
    unit: str
    note: str


@dataclass(frozen=True)
class Answer:
    """What stands at the top of the page.

    Attributes
    ----------
    headline
        The answer in one line.
    sentences
        Question and answer, in plain words.
    tiles
        Key figures.
    advice
        What to do if the data cannot tell.
    caution
        What makes these results weaker than they look, if anything does.
    """

    headline: str
    sentences: list[tuple[str, str]]
    tiles: list[Tile] = field(default_factory=list)
    advice: tuple[str, ...] = ()
    caution: str = ""


def compose(
    *,
    survey: Survey,
    envelopes: Mapping[str, EnvelopeTest] | None,
    fit: ClusterFit | None,
    status: str,
    reason: str,
    centres: CentreMap | None,
) -> Answer:
    """Put the answer together from the results; parameters as for `geoclust.report.page.write_page`."""
    clustered = _clustered(survey, envelopes, fit)
    if status != "ok" or fit is None:
        found = [("Are the points clustered?", clustered)] if clustered else []
        return Answer(
            "The data cannot tell" if status != "no-clustering" else "No clusters were found",
            [*found, ("Why is there no map of clusters?", reason)],
            advice=ADVICE.get(status, _ANY_ADVICE),
        )
    sentences = [("Are the points clustered?", clustered), ("How large is a cluster?", _size(fit))]
    sentences.append(("How many clusters are there?", _count(survey, fit, centres)))
    caution = ""
    if centres is not None:
        sentences.append(("Where are they?", _where(centres)))
        sentences.append(("How sure is this?", _sure(centres) + _unexplained(envelopes, fit)))
        beyond = _unwalked(centres)
        if beyond:
            sentences.append(("What does the part hold that was not walked?", beyond))
        if not centres.converged:
            caution = _not_converged(centres)
    return Answer(_headline(fit, centres), sentences, _tiles(survey, fit, centres), caution=caution)


def radius_holding(fit: ClusterFit, share: float) -> tuple[float, tuple[float, float] | None]:
    """Radius round the centre that holds a share of a cluster, and its 95 % interval, in metres.

    For the Gaussian kernel these are 1.1774σ for one half and 2.4477σ for 95 %.
    """
    model = fit.model
    radius = model.reach(1.0 - share)
    limits = fit.intervals.get(model.scale_name)
    if limits is None:
        return radius, None
    if any(p.above for p in model.described):
        # lengths hang on a shape as well: the radius of each draw; a fit read from a file has none
        if not fit.draws:
            return radius, None
        rows = zip(*(fit.draws[p.name] for p in model.described), strict=True)
        radii = [type(model)(*row).reach(1.0 - share) for row in rows]
        return radius, (float(np.quantile(radii, 0.025)), float(np.quantile(radii, 0.975)))
    # all lengths of a kernel grow in proportion to its scale
    per_scale = radius / fit.parameters[model.scale_name]
    return radius, (per_scale * limits[0], per_scale * limits[1])


def _headline(fit: ClusterFit, centres: CentreMap | None) -> str:
    half = words.number(radius_holding(fit, 0.5)[0], 2)
    if centres is None:
        return f"Clusters, half of each within {half} m of its centre"
    mean = centres.interval_inside()[0]
    return f"About {mean:,.0f} clusters, half of each within {half} m of its centre"


def _clustered(survey: Survey, envelopes: Mapping[str, EnvelopeTest] | None, fit: ClusterFit | None) -> str:
    if not envelopes or "L" not in envelopes:
        return ""
    test = envelopes["L"]
    drawn = f"{test.simulations:,} random patterns in the same study area"
    how = f"p = **{words.probability(test.p_value)}**, {drawn}"
    upper = [d for d in test.departures() if d[2] == "above"]
    lower = [d for d in test.departures() if d[2] == "below"]
    who = f"The {survey.n:,} points"
    if test.p_value > LEVEL:
        own = None if fit is None else fit.choices.get("clustering_p_value")
        if isinstance(own, float) and own <= LEVEL:
            reach = fit.choices["r_max_m"] if fit is not None else 0.0
            return (
                f"**Yes, at short distances.** Up to {words.number(float(str(reach)), 2)} m, {who.lower()} "
                "have more "
                f"neighbours than chance alone would give them (p = **{words.probability(own)}**); over all "
                "distances "
                f"studied the difference is not clear ({how})."
            )
        return (
            f"**Not beyond chance.** {who} lie as points thrown at random over the study area would ({how})."
        )
    if lower and not upper:
        return (
            f"**No, they keep apart.** {who} are spread more evenly than chance alone would place them, most "
            "clearly "
            f"at distances of {_ranges(lower)} ({how})."
        )
    near = [d for d in envelopes["g"].departures() if d[2] == "above"] if "g" in envelopes else upper
    ranges = near or upper
    where = f", most clearly pairs {_ranges(ranges[:1])} apart" if ranges else ""
    return f"**Yes.** {who} lie closer together than chance alone would place them{where} ({how})."


def _ranges(found: list[tuple[float, float, str]]) -> str:
    """Distances at which a curve leaves its envelope."""
    texts = [
        f"{words.distance(high)} m" if low == high else f"{words.distance(low)} to {words.distance(high)} m"
        for low, high, _ in found[:3]
    ]
    return words.listed(texts)


def _size(fit: ClusterFit) -> str:
    half, half_limits = radius_holding(fit, 0.5)
    most, most_limits = radius_holding(fit, 0.95)
    model = fit.model
    scale = fit.parameters[model.scale_name]
    limits = fit.intervals.get(model.scale_name)
    of_points = fit.parameters["mean_offspring"]
    count_limits = fit.intervals.get("mean_offspring")
    groups = _groups(fit)
    return (
        f"{groups}Half of a {'small ' if groups else ''}cluster's points lie within "
        f"**{words.number(half)} m** of its centre{_clause(half_limits, 'm')} and "
        f"95 % within **{words.number(most)} m**{_clause(most_limits, 'm')}; the spread behind this, "
        f"{model.scale_name.replace('_', ' ')}, is {words.number(scale)} m{_clause(limits, 'm')}. A "
        f"{'small ' if groups else ''}cluster holds "
        f"**{words.number(of_points, 2)}** points on average{_clause(count_limits, '')}."
    )


def _groups(fit: ClusterFit) -> str:
    """What is to be said of the outer level of a nested process first."""
    if len(fit.model.intensity_names) == 1:
        return ""
    outer, inner = (fit.parameters[name] for name in fit.model.intensity_names)
    limits = fit.intervals.get("outer_sigma")
    return (
        f"Small clusters lie in groups: a group holds **{words.number(inner / outer, 2)}** of them on "
        f"average, scattered round its centre with a standard deviation of "
        f"**{words.number(fit.parameters['outer_sigma'])} m** per axis{_clause(limits, 'm')}. "
    )


def _clause(limits: tuple[float, float] | None, unit: str) -> str:
    return f" ({words.interval(*limits)} {unit}".rstrip() + ")" if limits is not None else ""


def _count(survey: Survey, fit: ClusterFit, centres: CentreMap | None) -> str:
    named = zip(fit.model.intensity_names, _levels(fit), strict=True)
    found = ["{0} {2} per hectare{1}".format(*_per_hectare(fit, name), what) for name, what in named]
    text = f"There are {words.listed(found)}"
    extent = area_text(survey.area.area)
    if centres is None:
        return f"{text} in the study area of {extent}."
    mean, low, high = centres.interval_inside()
    return (
        f"{text}. In the study area of {extent} that makes **{words.whole(mean)}** centres "
        f"(95 % interval {words.counts_between(low, high)}{given(fit)})."
    )


def _levels(fit: ClusterFit) -> tuple[str, ...]:
    """What the centres of each level are called, outermost first."""
    several = len(fit.model.intensity_names) > 1
    return ("groups of clusters", "small clusters") if several else ("cluster centres",)


def _per_hectare(fit: ClusterFit, name: str) -> tuple[str, str]:
    """An intensity as bold text, and the clause of its interval."""
    limits = fit.intervals.get(name)
    shown = None if limits is None else (words.per_hectare(limits[0]), words.per_hectare(limits[1]))
    return f"**{words.number(words.per_hectare(fit.parameters[name]))}**", _clause(shown, "")


def given(fit: ClusterFit) -> str:
    """The condition under which numbers of centres hold, as a clause: none if parameters were sampled with "
    "them."""
    return "" if fit.sample is not None else ", if size and density of clusters are as fitted"


def _where(centres: CentreMap) -> str:
    share = share_holding_half(centres)
    text = (
        "The map of centres shows it: the darker the ground, the more centres are expected there. "
        f"Half of all centres lie on the darkest **{words.share(share)}** of the study area"
    )
    clusters = centres.clusters
    if len(clusters) == 0:
        return f"{text}."
    largest = clusters.loc[clusters["points"].idxmax()]
    text = (
        f"{text}. **{words.plural(len(clusters), 'group')}** of points could be outlined as clusters; the "
        "largest, "
        f"number {int(largest['cluster'])}, has {int(largest['points']):,} points"
    )
    if len(clusters) > centres.interval_inside()[2]:
        text += (
            ". These are more than there are centres, because points that may belong to either of two "
            "neighbours are "
            "outlined apart"
        )
    return f"{text}."


def share_holding_half(centres: CentreMap) -> float:
    """Smallest share of the study area that holds half of the expected centres, by whole cells."""
    inside = np.isfinite(centres.mean) & (centres.cell_areas > 0)
    density, size = centres.mean[inside], centres.cell_areas[inside]
    order = np.argsort(-density, kind="stable")
    held = np.cumsum((density * size)[order])
    if len(held) == 0 or held[-1] <= 0:
        return 1.0
    cells = int(np.searchsorted(held, 0.5 * held[-1])) + 1
    return float(size[order][:cells].sum() / size.sum())


def _sure(centres: CentreMap) -> str:
    probability = centres.points["membership_probability"].to_numpy(dtype=float, na_value=np.nan)
    member = centres.points["cluster"].to_numpy() > 0
    with np.errstate(invalid="ignore"):
        sure = int((member & (probability >= SURE)).sum())
    alone = int((~member).sum())
    chains, draws = np.atleast_2d(centres.number_inside).shape
    agree = "agree" if centres.converged else "do **not** agree yet"
    none = f", and {words.plural(alone, 'point belongs', 'points belong')} to none" if alone else ""
    return (
        f"**{sure:,} of {len(member):,}** points belong to their cluster with a probability of {SURE:g} or "
        f"more{none}. "
        f"The {chains} independent runs of {draws:,} draws that this rests on {agree} (R̂ "
        f"{centres.r_hat:.3f}, effective "
        f"sample size {centres.effective_sample_size:,.0f})."
    )


def _unexplained(envelopes: Mapping[str, EnvelopeTest] | None, fit: ClusterFit) -> str:
    """Say where pairs are more frequent than both chance and the fitted clusters make them."""
    left = more_than_fitted((envelopes or {}).get("g"), fit)
    if left is None:
        return ""
    return (
        f" Between {words.distance(left[0])} and {words.distance(left[1])} m points still have more "
        "neighbours than the fitted "
        "clusters give "
        "them: clusters lie in groups, or the terrain draws them together, which this model leaves out."
    )


def more_than_fitted(test: EnvelopeTest | None, fit: ClusterFit) -> tuple[float, float] | None:
    """The first stretch of distances where g leaves its envelope upwards and the fitted model does not.

    Stretches of fewer than three radii do not count.
    """
    if test is None or test.curve.upper is None:
        return None
    curve, upper = test.curve, test.curve.upper
    with np.errstate(invalid="ignore"):
        left = (curve.values > upper) & (fit.model.pair_correlation(curve.radii) < upper)
    start = 0
    for k in range(len(left) + 1):
        if k == len(left) or not left[k]:
            if k - start >= 3:
                return float(curve.radii[start]), float(curve.radii[k - 1])
            start = k + 1
    return None


def _not_converged(centres: CentreMap) -> str:
    return (
        f"The independent runs behind the map do not agree yet (R̂ {centres.r_hat:.3f}, should be below "
        "1.01; effective "
        f"sample size {centres.effective_sample_size:,.0f}, should be above 400). Take numbers and places of "
        "centres as "
        "rough; the size of a cluster and the number per hectare come from the fit and do not depend on this."
    )


def _unwalked(centres: CentreMap) -> str:
    parts = centres.unsurveyed
    if parts is None or len(parts) == 0:
        return ""
    hectares = float(parts["area_ha"].sum())
    points, number = float(parts["points_mean"].sum()), float(parts["centres_mean"].sum())
    if len(parts) == 1:
        row = parts.iloc[0]
        some = f" (95 % interval {words.counts_between(row['points_low'], row['points_high'])})"
        others = f" (95 % interval {words.counts_between(row['centres_low'], row['centres_high'])})"
        return (
            f"Its {words.number(hectares)} ha probably hold **{words.whole(points)}** points{some} and "
            f"**{words.whole(number)}** cluster centres{others}, if the ground there is like the ground that "
            "was walked."
        )
    return (
        f"The {len(parts):,} parts, {words.number(hectares)} ha together, probably hold "
        f"**{words.whole(points)}** points "
        f"and **{words.whole(number)}** cluster centres, if the ground there is like the ground that was "
        "walked; the "
        "table below gives each with its interval."
    )


def _tiles(survey: Survey, fit: ClusterFit, centres: CentreMap | None) -> list[Tile]:
    def note(limits: tuple[float, float] | None, factor: float = 1.0) -> str:
        return "no interval" if limits is None else f"{words.between(factor * limits[0], factor * limits[1])}"

    half, half_limits = radius_holding(fit, 0.5)
    intensities = [
        Tile(f"{what[0].upper()}{what[1:]} per hectare",
             words.number(words.per_hectare(fit.parameters[name])), "ha⁻¹",
             note(fit.intervals.get(name), words.HECTARE))
        for name, what in zip(fit.model.intensity_names, _levels(fit), strict=True)
    ]  # fmt: skip
    tiles = [
        *intensities,
        Tile("Half of a cluster lies within", words.number(half), "m", note(half_limits)),
        Tile("Points per cluster, mean", words.number(fit.parameters["mean_offspring"], 2), "",
             note(fit.intervals.get("mean_offspring"))),
    ]  # fmt: skip
    if centres is not None:
        mean, low, high = centres.interval_inside()
        inside = Tile("Centres in the study area", words.whole(mean), "", words.counts_between(low, high))
        tiles.insert(0, inside)
    return tiles
