"""A part of a capture: what [capture] window_s leaves of it.

The decoders see the window alone. Each line's level at its start is the one it had there, and what the window's ends
cut through is cut as by the ends of a capture.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from fractions import Fraction

from decode.sheet import Bound, CaptureKeys
from decode.spans import Span


@dataclass(frozen=True, slots=True)
class Window:
    """start <= tick < stop; None for an end that is open."""

    start: int | None = None
    stop: int | None = None

    @classmethod
    def of(cls, keys: CaptureKeys, tick: Fraction) -> Window:
        """The window that the sheet or the command names, for a capture of `tick` seconds per tick."""
        start, stop = keys.window_s or ("none", "none")
        return cls(_ticks(start, tick), _ticks(stop, tick))

    @property
    def is_open(self) -> bool:
        """Whether it leaves everything."""
        return self.start is None and self.stop is None

    def holds(self, tick: int) -> bool:
        """Whether a time lies within."""
        return (self.start is None or tick >= self.start) and (self.stop is None or tick < self.stop)

    def clipped(self, tick: int) -> int:
        """The time within the window that is next to `tick`; its end itself for one behind it."""
        tick = tick if self.start is None else max(tick, self.start)
        return tick if self.stop is None else min(tick, self.stop)

    def maybe_cut(self, span: Span) -> Span | None:
        """What the window leaves of a span; None for nothing."""
        start, stop = self.clipped(span.start), self.clipped(span.stop)
        if start >= stop:
            return None
        if (start, stop) == (span.start, span.stop):
            return span
        return Span(start, stop, {name: edges.between(start, stop) for name, edges in span.lines.items()}, span.joined)


def within(spans: Iterable[Span], window: Window) -> Iterator[Span]:
    """What the window leaves of a capture whose times never fall; later spans are not asked for."""
    for span in spans:
        cut = window.maybe_cut(span)
        if cut is not None:
            yield cut
        if window.stop is not None and span.stop >= window.stop:
            return


def _ticks(end: Bound, tick: Fraction) -> int | None:
    return None if isinstance(end, str) else math.ceil(Fraction(repr(float(end))) / tick)
