"""Breaks: where the time axis of a capture does not simply go on.

Two things break an axis. A row whose time lies before the row above is a reversal. And a stretch may be missing:
trigger windows put one after the other, or samples that the analyser lost. Silence alone is no proof of that, since
a shaft at rest and a master that pauses are silent too, so it is only judged after a thousand row intervals of
steady activity, by what the rows so far have shown and by nothing that comes later (a capture cut anywhere must give
the same):

    every sample  where all intervals so far are equal (within the last digit printed) and at least a quarter of the
                  rows repeat the row above: an interval of two steps or more is a gap
    every change  otherwise: an interval longer than eight times the longest one so far is a gap

After a break both the thousand and the longest begin anew. A real pause nearly always ends with one line moving; a
lost stretch seldom does, since every line went on in the meantime. So a gap behind which exactly one line differs
is only a note. Common practice, no source.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from decode.spans import BoolArray, IntArray

STEADY_INTERVALS = 1000
SILENCE_FACTOR = 8
STEP_FACTOR = 2
REPEATED_SHARE = 4
"""One row in this many must repeat the row above for a capture to count as one of every sample."""

_LONGEST = 2**59
"""Longer intervals count as this long, so that eight times the longest fits an int64."""


@dataclass(frozen=True, slots=True)
class Break:
    """row: index of the first row after it. kind: time_reversal or time_gap. ticks: how far back, or how long."""

    row: int
    kind: str
    ticks: int


class BreakFinder:
    """Finds breaks from row to row. `printed`: ticks by which two intervals of one length may differ: what the last
    printed digit is worth, or more where the times carry float noise."""

    def __init__(self, printed: int) -> None:
        self._printed = printed
        self._last: int | None = None
        self._restart()

    def _restart(self) -> None:
        self._intervals = 0
        self._repeated = 0
        self._longest = 0
        self._shortest = _LONGEST

    def resume(self) -> None:
        """Start anew behind rows that are missing: what comes next is not compared with what was fed."""
        self._last = None
        self._restart()

    def feed(self, times: IntArray, repeats: BoolArray) -> list[Break]:
        """The breaks among n further rows. repeats: (n,) whether all lines are as in the row above."""
        if times.size == 0:
            return []
        before = times[0] if self._last is None else self._last
        steps = np.diff(times, prepend=before)
        first = 1 if self._last is None else 0
        self._last = int(times[-1])
        return list(self._breaks(steps, repeats, first))

    def _breaks(self, steps: IntArray, repeats: BoolArray, first: int) -> Iterator[Break]:
        reversals = [int(row) for row in np.flatnonzero(steps < 0)]
        for stop in [*reversals, steps.size]:
            while (gap := self._maybe_gap(steps[first:stop], repeats[first:stop])) is not None:
                yield Break(first + gap, "time_gap", int(steps[first + gap]))
                first += gap + 1
                self._restart()
            if stop < steps.size:
                yield Break(stop, "time_reversal", -int(steps[stop]))
                first = stop + 1
                self._restart()

    def _maybe_gap(self, steps: IntArray, repeats: BoolArray) -> int | None:
        """Index of the first gap among steps that never fall, or None once all of them are taken in."""
        if steps.size == 0:
            return None
        longest = np.maximum.accumulate(np.concatenate([[self._longest], np.minimum(steps, _LONGEST)]))
        shortest = np.minimum.accumulate(np.concatenate([[self._shortest], np.minimum(steps, _LONGEST)]))
        intervals = self._intervals + np.arange(steps.size + 1)
        repeated = self._repeated + np.concatenate([[0], np.cumsum(repeats)])
        if intervals[-1] > STEADY_INTERVALS:
            every_sample = (longest - shortest <= self._printed) & (repeated * REPEATED_SHARE >= intervals)
            limit = np.where(every_sample, STEP_FACTOR * shortest - 1, SILENCE_FACTOR * longest)
            gaps = (intervals[:-1] >= STEADY_INTERVALS) & (steps > limit[:-1]) & (longest[:-1] > 0)
            if gaps.any():
                return int(np.argmax(gaps))
        self._intervals, self._repeated = int(intervals[-1]), int(repeated[-1])
        self._longest, self._shortest = int(longest[-1]), int(shortest[-1])
        return None
