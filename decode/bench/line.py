"""A line before it is sampled: a level and the instants at which it changes, in picoseconds from the capture's start.

An analyser shows a line's level at each tick of its grid. A change is shown at the tick it falls into, and an even
number of changes within one tick is not seen at all.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from decode.spans import BoolArray, Edges, IntArray, LevelArray

PS_PER_SECOND = 10**12
ABSENT = np.int64(np.iinfo(np.int64).max)
"""Stands in a table of instants where there is none; sorts behind every real one."""


def to_ps(seconds: float) -> int:
    """The nearest picosecond."""
    return round(seconds * PS_PER_SECOND)


@dataclass(frozen=True, slots=True, eq=False)
class Line:
    """initial: level before the first change. toggles: (n,) instants of the changes, never falling, in ps."""

    initial: int
    toggles: IntArray

    @classmethod
    def from_levels(cls, initial: int, times: IntArray, levels: LevelArray) -> Line:
        """A line that is set to levels[i] at times[i] (rising)."""
        return cls(initial, times[np.diff(levels, prepend=np.int8(initial)) != 0])

    @classmethod
    def from_windows(cls, windows: IntArray) -> Line:
        """A line that is high within each of the (m, 2) windows (rising, apart from each other)."""
        flat = windows.ravel()
        return cls(0, flat[flat != ABSENT])

    def level_at(self, time: int) -> int:
        """The level at an instant; a change at that very instant has happened."""
        return (self.initial + int(np.searchsorted(self.toggles, time, side="right"))) & 1

    def inverted(self) -> Line:
        return Line(1 - self.initial, self.toggles)

    def toggled_at(self, *times: int) -> Line:
        """The line with a further change at each of `times`: its level between two of them is turned over."""
        return Line(self.initial, np.sort(np.concatenate([self.toggles, np.array(times, np.int64)])))

    def held(self, start: int, stop: int | None, level: int | None) -> Line:
        """The line held at `level` (None: the one it has at `start`) from `start` to `stop` (None: for good)."""
        level = self.level_at(start) if level is None else level
        before = self.toggles[self.toggles <= start]
        parts = [before]
        if self.level_at(start) != level:
            parts.append(np.array([start], np.int64))
        if stop is not None:
            after = self.toggles[self.toggles > stop]
            if self.level_at(stop) != level:
                parts.append(np.array([stop], np.int64))
            parts.append(after)
        return Line(self.initial, np.concatenate(parts))


@dataclass(frozen=True, slots=True)
class Grid:
    """The analyser's sampling grid. first: the tick on which picosecond 0 falls. ticks: how many there are."""

    rate: Fraction
    first: int
    ticks: int

    @property
    def stop(self) -> int:
        return self.first + self.ticks

    def tick_of(self, times: IntArray) -> IntArray:
        """The tick each instant (ps) falls into: exact floor of time times rate."""
        per_ps = self.rate / PS_PER_SECOND
        whole, rest = np.divmod(times, per_ps.denominator)
        return np.asarray(whole * per_ps.numerator + rest * per_ps.numerator // per_ps.denominator + self.first)

    def sampled(self, line: Line) -> Edges:
        """What the analyser shows of a line within the capture."""
        ticks, changes = np.unique(self.tick_of(line.toggles), return_counts=True)
        seen = ticks[changes % 2 == 1]
        before = int(np.searchsorted(seen, self.first, side="right"))
        within = seen[before : np.searchsorted(seen, self.stop)]
        return Edges.from_toggles((line.initial + before) & 1, within)


def present(times: IntArray) -> BoolArray:
    """Where a table of instants holds one."""
    return np.asarray(times != ABSENT)
