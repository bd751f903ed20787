"""The whole job from layers to a folder of results: each step calls its room and no more."""

from __future__ import annotations

import secrets
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd

from geoclust.analysis import Analysis
from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.centres.locate import locate_centres
from geoclust.centres.rasters import cell_areas
from geoclust.centres.result import CentreMap
from geoclust.curves.curve import Curve
from geoclust.curves.envelopes import EnvelopeTest, randomness_envelopes
from geoclust.curves.second_order import default_radii, k_function
from geoclust.errors import CannotTell, OutputError, UsageError, not_allowed
from geoclust.fitting.assessment import Assessment, assess_fit
from geoclust.fitting.fit import fit_clusters
from geoclust.fitting.result import ClusterFit
from geoclust.intensity.covariates import Covariate
from geoclust.layers import styles
from geoclust.layers.columns import with_our_columns
from geoclust.layers.package import PatternWriter, write_package
from geoclust.layers.raster import Grid, grid_like
from geoclust.layers.results_folder import results_folder
from geoclust.layers.survey_layers import PathLike, read_polygons, read_survey_layers
from geoclust.models.catalogue import SAMPLED, model_by_name
from geoclust.report.page import write_page
from geoclust.report.record import add_assessment, add_terrain, fit_record, library_versions, write_record
from geoclust.seeds import stream
from geoclust.simulation.patterns import simulate_patterns
from geoclust.terrain import RASTER, Terrain, explain, read_covariates

Progress = Callable[[str, int, int], None]

# patterns that are refitted in the assessment of the fit: a part of those of the envelopes, and bounds
REFITS = (10, 19, 99)
# patterns in the layer simulated_points: enough to judge by eye, small enough to open
PATTERNS = 39

FILES = (
    ("report.html", "this page"),
    ("results.gpkg", "points with their cluster, study area, clusters, zones, simulated points; for a GIS"),
    ("centre_intensity.tif", "raster of expected centres per hectare, its standard deviation, and the "
                             "probability of at least one centre in the cell"),
    ("curves.csv", "the curves L and g with their envelopes, the curve that the model was fitted on, and the "
                   "curve that it is judged by"),
    ("fit.json", "parameters, intervals, status, choices and data audit for other programs"),
    ("*.sld", "styles for raster and layers (OGC Styled Layer Descriptor)"),
)  # fmt: skip


def read_survey(
    points: PathLike,
    area: PathLike,
    *,
    points_layer: str | None = None,
    area_layer: str | None = None,
    crs: object | None = None,
    x_column: str | None = None,
    y_column: str | None = None,
    metric_crs: object | None = None,
    repair: bool = False,
) -> Survey:
    """Read a survey from two layers, in a metric coordinate reference system.

    Parameters
    ----------
    points, area
        Files that GDAL opens as vector layers (or CSV with columns named): the mapped
        individuals, and the polygons inside which every one was looked for.
    points_layer, area_layer
        Names of the layers in them.
    crs
        System of the coordinates where a layer does not say; ``local`` for a plane in metres
        with no place on Earth.
    x_column, y_column
        Coordinate columns of a CSV file.
    metric_crs
        Metric system to use; the best one for the study area is chosen if not given.
    repair
        Repair invalid polygons even if that moves more than 0.1 % of the area.

    Returns
    -------
    Survey
        Its `audit` tells what was found and done.

    Raises
    ------
    InputError, UsageError
        One sentence on what was given, what is wrong and what to do.
    """
    found = read_survey_layers(
        points, area, points_layer=points_layer, area_layer=area_layer, crs=crs, x_column=x_column,
        y_column=y_column, metric_crs=metric_crs, repair=repair,
    )  # fmt: skip
    return Survey(
        found.xy, StudyArea(found.polygon, found.crs), attributes=found.attributes, audit=found.audit
    )


@dataclass(frozen=True)
class Extras:
    """What was given beside the survey: zones, parts not walked, template grid, covariates; warnings."""

    zones: gpd.GeoDataFrame | None
    unsurveyed: gpd.GeoDataFrame | None
    grid: Grid | None
    warnings: list[str]
    covariates: list[Covariate] = field(default_factory=list)


