"""Tables of the page: parameters, zones, parts not walked, choices, what the files hold."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from geoclust.report import words
from geoclust.report.answer import given, radius_holding

if TYPE_CHECKING:
    import geopandas as gpd

    from geoclust.area.survey import Survey
    from geoclust.centres.result import CentreMap
    from geoclust.fitting.result import ClusterFit

SYMBOLS = {
    "parent_intensity": "ρ", "sigma": "σ", "radius": "R", "mean_offspring": "μ", "outer_intensity": "ρ₁",
    "outer_sigma": "σ₁", "inner_intensity": "ρ₂", "inner_sigma": "σ₂", "omega": "ω", "scale": "η",
    "shape": "ν′",
}  # fmt: skip
_UNITS = {"1": "", "m⁻²": "m⁻²", "m": "m"}


@dataclass(frozen=True)
class Table:
    """Header and rows of text; `numeric` marks the columns of numbers."""

    header: tuple[str, ...]
    rows: list[tuple[str, ...]]
    numeric: frozenset[int] = frozenset()


def parameter_table(fit: ClusterFit, survey: Survey, centres: CentreMap | None) -> Table:
    """Parameters in the units that people use, with 95 % intervals and what follows from them."""
    rows: list[tuple[str, ...]] = []
    for p in fit.model.described:
        factor, unit = (words.HECTARE, "ha⁻¹") if p.per_area else (1.0, _UNITS.get(p.unit, p.unit))
        limits = fit.intervals.get(p.name)
        symbol = f" {SYMBOLS[p.name]}" if p.name in SYMBOLS else ""
        meaning = p.meaning.replace("per unit area", "per hectare") if p.per_area else p.meaning
        name = p.name.replace("_", " ") + ("" if symbol.strip() == p.name else symbol)
        rows.append(
            (name, words.number(factor * fit.parameters[p.name]), _limits(limits, factor), unit, meaning)
        )
    if "background_intensity" in fit.draws:
        value = words.per_hectare(float(np.median(fit.draws["background_intensity"])))
        limits = fit.intervals.get("background_intensity")
        meaning = "points per hectare that belong to no cluster"
        rows.append(("background ε", words.number(value), _limits(limits, words.HECTARE), "ha⁻¹", meaning))
    for share, text in ((0.5, "half"), (0.95, "95 %")):
        radius, limits = radius_holding(fit, share)
        meaning = f"distance from the centre within which {text} of a cluster's points lie"
        rows.append((f"radius of {text}", words.number(radius), _limits(limits), "m", meaning))
    if centres is not None:
        mean, low, high = centres.interval_inside()
        meaning = f"cluster centres inside the study area{given(fit)}"
        rows.append(("centres inside", words.number(mean), words.counts_between(low, high), "", meaning))
    intensity = words.per_hectare(survey.intensity)
    rows.append(("intensity λ", words.number(intensity), "counted", "ha⁻¹", "mapped points per hectare"))
    header = ("parameter", "estimate", "95 % interval", "unit", "meaning")
    return Table(header, rows, frozenset({1, 2}))


def _limits(limits: tuple[float, float] | None, factor: float = 1.0) -> str:
    return "none" if limits is None else words.between(factor * limits[0], factor * limits[1])


def text_lines(fit: ClusterFit, survey: Survey) -> list[str]:
    """The table of parameters as aligned lines of text."""
    table = parameter_table(fit, survey, None)
    rows = [table.header, *table.rows]
    widths = [max(len(row[k]) for row in rows) for k in range(len(table.header))]
    return [
        "  ".join(
            cell.rjust(width) if k in table.numeric else cell.ljust(width)
            for k, (cell, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in rows
    ]


def zone_names(zones: gpd.GeoDataFrame) -> list[str]:
    """A name for every polygon: the first column of text that tells them apart, or their number."""
    for column in zones.columns:
        if column == zones.geometry.name or not pd.api.types.is_string_dtype(zones[column]):
            continue
        names = zones[column].fillna("").astype(str)
        if names.nunique() == len(names) and (names.str.strip() != "").all():
            return list(names)
    return [f"polygon {k + 1}" for k in range(len(zones))]


def zone_table(zones: gpd.GeoDataFrame, heading: str) -> Table:
    """Area, points and centres of each polygon, points counted or predicted."""
    predicted = "points_mean" in zones
    counted = ("points, probable", "95 % interval") if predicted else ("points mapped",)
    rows = []
    for name, (_, row) in zip(zone_names(zones), zones.iterrows(), strict=True):
        if predicted:
            some = words.counts_between(row["points_low"], row["points_high"])
            points: tuple[str, ...] = (words.whole(row["points_mean"]), some)
        else:
            points = (f"{int(row['points']):,}",) if "points" in zones else ("",)
        density = row["centres_mean"] / row["area_ha"] if row["area_ha"] > 0 else float("nan")
        rows.append(
            (name, words.number(row["area_ha"]), *points, words.whole(row["centres_mean"]),
             words.counts_between(row["centres_low"], row["centres_high"]), words.number(density, 2))
        )  # fmt: skip
    header = (heading, "area (ha)", *counted, "cluster centres", "95 % interval", "centres per hectare")
    return Table(header, rows, frozenset(range(1, len(header))))


_CHOICE_NAMES = {
    "edge_weight": "edge weight of the envelopes",
    "model": "cluster model",
    "simulations": "random patterns for the envelopes",
    "r_max_m": "largest distance",
    "bandwidth_m": "bandwidth of g (half width of the kernel)",
    "seed": "seed of the random numbers",
    "function": "curve that the model was fitted on",
    "exponent": "power of the curve, q",
    "r_min_m": "smallest distance",
    "range_chosen_by": "range of the fit chosen by",
    "contrast": "contrast at the minimum",
    "pairs": "pairs of points within that range",
    "log_likelihood_over_randomness": "log-likelihood of the pairs over that of complete randomness",
    "bootstrap": "patterns for the intervals (parametric bootstrap)",
    "pilot": "values to start from",
    "pilot_function": "curve that they were fitted on",
    "background": "points may belong to no cluster",
    "acceptance": "moves accepted",
    "r_hat": "R̂",
    "margin_m": "centres looked for outside the study area, up to",
    "distance_weight": "power of the distance that each difference counts",
    "second_level_p_value": "p of the test of the second level against one",
    "second_level_contrast_drops": "parts of the contrast that the second level takes away, over both ranges",
    "second_level_simulations": "patterns with one level drawn for that test",
    "second_level_ranges_m": "largest distances of that test",
    "one_level": "best single level of clusters",
    "clustering_p_value": "p of the one-sided test for clustering over the fitted range",
}


def choice_rows(choices: Mapping[str, object], within: str = "") -> list[tuple[str, str]]:
    """Choices by name, each as one line of text with its unit; those of a group begin with its name."""
    rows = []
    for key, value in choices.items():
        name = within + _CHOICE_NAMES.get(key, _spoken(key))
        if isinstance(value, Mapping):
            rows += choice_rows(value, f"{name}: ")
        else:
            rows.append((name, _shown(value, key)))
    return rows


def _spoken(key: str) -> str:
    for suffix in ("_m", "_m2", "_ha"):
        key = key.removesuffix(suffix)
    return key.replace("_", " ")


def _shown(value: object, key: str) -> str:
    lengths = ("sigma", "scale", "outer_sigma", "inner_sigma")
    unit = " m" if key.endswith("_m") or key in lengths else ""
    per_area = key in ("parent_intensity", "outer_intensity", "inner_intensity")
    if per_area:
        unit = " ha⁻¹"
    factor = words.HECTARE if per_area else 1.0
    if value is None:
        return "chosen by geoclust"
    if isinstance(value, bool | np.bool_):
        return "yes" if value else "no"
    if isinstance(value, int | np.integer):
        return f"{int(value)}{unit}" if key == "seed" else f"{int(value):,}{unit}"
    if isinstance(value, float | np.floating):
        return f"{words.number(factor * float(value))}{unit}"
    if isinstance(value, list | tuple):
        parts = [_shown(v, key).removesuffix(unit) for v in value]
        return (" to ".join(parts) if len(parts) == 2 else ", ".join(parts)) + unit
    return str(value)


CONTENTS: tuple[tuple[str, tuple[tuple[str, str], ...]], ...] = (
    (
        "results.gpkg, layer points",
        (
            ("columns of the input", "as they came"),
            ("cluster", "number of the cluster, 1 the largest; 0 if in none"),
            ("membership_probability", "probability of sharing a centre with the others of its cluster"),
            ("background_probability", "probability of belonging to no cluster"),
        ),
    ),
    ("results.gpkg, layer study_area", (("area_ha", "area, ha"), ("perimeter_m", "perimeter, m"))),
    (
        "results.gpkg, layer clusters",
        (
            ("cluster", "its number, as in points"),
            ("points", "points in it"),
            ("centre_e_m, centre_n_m", "easting and northing of its centre in the metric CRS, m"),
            ("centre_sd_m", "standard deviation of that centre per axis, m"),
            ("centre_inside", "whether the centre lies inside the study area"),
            ("membership_probability", "mean over its points"),
            ("area_m2", "area of the outline, m²"),
        ),
    ),
    (
        "results.gpkg, layers zones and unsurveyed",
        (
            ("area_ha", "area that counts: inside the study area for zones, outside it for parts not "
                        "walked, ha"),
            ("points", "points mapped there (zones)"),
            ("points_mean, points_low, points_high", "points probably there, with 95 % interval (parts not "
                                                     "walked)"),
            ("centres_mean, centres_low, centres_high", "cluster centres there, with 95 % interval"),
        ),
    ),
    (
        "results.gpkg, layer simulated_points",
        (("pattern", "number of the simulated pattern, to compare the survey with by eye"),),
    ),
    (
        "centre_intensity.tif, bands",
        (
            ("centres_per_ha_mean", "expected cluster centres per hectare, of the part of the cell inside "
                                    "the study area"),
            ("centres_per_ha_sd", "its standard deviation, ha⁻¹"),
            ("probability_any_centre", "probability of at least one centre in that part"),
        ),
    ),
    (
        "curves.csv, columns",
        (
            ("function", "K (m²), L (m), g (no unit), or the curve that was fitted"),
            ("r_m", "distance, m"),
            ("estimate", "of the survey"),
            ("theory", "under complete randomness; for the fitted curve, of the model"),
            ("lower, upper", "global envelope of complete randomness"),
        ),
    ),
)  # fmt: skip


def contents(
    files: Sequence[tuple[str, str]], unused: Sequence[str]
) -> list[tuple[str, tuple[tuple[str, str], ...]]]:
    """What the layers, bands and columns of the files at hand are.

    Parameters
    ----------
    files
        Name and meaning of each file.
    unused
        Layers that the results do not have.
    """
    names = {name for name, _ in files}
    return [
        (title, rows) for title, rows in CONTENTS
        if title.split(",")[0] in names and not any(title.endswith(f"layer {layer}") for layer in unused)
    ]  # fmt: skip


def digest_rows(audit: Any) -> list[tuple[str, str, str]]:
    """Role, file and SHA-256 of each input."""
    pairs = (("points", audit.points_source), ("study area", audit.area_source))
    return [
        (
            role,
            source.file + (f", layer {source.layer}" if source.layer is not None else ""),
            source.sha256 or "none",
        )
        for role, source in pairs
    ]
