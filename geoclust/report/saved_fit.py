"""A fit read back from fit.json, so that centres can be located or patterns simulated from it."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from geoclust.area.survey import Survey
from geoclust.curves.curve import Curve
from geoclust.curves.second_order import k_function, l_function, pair_correlation
from geoclust.errors import CannotTell, InputError, UsageError
from geoclust.fitting.result import ClusterFit
from geoclust.intensity.loglinear import LogLinearIntensity
from geoclust.models.base import ClusterModel
from geoclust.models.catalogue import MODELS
from geoclust.report.record import SCHEMA_VERSION

# as many radii as a new fit would use
_RADII = 129


def read_fit(path: str | Path, survey: Survey, intensity: LogLinearIntensity | None = None) -> ClusterFit:
    """Read a fit that `geoclust fit` or `geoclust analyse` has written.

    Parameters
    ----------
    path
        The file.
    survey
        The survey that it belongs to; its curve is computed again.
    intensity
        Fitted to the survey on the covariates of the record; None if it has none.

    Raises
    ------
    InputError
        If the file is no such record, or was made with other covariates.
    CannotTell
        If the record says that the data cannot tell.
    """
    record = _record(path)
    _same_covariates(path, record, intensity)
    if record["status"] != "ok":
        raise CannotTell(str(record["status"]), f"The fit in {path} has no answer: {record['reason']}")
    model, intervals = _model(path, record)
    choices = record["choices"].get("fit")
    if not isinstance(choices, dict) or not isinstance(choices.get("r_max_m"), int | float):
        raise InputError(f"{path} does not say how the fit was made; make it again with geoclust fit.")
    curve = _curve(survey, choices, None if intensity is None else intensity.at_own_points())
    of_model = {"g": model.pair_correlation, "K": model.k_function, "L": model.l_function}[curve.function]
    fitted = of_model(curve.radii)
    return ClusterFit(
        model=model, intervals=intervals, status="ok", reason="", method=str(record["method"]),
        choices=choices, curve=curve, fitted=fitted, seed=record["seed"], intensity=intensity,
    )  # fmt: skip


def _record(path: str | Path) -> dict[str, Any]:
    try:
        record = json.loads(Path(path).read_text(encoding="utf-8"))
    except FileNotFoundError as error:
        raise InputError(f"There is no file {path}; give the fit.json of an earlier run.") from error
    except OSError as error:
        raise InputError(f"{path} cannot be read: {error.strerror}.") from error
    except ValueError as error:  # neither JSON nor even text
        raise InputError(f"{path} is not JSON; give the fit.json of an earlier run.") from error
    needed = {"schema", "status", "reason", "model", "parameters", "choices", "method", "seed"}
    if not isinstance(record, dict) or not needed <= set(record):
        raise InputError(f"{path} is no fit written by geoclust; give the fit.json of an earlier run.")
    if str(record["schema"]).split(".")[0] != SCHEMA_VERSION.split(".")[0]:
        raise InputError(
            f"{path} was written in version {record['schema']} of its schema, this program reads "
            f"{SCHEMA_VERSION}; make the fit again with geoclust fit."
        )
    return record


def _model(path: str | Path, record: dict[str, Any]) -> tuple[ClusterModel, dict[str, tuple[float, float]]]:
    kind = MODELS.get(record["model"])
    given = record["parameters"]
    if kind is None or not isinstance(given, dict) or set(given) != {p.name for p in kind.described}:
        raise InputError(
            f"{path} holds a fit of the model {record['model']}, which this program does not know; make the "
            "fit "
            "again with geoclust fit."
        )
    try:
        values = {name: float(entry["value"]) for name, entry in given.items()}
        intervals = {
            name: (float(entry["lower_95"]), float(entry["upper_95"]))
            for name, entry in given.items()
            if entry["lower_95"] is not None and entry["upper_95"] is not None
        }
    except (TypeError, KeyError, ValueError) as error:
        raise InputError(f"{path} has a parameter without a usable value; make the fit again.") from error
    try:
        return kind(**values), intervals
    except UsageError as error:
        raise InputError(
            f"{path} has a parameter that is not allowed ({error}); make the fit again."
        ) from error


def _same_covariates(path: str | Path, record: dict[str, Any], intensity: LogLinearIntensity | None) -> None:
    """Refuse a fit that was made with other covariates than those given."""
    held = record.get("intensity")
    names = [] if held is None else [c["name"] for c in held["coefficients"] if c["name"] != "intercept"]
    given = [] if intensity is None else [name for name in intensity.coefficients if name != "intercept"]
    if sorted(names) == sorted(given):
        return
    wanted = f"the covariates {', '.join(names)}" if names else "no covariates"
    has = ", ".join(given) if given else "none"
    raise InputError(f"{path} holds a fit with {wanted}; given were {has}. Give the same ones.")


def _curve(survey: Survey, choices: dict[str, Any], intensity: np.ndarray | None) -> Curve:
    """The survey's curve over the range of the fit."""
    function = choices.get("function", choices.get("pilot_function", "g"))
    g = function == "g"
    width = choices.get("bandwidth_m") if g else None
    radii = np.linspace(choices.get("r_min_m", width or 0.0), choices["r_max_m"], _RADII)
    radii = radii[radii > 0]
    if g:
        return pair_correlation(survey, radii, bandwidth=width, intensity_at_points=intensity)
    measure = l_function if function == "L" else k_function
    return measure(survey, radii, intensity_at_points=intensity)