def analyse(
    points: PathLike,
    area: PathLike,
    *,
    out: str | Path,
    points_layer: str | None = None,
    area_layer: str | None = None,
    model: str = "thomas",
    covariates: Sequence[PathLike] = (),
    zones: PathLike | None = None,
    zones_layer: str | None = None,
    unsurveyed: PathLike | None = None,
    unsurveyed_layer: str | None = None,
    like: PathLike | None = None,
    cell: float | None = None,
    seed: int | None = None,
    overwrite: bool = False,
    crs: object | None = None,
    x_column: str | None = None,
    y_column: str | None = None,
    metric_crs: object | None = None,
    repair: bool = False,
    simulations: int = 999,
    workers: int | None = None,
    progress: Progress | None = None,
    command: str | None = None,
    title: str | None = None,
) -> Analysis:
    """Do the whole job: read, describe, fit, locate, and write one folder of results.

    Parameters
    ----------
    points, area, points_layer, area_layer, crs, x_column, y_column, metric_crs, repair
        As for `read_survey`.
    out
        Folder for the results; it appears whole at the end or not at all.
    model
        Name of the cluster model.
    covariates
        Rasters that may explain where points are; every band is one. The clusters are then those
        beyond them.
    zones, zones_layer
        Polygons to give numbers of points and centres for.
    unsurveyed, unsurveyed_layer
        Polygons that nobody walked, to predict for.
    like, cell
        Template raster whose grid the maps follow, or cell size in metres.
    seed
        Seed of all random numbers; drawn, and reported, if not given.
    overwrite
        Whether earlier results in `out` may be replaced.
    simulations
        Patterns of complete randomness for the envelopes.
    workers
        Threads; one a core if not given. The results do not depend on it.
    progress
        Called with label, done, total.
    command, title
        Shown in the report.

    Returns
    -------
    Analysis

    Raises
    ------
    InputError, UsageError, OutputError
        One sentence; nothing is written then.
    """
    kind = model_by_name(model)
    if not kind.sampled and (zones is not None or unsurveyed is not None):
        raise UsageError(
            f"zones and unsurveyed get their numbers from the cluster centres, which can be located for the "
            f"models {', '.join(SAMPLED)}; leave them out, or take one of these models."
        )
    if like is not None and cell is not None:
        raise UsageError("Give either a template raster or a cell size, not both.")
    if simulations < 39:
        raise not_allowed("simulations", "at least 39", simulations)
    used_seed = secrets.randbits(32) if seed is None else int(seed)
    if used_seed < 0:
        raise not_allowed("seed", "a whole number, not negative", seed)
    with results_folder(out, overwrite) as folder:
        survey = read_survey(
            points, area, points_layer=points_layer, area_layer=area_layer, crs=crs, x_column=x_column,
            y_column=y_column, metric_crs=metric_crs, repair=repair,
        )  # fmt: skip
        extras = read_extras(survey, zones, zones_layer, unsurveyed, unsurveyed_layer, like, crs, repair)
        extras.covariates.extend(read_covariates(covariates, survey.area))
        found = _analyse_survey(
            survey, extras, model=model, cell=cell, seed=used_seed, simulations=simulations,
            workers=workers, progress=progress, out=Path(out),
        )  # fmt: skip
        _write_all(folder, found, extras, command, title or _title(points), workers, progress)
    return found


def _title(points: PathLike) -> str:
    return Path(str(points)).stem.replace("_", " ")


def read_extras(
    survey: Survey,
    zones: PathLike | None,
    zones_layer: str | None,
    unsurveyed: PathLike | None,
    unsurveyed_layer: str | None,
    like: PathLike | None,
    crs: object | None,
    repair: bool,
) -> Extras:
    """Read what was given beside the survey, in its metric system."""
    warnings: list[str] = []

    def polygons(path: PathLike | None, layer: str | None) -> gpd.GeoDataFrame | None:
        if path is None:
            return None
        found = read_polygons(path, crs=survey.area.crs, layer=layer, stated_crs=crs, repair=repair)
        warnings.extend(found.attrs.get("warnings", []))
        return found

    grid = None if like is None else grid_like(str(like))
    if grid is not None and not cell_areas(grid, survey.area).any():
        raise UsageError(f"The template raster {like} does not overlap the study area; give one that does.")
    return Extras(polygons(zones, zones_layer), polygons(unsurveyed, unsurveyed_layer), grid, warnings)


