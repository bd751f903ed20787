"""What terrain explains: covariates read, intensity fitted, the test beyond it, and its raster."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.envelopes import EnvelopeTest
from geoclust.errors import InputError, UsageError
from geoclust.intensity.covariates import Covariate, RasterCovariate
from geoclust.intensity.envelopes import inhomogeneous_envelopes
from geoclust.intensity.loglinear import LogLinearIntensity, fit_intensity
from geoclust.intensity.maps import UNITS, intensity_bands
from geoclust.layers import styles
from geoclust.layers.covariates import read_covariate_bands
from geoclust.layers.raster import Grid, write_bands
from geoclust.layers.survey_layers import PathLike

Progress = Callable[[str, int, int], None]

RASTER = "intensity.tif"


@dataclass(frozen=True, eq=False)
class Terrain:
    """The intensity that covariates explain, and whether there is structure beyond it.

    Attributes
    ----------
    intensity
        Log-linear in the covariates.
    envelopes
        Tests of the fitted intensity, by name of the curve.
    """

    intensity: LogLinearIntensity
    envelopes: dict[str, EnvelopeTest]

    def lines(self) -> list[str]:
        """The answer in a few lines of text."""
        out = []
        for name, (low, high) in self.intensity.intervals().items():
            if name == "intercept":
                continue
            factor, lowest, highest = np.exp([self.intensity.coefficients[name], low, high])
            out.append(
                f"{name}: one unit more multiplies the points per hectare by {factor:.3g} "
                f"(95 %, clusters allowed for: {lowest:.3g} to {highest:.3g})"
            )
        if "L" in self.envelopes:
            test = self.envelopes["L"]
            out.append(
                f"beyond the covariates: p = {test.p_value:.3g} ({test.simulations} simulations, weighted L)"
            )
        return [*out, *self.intensity.notes()]

    def frames(self) -> list[pd.DataFrame]:
        """The weighted curves in the columns of curves.csv."""
        out = []
        for name, test in self.envelopes.items():
            frame = test.curve.to_frame()
            frame["function"] = f"{name} beyond covariates"
            out.append(frame)
        return out

    def write(self, folder: Path, survey: Survey, like: Grid | None = None) -> dict[str, str]:
        """Write intensity.tif; returns its style by name.

        It follows the template grid if that lies in the system of the study area, else
        the cells that the intensity was fitted on.
        """
        area = survey.area
        cells = self.intensity.quadrature.cells
        assert area.crs is not None
        grid = Grid(cells.transform, cells.shape, area.crs)
        if like is not None and like.crs.equals(area.crs, ignore_axis_order=True):
            grid = like
        bands = intensity_bands(survey, self.intensity, grid)
        write_bands(folder / RASTER, grid, bands, units=UNITS)
        breaks = styles.quantile_breaks(bands["intensity_per_ha"])
        style = styles.raster_style(
            Path(RASTER).stem, breaks, title="Points per hectare that covariates explain", unit="ha⁻¹"
        )
        return {Path(RASTER).stem: style}


def read_covariates(paths: Sequence[PathLike], area: StudyArea) -> list[Covariate]:
    """Read every band of every raster as a covariate.

    Raises
    ------
    InputError
        If a file cannot be used.
    UsageError
        If two bands have the same name, or the study area has no place on Earth.
    """
    if paths and area.crs is None:
        raise UsageError(
            "Covariates need a coordinate reference system of the study area; state it with the layers."
        )
    found: dict[str, Covariate] = {}
    for path in paths:
        for band in read_covariate_bands(str(path)):
            name = band.name
            if name in found:
                name = f"{Path(str(path)).stem}_{name}"
            if name in found or name == "intercept":
                raise UsageError(f"Two covariates are called {name}; rename a file or a band of {path}.")
            found[name] = RasterCovariate(name, band.values, band.grid, area.crs)
    return list(found.values())


def intensity_of(paths: Sequence[PathLike], survey: Survey) -> LogLinearIntensity | None:
    """The intensity fitted to a survey on covariate rasters; None without any.

    Raises
    ------
    InputError, UsageError
        As `read_covariates`, and if there are too few points to fit one.
    """
    if not paths:
        return None
    return _fitted(survey, read_covariates(paths, survey.area))


def _fitted(survey: Survey, covariates: Sequence[Covariate]) -> LogLinearIntensity:
    if survey.n < 2:
        raise InputError(f"The survey has {survey.n} point(s), too few to relate them to covariates.")
    return fit_intensity(survey, covariates)


def explain(
    survey: Survey,
    covariates: Sequence[Covariate],
    radii: np.ndarray,
    *,
    simulations: int,
    rng: np.random.Generator,
    workers: int | None = None,
    progress: Progress | None = None,
) -> Terrain:
    """Fit the intensity and test what is left."""
    intensity = _fitted(survey, covariates)
    envelopes = inhomogeneous_envelopes(
        survey, intensity, radii, simulations=simulations, rng=rng, workers=workers, progress=progress
    )
    return Terrain(intensity, envelopes)
