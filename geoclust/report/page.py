"""The page for people: one self-contained HTML file, from which no request leaves."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup, escape

from geoclust.errors import OutputError
from geoclust.fitting.contrast import LevelSurface
from geoclust.fitting.pair_likelihoods import LikelihoodSurface
from geoclust.layers.audit import area_text
from geoclust.report import answer, canvas, effects, figures, fit_check, maps, method, tables, words

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from geoclust.area.survey import Survey
    from geoclust.centres.result import CentreMap
    from geoclust.curves.envelopes import EnvelopeTest
    from geoclust.fitting.assessment import Assessment
    from geoclust.fitting.result import ClusterFit
    from geoclust.intensity.loglinear import LogLinearIntensity
    from geoclust.layers.audit import Audit


@dataclass(frozen=True)
class Picture:
    """A figure of the page with its text."""

    number: int
    uri: str
    width: int
    height: int
    alt: str
    caption: str


class _Pictures:
    """Numbers figures in the order in which they are added."""

    def __init__(self) -> None:
        self._count = 0

    def take(self, figure: Figure, alt: str, caption: str) -> Picture:
        self._count += 1
        # css pixels, 96 an inch
        width, height = (round(96 * float(side)) for side in figure.get_size_inches())
        return Picture(self._count, canvas.data_uri(figure), width, height, alt, caption)


def write_page(
    path: str | Path,
    *,
    survey: Survey,
    audit: Audit | None,
    envelopes: Mapping[str, EnvelopeTest] | None,
    fit: ClusterFit | None,
    status: str,
    reason: str,
    centres: CentreMap | None,
    choices: Mapping[str, object],
    versions: Mapping[str, str],
    command: str | None,
    title: str,
    files: Sequence[tuple[str, str]],
    terrain: tuple[LogLinearIntensity, Mapping[str, EnvelopeTest]] | None = None,
    notes: Sequence[str] = (),
    assessment: Assessment | None = None,
) -> None:
    """Write the page.

    Parameters
    ----------
    path
        File to write.
    survey, audit
        Points and study area, and what was found when they were read.
    envelopes
        Tests of complete randomness, by name of the curve.
    fit, centres
        What was fitted and located; None where there is nothing.
    status, reason
        ``ok``, or why the data cannot tell, and the sentence.
    choices, versions, command
        How the results came about.
    title
        Heading of the page.
    files
        Name and meaning of each file in the folder.
    terrain
        Intensity on covariates, and the tests beyond it.
    notes
        Sentences that a reader must know before using the results.
    assessment
        Whether the fitted model reproduces the survey.

    Raises
    ------
    OutputError
        If the file cannot be written.
    """
    ok = status == "ok" and fit is not None
    shown = centres if ok else None
    pictures = _Pictures()
    taken = method.steps(fit, shown is not None, terrain is not None)
    unused = [] if shown is not None else ["clusters"]
    told = answer.compose(
        survey=survey, envelopes=envelopes, fit=fit, status=status, reason=reason, centres=shown
    )
    if assessment is not None:
        taken.append(fit_check.STEP)
        told.sentences.append((fit_check.QUESTION, assessment.sentence()))
    text = _environment().get_template("page.html").render(
        title=title,
        ok=ok,
        answer=told,
        facts=_facts(survey, audit),
        maps=_maps(pictures, survey, shown),
        charts=_charts(pictures, envelopes, fit, ok, shown, terrain) + _checked(pictures, assessment),
        effects=None if terrain is None else effects.effect_table(terrain[0]),
        beyond=None if terrain is None else effects.reading(terrain[1]),
        uncovered=[] if terrain is None else terrain[0].notes(),
        parameters=tables.parameter_table(fit, survey, shown) if fit is not None else None,
        zones=_polygon_table(shown, "zones", "zone"),
        unsurveyed=_polygon_table(shown, "unsurveyed", "part"),
        diagnostics=_diagnostics(envelopes, fit, shown)
        + ([] if assessment is None else fit_check.rows(assessment)),
        choices=tables.choice_rows(choices),
        fit_choices=tables.choice_rows(fit.choices) if fit is not None else [],
        steps=taken,
        references=method.references(taken),
        audit=_audit_groups(audit),
        notes=notes,
        warnings=audit.warnings if audit is not None else [],
        files=files,
        contents=tables.contents(files, unused),
        digests=tables.digest_rows(audit) if audit is not None else [],
        versions=versions,
        command=command,
    )  # fmt: skip
    try:
        Path(path).write_text(text, encoding="utf-8")
    except OSError as error:
        raise OutputError(f"{path} cannot be written: {error.strerror}.") from error


def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("geoclust.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["strong"] = strong
    environment.filters["raised"] = raised
    return environment


def strong(text: str) -> Markup:
    """Escape a text and turn **what stands between asterisks** into bold type.

    Examples
    --------
    >>> str(strong("**5** < 6"))
    '<strong>5</strong> &lt; 6'
    """
    # safe: escaped before the only mark-up is put in
    kept = re.sub(r"(?<=\d) (?=(?:%|m\b|ha\b))", "\u00a0", str(escape(text)))
    return Markup(re.sub(r"\*\*(.+?)\*\*", r"<strong>\1</strong>", kept))


def raised(text: str) -> Markup:
    """Escape a formula and set what follows a circumflex high.

    Examples
    --------
    >>> str(raised("r^q < 1"))
    'r<sup>q</sup> &lt; 1'
    """
    return Markup(re.sub(r"\^(\w)", r"<sup>\1</sup>", str(escape(text))))


def _facts(survey: Survey, audit: Audit | None) -> list[str]:
    area = survey.area
    parts = len(area.polygon.geoms)
    holes = sum(len(p.interiors) for p in area.polygon.geoms)
    shape = [words.plural(parts, "part")] if parts > 1 else []
    shape += [words.plural(holes, "hole")] if holes else []
    facts = [
        words.plural(survey.n, "mapped point"),
        f"{area_text(area.area)} study area" + (f" ({words.listed(shape)})" if shape else ""),
        f"{words.number(words.per_hectare(survey.intensity))} points per hectare",
    ]
    return [*facts, f"measured in {audit.metric_crs}"] if audit is not None else facts


def _maps(pictures: _Pictures, survey: Survey, centres: CentreMap | None) -> list[Picture]:
    """The map that answers the question first, the survey itself second."""
    found = []
    if centres is not None:
        mean = centres.interval_inside()[0]
        found.append(
            pictures.take(
                maps.centre_map(centres, survey),
                f"Map of expected cluster centres per hectare; about {mean:.0f} centres in all.",
                "Where the centres are: the darker a cell, the more cluster centres per hectare are expected "
                "in it; on "
                "pale ground there is hardly one.",
            )
        )
        found.append(
            pictures.take(
                maps.clusters_map(centres, survey),
                f"Map of {len(centres.clusters):,} outlined clusters with their centres and points.",
                "Which points belong together: each shape is one cluster, a cross its centre; golden points "
                "might as "
                "well belong to a neighbouring one, hollow ones to none.",
            )
        )
    shown = {} if centres is None else {"zones": centres.zones, "unsurveyed": centres.unsurveyed}
    width = maps.WIDE if centres is None else maps.NARROW
    found.append(
        pictures.take(
            maps.survey_map(survey, width=width, **shown),
            f"Map of the study area with {survey.n:,} mapped points.",
            "The survey: every dot is a mapped point; white ground inside the outline was not part of the "
            "study area.",
        )
    )
    if centres is not None:
        found.append(
            pictures.take(
                maps.probability_map(centres, survey, width=width),
                "Map of the probability that a cell holds at least one cluster centre.",
                "How likely a centre is: the probability that the cell holds at least one cluster centre, "
                "which depends "
                "on the size of the cells.",
            )
        )
    return found


def _surface_words(fit: ClusterFit, ok: bool) -> tuple[str, str]:
    """Alternative text and reading of the surface of a fit."""
    reading = "How well the data fix the answer: the golden dot is " + (
        "the estimate" if ok else "where the search ended"
    )
    valley = (
        ", and a long dark valley means that few wide and many narrow clusters cannot be told apart by it"
    )
    if isinstance(fit.surface, LikelihoodSurface):
        if fit.surface.level is not None:
            reading += (
                ", the small dots are the estimates of the bootstrap; the bold line goes round the places "
                "that fit the pairs of points nearly as well: 95 % of the bootstrap's estimates lose no more "
                "than "
                f"{fit.surface.level:.3g} in log-likelihood; the thin lines tell larger losses"
            )
        else:
            reading += "; the lines tell what other places lose in log-likelihood"
        alt = "Contour plot of the loss of likelihood over cluster centres per hectare and size of a cluster."
        return alt, reading + valley
    if isinstance(fit.surface, LevelSurface):
        reading += (
            ", any other place inside the bold line fits the curve nearly as well (contrast up to 1.25 times "
            "the least); for each pair of sizes the numbers of groups and of small clusters are those that "
            "fit best"
        )
        return "Contour plot of the contrast over the size of groups and the size of small clusters.", reading
    reading += (
        ", any other place inside the bold line fits the curve nearly as well (contrast up to 1.25 times the "
        "least)" + valley
    )
    if fit.sample is not None:
        reading += "; the small dots are draws from the posterior, which uses more than the curve"
    return "Contour plot of the contrast over cluster centres per hectare and size of a cluster.", reading


def _charts(
    pictures: _Pictures,
    envelopes: Mapping[str, EnvelopeTest] | None,
    fit: ClusterFit | None,
    ok: bool,
    centres: CentreMap | None,
    terrain: tuple[LogLinearIntensity, Mapping[str, EnvelopeTest]] | None = None,
) -> list[Picture]:
    found = []
    readings = {
        "L": "Neighbours within a distance: where the line of the survey runs above the grey band, points "
        "have more "
        "neighbours within that distance than chance gives.",
        "g": "Pairs at a distance: 2 means that pairs at this distance are twice as frequent as by chance; "
        "where the "
        "line falls back to the band, clusters end.",
    }
    for name, test in (envelopes or {}).items():
        if name in readings:
            modelled = "; the golden broken line is the fitted model" if ok and terrain is None else ""
            reading = (
                readings[name].rstrip(".")
                + f"{modelled} ({test.level * 100:g} % of random patterns stay inside the band everywhere)."
            )
            alt = f"Curve {name} with its envelope of complete randomness, p = {test.p_value:.3g}."
            # the clusters of a fit beyond covariates are those of the weighted curve
            drawn = fit if ok and terrain is None else None
            found.append(pictures.take(figures.curve_figure(test, fit=drawn), alt, reading))
    if terrain is not None and "g" in terrain[1]:
        test = terrain[1]["g"]
        alt = f"Curve g weighted by the intensity, with its envelope, p = {test.p_value:.3g}."
        reading = (
            "Pairs beyond the covariates: as before, with every pair weighted by how many points the "
            "covariates let expect at its two places; above the band, points gather for other reasons."
        )
        found.append(pictures.take(figures.curve_figure(test, fit=fit if ok else None), alt, reading))
    if fit is not None:
        surface = figures.surface_figure(fit)
        if surface is not None:
            alt, reading = _surface_words(fit, ok)
            found.append(pictures.take(surface, alt, reading + "."))
    if centres is not None:
        mean, low, high = centres.interval_inside()
        found.append(
            pictures.take(
                figures.number_figure(centres),
                f"Histogram of the number of centres inside: mean {mean:.1f}, 95 % interval {low:.0f} to "
                f"{high:.0f}.",
                "How many centres: the higher a bar, the more probable is that number of cluster centres in "
                f"the study area{answer.given(fit) if fit is not None else ''}.",
            )
        )
        if centres.zones is not None and len(centres.zones) > 1:
            found.append(
                pictures.take(
                    figures.zones_figure(centres.zones, tables.zone_names(centres.zones)),
                    "Cluster centres per hectare in each zone with 95 % intervals; the table has the "
                    "numbers.",
                    "Zones compared: the dot is the expected number of cluster centres per hectare of the "
                    "zone, the "
                    "line its 95 % interval; zones whose lines overlap widely may not differ.",
                )
            )
    return found


def _checked(pictures: _Pictures, assessment: Assessment | None) -> list[Picture]:
    if assessment is None:
        return []
    return [pictures.take(fit_check.figure(assessment), *fit_check.texts(assessment))]


def _polygon_table(centres: CentreMap | None, which: str, heading: str) -> tables.Table | None:
    frame = None if centres is None else getattr(centres, which)
    return None if frame is None or len(frame) == 0 else tables.zone_table(frame, heading)


def _diagnostics(
    envelopes: Mapping[str, EnvelopeTest] | None, fit: ClusterFit | None, centres: CentreMap | None
) -> list[tuple[str, str]]:
    rows: list[tuple[str, str]] = []
    for name, test in (envelopes or {}).items():
        away = [
            f"{a:.3g} m ({side})" if a == b else f"{a:.3g} to {b:.3g} m ({side})"
            for a, b, side in test.departures()
        ]
        rows.append(
            (f"complete randomness by {name}", f"p = {words.probability(test.p_value)}; outside the "
                                               "envelope: "
             f"{words.listed(away) if away else 'nowhere'}")
        )  # fmt: skip
    if fit is not None:
        rows.append(("status of the fit", fit.status))
    if centres is not None:
        chains, draws = centres.number_inside.shape
        rows += [
            ("runs and draws kept of each", f"{chains:,} and {draws:,}"),
            ("R̂ (should be below 1.01)", f"{centres.r_hat:.4f}"),
            ("effective sample size (should be above 400)", f"{centres.effective_sample_size:,.0f}"),
            ("runs agree", "yes" if centres.converged else "no"),
            ("centres looked for outside the study area, up to", f"{words.number(centres.margin)} m"),
            (
                "cells of the raster",
                f"{centres.grid.cell[0]:g} by {centres.grid.cell[1]:g} "
                f"{centres.grid.crs.axis_info[0].unit_name if centres.grid.crs.axis_info else 'units'}",
            ),
        ]
    return rows


def _audit_groups(audit: Audit | None) -> list[tuple[str, list[str]]]:
    """The lines of the audit, each heading with the lines below it."""
    groups: list[tuple[str, list[str]]] = []
    for line in audit.lines() if audit is not None else []:
        if line.startswith(" ") and groups:
            groups[-1][1].append(line.strip())
        else:
            groups.append((line, []))
    return groups
