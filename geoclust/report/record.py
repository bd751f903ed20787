"""fit.json: the answer and everything it depends on, for machines and for the archive."""

from __future__ import annotations

import json
import platform
from collections.abc import Mapping
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np

from geoclust.centres.result import CentreMap
from geoclust.curves.envelopes import EnvelopeTest
from geoclust.errors import OutputError
from geoclust.fitting.assessment import Assessment
from geoclust.fitting.choosing import ModelComparison
from geoclust.fitting.result import ClusterFit
from geoclust.intensity.loglinear import LogLinearIntensity
from geoclust.layers.audit import Audit

SCHEMA_VERSION = "1.0"
LIBRARIES = ("numpy", "scipy", "numba", "shapely", "pyproj", "geopandas", "rasterio", "fiona", "arviz")


def library_versions() -> dict[str, str]:
    """Versions of geoclust, Python and the libraries that the numbers depend on."""
    from geoclust.version import __version__

    out = {"geoclust": __version__, "python": platform.python_version()}
    for name in LIBRARIES:
        try:
            out[name] = version(name)
        except PackageNotFoundError:
            out[name] = "not installed"
    return out


def fit_record(
    *,
    status: str,
    reason: str,
    fit: ClusterFit | None,
    envelopes: Mapping[str, EnvelopeTest] | None,
    centres: CentreMap | None,
    audit: Audit | None,
    choices: Mapping[str, object],
    seed: int | None,
) -> dict[str, Any]:
    """Build the content of fit.json.

    Parameters
    ----------
    status, reason
        ``ok``, or why the data cannot tell, and the sentence.
    fit, envelopes, centres, audit
        Results; None where there is none.
    choices
        What was chosen, by name.
    seed
        What the random numbers started from.

    Returns
    -------
    dict
        According to ``geoclust/report/fit.schema.json``: intensities in m⁻², lengths in metres.
    """
    out: dict[str, Any] = {
        "schema": SCHEMA_VERSION,
        "status": status,
        "reason": reason,
        "model": None,
        "method": None,
        "parameters": {},
        "tests": {},
        "centres": None,
        "choices": dict(choices),
        "seed": seed,
        "versions": library_versions(),
        "audit": None if audit is None else audit.to_dict(),
        "inputs": [],
    }
    if fit is not None:
        out["model"], out["method"] = fit.model.name, fit.method
        out["choices"]["fit"] = fit.choices
        for p in fit.model.described:
            low, high = fit.intervals.get(p.name, (None, None))
            out["parameters"][p.name] = {
                "value": fit.parameters[p.name],
                "lower_95": low,
                "upper_95": high,
                "unit": p.unit,
                "meaning": p.meaning,
            }
    for name, test in (envelopes or {}).items():
        out["tests"][f"complete randomness, {name}"] = _test(test)
    if centres is not None:
        mean, low, high = centres.interval_inside()
        out["centres"] = {
            "number_inside": {"mean": mean, "lower_95": low, "upper_95": high},
            "clusters_delineated": len(centres.clusters),
            "margin_m": centres.margin,
            "chains": int(centres.number_inside.shape[0]),
            "draws_per_chain": int(centres.number_inside.shape[1]),
            "r_hat": centres.r_hat,
            "effective_sample_size": centres.effective_sample_size,
            "converged": centres.converged,
            "cell": list(centres.grid.cell),
        }
    if audit is not None:
        for role, source in (("points", audit.points_source), ("study area", audit.area_source)):
            out["inputs"].append(
                {"role": role, "file": source.file, "layer": source.layer, "sha256": source.sha256}
            )
    return plain(out)


def add_terrain(
    record: dict[str, Any], intensity: LogLinearIntensity, envelopes: Mapping[str, EnvelopeTest]
) -> None:
    """Add the intensity that covariates explain, and the tests beyond it, to the content of fit.json."""
    record["intensity"] = plain(intensity.record())
    for name, test in envelopes.items():
        record["tests"][f"fitted intensity, {name}"] = plain(_test(test))


def add_assessment(record: dict[str, Any], found: Assessment) -> None:
    """Add whether the fitted model reproduces the survey to the content of fit.json."""
    record["assessment"] = plain(found.record())


def add_comparison(record: dict[str, Any], found: ModelComparison) -> None:
    """Add how well models predict held-out ground to the content of fit.json."""
    record["comparison"] = plain(found.record())


def _test(test: EnvelopeTest) -> dict[str, object]:
    return {
        "p_value": test.p_value,
        "simulations": test.simulations,
        "alternative": test.alternative,
        "departures_m": [list(d) for d in test.departures()],
    }


def write_record(path: str | Path, record: Mapping[str, Any]) -> None:
    """Write fit.json; keys in the order of the schema."""
    try:
        Path(path).write_text(json.dumps(record, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
    except OSError as error:
        raise OutputError(f"{path} could not be written: {error.strerror}.") from error


def plain(value: Any) -> Any:
    """The same value in types that JSON knows; numbers that are not finite become null."""
    if isinstance(value, Mapping):
        return {str(k): plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple | np.ndarray):
        return [plain(v) for v in value]
    if isinstance(value, bool | np.bool_):
        return bool(value)
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return float(value) if np.isfinite(value) else None
    return value if value is None or isinstance(value, str) else str(value)
