"""One plausible model of every kind."""

from __future__ import annotations

from geoclust.models.base import ClusterModel


def example(
    kind: type[ClusterModel], centres_per_ha: float = 1.0, scales: tuple[float, ...] = (40.0, 15.0, 8.0),
    mean_offspring: float = 6.0,
) -> ClusterModel:  # fmt: skip
    """A model with some centres a hectare, scales of some metres, the outer one first, six points each.

    A model with a single scale takes the last but one; a parameter that is neither is a shape.
    """
    lengths = [p.name for p in kind.described if p.unit == "m"]
    given = iter(scales if len(lengths) > 1 else scales[1:])
    values = {}
    for p in kind.described:
        if p.per_area:
            values[p.name] = 1e-4 * centres_per_ha
        elif p.unit == "m":
            values[p.name] = next(given)
        else:
            values[p.name] = mean_offspring if p.name == "mean_offspring" else 0.75
    return kind(**values)
