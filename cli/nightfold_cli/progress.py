"""Progress of long work, on stderr: a line that rewrites itself on a terminal, else a line now and then."""

from __future__ import annotations

import time
from types import TracebackType
from typing import TextIO

_PATIENCE_S = 1.0
_TERMINAL_EVERY_S = 0.1
_PIPED_EVERY_S = 10.0


class Progress:
    """Say how far a long piece of work has come; work of less than a second says nothing.

    Parameters
    ----------
    title : str
        What is being done.
    total : int
        The whole of the work, 0 when it is not known.
    stream : TextIO
        Where to, usually stderr.
    """

    def __init__(self, title: str, total: int, stream: TextIO) -> None:
        self._title, self._total, self._stream = title, total, stream
        self._terminal = stream.isatty()
        self._began = time.monotonic()
        self._next = self._began + _PATIENCE_S
        self._drawn = 0

    def __enter__(self) -> Progress:
        return self

    def __exit__(self, *_: type[BaseException] | BaseException | TracebackType | None) -> None:
        self.clear()

    def __call__(self, done: int) -> None:
        """Report that so much of the work is done."""
        now = time.monotonic()
        if now < self._next:
            return
        self._next = now + (_TERMINAL_EVERY_S if self._terminal else _PIPED_EVERY_S)
        text = self._text(done, now - self._began)
        if self._terminal:
            self._stream.write("\r" + text.ljust(self._drawn))
            self._drawn = len(text)
        else:
            self._stream.write(text + "\n")
        self._stream.flush()

    def clear(self) -> None:
        """Take the line off a terminal."""
        if self._drawn:
            self._stream.write("\r" + " " * self._drawn + "\r")
            self._stream.flush()
            self._drawn = 0

    def _text(self, done: int, elapsed_s: float) -> str:
        """Return the line to show."""
        if not self._total or not done:
            return f"{self._title} … {elapsed_s:.0f} s"
        share = min(1.0, done / self._total)
        left_s = elapsed_s * (1 - share) / share if share else 0.0
        return f"{self._title} … {share:4.0%}, {left_s:.0f} s left"
