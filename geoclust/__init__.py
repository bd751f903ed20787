"""geoclust: clusters in mapped field surveys, and where on the map they are.

Coordinates are (n, 2) arrays, easting then northing, in metres; intensities are
per square metre; every random function takes `rng`, a generator or a seed.
"""

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.centres.locate import locate_centres
from geoclust.centres.result import CentreMap
from geoclust.curves.curve import Curve
from geoclust.curves.envelopes import global_envelope, randomness_envelopes
from geoclust.curves.nearest import empty_space_function, j_function, nearest_neighbour_function
from geoclust.curves.quadrats import dispersion, quadrat_test
from geoclust.curves.randomness import clark_evans_test, loosmore_ford_test
from geoclust.curves.second_order import k_function, l_function, pair_correlation
from geoclust.errors import CannotTell, GeoclustError, InputError, OutputError, UsageError
from geoclust.fitting.fit import fit_clusters
from geoclust.fitting.result import ClusterFit
from geoclust.layers.survey_layers import audit_survey
from geoclust.models.thomas import Thomas
from geoclust.simulation.patterns import simulate_patterns
from geoclust.version import __version__
from geoclust.workflow import analyse, read_survey

__all__ = [
    "CannotTell",
    "CentreMap",
    "ClusterFit",
    "Curve",
    "GeoclustError",
    "InputError",
    "OutputError",
    "StudyArea",
    "Survey",
    "Thomas",
    "UsageError",
    "__version__",
    "analyse",
    "audit_survey",
    "clark_evans_test",
    "dispersion",
    "empty_space_function",
    "fit_clusters",
    "global_envelope",
    "j_function",
    "k_function",
    "l_function",
    "locate_centres",
    "loosmore_ford_test",
    "nearest_neighbour_function",
    "pair_correlation",
    "quadrat_test",
    "randomness_envelopes",
    "read_survey",
    "simulate_patterns",
]