def _analyse_survey(
    survey: Survey,
    extras: Extras,
    *,
    model: str,
    cell: float | None,
    seed: int,
    simulations: int,
    workers: int | None,
    progress: Progress | None,
    out: Path,
) -> Analysis:
    envelope_seed, fit_seed, centre_seed = (stream(seed, step) for step in ("curves", "fit", "centres"))
    envelopes: dict[str, EnvelopeTest] = {}
    fit: ClusterFit | None = None
    centres: CentreMap | None = None
    assessment: Assessment | None = None
    status, reason = "ok", ""
    notes = list(extras.warnings)
    choices: dict[str, object] = {"model": model, "simulations": simulations}
    if survey.n >= 2:
        radii = default_radii(survey.area)
        envelopes = randomness_envelopes(
            survey, radii, simulations=simulations, rng=envelope_seed, workers=workers, progress=progress
        )
        choices["edge_weight"] = envelopes["L"].curve.edge_weight
        choices["r_max_m"] = float(radii[-1])
        choices["bandwidth_m"] = envelopes["g"].curve.bandwidth
    terrain: Terrain | None = None
    if extras.covariates:
        terrain = explain(
            survey, extras.covariates, default_radii(survey.area), simulations=simulations,
            rng=stream(seed, "terrain"), workers=workers, progress=progress,
        )  # fmt: skip
        choices["covariates"] = [c.name for c in extras.covariates]
    try:
        fit = fit_clusters(
            survey, model, intensity=None if terrain is None else terrain.intensity, rng=fit_seed,
            workers=workers, progress=progress,
        )  # fmt: skip
        if fit.status == "not-converged":
            # a usable answer, and the failure said: parameters by the moments, centres at these
            notes.append(
                f"{fit.reason} Its place is taken by a minimum contrast fit, and the centres are sampled "
                "with its parameters taken as known."
            )
            choices["posterior_not_converged"] = fit.choices.get("diagnostics", fit.reason)
            fit = fit_clusters(
                survey, model, method="minimum-contrast",
                intensity=None if terrain is None else terrain.intensity, rng=fit_seed.spawn(1)[0],
                workers=workers, progress=progress,
            )  # fmt: skip
        choices["method"] = fit.method
        status, reason = fit.status, fit.reason
        if fit.ok:
            part, least, most = REFITS
            try:
                assessment = assess_fit(
                    survey, fit, simulations=min(max(simulations // part, least), most),
                    rng=stream(seed, "assessment"), workers=workers, progress=progress,
                )  # fmt: skip
            except CannotTell as verdict:
                notes.append(str(verdict))
            if fit.model.sampled:
                centres = locate_centres(
                    survey, fit, cell=cell, like=extras.grid, zones=extras.zones,
                    unsurveyed=extras.unsurveyed, rng=centre_seed, workers=workers, progress=progress,
                )  # fmt: skip
            else:
                notes.append(
                    f"The model {model} is fitted by {fit.method}, and there is no map of centres: they can "
                    f"be located for the models {', '.join(SAMPLED)}."
                )
    except CannotTell as verdict:
        status, reason = verdict.status, str(verdict)
    return Analysis(
        status, reason, survey, envelopes, fit, centres, choices, seed, out, notes, terrain, assessment
    )


def curve_table(
    envelopes: Mapping[str, EnvelopeTest], fit: ClusterFit | None, survey: Survey
) -> pd.DataFrame:
    """All curves in the columns of curves.csv: K, L and g of the survey, and the fitted curve."""
    frames = []
    if "L" in envelopes:
        shown = envelopes["L"].curve
        k = k_function(survey, shown.radii, edge_weight=shown.edge_weight)
        frames.append(k.to_frame())
        frames += [test.curve.to_frame() for test in envelopes.values()]
    if fit is not None:
        c = fit.curve
        name = f"{c.function} fitted, {fit.model.name}"
        frames.append(
            Curve(name, c.radii, c.values, fit.fitted, c.unit, c.edge_weight, c.bandwidth).to_frame()
        )
    columns = ["function", "r_m", "estimate", "theory", "lower", "upper"]
    return pd.concat(frames, ignore_index=True) if frames else pd.DataFrame(columns=columns)


def _write_all(
    folder: Path,
    found: Analysis,
    extras: Extras,
    command: str | None,
    title: str,
    workers: int | None,
    progress: Progress | None,
) -> None:
    survey, fit, centres = found.survey, found.fit, found.centres
    record = fit_record(
        status=found.status, reason=found.reason, fit=fit, envelopes=found.envelopes, centres=centres,
        audit=survey.audit, choices=found.choices, seed=found.seed,
    )  # fmt: skip
    terrain = found.terrain
    if terrain is not None:
        add_terrain(record, terrain.intensity, terrain.envelopes)
    if found.assessment is not None:
        add_assessment(record, found.assessment)
    write_record(folder / "fit.json", record)
    try:
        table = curve_table(found.envelopes, fit, survey)
        frames = [] if terrain is None else terrain.frames()
        frames += [] if found.assessment is None else found.assessment.frames()
        pd.concat([table, *frames], ignore_index=True).to_csv(folder / "curves.csv", index=False)
    except OSError as error:
        raise OutputError(f"curves.csv could not be written: {error.strerror}.") from error
    package = folder / "results.gpkg"
    renamed = write_layers(package, found, extras)
    pattern_seed = stream(found.seed, "patterns")
    with PatternWriter(
        package, "simulated_points", survey.area.crs, layer_crs=survey.points_crs, into_package=True
    ) as sink:
        source: ClusterFit | float = fit if fit is not None and found.status == "ok" else survey.intensity
        simulate_patterns(
            source, survey.area, PATTERNS, rng=pattern_seed, sink=sink, workers=workers, progress=progress
        )
    files = [(name, meaning) for name, meaning in FILES if centres is not None or name[-4:] != ".tif"]
    sheets = styles.vector_styles()
    if terrain is not None:
        sheets |= terrain.write(folder, survey, extras.grid)
        files.insert(2, (RASTER, "raster of points per hectare that covariates explain, and residuals"))
    if centres is not None:
        centres.write(folder / "centre_intensity.tif")
        sheets["centre_intensity"] = styles.centre_intensity_style(centres.mean)
    styles.write_styles(folder, sheets)
    for layer, names in renamed.items():
        for old, new in names.items():
            found.notes.append(f"column {old} of layer {layer} is called {new} in results.gpkg")
    write_page(
        folder / "report.html",
        survey=survey,
        audit=survey.audit,
        envelopes=found.envelopes or None,
        fit=fit,
        status=found.status,
        reason=found.reason,
        centres=centres,
        terrain=None if terrain is None else (terrain.intensity, terrain.envelopes),
        assessment=found.assessment,
        choices=found.choices | {"seed": found.seed},
        versions=library_versions(),
        command=command,
        title=title,
        files=files,
        notes=found.notes,
    )


def write_layers(path: Path, found: Analysis, extras: Extras) -> dict[str, dict[str, str]]:
    """Write results.gpkg, in the system of the input points; returns the columns renamed, by layer."""
    survey, centres = found.survey, found.centres
    crs = survey.points_crs
    attributes = survey.attributes
    if attributes is None:
        attributes = gpd.GeoDataFrame(geometry=gpd.points_from_xy(*survey.xy.T), crs=survey.area.crs)
    if centres is not None:
        ours: dict[str, Any] = {str(name): centres.points[name].to_numpy() for name in centres.points}
    else:
        nothing = np.full(survey.n, np.nan)
        ours = {
            "cluster": pd.array([pd.NA] * survey.n, dtype="Int64"),
            "membership_probability": nothing,
            "background_probability": nothing,
        }
    with_ours, renamed = with_our_columns(attributes, ours)
    layers = {"points": with_ours, "study_area": _study_area_layer(survey, crs)}
    if centres is not None:
        layers["clusters"] = _moved(centres.clusters, crs)
    numbered = {
        "zones": (extras.zones, centres.zones if centres is not None else None),
        "unsurveyed": (extras.unsurveyed, centres.unsurveyed if centres is not None else None),
    }
    for name, (given, answered) in numbered.items():
        if answered is not None or given is not None:
            layers[name] = _moved(answered if answered is not None else given, crs)
    all_styles = styles.vector_styles(_label_column(extras.zones))
    chosen = {name: text for name, text in all_styles.items() if name in layers or name == "simulated_points"}
    changed = dict(write_package(path, layers, chosen))
    if renamed:
        changed["points"] = renamed | changed.get("points", {})
    return changed


def _label_column(zones: gpd.GeoDataFrame | None) -> str | None:
    """The first column of text, which names the zones."""
    if zones is None:
        return None
    names = [c for c in zones.columns if c != zones.geometry.name and pd.api.types.is_string_dtype(zones[c])]
    return names[0] if names else None


def _study_area_layer(survey: Survey, crs: object) -> gpd.GeoDataFrame:
    layer = gpd.GeoDataFrame(
        {"area_ha": [survey.area.area / 1e4], "perimeter_m": [survey.area.perimeter], "points": [survey.n]},
        geometry=[survey.area.polygon],
        crs=survey.area.crs,
    )
    return _moved(layer, crs)


def _moved(layer: gpd.GeoDataFrame, crs: object) -> gpd.GeoDataFrame:
    return layer if layer.crs is None or crs is None or layer.crs == crs else layer.to_crs(crs)
