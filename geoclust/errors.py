"""What can go wrong, told to the person in one sentence.

A message says what was given, what is wrong and what to do. Commands print it
and leave with the exit status carried by the class; nothing branches on the
text of a message.
"""

from __future__ import annotations

from collections.abc import Iterable


class GeoclustError(Exception):
    """Base of every error that geoclust raises on purpose."""

    exit_status = 1


class InputError(GeoclustError):
    """A layer, geometry or coordinate reference system cannot be used as it is."""


class OutputError(GeoclustError):
    """The results cannot be written where they were asked for."""


class UsageError(GeoclustError, ValueError):
    """An option or argument has a value that is not allowed."""

    exit_status = 2


class CannotTell(GeoclustError):
    """The data cannot carry the answer; `status` names the reason, the message explains it."""

    exit_status = 3

    def __init__(self, status: str, reason: str) -> None:
        super().__init__(reason)
        self.status = status


def not_allowed(parameter: str, allowed: str | Iterable[str], got: object) -> UsageError:
    """Build the one form of message for a value that is not allowed.

    Parameters
    ----------
    parameter
        Name of the argument or option, as the user wrote it.
    allowed
        A phrase ("a positive number"), or the legal choices.
    got
        What was given.

    Examples
    --------
    >>> str(not_allowed("count", "a positive whole number", 0))
    'count must be a positive whole number; got 0'
    >>> str(not_allowed("edge_weight", ["isotropic", "unweighted"], "none"))
    "edge_weight must be one of isotropic, unweighted; got 'none'"
    """
    phrase = allowed if isinstance(allowed, str) else "one of " + ", ".join(allowed)
    return UsageError(f"{parameter} must be {phrase}; got {got!r}")
