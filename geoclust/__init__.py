"""geoclust: clusters in mapped field surveys, and where on the map they are.

Coordinates are (n, 2) arrays, easting then northing, in metres; intensities are
per square metre; every random function takes `rng`, a generator or a seed.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

from geoclust.version import __version__

if TYPE_CHECKING:
    from geoclust.area.plots import pool_surveys
    from geoclust.area.study_area import StudyArea
    from geoclust.area.survey import Survey
    from geoclust.centres.locate import locate_centres
    from geoclust.centres.result import CentreMap
    from geoclust.curves.bandwidth import cross_validated_bandwidth
    from geoclust.curves.curve import Curve
    from geoclust.curves.envelopes import global_envelope, randomness_envelopes
    from geoclust.curves.nearest import empty_space_function, j_function, nearest_neighbour_function
    from geoclust.curves.quadrats import dispersion, quadrat_test
    from geoclust.curves.randomness import clark_evans_test, loosmore_ford_test
    from geoclust.curves.second_order import k_function, l_function, pair_correlation
    from geoclust.errors import CannotTell, GeoclustError, InputError, OutputError, UsageError
    from geoclust.fitting.assessment import Assessment, assess_fit
    from geoclust.fitting.choosing import ModelComparison, compare_models
    from geoclust.fitting.fit import fit_clusters
    from geoclust.fitting.groups import GroupComparison, compare_groups
    from geoclust.fitting.result import ClusterFit
    from geoclust.intensity.covariates import DistanceCovariate, RasterCovariate, coordinate_covariates
    from geoclust.intensity.envelopes import inhomogeneous_envelopes
    from geoclust.intensity.kernel import KernelIntensity, kernel_intensity
    from geoclust.intensity.loglinear import LogLinearIntensity, fit_intensity
    from geoclust.layers.survey_layers import audit_survey
    from geoclust.models.cauchy import Cauchy
    from geoclust.models.matern_cluster import MaternCluster
    from geoclust.models.nested_thomas import NestedThomas
    from geoclust.models.thomas import Thomas
    from geoclust.models.variance_gamma import VarianceGamma
    from geoclust.replicates import Plots, read_plots
    from geoclust.simulation.patterns import simulate_patterns
    from geoclust.terrain import read_covariates
    from geoclust.workflow import analyse, read_survey

# loaded when they are first used: `geoclust --help` need not wait for compilers and geometry
_HOMES = {
    "pool_surveys": "geoclust.area.plots",
    "GroupComparison": "geoclust.fitting.groups",
    "compare_groups": "geoclust.fitting.groups",
    "Plots": "geoclust.replicates",
    "read_plots": "geoclust.replicates",
    "StudyArea": "geoclust.area.study_area",
    "Survey": "geoclust.area.survey",
    "locate_centres": "geoclust.centres.locate",
    "CentreMap": "geoclust.centres.result",
    "Curve": "geoclust.curves.curve",
    "global_envelope": "geoclust.curves.envelopes",
    "randomness_envelopes": "geoclust.curves.envelopes",
    "empty_space_function": "geoclust.curves.nearest",
    "j_function": "geoclust.curves.nearest",
    "nearest_neighbour_function": "geoclust.curves.nearest",
    "dispersion": "geoclust.curves.quadrats",
    "quadrat_test": "geoclust.curves.quadrats",
    "clark_evans_test": "geoclust.curves.randomness",
    "loosmore_ford_test": "geoclust.curves.randomness",
    "k_function": "geoclust.curves.second_order",
    "l_function": "geoclust.curves.second_order",
    "pair_correlation": "geoclust.curves.second_order",
    "CannotTell": "geoclust.errors",
    "GeoclustError": "geoclust.errors",
    "InputError": "geoclust.errors",
    "OutputError": "geoclust.errors",
    "UsageError": "geoclust.errors",
    "Assessment": "geoclust.fitting.assessment",
    "assess_fit": "geoclust.fitting.assessment",
    "ModelComparison": "geoclust.fitting.choosing",
    "compare_models": "geoclust.fitting.choosing",
    "fit_clusters": "geoclust.fitting.fit",
    "ClusterFit": "geoclust.fitting.result",
    "audit_survey": "geoclust.layers.survey_layers",
    "Cauchy": "geoclust.models.cauchy",
    "MaternCluster": "geoclust.models.matern_cluster",
    "NestedThomas": "geoclust.models.nested_thomas",
    "Thomas": "geoclust.models.thomas",
    "VarianceGamma": "geoclust.models.variance_gamma",
    "simulate_patterns": "geoclust.simulation.patterns",
    "fit_intensity": "geoclust.intensity.loglinear",
    "LogLinearIntensity": "geoclust.intensity.loglinear",
    "KernelIntensity": "geoclust.intensity.kernel",
    "kernel_intensity": "geoclust.intensity.kernel",
    "inhomogeneous_envelopes": "geoclust.intensity.envelopes",
    "cross_validated_bandwidth": "geoclust.curves.bandwidth",
    "RasterCovariate": "geoclust.intensity.covariates",
    "DistanceCovariate": "geoclust.intensity.covariates",
    "coordinate_covariates": "geoclust.intensity.covariates",
    "read_covariates": "geoclust.terrain",
    "analyse": "geoclust.workflow",
    "read_survey": "geoclust.workflow",
}

__all__ = [
    "Assessment",
    "CannotTell",
    "Cauchy",
    "CentreMap",
    "ClusterFit",
    "Curve",
    "DistanceCovariate",
    "GeoclustError",
    "GroupComparison",
    "InputError",
    "KernelIntensity",
    "LogLinearIntensity",
    "MaternCluster",
    "ModelComparison",
    "NestedThomas",
    "OutputError",
    "Plots",
    "RasterCovariate",
    "StudyArea",
    "Survey",
    "Thomas",
    "UsageError",
    "VarianceGamma",
    "__version__",
    "analyse",
    "assess_fit",
    "audit_survey",
    "clark_evans_test",
    "compare_groups",
    "compare_models",
    "coordinate_covariates",
    "cross_validated_bandwidth",
    "dispersion",
    "empty_space_function",
    "fit_clusters",
    "fit_intensity",
    "global_envelope",
    "inhomogeneous_envelopes",
    "j_function",
    "k_function",
    "kernel_intensity",
    "l_function",
    "locate_centres",
    "loosmore_ford_test",
    "nearest_neighbour_function",
    "pair_correlation",
    "pool_surveys",
    "quadrat_test",
    "randomness_envelopes",
    "read_covariates",
    "read_plots",
    "read_survey",
    "simulate_patterns",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'geoclust' has no attribute {name!r}")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *_HOMES})
