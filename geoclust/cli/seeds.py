"""The seed of a command: as given, or drawn and told."""

from __future__ import annotations

import secrets

from geoclust.cli.talk import Talk


def chosen_seed(seed: int | None, talk: Talk) -> int:
    """The seed as given, or one drawn and told, so that the run can be repeated."""
    if seed is not None:
        return seed
    drawn = secrets.randbits(32)
    talk.say(f"seed {drawn}")
    return drawn
