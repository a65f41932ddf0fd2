"""The count at a frame's latch instant, interpolated between the A/B edges around it.

A count of c says that the shaft is somewhere in the cell [c, c + 1). The shaft enters that cell from below at c and
from above at c + 1, so an edge from count p to count c happens at the position (p + c + 1) / 2: c where the count
rises by one, c + 1 where it falls by one, the middle of what was skipped where a state was missed. With that reading
the position is continuous and the same in both senses of rotation.

Between two edges that follow each other in one sense the position is interpolated linearly in time. That is right as
far as the speed kept; how far it may be wrong follows from the neighbouring intervals (a steady acceleration a bends
the path by a T^2 / 8 over an interval T). Where that reaches half a count the shaft may as well have stood still, and
nothing is known beyond the cell: its middle, give or take half a count. Between two edges over the same boundary the
shaft turned round inside the cell: the parabola through the two crossings and the one next to them is taken, or the
cell's middle where it would leave the cell.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from decode.spans import BoolArray, FloatArray, IntArray

IndexArray = npt.NDArray[np.intp]

HALF_CELL = 0.5
"""Counts: all that a count alone tells."""

CYCLE = 4
"""States to a cycle: what the speed is taken over."""

STANDSTILL_RATIO = 4
"""An open interval this many times as long as its neighbour is a standstill. Common practice, no source."""


@dataclass(frozen=True, slots=True, eq=False)
class Joined:
    """The count at some latch instants, in the order they were fed.

    latches: (n,) ticks. counted: (n,) counts, NaN where no edge bounds the motion. speed: (n,) counts per tick, signed
    as the count, over the four states around (one cycle, so that unequal states cancel); NaN like counted.
    uncertainty: (n,) counts, how far `counted` may be off; NaN like counted.
    """

    latches: IntArray
    counted: FloatArray
    speed: FloatArray
    uncertainty: FloatArray


class LatchJoin:
    """Joins latch instants with A/B edges, wherever the capture is cut into spans.

    One object serves one unbroken stretch: where a span is not joined to the one before, take the rest with `finish`
    and begin a new one. It holds the latches that wait for their second next edge, and the edges that latches still
    to come may need.

    start: tick at which A/B is first known. start_count: count before the first edge.
    """

    def __init__(self, start: int, start_count: int = 0) -> None:
        self._start = self._until = self._settled = start
        self._count_before = start_count
        self._times: IntArray = np.empty(0, np.int64)
        self._counts: IntArray = np.empty(0, np.int64)
        self._boundaries: FloatArray = np.empty(0, np.float64)
        self._waiting: list[IntArray] = []

    def feed(
        self, times: IntArray, counts: IntArray, until: int, latches: IntArray, settled: int | None = None
    ) -> Joined:
        """Take the edges up to `until` and the latches known by now; give what can be told for good.

        times, counts: (n,) ticks, never falling, and the count after each edge. until: no later edge is before it.
        latches: (m,) ticks, never falling over all calls; they may lie far behind the edges. settled: no later
        latch is before it (default: the last latch fed); edges before it are forgotten.
        """
        self._add_edges(times, counts)
        self._until = until
        if latches.size:
            self._waiting.append(latches)
            self._settled = max(self._settled, int(latches[-1]))
        if settled is not None:
            self._settled = max(self._settled, settled)
        told = self._tell()
        self._forget()
        return told

    def finish(self) -> Joined:
        """What still waits, told as at the capture's end."""
        latches = self._take_waiting()
        return self._joined(latches)

    def _add_edges(self, times: IntArray, counts: IntArray) -> None:
        if times.size == 0:
            return
        before = np.concatenate([[self._count_before], counts[:-1]])
        self._count_before = int(counts[-1])
        self._times = np.concatenate([self._times, times])
        self._counts = np.concatenate([self._counts, counts])
        self._boundaries = np.concatenate([self._boundaries, (before + counts + 1) / 2])

    def _take_waiting(self) -> IntArray:
        latches = np.concatenate(self._waiting) if self._waiting else np.empty(0, np.int64)
        self._waiting = []
        return latches

    def _tell(self) -> Joined:
        """Only a latch with two edges after it, and a cycle about it, is told: they say how steady the speed was."""
        ready_before = self._times[-2] if self._times.size > CYCLE else self._start
        if not self._waiting or self._waiting[0][0] >= ready_before:
            return self._joined(np.empty(0, np.int64))
        latches = self._take_waiting()
        ready = int(np.searchsorted(latches, ready_before, side="left"))
        if ready < latches.size:
            self._waiting = [latches[ready:]]
        return self._joined(latches[:ready])

    def _forget(self) -> None:
        """Drop the edges that no latch can need: all but a cycle up to the earliest latch still possible."""
        horizon = min(self._settled, int(self._waiting[0][0])) if self._waiting else self._settled
        first = int(np.searchsorted(self._times, horizon, side="right")) - CYCLE
        if first > 0:
            self._times, self._counts = self._times[first:].copy(), self._counts[first:].copy()
            self._boundaries = self._boundaries[first:].copy()

    def _joined(self, latches: IntArray) -> Joined:
        counted, speed, uncertainty = (np.full(latches.size, np.nan) for _ in range(3))
        at = np.searchsorted(self._times, latches, side="right") - 1
        inside = (at >= 0) & (at < self._times.size - 1)
        if inside.any():
            counted[inside], speed[inside], uncertainty[inside] = self._between_edges(latches[inside], at[inside])
        for outside, count, standing in (
            (at < 0, self._count_at_start(), self._stands_at_start()),
            ((at >= 0) & ~inside, self._count_before, self._stands_at_end()),
        ):
            if standing:
                counted[outside], speed[outside], uncertainty[outside] = count + HALF_CELL, 0.0, HALF_CELL
        return Joined(latches, counted, speed, uncertainty)

    def _between_edges(self, latches: IntArray, at: IndexArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        times, boundaries = self._times, self._boundaries
        duration = (times[at + 1] - times[at]).astype(np.float64)
        fraction = (latches - times[at]) / duration
        step = boundaries[at + 1] - boundaries[at]
        inward = np.where(boundaries[at] > self._counts[at], -1.0, 1.0)
        turned = step == 0
        before = _bend(duration, *self._neighbour(at, -1, np.where(turned, inward, step)), turned)
        after = _bend(duration, *self._neighbour(at, 2, np.where(turned, -inward, step)), turned)
        bend = np.fmax(before, after)
        held = ~(bend < np.where(turned, 2 * HALF_CELL, HALF_CELL))
        bend = np.where(held, 0.0, bend)
        excursion = np.where(turned, inward * bend * 4 * fraction * (1 - fraction), 0.0)
        counted = boundaries[at] + step * fraction + excursion
        middle = np.where(turned, boundaries[at] + inward * HALF_CELL, boundaries[at] + step / 2)
        uncertainty = np.where(turned, bend / 2, bend) * np.maximum(np.abs(step), 1)
        low = np.clip(at - CYCLE // 2, 0, max(times.size - 1 - CYCLE, 0))
        high = np.minimum(low + CYCLE, times.size - 1)
        around = (boundaries[high] - boundaries[low]) / (times[high] - times[low])
        return (
            np.where(held, middle, counted),
            np.where(held, step / duration, around),
            np.where(held, HALF_CELL * np.maximum(np.abs(step), 1), uncertainty),
        )

    def _neighbour(self, at: IndexArray, edge: int, sense: FloatArray) -> tuple[FloatArray, BoolArray]:
        """Duration of the interval before (edge = -1) or after (edge = 2) the latch's own, and whether the shaft
        moved through it in that sense."""
        low = at - 1 if edge < 0 else at + 1
        exists = (low >= 0) & (low + 1 < self._times.size)
        low = np.where(exists, low, 0)
        moved = self._boundaries[low + 1] - self._boundaries[low]
        return (self._times[low + 1] - self._times[low]).astype(np.float64), exists & (moved * sense > 0)

    def _count_at_start(self) -> int:
        """The count before the first edge held; asked only where that is the stretch's first edge."""
        if self._times.size == 0:
            return self._count_before
        return int(2 * self._boundaries[0]) - 1 - int(self._counts[0])

    def _stands_at_start(self) -> bool:
        if self._times.size < 2:
            return True
        return bool(self._times[0] - self._start >= STANDSTILL_RATIO * (self._times[1] - self._times[0]))

    def _stands_at_end(self) -> bool:
        if self._times.size < 2:
            return True
        return bool(self._until - self._times[-1] >= STANDSTILL_RATIO * (self._times[-1] - self._times[-2]))


def _bend(duration: FloatArray, neighbour: FloatArray, same_sense: BoolArray, turned: BoolArray) -> FloatArray:
    """How far a steady acceleration carries the shaft off the straight line within the interval, in counts.

    Worked from the interval and one neighbour; NaN where the shaft did not move the same way through that, infinite
    where it has no duration.
    """
    room = 4 * neighbour * (neighbour + duration)
    reach = np.where(turned, duration * duration, np.abs(duration - neighbour) * duration)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(same_sense, np.where(room > 0, reach / room, np.inf), np.nan)
