"""Single steps of the job that write files of their own: locating the centres, simulating patterns."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Unpack

from geoclust.area.study_area import StudyArea
from geoclust.centres.locate import locate_centres
from geoclust.errors import UsageError, not_allowed
from geoclust.fitting.fit import fit_clusters
from geoclust.fitting.result import ClusterFit
from geoclust.layers import styles
from geoclust.layers.package import PatternWriter
from geoclust.layers.results_folder import results_folder
from geoclust.layers.survey_layers import PathLike, Reading
from geoclust.models.base import ClusterModel
from geoclust.models.catalogue import check_sampled, model_by_name
from geoclust.report.saved_fit import read_fit
from geoclust.seeds import stream
from geoclust.simulation.patterns import simulate_patterns
from geoclust.terrain import intensity_of
from geoclust.workflow import Analysis, Progress, read_extras, read_survey, write_layers

HECTARE = 1e4


def locate(
    points: PathLike,
    area: PathLike,
    *,
    out: str | Path,
    fit_file: PathLike | None = None,
    model: str = "thomas",
    covariates: Sequence[PathLike] = (),
    zones: PathLike | None = None,
    zones_layer: str | None = None,
    unsurveyed: PathLike | None = None,
    unsurveyed_layer: str | None = None,
    like: PathLike | None = None,
    cell: float | None = None,
    seed: int,
    overwrite: bool = False,
    workers: int | None = None,
    progress: Progress | None = None,
    **reading: Unpack[Reading],
) -> Analysis:
    """Map the centres of a survey and outline its clusters, in a folder of their own.

    Parameters
    ----------
    points, area, reading
        As for `geoclust.workflow.read_survey`.
    out
        Folder for centre_intensity.tif, results.gpkg and styles.
    fit_file
        Fit to take over (fit.json); a new one is made if not given.
    model
        Model of the new fit.
    covariates
        Rasters that may explain where points are, as for `geoclust.workflow.analyse`; those of the fit
        if that is taken over.
    zones, zones_layer, unsurveyed, unsurveyed_layer, like, cell, overwrite, workers, progress
        As for `geoclust.workflow.analyse`.
    seed
        Seed of all random numbers.

    Raises
    ------
    CannotTell
        If the data cannot carry a map; nothing is written then.
    InputError, UsageError, OutputError
        One sentence; nothing is written.
    """
    if like is not None and cell is not None:
        raise UsageError("Give either a template raster or a cell size, not both.")
    kind = model_by_name(model)
    if fit_file is None:
        check_sampled(kind)
    with results_folder(out, overwrite) as folder:
        survey = read_survey(points, area, **reading)
        extras = read_extras(
            survey, zones, zones_layer, unsurveyed, unsurveyed_layer, like, reading.get("crs"),
            bool(reading.get("repair")),
        )  # fmt: skip
        intensity = intensity_of(covariates, survey)
        if fit_file is not None:
            fit = read_fit(str(fit_file), survey, intensity)
        else:
            fit = fit_clusters(
                survey, model, intensity=intensity, rng=stream(seed, "fit"), workers=workers,
                progress=progress,
            )  # fmt: skip
        centres = locate_centres(
            survey, fit, cell=cell, like=extras.grid, zones=extras.zones, unsurveyed=extras.unsurveyed,
            rng=stream(seed, "centres"), workers=workers, progress=progress,
        )  # fmt: skip
        found = Analysis("ok", "", survey, {}, fit, centres, {}, seed, Path(out), list(extras.warnings))
        write_layers(folder / "results.gpkg", found, extras)
        centres.write(folder / "centre_intensity.tif")
        sheets = styles.vector_styles()
        sheets["centre_intensity"] = styles.centre_intensity_style(centres.mean)
        styles.write_styles(folder, sheets)
    return found


def simulate(
    points: PathLike,
    area: PathLike,
    *,
    out: str | Path,
    count: int = 39,
    model: str = "thomas",
    parameters: Mapping[str, float] | None = None,
    fit_file: PathLike | None = None,
    covariates: Sequence[PathLike] = (),
    random: bool = False,
    seed: int,
    overwrite: bool = False,
    workers: int | None = None,
    progress: Progress | None = None,
    **reading: Unpack[Reading],
) -> int:
    """Simulate patterns in the study area of a survey, streamed to a layer.

    Parameters
    ----------
    points, area, reading
        As for `geoclust.workflow.read_survey`.
    out
        File for the patterns: .gpkg, .fgb, .geojson or .csv.
    count
        Number of patterns.
    model, parameters
        Model and its values: intensities per hectare, lengths in metres.
    fit_file
        Fit to simulate from (fit.json).
    covariates
        Rasters that thin the clusters, as for `locate`; not with `parameters` or `random`.
    random
        Whether to simulate complete randomness with the intensity of the survey.
    seed, overwrite, workers, progress
        As for `locate`.

    Returns
    -------
    int
        Number of points written.

    Raises
    ------
    CannotTell
        If the model is to be fitted, and the data cannot tell.
    InputError, UsageError, OutputError
        One sentence; nothing is written.
    """
    kind = model_by_name(model)
    stated = _stated(kind, parameters) if parameters else None
    if covariates and (random or stated is not None):
        raise UsageError("Covariates belong to a fit; leave them out for stated parameters or randomness.")
    survey = read_survey(points, area, **reading)
    source: ClusterFit | ClusterModel | float
    if stated is not None:
        source = stated
    elif random:
        source = survey.intensity
    elif fit_file is not None:
        source = read_fit(str(fit_file), survey, intensity_of(covariates, survey))
    else:
        source = fit_clusters(
            survey, model, intensity=intensity_of(covariates, survey), rng=stream(seed, "fit"),
            workers=workers, progress=progress,
        )  # fmt: skip
    return _write_patterns(source, survey.area, Path(out), count, seed, overwrite, workers, progress)


def _write_patterns(
    source: ClusterFit | ClusterModel | float,
    area: StudyArea,
    out: Path,
    count: int,
    seed: int,
    overwrite: bool,
    workers: int | None,
    progress: Progress | None,
) -> int:
    with PatternWriter(out, "simulated_points", area.crs, overwrite=overwrite) as sink:
        simulate_patterns(
            source, area, count, rng=stream(seed, "patterns"), sink=sink, workers=workers, progress=progress
        )
    return sink.points


def _stated(kind: type[ClusterModel], given: Mapping[str, float]) -> ClusterModel:
    """A model with the values that were stated."""
    names = [p.name for p in kind.described]
    if set(given) != set(names):
        wrong = sorted(set(given) - set(names))
        missing = [name for name in names if name not in given]
        what = f"{wrong[0]} is none of them" if wrong else f"{missing[0]} is missing"
        raise UsageError(f"The model {kind.name} has the parameters {', '.join(names)}; {what}.")
    for p in kind.described:
        if not p.above < given[p.name] < float("inf"):
            allowed = "a positive finite number" if p.above == 0 else f"a finite number above {p.above:g}"
            raise not_allowed(p.name, allowed, given[p.name])
    return kind(**{p.name: given[p.name] / (HECTARE if p.per_area else 1.0) for p in kind.described})
