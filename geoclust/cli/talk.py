"""Talk and progress: on stderr, so that data on stdout can go on into other programs."""

from __future__ import annotations

import sys
from types import TracebackType
from typing import TYPE_CHECKING, Never, Self, TextIO

if TYPE_CHECKING:
    from tqdm import tqdm


class Talk:
    """Talks to the person at the terminal; says nothing if it was asked to be quiet.

    On a terminal every stage has a moving bar; elsewhere it has one line when it begins.

    Parameters
    ----------
    quiet
        Whether to say nothing at all.
    stream
        Where to talk; stderr if not given.
    """

    def __init__(self, quiet: bool = False, stream: TextIO | None = None) -> None:
        self._stream = stream if stream is not None else sys.stderr
        self._quiet = quiet
        self._live = not quiet and self._stream.isatty()
        self._label: str | None = None
        self._bar: tqdm[Never] | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._close()

    def say(self, text: str) -> None:
        """Say one line."""
        if not self._quiet:
            self._close()
            print(text, file=self._stream, flush=True)

    def progress(self, label: str, done: int, total: int) -> None:
        """Tell how far a stage is; what long computations are given to call."""
        if self._quiet:
            return
        if label != self._label:
            self._close()
            self._label = label
            if self._live:
                from tqdm import tqdm

                self._bar = tqdm(total=total, desc=label, file=self._stream, leave=False, dynamic_ncols=True)
            else:
                print(f"{label} ({total:,})", file=self._stream, flush=True)
        if self._bar is not None:
            self._bar.total = total
            self._bar.update(done - self._bar.n)

    def _close(self) -> None:
        if self._bar is not None:
            self._bar.close()
        self._bar, self._label = None, None
