"""Complementary pairs: the two lines of a differential output, each captured by itself.

A driver sends a line and its complement, so the two have opposite levels except while both change: for their skew,
some tens of nanoseconds at most. Both at one level for longer than that means that one leg is broken, not driven or
not probed. The line itself goes on as it is; its complement ends here.

    line        __|~~~~~~|______|~~~~~~|______
    complement  ~~|______|~~~~~~~~~~~~~~~~~~~~~     the complement stopped after its second edge
    equal         .      .      ========          one stretch, though the line crosses it again and again

A broken leg makes the pair equal in every other half period. That is one stretch, not thousands: it goes on until the
pair has changed properly again, both lines to their opposite levels within the skew.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import NamedTuple

import numpy as np

from decode.anomalies import Anomalies
from decode.spans import UNKNOWN, Edges, IntArray, Span

DEFAULT_SKEW_S = Fraction(50, 10**9)
"""Longest time for which the lines of a healthy RS-422 pair are seen equal. Common practice, no source."""

DEFAULT_SKEW_STEPS = 2
"""Sampling alone can shift each of the two edges by a step."""


def default_skew(tick: Fraction, grid: int) -> int:
    """The skew, in ticks, for a capture of `tick` seconds per tick sampled every `grid` ticks."""
    return max(math.ceil(DEFAULT_SKEW_S / tick), DEFAULT_SKEW_STEPS * grid)


class PairCombiner:
    """Spans with both lines of a pair to spans with the line alone; finds where the two are not complementary.

    pairs: a line's column to its complement's. skew: ticks for which both may be equal. Columns in no pair pass.
    """

    def __init__(self, pairs: Mapping[str, str], skew: int) -> None:
        self._pairs = [_Pair(line, complement, skew) for line, complement in pairs.items()]
        self._complements = frozenset(pairs.values())
        self._stop: int | None = None

    def feed(self, span: Span) -> Span:
        """The same window without the complements."""
        fresh = self._stop is None or not span.joined
        for pair in self._pairs:
            if fresh and self._stop is not None:
                pair.finish(self._stop)
            pair.feed(span, fresh)
        self._stop = span.stop
        lines = {name: edges for name, edges in span.lines.items() if name not in self._complements}
        return Span(span.start, span.stop, lines, span.joined)

    def finish(self) -> list[Anomalies]:
        """pair_mismatch for each pair that has any, once the capture has ended.

        Evidence: complement (its column), duration_ticks, level (of both at the start), line_edges and
        complement_edges (how often each moved meanwhile).
        """
        if self._stop is not None:
            for pair in self._pairs:
                pair.finish(self._stop)
        self._stop = None
        return [pair.anomalies() for pair in self._pairs if pair.found]


class _Begins(NamedTuple):
    """Where both lines become equal, as columns.

    time: ticks. level: of both. line_before, complement_before: edges of each until then. was: level of the line
    before that, UNKNOWN where the two were not opposed. changes: proper changes of the pair until then.
    """

    time: IntArray
    level: IntArray
    line_before: IntArray
    complement_before: IntArray
    was: IntArray
    changes: IntArray


class _Ends(NamedTuple):
    """Where both lines cease to be equal, as columns: ticks, edges of each up to there, the line's level if opposed."""

    time: IntArray
    line: IntArray
    complement: IntArray
    now: IntArray


class _Stretch(NamedTuple):
    """A time for which a pair is wrong, from its first beginning to its last end.

    line_before, complement_before: edges of each ahead of it. line, complement: edges of each up to its end.
    """

    start: int
    level: int
    line_before: int
    complement_before: int
    changes: int
    stop: int
    line: int
    complement: int

    @property
    def line_edges(self) -> int:
        return self.line - self.line_before

    @property
    def complement_edges(self) -> int:
        return self.complement - self.complement_before

    def cause(self) -> str | None:
        if self.line_edges == 0 and self.complement_edges > 0:
            return "the line stands still while its complement moves"
        if self.complement_edges == 0 and self.line_edges > 0:
            return "the complement stands still while its line moves"
        return None


