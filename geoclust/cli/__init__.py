"""The command line: one file a command, one registry of shared options, no work of its own."""

import signal

__all__ = ["main"]


def main() -> None:
    """Entry point of the command."""
    # while libraries load there is nothing to sweep up yet: an interrupt ends the program without a word
    before = signal.signal(signal.SIGINT, signal.SIG_DFL)
    from geoclust.cli.entry import main as command

    signal.signal(signal.SIGINT, before)
    command()
