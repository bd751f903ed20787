"""One seed gives every step its own stream of random numbers, the same one wherever the step is taken."""

from __future__ import annotations

import numpy as np

STEPS = ("curves", "fit", "centres", "patterns", "terrain", "description", "assessment", "comparison")
"""Steps that draw random numbers; the order is part of what a seed means."""


def stream(seed: int, step: str) -> np.random.Generator:
    """Random numbers of one step.

    Examples
    --------
    >>> int(stream(1, "fit").integers(1000)) == int(stream(1, "fit").integers(1000))
    True
    """
    return np.random.default_rng(seed).spawn(len(STEPS))[STEPS.index(step)]