@dataclass(slots=True)
class _Pair:
    """What is kept of one pair from span to span.

    line_edges, complement_edges, changes: so far. open: the equal time that still goes on (no row or one). found: the
    stretches, of which the last may still grow. sealed: how many of them may not, as a break lies behind them.
    """

    line: str
    complement: str
    skew: int
    line_edges: int = 0
    complement_edges: int = 0
    changes: int = 0
    open: _Begins = field(default_factory=lambda: _Begins(*[np.empty(0, np.int64)] * 6))
    found: list[_Stretch] = field(default_factory=list)
    sealed: int = 0

    def feed(self, span: Span, fresh: bool) -> None:
        line, complement = span.lines[self.line], span.lines[self.complement]
        if fresh and line.initial == complement.initial != UNKNOWN:
            edges = (self.line_edges, self.complement_edges)
            self.open = _Begins(*_columns(span.start, line.initial, *edges, UNKNOWN, self.changes))
        times = np.unique(np.concatenate([line.times, complement.times]))
        if times.size:
            self._take_in(*self._equal_times(line, complement, times))
        self.line_edges += line.times.size
        self.complement_edges += complement.times.size

    def finish(self, stop: int) -> None:
        """The lines end at `stop`: so does an equal time that still goes on."""
        if self.open.time.size:
            ends = _Ends(*_columns(stop, self.line_edges, self.complement_edges, UNKNOWN))
            self._take_in(self.open, ends)
        self.sealed = len(self.found)

    def _equal_times(self, line: Edges, complement: Edges, times: IntArray) -> tuple[_Begins, _Ends]:
        """Where the lines become equal (the open one first) and where they cease to, each tick as a whole."""
        ranks = [np.searchsorted(edges.times, times, side="right") for edges in (line, complement)]
        first = np.array([line.initial], np.int8), np.array([complement.initial], np.int8)
        levels = np.concatenate([first[0], line.levels_before(ranks[0])])
        others = np.concatenate([first[1], complement.levels_before(ranks[1])])
        known = (levels != UNKNOWN) & (others != UNKNOWN)
        alike = known & (levels == others)
        alike[0] = self.open.time.size > 0
        opposed = np.where(known & (levels != others), levels, np.int8(UNKNOWN)).astype(np.int64)
        counts = [
            np.concatenate([[0], rank]) + count
            for rank, count in zip(ranks, (self.line_edges, self.complement_edges), strict=True)
        ]
        begins = np.flatnonzero(alike[1:] & ~alike[:-1])
        ends = np.flatnonzero(~alike[1:] & alike[:-1])
        joined = self._joined(
            times[begins], levels[begins + 1], counts[0][begins], counts[1][begins], opposed[begins], begins * 0
        )
        stops = _Ends(times[ends], counts[0][ends + 1], counts[1][ends + 1], opposed[ends + 1])
        at_once = np.flatnonzero((opposed[1:] == 1 - opposed[:-1]) & (opposed[:-1] != UNKNOWN))
        return self._with_changes(joined, stops, times[at_once]), stops

    def _joined(self, *fresh: IntArray) -> _Begins:
        """The open beginning, if any, and those of a span behind it."""
        return _Begins(*[np.concatenate(pair).astype(np.int64) for pair in zip(self.open, fresh, strict=True)])

    def _with_changes(self, begins: _Begins, ends: _Ends, at_once: IntArray) -> _Begins:
        """The beginnings with the proper changes before each: `at_once` and those within the skew."""
        count = ends.time.size
        swapped = (ends.now == 1 - begins.was[:count]) & (ends.now != UNKNOWN)
        within = ends.time[swapped & (ends.time - begins.time[:count] <= self.skew)]
        ticks = np.sort(np.concatenate([at_once, within]))
        changes = self.changes + np.searchsorted(ticks, begins.time)
        changes[: self.open.time.size] = self.open.changes
        self.changes += ticks.size
        return begins._replace(changes=changes)

    def _take_in(self, begins: _Begins, ends: _Ends) -> None:
        """Add the equal times longer than the skew; those without a proper change between are one stretch."""
        count = ends.time.size
        self.open = _Begins(*[column[count:] for column in begins])
        long = ends.time - begins.time[:count] > self.skew
        begins, ends = _Begins(*[column[:count][long] for column in begins]), _Ends(*[column[long] for column in ends])
        if ends.time.size == 0:
            return
        first = np.flatnonzero(np.diff(begins.changes, prepend=-1))
        last = np.append(first[1:], ends.time.size) - 1
        begun = (begins.time, begins.level, begins.line_before, begins.complement_before, begins.changes)
        ended = (ends.time, ends.line, ends.complement)
        columns = [*(column[first] for column in begun), *(column[last] for column in ended)]
        rows = [_Stretch(*row) for row in np.column_stack(columns).tolist()]
        if len(self.found) > self.sealed and self.found[-1].changes == rows[0].changes:
            grown = rows.pop(0)
            self.found[-1] = self.found[-1]._replace(stop=grown.stop, line=grown.line, complement=grown.complement)
        self.found += rows

    def anomalies(self) -> Anomalies:
        found = self.found
        return Anomalies(
            "pair_mismatch",
            np.array([stretch.start for stretch in found], np.int64),
            line=self.line,
            causes=[stretch.cause() for stretch in found],
            evidence={
                "complement": [self.complement] * len(found),
                "duration_ticks": np.array([stretch.stop - stretch.start for stretch in found], np.int64),
                "level": np.array([stretch.level for stretch in found], np.int64),
                "line_edges": np.array([stretch.line_edges for stretch in found], np.int64),
                "complement_edges": np.array([stretch.complement_edges for stretch in found], np.int64),
            },
        )


def _columns(*values: int) -> list[IntArray]:
    return [np.array([value], np.int64) for value in values]
