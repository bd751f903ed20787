"""A small version of the study in tests/studies/edge_weights.py, which names the method."""

from __future__ import annotations

import pytest
from studies.edge_weights import study


@pytest.mark.parametrize("window", ["comb", "detached strips"])
def test_weights_are_unbiased_in_thin_strips(window: str):
    outcomes = study(window, patterns=40, seed=12)
    assert {o.edge_weight for o in outcomes if len(o.radii)} >= {"isotropic", "translation", "rigid-motion"}
    for o in outcomes:
        if o.edge_weight == "unweighted":
            # the negative control
            assert not o.unbiased
        else:
            assert o.unbiased, o
