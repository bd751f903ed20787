"""The models by name."""

from __future__ import annotations

from geoclust.errors import not_allowed
from geoclust.models.base import ClusterModel
from geoclust.models.cauchy import Cauchy
from geoclust.models.matern_cluster import MaternCluster
from geoclust.models.thomas import Thomas

MODELS: dict[str, type[ClusterModel]] = {kind.name: kind for kind in (Thomas, MaternCluster, Cauchy)}


def model_by_name(name: str) -> type[ClusterModel]:
    """The model class of a name, or an error that lists the legal ones."""
    if name not in MODELS:
        raise not_allowed("model", MODELS, name)
    return MODELS[name]
