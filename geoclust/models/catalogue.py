"""The models by name."""

from __future__ import annotations

from geoclust.errors import UsageError, not_allowed
from geoclust.models.base import ClusterModel
from geoclust.models.cauchy import Cauchy
from geoclust.models.matern_cluster import MaternCluster
from geoclust.models.nested_thomas import NestedThomas
from geoclust.models.thomas import Thomas
from geoclust.models.variance_gamma import VarianceGamma

MODELS: dict[str, type[ClusterModel]] = {
    kind.name: kind for kind in (Thomas, MaternCluster, Cauchy, NestedThomas, VarianceGamma)
}
# those whose centres can be sampled, with the parameters or given them
SAMPLED = tuple(name for name, kind in MODELS.items() if kind.sampled)


def model_by_name(name: str) -> type[ClusterModel]:
    """The model class of a name, or an error that lists the legal ones."""
    if name not in MODELS:
        raise not_allowed("model", MODELS, name)
    return MODELS[name]


def check_sampled(kind: type[ClusterModel]) -> None:
    """One sentence if the centres of a model cannot be located."""
    if not kind.sampled:
        raise UsageError(
            f"Centres can be located for the models {', '.join(SAMPLED)}; {kind.name} is none of them, so "
            "it can be fitted and simulated only."
        )
