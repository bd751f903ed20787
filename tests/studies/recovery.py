"""Do fits find the parameters that surveys were simulated with?

Surveys of a Thomas process in the sample reserve (rho = 1 per hectare, sigma =
15 m, mu = 6) are fitted by minimum contrast on g and on K with the default
choices, some of them with a bootstrap interval, and by Palm and composite likelihood.
Run it again to go on where it stopped:

    python tests/studies/recovery.py --surveys 100 --with-interval 40 --bootstrap 59
"""

from __future__ import annotations

import argparse
import sys

import numpy as np
import pandas as pd
from tables import HERE, machine, run_missing, shares_within

sys.path.insert(0, str(HERE.parent))
from known_areas import sample_reserve

import geoclust as gc
from geoclust.fitting.likelihood_fits import FORMS, fit_pairs
from geoclust.fitting.moments import ContrastChoices, fit_points
from geoclust.models.patterns import draw_pattern

TRUTH = gc.Thomas(parent_intensity=1e-4, sigma=15.0, mean_offspring=6.0)


def survey_of(number: int, area: gc.StudyArea) -> tuple[gc.Survey, np.random.Generator]:
    """The survey of a number, the same for both functions, and random numbers for its fit."""
    drawn, fitted = np.random.default_rng([1994, number]).spawn(2)
    return gc.Survey(draw_pattern(TRUTH, area, drawn).points + area.origin, area), fitted


def estimates(number: int, area: gc.StudyArea, function: str) -> dict[str, float]:
    """Simulate, fit on a curve or by a likelihood of pairs, and tell what came out."""
    survey, _ = survey_of(number, area)
    if function in FORMS:
        fit = fit_pairs(gc.Thomas, function, survey.local_xy, area, ContrastChoices())
        found_on_bound = int(bool(fit.on_bound))
        row: dict[str, float] = {"points": survey.n, "r_max_m": fit.likelihood.r_max}
        return {**row, "on_bound": found_on_bound, **fit.model.parameters}
    found = fit_points(gc.Thomas, survey.local_xy, area, ContrastChoices(function))
    on_bound = int(bool(found.fit.on_bound))
    return {"points": survey.n, "r_max_m": found.r_max, "on_bound": on_bound, **found.fit.model.parameters}


def intervals(number: int, area: gc.StudyArea, function: str, bootstrap: int) -> dict[str, float]:
    """Bootstrap intervals and verdict of the same survey."""
    survey, seed = survey_of(number, area)
    fit = gc.fit_clusters(survey, method="minimum-contrast", function=function, bootstrap=bootstrap, rng=seed)
    row: dict[str, float] = {"ok": int(fit.ok)}
    for name in TRUTH.parameters:
        row[f"{name}_low"], row[f"{name}_high"] = fit.intervals[name]
    return row


def summary(table: pd.DataFrame, covered: pd.DataFrame | None, function: str, bootstrap: int) -> list[str]:
    """Lines of the results page for one function or likelihood."""
    heading = function.capitalize().replace("-", " ") if function in FORMS else f"Contrast on {function}"
    lines = [
        f"## {heading}, {len(table)} surveys, {int(table['on_bound'].sum())} on a bound",
        "",
        "| parameter | truth | median | median / truth | middle 90 % | rms of log(estimate / truth) |",
        "|---|---|---|---|---|---|",
    ]
    for name, truth in TRUTH.parameters.items():
        factor, unit = (
            (1e4, " ha⁻¹") if name == "parent_intensity" else (1.0, " m" if name == "sigma" else "")
        )
        low, median, high = np.quantile(table[name], [0.05, 0.5, 0.95]) * factor
        spread = np.sqrt(np.mean(np.log(table[name] / truth) ** 2))
        lines.append(
            f"| {name} | {truth * factor:g}{unit} | {median:.3f} | {median / truth / factor:.3f} "
            f"| {low:.3f} to {high:.3f} | {spread:.3f} |"
        )
    if covered is None:
        return [*lines, ""]
    lines += [
        "",
        f"95 % bootstrap interval ({bootstrap} patterns) of {len(covered)} of these surveys, "
        f"{int(covered['ok'].sum())} of them with status ok:",
        "",
        "| parameter | covers the truth | median of high / low |",
        "|---|---|---|",
    ]
    for name, truth in TRUTH.parameters.items():
        low, high = covered[f"{name}_low"], covered[f"{name}_high"]
        inside = int(((low <= truth) & (truth <= high)).sum())
        lines.append(f"| {name} | {shares_within(inside, len(covered))} | {np.median(high / low):.2f} |")
    return [*lines, ""]


def comparison(tables: dict[str, pd.DataFrame]) -> list[str]:
    """Errors of all ways of fitting over the same surveys, in units of those of the contrast on g."""
    names = list(TRUTH.parameters)
    common = set.intersection(*(set(t["survey"]) for t in tables.values()))
    lines = [
        f"## Compared over the same {len(common)} surveys",
        "",
        "Root mean square of log(estimate / truth), and in units of that of the contrast on g:",
        "",
        "| fit | " + " | ".join(names) + " |",
        "|---|" + "---|" * len(names),
    ]
    errors = {}
    for function, table in tables.items():
        kept = table[table["survey"].isin(common)]
        errors[function] = [
            float(np.sqrt(np.mean(np.log(kept[n] / t) ** 2))) for n, t in TRUTH.parameters.items()
        ]
        cells = [f"{e:.3f} ({e / g:.2f})" for e, g in zip(errors[function], errors["g"], strict=True)]
        lines.append(f"| {function} | " + " | ".join(cells) + " |")
    return [*lines, ""]


def main() -> None:
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--surveys", type=int, default=100)
    options.add_argument("--with-interval", type=int, default=40)
    options.add_argument("--bootstrap", type=int, default=59)
    given = options.parse_args()
    area = gc.StudyArea(sample_reserve())
    folder = HERE / "results"
    page = ["# Recovery of known parameters", "", machine(), ""]
    page += [
        "Thomas process in the sample reserve, rho = 1 ha⁻¹, sigma = 15 m, mu = 6; all fits with",
        "the default choices (`tests/studies/recovery.py`).",
        "",
    ]
    tables = {}
    for function in ("g", "K", *FORMS):
        table = run_missing(
            folder / f"recovery_{function}.csv", range(given.surveys),
            lambda k, f=function: estimates(k, area, f), f"recovery on {function}",
        )  # fmt: skip
        tables[function] = table
        covered = None
        if function not in FORMS:
            covered = run_missing(
                folder / f"recovery_interval_{function}.csv", range(given.with_interval),
                lambda k, f=function: intervals(k, area, f, given.bootstrap), f"interval on {function}",
            )  # fmt: skip
        page += summary(table, covered, function, given.bootstrap)
        (folder / "recovery.md").write_text("\n".join(page), encoding="utf-8")
    page += comparison(tables)
    (folder / "recovery.md").write_text("\n".join(page), encoding="utf-8")
    print("\n".join(page))


if __name__ == "__main__":
    main()
