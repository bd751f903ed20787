"""The command line: one file a command, one registry of shared options, no work of its own."""

from geoclust.cli.entry import main

__all__ = ["main"]
