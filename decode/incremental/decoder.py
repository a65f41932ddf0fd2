"""Edges of A, B and the index to counts, widths, spacing, turns and faults, window by window.

Two streams run side by side. The plain count takes every edge as it comes and is what a four-count counter on the
same lines would show. The figures about widths, the way of the shaft and the index are taken from the lines without
short pulses, a few edges later, since telling a short pulse takes the edges after it. Nothing else is kept than those
few edges, histograms, one row an index edge, a thinned record of the way and what was found wrong.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from decode.anomalies import Anomalies
from decode.incremental.index import SKEW_S, Glitch, IndexReading, IndexRules, read_index
from decode.incremental.path import Path
from decode.incremental.pulses import RATIO, Cleaned, Clusters, PulseFilter
from decode.incremental.quadrature import PLACE_OF_PAIR, Counts, Steps, naive_single_count, state_name, steps_of
from decode.incremental.result import IncrementalResult, assemble
from decode.incremental.widths import ANGLE_QUANTUM_DEG, CLASSES, NARROW, ByClass, Widths
from decode.sheet import Incremental
from decode.spans import UNKNOWN, BoolArray, Edges, IntArray, LevelArray, Span

SHORT_PERCENT = 1.0
"""The shortest normal state of a capture is this percentile of its states (common practice, no source)."""

FEW_STATES = 8
"""Below so many states a capture has no shortest normal one."""

STANDSTILL_RATIO = 100
"""Without a normal state, a glitch is this much shorter than the quiet time before it (common practice, no source)."""


class QuadratureDecoder:
    """Decodes one set of A, B and index lines.

    Parameters
    ----------
    a, b, index: names of the lines in `Span.lines`; index may be None.
    sheet: what the encoder is meant to do, None where nothing is stated.
    tick_s: seconds in a tick.
    shortest_spacing_ticks: stated minimum between two edges of A and B, None for none.
    """

    def __init__(
        self,
        a: str,
        b: str,
        index: str | None,
        sheet: Incremental | None,
        tick_s: float,
        shortest_spacing_ticks: float | None = None,
    ) -> None:
        self._a, self._b, self._index = a, b, index
        self._sheet = sheet or Incremental()
        self._tick_s = tick_s
        self._widths = Widths(shortest_spacing_ticks)
        turn = self._sheet.counts_per_turn
        self._path = Path(256 if turn is None else max(1, turn // 16))
        self._dropped: tuple[list[Clusters], list[Clusters]] = ([], [])
        self._filter: PulseFilter | None = None
        self._stop = 0
        self._count = 0
        self._clean_count = 0
        self._edges = 0
        self._illegal = 0
        self._naive = 0

    def feed(self, span: Span) -> Counts:
        """The count at every A/B edge of this span; a span that does not continue the one before starts afresh."""
        a, b = span.lines[self._a], span.lines[self._b]
        index = span.lines[self._index] if self._index is not None else Edges.none(UNKNOWN)
        if self._filter is None or not span.joined:
            self._end_piece()
            self._begin_piece(span.start, a, b)
        assert self._filter is not None
        self._stop = span.stop
        self._take(self._filter.feed(a, b, span.stop), index)
        return self._count_plainly(a, b)

    def finish(self) -> IncrementalResult:
        """Everything else, once the capture is over. Call it once."""
        self._end_piece()
        spacing = self._widths.spacing.of(1.0, *range(CLASSES))
        shortest = int(spacing.percentile(SHORT_PERCENT)) if spacing.n >= FEW_STATES else None
        reading = self._read_index(shortest)
        glitches = [
            _glitches(self._dropped[0], shortest, self._a),
            _glitches(self._dropped[1], shortest, self._b),
        ]
        if reading is not None and self._index is not None:
            glitches.append(_index_glitches(reading.glitches, self._index))
        anomalies = [self._illegal_steps(), *glitches, self._close_edges()]
        anomalies += reading.anomalies if reading is not None else []
        return assemble(
            self._sheet,
            self._tick_s,
            self._widths,
            reading,
            [anomaly for anomaly in anomalies if len(anomaly)],
            edges=self._edges,
            net_counts=self._count,
            illegal=self._illegal,
            x1_naive=self._naive,
            x4_without_short_pulses=self._clean_count,
            short_pulse_ticks=None if shortest is None else shortest / RATIO,
        )

    def _begin_piece(self, start: int, a: Edges, b: Edges) -> None:
        self._filter = PulseFilter(start, a.initial, b.initial)
        self._clean_a, self._clean_b = Edges.none(a.initial), Edges.none(b.initial)
        self._marks = np.empty(0, np.int64)

    def _end_piece(self) -> None:
        """The capture ends, or is broken: what waits is decided as it stands."""
        if self._filter is None:
            return
        nothing = Edges.none(UNKNOWN)
        self._take(self._filter.feed(nothing, nothing, self._stop, last=True), nothing)
        self._path.end_piece()
        self._widths.restart()
        self._filter = None

    def _count_plainly(self, a: Edges, b: Edges) -> Counts:
        steps = steps_of(a, b)
        start = self._count
        counts = start + np.cumsum(steps.step, dtype=np.int64)
        self._edges += a.times.size + b.times.size
        self._illegal += int(np.count_nonzero(steps.illegal))
        self._naive += naive_single_count(steps)
        self._count = int(counts[-1]) if counts.size else start
        return Counts(steps.times, counts, steps.illegal, start)

    def _take(self, cleaned: Cleaned, index: Edges) -> None:
        """Clean edges below the horizon go on to the figures and the path."""
        for kept, clusters in zip(self._dropped, cleaned.dropped, strict=True):
            if clusters.first.size:
                kept.append(clusters)
                self._marks = np.concatenate([self._marks, clusters.first, clusters.last])
        a, b = self._clean_a.then(cleaned.a), self._clean_b.then(cleaned.b)
        below_a, below_b = np.searchsorted(a.times, cleaned.horizon), np.searchsorted(b.times, cleaned.horizon)
        steps = steps_of(
            Edges(a.initial, a.times[:below_a], a.levels[:below_a]),
            Edges(b.initial, b.times[:below_b], b.levels[:below_b]),
        )
        self._clean_a, self._clean_b = _rest(a, int(below_a)), _rest(b, int(below_b))
        self._clean_count += int(steps.step.sum(dtype=np.int64))
        self._follow(steps, index)

    def _follow(self, steps: Steps, index: Edges) -> None:
        usable = ~(steps.illegal | steps.unknown)
        if self._marks.size and steps.times.size:
            row = np.searchsorted(steps.times, self._marks, "left")
            usable[row[row < usable.size]] = False
            self._marks = self._marks[row == usable.size]
        before, after = PLACE_OF_PAIR[steps.before], PLACE_OF_PAIR[steps.after]
        self._widths.add(steps.times, steps.step, before, usable)
        self._path.add(steps.times, steps.step, before, after, steps.illegal, steps.unknown, index)

    def _read_index(self, shortest: int | None) -> IndexReading | None:
        if self._index is None:
            return None
        sheet = self._sheet
        rules = IndexRules(
            sheet.counts_per_turn,
            sheet.index_width_counts,
            sheet.index_states,
            shortest,
            SKEW_S / self._tick_s,
            self._index,
        )
        return read_index(self._path.index_edges(), self._path.trace(), rules)

    def _illegal_steps(self) -> Anomalies:
        illegal = self._path.illegal_steps()
        return Anomalies(
            "illegal_transition",
            illegal.times,
            evidence={
                "before": [state_name(int(place)) for place in illegal.before],
                "after": [state_name(int(place)) for place in illegal.after],
                "counts_lost": illegal.lost,
            },
        )

    def _close_edges(self) -> Anomalies:
        """Edges too close to each other, unless their state is that narrow all over the capture."""
        state, spacing = self._widths.state, self._widths.spacing
        narrow = self._widths.narrow.columns()
        chosen = [narrow.of_classes(_typically(state, lambda median: median >= NARROW))]
        limit = self._widths.shortest_spacing_ticks
        if limit is not None:
            below = self._widths.below_limit.columns()
            chosen.append(below.of_classes(_typically(spacing, lambda median: median + 1 >= limit)))
        times = np.concatenate([rows.times for rows in chosen])
        times, first = np.unique(times, return_index=True)
        angle = np.concatenate([rows.angle for rows in chosen])[first]
        return Anomalies(
            "edge_too_close",
            times,
            evidence={
                "spacing_ticks": np.concatenate([rows.spacing for rows in chosen])[first],
                "state_width_deg": [None if one < 0 else round(float(one) * ANGLE_QUANTUM_DEG, 2) for one in angle],
                "state": [
                    state_name(int(one) >> 1) for one in np.concatenate([rows.classes for rows in chosen])[first]
                ],
            },
        )


def _typically(figures: ByClass, fits: Callable[[float], bool]) -> BoolArray:
    """(CLASSES,) for each class whether its median fits; a class without figures does not."""
    found = np.zeros(CLASSES, np.bool_)
    for one in range(CLASSES):
        here = figures.of(1.0, one)
        found[one] = here.n > 0 and fits(here.percentile(50))
    return found


def _rest(edges: Edges, first: int) -> Edges:
    initial = int(edges.levels[first - 1]) if first else edges.initial
    return Edges(initial, edges.times[first:], edges.levels[first:])


def _glitches(dropped: list[Clusters], shortest: int | None, line: str) -> Anomalies:
    """The dropped groups that are too short by the measure of the whole capture."""
    if not dropped:
        return Anomalies("glitch", np.empty(0, np.int64), line=line)
    shortest_gap = np.concatenate([part.shortest for part in dropped])
    quiet = np.concatenate([part.quiet for part in dropped])
    real = STANDSTILL_RATIO * shortest_gap < quiet if shortest is None else RATIO * shortest_gap < shortest
    rows = {name: np.concatenate([getattr(part, name) for part in dropped])[real] for name in _GLITCH_COLUMNS}
    found = _glitch_anomalies(rows["at"], rows["last"], rows["shortest"], rows["toggles"], rows["level"], line)
    # Where the shaft stands on an edge its line chatters at any pace; that is worth a note and no fault.
    return found if shortest is not None else replace(found, severity="note")


_GLITCH_COLUMNS = ("at", "last", "shortest", "toggles", "level")


def _index_glitches(glitches: list[Glitch], line: str) -> Anomalies:
    rows = [(one.first, one.last, one.width, one.toggles, int(one.high)) for one in glitches]
    first, last, width, toggles, level = np.array(rows, np.int64).reshape(-1, 5).T
    return _glitch_anomalies(first, last, width, toggles, level, line)


def _glitch_anomalies(
    first: IntArray, last: IntArray, width: IntArray, toggles: IntArray, level: IntArray | LevelArray, line: str
) -> Anomalies:
    return Anomalies(
        "glitch",
        first,
        line=line,
        evidence={
            "width_ticks": width,
            "stop_ticks": last,
            "edges": toggles,
            "level": level,
            "at_a_true_edge": toggles % 2 == 1,
        },
    )
