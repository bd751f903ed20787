"""The seed of a command: as given, or drawn."""

from __future__ import annotations

import secrets


def chosen_seed(seed: int | None) -> int:
    """The seed as given, or one drawn; commands tell it in the end, so that a run can be repeated."""
    return secrets.randbits(32) if seed is None else seed
