"""How far long work has come, on standard error.

Nothing is shown for the first second: most captures are done by then. A terminal gets one line that is written over
and wiped at the end; a log file gets a line every ten seconds, since it keeps them all.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import TextIO

from decode.report.text import visible

QUIET_S = 1.0
BETWEEN_S = {True: 0.2, False: 10.0}
"""Least time between two lines, on a terminal and elsewhere."""
_WIDTH = 78


class Progress:
    """Called with (fraction, text); shows what it is told on `stream` as often as that stream bears."""

    def __init__(self, stream: TextIO, clock: Callable[[], float] = time.monotonic) -> None:
        self._stream = stream
        self._clock = clock
        self._on_terminal = stream.isatty()
        self._next = clock() + (QUIET_S if self._on_terminal else BETWEEN_S[False])
        self._shown = False

    def __call__(self, fraction: float, text: str) -> None:
        now = self._clock()
        if now < self._next:
            return
        self._next = now + BETWEEN_S[self._on_terminal]
        line = visible(f"{min(max(fraction, 0.0), 1.0):4.0%} {text}")[:_WIDTH]
        self._stream.write(f"\r{line:<{_WIDTH}}" if self._on_terminal else f"{line}\n")
        self._stream.flush()
        self._shown = True

    def done(self) -> None:
        """Wipe the line."""
        if self._shown and self._on_terminal:
            self._stream.write(f"\r{'':<{_WIDTH}}\r")
            self._stream.flush()
        self._shown = False
