"""The way the shaft went, in counts, as far as A and B tell.

The count of a plain decoder loses two for each illegal step. Where the steps before and after it agree in direction
the step was plainly two counts that way, so the place of the shaft stays known and only the plain count is wrong; where
they do not, the place is lost, and what is judged by it must not reach across: each loss starts a new `stretch`.

A place is where an edge lies: count c reaches from place c to c + 1, so an edge has the same place whichever way it is
passed. An index edge between two A/B edges lies between their places in proportion to time.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from decode.spans import BoolArray, Edges, FloatArray, IntArray, LevelArray


@dataclass(frozen=True, slots=True, eq=False)
class IndexEdges:
    """Edges of the index line with where the shaft was.

    times: (n,) ticks. before, level: (n,) level of the index before and after. place: (n,) counts. direction: (n,) of
    the nearest A/B step. state: (n,) place in the cycle at that time, -1 unknown. count: (n,) count at that time.
    lasts: (n,) ticks between the A/B edges around it, 0 where one is missing. stretch: (n,) see above. piece: (n,)
    number of the joined part of the capture.
    """

    times: IntArray
    before: LevelArray
    level: LevelArray
    place: FloatArray
    direction: LevelArray
    state: LevelArray
    count: IntArray
    lasts: IntArray
    stretch: IntArray
    piece: IntArray


@dataclass(frozen=True, slots=True, eq=False)
class Trace:
    """A thinned record of the way: times (n,) ticks, place (n,) counts, stretch (n,)."""

    times: IntArray
    place: FloatArray
    stretch: IntArray


@dataclass(frozen=True, slots=True, eq=False)
class IllegalSteps:
    """Steps in which both lines changed: times (n,) ticks, before and after (n,) places in the cycle, lost (n,) counts
    that a plain counter lacks for it, 0 where that is not known."""

    times: IntArray
    before: LevelArray
    after: LevelArray
    lost: IntArray


@dataclass(frozen=True, slots=True, eq=False)
class _Way:
    """Placed steps: times, place, step, state after (place in the cycle), counts after, stretch; each (n,)."""

    times: IntArray
    place: FloatArray
    step: LevelArray
    state: LevelArray
    counts: IntArray
    stretch: IntArray

    def then(self, later: _Way) -> _Way:
        return _Way(*(np.concatenate([getattr(self, name), getattr(later, name)]) for name in _WAY))

    def end(self) -> _Way:
        return _Way(*(getattr(self, name)[-1:].copy() for name in _WAY))


_WAY = ("times", "place", "step", "state", "counts", "stretch")


def _nowhere(count: int, stretch: int) -> _Way:
    """A piece of the capture without a single step: all that is known is the count before it."""
    level = np.full(1, -1, np.int8)
    zero = np.zeros(1, np.int64)
    return _Way(zero, np.full(1, float(count)), level * 0, level, zero + count, zero + stretch)


class Path:
    """Follows the place through clean steps and puts index edges onto it, window by window."""

    def __init__(self, thinning: int) -> None:
        self._thinning = thinning
        self._count = 0
        self._stretch = 0
        self._piece = 0
        self._index: list[IndexEdges] = []
        self._trace: list[Trace] = []
        self._illegal: list[IllegalSteps] = []
        self._clear()

    def _clear(self) -> None:
        none = np.empty(0, np.int64)
        self._times = none
        self._step = np.empty(0, np.int8)
        self._after = np.empty(0, np.int8)
        self._before = np.empty(0, np.int8)
        self._lost = np.empty(0, np.bool_)
        self._illegal_now = np.empty(0, np.bool_)
        self._pending = Edges.none(0)
        self._known: _Way | None = None

    def add(
        self,
        times: IntArray,
        step: LevelArray,
        before: LevelArray,
        after: LevelArray,
        illegal: BoolArray,
        unknown: BoolArray,
        index: Edges,
    ) -> None:
        """The next clean steps (n,) and the next index edges."""
        self._times = np.concatenate([self._times, times])
        self._step = np.concatenate([self._step, step])
        self._before = np.concatenate([self._before, before])
        self._after = np.concatenate([self._after, after])
        self._illegal_now = np.concatenate([self._illegal_now, illegal])
        self._lost = np.concatenate([self._lost, unknown])
        self._pending = self._pending.then(index) if self._pending.times.size else index
        self._advance(self._times.size - 1, last=False)

    def end_piece(self) -> None:
        """The capture ends here, or is broken here."""
        self._advance(self._times.size, last=True)
        self._clear()
        self._piece += 1
        self._stretch += 1

    def _advance(self, ready: int, *, last: bool) -> None:
        """Place the first `ready` of the waiting steps; a step needs the one after it."""
        if ready > 0:
            way = self._place_steps(ready)
            self._place_index(way if self._known is None else self._known.then(way), last)
            self._known = way.end()
            self._times, self._step = self._times[ready:], self._step[ready:]
            self._before, self._after = self._before[ready:], self._after[ready:]
            self._illegal_now, self._lost = self._illegal_now[ready:], self._lost[ready:]
        elif last:
            self._place_index(self._known or _nowhere(self._count, self._stretch), last)

    def _place_steps(self, ready: int) -> _Way:
        previous = 0 if self._known is None else int(self._known.step[0])
        around = np.concatenate([[previous], self._step, [0]]).astype(np.int64)
        earlier, later = around[:ready], around[2 : ready + 2]
        illegal = self._illegal_now[:ready]
        bridged = np.where(illegal & (earlier == later), 2 * earlier, 0)
        lost = self._lost[:ready] | (illegal & (bridged == 0))
        moved = np.asarray(self._step[:ready] + bridged, np.int64)
        counts = self._count + np.cumsum(moved)
        stretch = self._stretch + np.cumsum(lost)
        place = (counts + counts - moved + 1) / 2
        times = self._times[:ready]
        which = np.flatnonzero(illegal)
        if which.size:
            self._illegal.append(IllegalSteps(times[which], self._before[which], self._after[which], bridged[which]))
        cell = counts // self._thinning
        first = np.concatenate([[self._count // self._thinning], cell[:-1]])
        kept = np.flatnonzero((cell != first) | lost)
        if kept.size:
            self._trace.append(Trace(times[kept], place[kept], stretch[kept]))
        self._count, self._stretch = int(counts[-1]), int(stretch[-1])
        return _Way(times, place, np.sign(moved).astype(np.int8), self._after[:ready], counts, stretch)

    def _place_index(self, way: _Way, last: bool) -> None:
        """Index edges before the end of `way`, or all that wait where no more steps come."""
        edges = self._pending
        ready = edges.times.size if last else int(np.searchsorted(edges.times, way.times[-1], "left"))
        if ready == 0:
            return
        ticks = edges.times[:ready]
        before = np.concatenate([[edges.initial], edges.levels[: ready - 1]]).astype(np.int8)
        row = np.searchsorted(way.times, ticks, "right") - 1
        known = (row >= 0) & (row < way.times.size - 1)
        row = np.maximum(row, 0)
        after = np.minimum(row + 1, way.times.size - 1)
        lasts = np.where(known, way.times[after] - way.times[row], 0)
        share = np.where(known, (ticks - way.times[row]) / np.maximum(lasts, 1), 0)
        self._index.append(
            IndexEdges(
                ticks,
                before,
                edges.levels[:ready],
                way.place[row] + share * (way.place[after] - way.place[row]),
                way.step[np.where(share > 0.5, after, row)],
                way.state[row],
                way.counts[row],
                lasts,
                way.stretch[row],
                np.full(ready, self._piece, np.int64),
            )
        )
        self._pending = Edges(int(edges.levels[ready - 1]), edges.times[ready:], edges.levels[ready:])

    def index_edges(self) -> IndexEdges:
        """All index edges so far."""
        none = np.empty(0, np.int64)
        level = np.empty(0, np.int8)
        parts = self._index or [IndexEdges(none, level, level, np.empty(0), level, level, none, none, none, none)]
        names = IndexEdges.__dataclass_fields__
        return IndexEdges(*(np.concatenate([getattr(part, name) for part in parts]) for name in names))

    def trace(self) -> Trace:
        """The thinned way so far."""
        none = np.empty(0, np.int64)
        parts = self._trace or [Trace(none, np.empty(0), none)]
        return Trace(*(np.concatenate([getattr(part, name) for part in parts]) for name in Trace.__dataclass_fields__))

    def illegal_steps(self) -> IllegalSteps:
        """All illegal steps so far."""
        level = np.empty(0, np.int8)
        parts = self._illegal or [IllegalSteps(np.empty(0, np.int64), level, level, np.empty(0, np.int64))]
        names = IllegalSteps.__dataclass_fields__
        return IllegalSteps(*(np.concatenate([getattr(part, name) for part in parts]) for name in names))
