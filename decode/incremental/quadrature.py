"""Two square waves a quarter of a cycle apart, counted four to a cycle.

A and B have four states, and turning one way the shaft goes through them in one order, 00 10 11 01 (A leads B, which
counts up), turning the other way in the opposite one. Neighbouring states differ in one line, so each edge of either
line is one count, and its direction follows from the state before and after it alone. A step in which both lines
change has no direction: at least one state was missed. It is called illegal and counts nothing.

The tables below are the decoding; `decode.incremental.reference` says the same as a plain loop.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from decode.spans import BoolArray, Edges, FloatArray, IntArray, LevelArray

ILLEGAL = 2
STEP_OF_STATES = (0, -1, 1, ILLEGAL, 1, 0, ILLEGAL, -1, -1, ILLEGAL, 0, 1, ILLEGAL, 1, -1, 0)
"""Count for a step, by 4 * state before + state after; a state is 2 * A + B."""

CYCLE = (0, 2, 3, 1)
"""The four states in the order in which the count rises."""


def _tables() -> tuple[LevelArray, BoolArray, BoolArray]:
    """Step, illegal and unknown by 9 * before + after, where a line may also be unknown and a pair is 3 * A + B."""
    step = np.zeros(81, np.int8)
    illegal = np.zeros(81, np.bool_)
    unknown = np.ones(81, np.bool_)
    for before in range(4):
        for after in range(4):
            pairs = 9 * (before // 2 * 3 + before % 2) + after // 2 * 3 + after % 2
            value = STEP_OF_STATES[4 * before + after]
            unknown[pairs] = False
            illegal[pairs] = value == ILLEGAL
            step[pairs] = 0 if value == ILLEGAL else value
    return step, illegal, unknown


_STEP, _ILLEGAL, _UNKNOWN = _tables()

PLACE_OF_PAIR = np.full(9, -1, np.int8)
"""Place in `CYCLE` of a pair 3 * A + B; -1 where a line is unknown."""
PLACE_OF_PAIR[[0, 3, 4, 1]] = [0, 1, 2, 3]


@dataclass(frozen=True, slots=True, eq=False)
class Steps:
    """The changes of the pair A, B; one row an edge, or one row for two edges at one tick.

    times: (n,) ticks, never falling. before, after: (n,) the pair as 3 * A + B, levels as in `decode.spans`.
    step: (n,) -1, 0 or 1. illegal: (n,) both lines changed. unknown: (n,) a line's level is not known before or after.
    """

    times: IntArray
    before: LevelArray
    after: LevelArray
    step: LevelArray
    illegal: BoolArray
    unknown: BoolArray


@dataclass(frozen=True, slots=True, eq=False)
class Counts:
    """The count over time, four to a cycle.

    times: (n,) ticks of every A/B edge, once each; edges of A and B at one tick are one row.
    counts: (n,) count after each. illegal: (n,) the step had no direction and counted nothing.
    start: count before the first.
    """

    times: IntArray
    counts: IntArray
    illegal: BoolArray
    start: int

    @property
    def places(self) -> FloatArray:
        """(n,) where each edge lies, in counts: count c reaches from place c to c + 1, whichever way it is entered."""
        before = np.concatenate([[self.start], self.counts[:-1]]) if self.counts.size else self.counts
        return np.asarray((before + self.counts + 1) / 2, np.float64)


def steps_of(a: Edges, b: Edges) -> Steps:
    """Merge the edges of A and B within one window into the steps of their state.

    Where both lines change at one tick the order is not known, so the two edges make one step. A pulse shorter than
    the grid (two edges of one line at one tick) stays two steps.
    """
    times = np.concatenate([a.times, b.times])
    order = np.argsort(times, kind="stable")
    times = times[order]
    is_a = order < a.times.size
    seen_a = np.cumsum(is_a)
    level_a = np.concatenate([[a.initial], a.levels]).astype(np.int8)[seen_a]
    level_b = np.concatenate([[b.initial], b.levels]).astype(np.int8)[np.arange(1, times.size + 1) - seen_a]
    after = (3 * level_a + level_b).astype(np.int8)
    together = _together(a, b, times, is_a)
    if together.size:
        keep = np.ones(times.size, np.bool_)
        keep[together] = False
        times, after = times[keep], after[keep]
    first = np.int8(3 * a.initial + b.initial)
    before = np.concatenate([[first], after[:-1]]).astype(np.int8) if after.size else after
    pairs = 9 * before.astype(np.intp) + after
    return Steps(times, before, after, _STEP[pairs], _ILLEGAL[pairs], _UNKNOWN[pairs])


def _together(a: Edges, b: Edges, times: IntArray, is_a: BoolArray) -> IntArray:
    """Rows of A that share their tick with a change of B: where both lines end the tick at another level."""
    rows = np.flatnonzero(is_a[:-1] & ~is_a[1:] & (times[:-1] == times[1:]))
    if rows.size == 0:
        return rows
    ticks = times[rows]
    odd = np.ones(rows.size, np.bool_)
    for line in (a.times, b.times):
        odd &= (np.searchsorted(line, ticks, "right") - np.searchsorted(line, ticks, "left")) % 2 == 1
    return rows[odd]


def naive_single_count(steps: Steps) -> int:
    """What a counter makes of these steps that looks at rising edges of A only: up where B is low, else down."""
    rising = (steps.before // 3 == 0) & (steps.after // 3 == 1)
    level_b = steps.after[rising] % 3
    return int(np.count_nonzero(level_b == 0)) - int(np.count_nonzero(level_b == 1))


def state_name(place: int) -> str:
    """A state by its place in the cycle, as the sheet writes it."""
    state = CYCLE[place % 4]
    return f"a={state >> 1} b={state & 1}"
