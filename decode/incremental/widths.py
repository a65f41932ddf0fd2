"""Electrical angles from edge times, with the speed taken out.

A time becomes an angle by dividing it by the time of a whole cycle at the same place. A whole cycle is the only ruler
that uneven states do not bend, and one laid symmetrically about what it measures is right under constant
acceleration too. With t[i] the time of edge i, in steady motion four edges to a cycle:

    state between edges i-1 and i   360 * 2 (t[i] - t[i-1]) / ((t[i+1] - t[i-3]) + (t[i+2] - t[i-2]))
    pulse about edge i              360 * (t[i+1] - t[i-1]) / (t[i+2] - t[i-2])
    phase from i-1, i to i+1, i+2   360 * (t[i] + t[i+2] - t[i-1] - t[i+1]) / ((t[i+2] - t[i-2]) + (t[i+3] - t[i-1]))
    error of edge i                 360 * (t[i] - (t[i-2] + t[i+2]) / 2 + bend) / (t[i+2] - t[i-2])
    bend                            ((t[i+6] - t[i+2]) - (t[i-2] - t[i-6])) / 16

`bend` takes the acceleration out of the midpoint and holds edges of two opposite kinds in equal parts, so that no
unevenness gets in by it. All this is asked only where 13 edges in a row go one way, nothing among them is illegal,
unknown or dropped, and the three cycles they make differ by no more than a sixth: from standstill that is after 24
counts, and then what is left of a constant acceleration is below 0.3 degrees, with states uneven by 10 degrees too. The
three cycles begin and end at edges i-6, i-2, i+2 and i+6, so a displaced edge does not hide itself.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from decode.distribution import Distribution
from decode.spans import BoolArray, FloatArray, IntArray, LevelArray

ANGLE_QUANTUM_DEG = 0.01
_PER_TURN = 36_000
NARROW = _PER_TURN // 16
"""Quanta: a quarter of the nominal state; what is narrower is too close (common practice, no source)."""

REACH = 6
HISTORY = 2 * REACH + 1
"""So many rows before the new ones must be at hand."""

CLASSES = 8
"""A class is 2 * place in the cycle before the step + (1 if the count falls)."""


class ByClass:
    """Exact histograms of whole numbers in up to 16 classes, kept as one."""

    def __init__(self) -> None:
        self._keys = Distribution(1.0)

    def add(self, numbers: IntArray, classes: IntArray) -> None:
        """Count each of `numbers` (n,) in its class (n,)."""
        _count_into(self._keys, numbers * 16 + classes)

    def of(self, quantum: float, *classes: int) -> Distribution:
        """What the classes named hold together."""
        found = Distribution(quantum)
        here = self._keys.values & 15
        for one in classes:
            chosen = here == one
            found.add_counted(self._keys.values[chosen] >> 4, self._keys.counts[chosen])
        return found


def _count_into(distribution: Distribution, numbers: IntArray) -> None:
    """`distribution.add`, faster where many numbers lie in a narrow range."""
    if numbers.size == 0:
        return
    lowest = int(numbers.min())
    width = int(numbers.max()) - lowest + 1
    if width > 4 * numbers.size:
        distribution.add(numbers)
        return
    counts = np.bincount(numbers - lowest, minlength=width).astype(np.int64)
    present = np.flatnonzero(counts)
    distribution.add_counted(present + lowest, counts[present])


@dataclass(frozen=True, slots=True, eq=False)
class CloseEdges:
    """Edges that follow one of the other line too closely.

    times: (n,) ticks. spacing: (n,) ticks since the edge before. angle: (n,) width of the state in quanta of
    `ANGLE_QUANTUM_DEG`, -1 where it was not measured. classes: (n,).
    """

    times: IntArray
    spacing: IntArray
    angle: IntArray
    classes: IntArray

    def of_classes(self, chosen: BoolArray) -> CloseEdges:
        """The rows whose class is chosen (CLASSES,)."""
        keep = chosen[self.classes]
        return CloseEdges(self.times[keep], self.spacing[keep], self.angle[keep], self.classes[keep])


class _Parts:
    """Columns that arrive in parts."""

    def __init__(self) -> None:
        self._parts: list[CloseEdges] = []

    def add(self, rows: CloseEdges) -> None:
        if rows.times.size:
            self._parts.append(rows)

    def columns(self) -> CloseEdges:
        none = np.empty(0, np.int64)
        parts = self._parts or [CloseEdges(none, none, none, none)]
        return CloseEdges(
            np.concatenate([part.times for part in parts]),
            np.concatenate([part.spacing for part in parts]),
            np.concatenate([part.angle for part in parts]),
            np.concatenate([part.classes for part in parts]),
        )


class Widths:
    """Collects the figures of one capture from its clean steps, window by window."""

    def __init__(self, shortest_spacing_ticks: float | None) -> None:
        self.shortest_spacing_ticks = shortest_spacing_ticks
        self.spacing = ByClass()
        self.cycle = ByClass()
        self.state = ByClass()
        self.pulse = ByClass()
        self.phase = ByClass()
        self.error = ByClass()
        self.narrow = _Parts()
        self.below_limit = _Parts()
        self.restart()

    def restart(self) -> None:
        """What comes next does not continue what came before."""
        self._times = np.zeros(HISTORY, np.int64)
        self._step = np.zeros(HISTORY, np.int8)
        self._place = np.full(HISTORY, -1, np.int8)
        self._usable = np.zeros(HISTORY, np.bool_)

    def add(self, times: IntArray, step: LevelArray, place: LevelArray, usable: BoolArray) -> None:
        """The next clean edges (n,): step -1, 0 or 1, place in the cycle before it, and whether the edge is beyond
        doubt."""
        if times.size == 0:
            return
        self._times = np.concatenate([self._times, times])
        self._step = np.concatenate([self._step, step])
        self._place = np.concatenate([self._place, place])
        self._usable = np.concatenate([self._usable, usable])
        steady = np.zeros(self._step.size, np.bool_)
        steady[1:] = (self._step[1:] == self._step[:-1]) & (self._step[1:] != 0) & self._usable[1:]
        broken = np.cumsum(~steady, dtype=np.int64)
        classes = 2 * self._place.astype(np.int64) + (self._step < 0)
        self._add_spacing(classes, steady)
        self._add_cycles(classes, broken)
        self._add_angles(classes, broken)
        self._times, self._step = self._times[-HISTORY:], self._step[-HISTORY:]
        self._place, self._usable = self._place[-HISTORY:], self._usable[-HISTORY:]

    def _add_spacing(self, classes: IntArray, steady: BoolArray) -> None:
        rows = np.flatnonzero(steady[HISTORY:]) + HISTORY
        spacing = self._times[rows] - self._times[rows - 1]
        self.spacing.add(spacing, classes[rows])
        if self.shortest_spacing_ticks is not None:
            close = spacing + 1 < self.shortest_spacing_ticks
            times, unmeasured = self._times[rows[close]], np.full(np.count_nonzero(close), -1, np.int64)
            self.below_limit.add(CloseEdges(times, spacing[close], unmeasured, classes[rows[close]]))

    def _add_cycles(self, classes: IntArray, broken: IntArray) -> None:
        """One cycle of each revolution of the state: the one that ends where state a=0 b=0 is left."""
        rows = np.arange(HISTORY, self._times.size)
        rows = rows[(broken[rows] == broken[rows - 4]) & (self._place[rows] == 0)]
        self.cycle.add(self._times[rows] - self._times[rows - 4], classes[rows])

    def _add_angles(self, classes: IntArray, broken: IntArray) -> None:
        i = np.arange(HISTORY - REACH, self._times.size - REACH)
        i = i[broken[i + REACH] == broken[i - REACH]]
        t = self._times
        after, before = t[i + 6] - t[i + 2], t[i - 2] - t[i - 6]
        cycle, around = t[i + 2] - t[i - 2], after + before
        even = (12 * (np.abs(after - before) - 2) <= around) & (6 * (np.abs(2 * cycle - around) - 4) <= around)
        i, cycle = i[even], cycle[even]
        if i.size == 0:
            return
        classes = classes[i]
        state = _angle(2 * (t[i] - t[i - 1]), cycle + t[i + 1] - t[i - 3])
        self.state.add(state, classes)
        narrow = state < NARROW
        close = i[narrow]
        self.narrow.add(CloseEdges(t[close], t[close] - t[close - 1], state[narrow], classes[narrow]))
        bend = (t[i + 6] - t[i + 2]) - (t[i - 2] - t[i - 6])
        late = _angle(16 * t[i] - 8 * (t[i - 2] + t[i + 2]) + bend, 16 * cycle)
        self.error.add(late * self._step[i], classes)
        self.pulse.add(_angle(t[i + 1] - t[i - 1], cycle), classes)
        lead = np.flatnonzero((classes >> 1 == 1) & (classes & 1 == 0) | (classes >> 1 == 3) & (classes & 1 == 1))
        first, ruler = i[lead], cycle[lead] + t[i[lead] + 3] - t[i[lead] - 1]
        distance = t[first] + t[first + 2] - t[first - 1] - t[first + 1]
        self.phase.add(_angle(distance, ruler), classes[lead])


def _angle(part: IntArray, whole: IntArray) -> IntArray:
    """part / whole cycles in quanta of `ANGLE_QUANTUM_DEG`, to the nearest."""
    ratio: FloatArray = part * float(_PER_TURN) / whole
    return np.rint(ratio).astype(np.int64)
