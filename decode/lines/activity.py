"""Activity: what each line did over the whole capture, in a few numbers.

A line that never moves, or stops moving, is only wrong where its partners go on: a data line at rest beside a clock
at rest says nothing. So beside its own edges each line counts those of its partners since its last one.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np

from decode.spans import HIGH, LOW, Edges, Span

RECENT = 65
"""Edges of a line that are remembered."""


@dataclass(slots=True)
class LineActivity:
    """One line's activity.

    level_at_start: 0, 1 or 2 for unknown. edges: their number. first, last: ticks of its first and last edge, None
    without one. high_ticks, low_ticks: how long it was seen at each level. partner_edges: for each partner, its edges
    after this line's last one (all of them where this line has none). recent: ticks of its last edges.
    """

    level_at_start: int
    edges: int = 0
    first: int | None = None
    last: int | None = None
    recent: list[int] = field(default_factory=list)
    high_ticks: int = 0
    low_ticks: int = 0
    partner_edges: dict[str, int] = field(default_factory=dict)


class Activity:
    """Gathers the activity of `columns` over spans.

    partners: pairs of lines that should be busy together, such as ("A", "B"); each is the other's partner.
    """

    def __init__(self, columns: Iterable[str], partners: Iterable[tuple[str, str]] = ()) -> None:
        self._columns = tuple(columns)
        self._partners: dict[str, list[str]] = {column: [] for column in self._columns}
        for one, other in partners:
            self._partners[one].append(other)
            self._partners[other].append(one)
        self._lines: dict[str, LineActivity] = {}

    def feed(self, span: Span) -> None:
        """Take in the next span."""
        for column in self._columns:
            edges = span.lines[column]
            if column not in self._lines:
                self._lines[column] = LineActivity(
                    edges.initial, partner_edges=dict.fromkeys(self._partners[column], 0)
                )
            line = self._lines[column]
            _add_times(line, edges, span)
            _add_partners(line, edges, span)
            _add_edges(line, edges)

    def result(self) -> dict[str, LineActivity]:
        """The activity of each column so far, by name; empty before the first span."""
        return dict(self._lines)


def _add_edges(line: LineActivity, edges: Edges) -> None:
    if edges.times.size:
        line.edges += edges.times.size
        line.first = int(edges.times[0]) if line.first is None else line.first
        line.last = int(edges.times[-1])
        line.recent = [*line.recent, *edges.times[-RECENT:].tolist()][-RECENT:]


def _add_times(line: LineActivity, edges: Edges, span: Span) -> None:
    durations = np.diff(edges.times, prepend=span.start, append=span.stop)
    levels = np.concatenate([[edges.initial], edges.levels])
    line.high_ticks += int(durations[levels == HIGH].sum())
    line.low_ticks += int(durations[levels == LOW].sum())


def _add_partners(line: LineActivity, edges: Edges, span: Span) -> None:
    for partner in line.partner_edges:
        times = span.lines[partner].times
        if edges.times.size:
            line.partner_edges[partner] = times.size - int(np.searchsorted(times, edges.times[-1], side="right"))
        else:
            line.partner_edges[partner] += times.size
