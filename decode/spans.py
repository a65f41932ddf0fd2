"""Spans: the currency between the rooms.

A capture is never held whole. A reader yields spans: consecutive half-open windows of time [start, stop), each with
every line's level at its start and the edges inside it. Times are int64 ticks of the capture; how long a tick is, is
known to the capture alone, and seconds appear only in reports.

A machine is fed spans and returns tables. It must give the same tables wherever the capture was cut, so whatever is
not complete at the end of a span is kept for the next one. A span with `joined = False` does not continue the one
before it (the capture itself is broken there): a machine finishes what it holds as if the capture had ended and
starts afresh, blaming nothing on the cut.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

IntArray = npt.NDArray[np.int64]
LevelArray = npt.NDArray[np.int8]
FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

LOW, HIGH, UNKNOWN = 0, 1, 2

NO_TICK = np.iinfo(np.int64).min
"""Stands in a column of ticks where there is none: any other number, also a negative one, is a time."""


@dataclass(frozen=True, slots=True, eq=False)
class Edges:
    """The level changes of one line within a window.

    initial: level just before the first edge (0, 1, or 2 for unknown).
    times: (n,) ticks, never falling; two edges at one tick are a pulse shorter than the grid.
    levels: (n,) level after each edge; neighbours differ.
    """

    initial: int
    times: IntArray
    levels: LevelArray

    @classmethod
    def none(cls, level: int) -> Edges:
        """A line that stays at `level`."""
        return cls(level, np.empty(0, np.int64), np.empty(0, np.int8))

    @classmethod
    def from_toggles(cls, initial: int, times: Iterable[int] | IntArray) -> Edges:
        """A two-level line that starts at `initial` and changes at each of `times` (ticks)."""
        ticks = np.asarray(times if isinstance(times, np.ndarray) else list(times), np.int64)
        levels = ((np.arange(1, ticks.size + 1) + initial) & 1).astype(np.int8)
        return cls(initial, ticks, levels)

    @classmethod
    def from_samples(cls, times: IntArray, levels: LevelArray, before: int | None = None) -> Edges:
        """Edges of a sampled line; `before` is its level ahead of the first sample (None: that sample's own)."""
        if levels.size == 0:
            return cls.none(UNKNOWN if before is None else before)
        initial = int(levels[0]) if before is None else before
        changed = np.flatnonzero(np.diff(levels, prepend=np.int8(initial)))
        return cls(initial, times[changed], levels[changed])

    @property
    def final(self) -> int:
        """Level after the last edge."""
        return int(self.levels[-1]) if self.levels.size else self.initial

    def level_at(self, times: IntArray) -> LevelArray:
        """(m,) level at each of `times` (ticks); an edge at the very tick has already happened."""
        return self.levels_before(np.searchsorted(self.times, times, side="right"))

    def levels_before(self, positions: npt.NDArray[np.intp]) -> LevelArray:
        """(m,) level just before the edge at each of `positions` (an index from 0 to n)."""
        if self.levels.size == 0:
            return np.full(positions.shape, self.initial, np.int8)
        found = self.levels[np.maximum(positions - 1, 0)]
        return np.where(positions > 0, found, np.int8(self.initial)).astype(np.int8)

    def between(self, start: int, stop: int) -> Edges:
        """The edges with start <= time < stop; `initial` is the level just before `start`."""
        first, last = np.searchsorted(self.times, [start, stop], side="left")
        initial = int(self.levels[first - 1]) if first else self.initial
        return Edges(initial, self.times[first:last], self.levels[first:last])

    def then(self, later: Edges) -> Edges:
        """These edges followed by those of the next window."""
        if self.times.size == 0:
            return Edges(self.initial, later.times, later.levels)
        return Edges(
            self.initial,
            np.concatenate([self.times, later.times]),
            np.concatenate([self.levels, later.levels]),
        )


@dataclass(frozen=True, slots=True, eq=False)
class Span:
    """A half-open window [start, stop) of ticks with the edges of each line in it, by the line's column name."""

    start: int
    stop: int
    lines: Mapping[str, Edges] = field(default_factory=dict)
    joined: bool = True


def cut(span: Span, at: Iterable[int]) -> Iterator[Span]:
    """The same span as consecutive shorter ones, cut at each tick of `at` that lies inside it."""
    stops = sorted({tick for tick in at if span.start < tick < span.stop})
    start, joined = span.start, span.joined
    for stop in [*stops, span.stop]:
        yield Span(start, stop, {name: edges.between(start, stop) for name, edges in span.lines.items()}, joined)
        start, joined = stop, True
