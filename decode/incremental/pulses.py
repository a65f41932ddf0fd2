"""Pulses too short to be real, and the lines without them.

A moving shaft never toggles one line twice without an edge of the other line in between, except where it turns
back. So two edges of one line next to each other, much closer than the intervals around them on that line, are
noise: an even number of them leaves the line as it was (a glitch), an odd number is a true edge that rang. Out-and-back
pulses cancel in a four-count decoder but not in the figures about widths, so those are taken from lines
without them.

A pulse that happens to have an edge of the other line inside it changes the count by four. It is dropped only where the
line beats regularly around it and the other line has just that one edge between the true edges beside the pulse.

What is decided here is local. Whether a dropped pulse is also called a glitch is decided at the end, when the
shortest state of the capture is known: the turning point of a shaft may make a pulse as short as it likes.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from decode.spans import UNKNOWN, BoolArray, Edges, IntArray, LevelArray

RATIO = 4
"""A pulse is short below one over this of what it is compared with (common practice, no source)."""

REACH = 8
"""So many intervals to each side are searched for a normal one: ringing of up to this many edges is bridged."""

_LONG, _SHORT, _OPEN = 0, 1, 2
_CONTEXT = REACH + 2


@dataclass(frozen=True, slots=True, eq=False)
class Clusters:
    """Groups of edges on one line closer together than can be.

    first, last: (n,) ticks of a group's first and last edge. shortest: (n,) ticks, its shortest interval. at: (n,)
    ticks at which that begins. toggles: (n,) edges in it. level: (n,) level after the first. quiet: (n,) ticks
    without an edge before it.
    """

    first: IntArray
    last: IntArray
    shortest: IntArray
    at: IntArray
    toggles: IntArray
    level: LevelArray
    quiet: IntArray


@dataclass(frozen=True, slots=True, eq=False)
class Cleaned:
    """A and B without short pulses, final below `horizon` (ticks), and what was dropped from each line."""

    a: Edges
    b: Edges
    horizon: int
    dropped: tuple[Clusters, Clusters]


def runs_of(numbers: IntArray) -> tuple[IntArray, IntArray]:
    """Where runs of consecutive numbers begin and end: indices into `numbers` (rising), both inclusive."""
    breaks = np.flatnonzero(np.diff(numbers) != 1)
    zero = np.zeros(1, np.int64)
    last = np.full(1, numbers.size - 1, np.int64)
    return np.concatenate([zero, breaks + 1]), np.concatenate([breaks, last])


@dataclass(slots=True, eq=False)
class _Line:
    """One line's edges that are undecided, after the decided ones that are still looked back at."""

    before: int
    level_before: int
    clean_level: int
    times: IntArray = field(default_factory=lambda: np.empty(0, np.int64))
    levels: LevelArray = field(default_factory=lambda: np.empty(0, np.int8))
    decided: int = 0

    def append(self, edges: Edges) -> None:
        self.times = np.concatenate([self.times, edges.times])
        self.levels = np.concatenate([self.levels, edges.levels])

    def oldest_needed(self) -> int | None:
        first = max(0, self.decided - _CONTEXT)
        return int(self.times[first]) if first < self.times.size else None

    def forget_before(self, tick: int) -> None:
        drop = min(max(0, self.decided - _CONTEXT), int(np.searchsorted(self.times, tick)))
        if drop:
            self.before, self.level_before = int(self.times[drop - 1]), int(self.levels[drop - 1])
            self.times, self.levels = self.times[drop:], self.levels[drop:]
            self.decided -= drop

    def horizon(self, stop: int) -> int:
        return int(self.times[self.decided]) if self.decided < self.times.size else stop


class PulseFilter:
    """Drops short pulses from a pair of lines, window by window."""

    def __init__(self, start: int, level_a: int, level_b: int) -> None:
        self._a = _Line(start, level_a, level_a)
        self._b = _Line(start, level_b, level_b)

    def feed(self, a: Edges, b: Edges, stop: int, *, last: bool = False) -> Cleaned:
        """The next window's edges, up to `stop`; `last` where no more come. Returns what is final now."""
        self._a.append(a)
        self._b.append(b)
        clean_a, dropped_a = _decide(self._a, self._b.times, stop, last)
        clean_b, dropped_b = _decide(self._b, self._a.times, stop, last)
        horizon = min(self._a.horizon(stop), self._b.horizon(stop))
        needed = [tick for tick in (self._a.oldest_needed(), self._b.oldest_needed()) if tick is not None]
        for line in (self._a, self._b):
            line.forget_before(min(needed, default=stop))
        return Cleaned(clean_a, clean_b, horizon, (dropped_a, dropped_b))


def _decide(line: _Line, other: IntArray, stop: int, last: bool) -> tuple[Edges, Clusters]:
    """The edges of `line` that can be decided now, without short pulses, and the groups that were dropped."""
    times, count = line.times, line.times.size
    gaps = np.diff(times, prepend=line.before, append=stop)
    state = np.zeros(count + 1, np.int8)
    closed = np.arange(max(1, line.decided), count)
    inside = np.searchsorted(other, times[closed], "right") - np.searchsorted(other, times[closed - 1], "left")
    before = np.concatenate([[line.level_before], line.levels[:-1]]).astype(np.int8) if count else line.levels
    pulse = (before[closed - 1] == line.levels[closed]) & (line.levels[closed - 1] != UNKNOWN)
    pulse &= line.levels[closed] != UNKNOWN
    alone = closed[pulse & (inside == 0)]
    state[alone] = _judge_alone(gaps, alone, last)
    crossed = closed[pulse & (inside == 1) & (closed >= 2)]
    crossed = crossed[RATIO * gaps[crossed] < gaps[crossed - 2]]
    crossed = crossed[_is_beside(times, crossed, other)]
    state[crossed] = _judge_crossed(gaps, crossed, last)
    if count and not last:
        state[count] = _judge_open(gaps, times, other)
    undecided = np.flatnonzero(state == _OPEN)
    limit = int(undecided[0]) - 1 if undecided.size else count
    while limit > line.decided and state[limit] == _SHORT:
        limit -= 1
    limit = max(limit, line.decided)
    return _hand_on(line, gaps, state, limit)


def _judge_alone(gaps: IntArray, which: IntArray, last: bool) -> LevelArray:
    """Pulses without an edge of the other line inside: short against the longest interval nearby on either side.

    The last of `gaps` is still growing, so it can show a pulse to be short but never that one is not.
    """
    reach = np.arange(1, REACH + 1)
    end = gaps.size - 1
    width = RATIO * gaps[which]
    back = gaps[np.maximum(which[:, None] - reach, 0)].max(axis=1)
    ahead = gaps[np.minimum(which[:, None] + reach, end)].max(axis=1)
    waiting = (which + REACH >= end) & (not last)
    short = np.where(width < ahead, _SHORT, np.where(waiting, _OPEN, _LONG))
    return np.where(width < back, short, _LONG).astype(np.int8)


def _judge_crossed(gaps: IntArray, which: IntArray, last: bool) -> LevelArray:
    """Pulses with an edge of the other line inside: short, and the line regular within a factor of two around them."""
    end = gaps.size - 1
    back = gaps[which - 2]
    whole = gaps[which - 1] + gaps[which] + gaps[which + 1]
    ahead = np.where(which + 2 <= end, gaps[np.minimum(which + 2, end)], 0)
    small, large = np.minimum(np.minimum(back, whole), ahead), np.maximum(np.maximum(back, whole), ahead)
    known = which + 2 < end
    fits = (RATIO * gaps[which] < ahead) & (large <= 2 * small)
    hopeless = (whole > 2 * back) | ((which + 1 < end) & (2 * whole < back)) | (ahead > 2 * np.minimum(back, whole))
    waiting = np.where(hopeless | last, _LONG, _OPEN)
    return np.where(known, np.where(fits, _SHORT, _LONG), waiting).astype(np.int8)


def _is_beside(times: IntArray, which: IntArray, other: IntArray) -> BoolArray:
    """Whether the other line has no edge between the pulse and the edges of its own line before and after it.

    A shaft would have to turn back twice within one state to make such a sequence.
    """
    early = np.searchsorted(other, times[which - 1], "left") - np.searchsorted(other, times[which - 2], "left")
    following = np.where(which + 1 < times.size, times[np.minimum(which + 1, times.size - 1)], np.iinfo(np.int64).max)
    late = np.searchsorted(other, following, "right") - np.searchsorted(other, times[which], "right")
    return np.asarray((early == 0) & (late == 0), np.bool_)


def _judge_open(gaps: IntArray, times: IntArray, other: IntArray) -> int:
    """The interval after the last edge: may it still become a short one?"""
    end = gaps.size - 1
    width = RATIO * int(gaps[end])
    crossed = int(np.searchsorted(other, times[-1], "left")) < other.size
    alone = not crossed and width < int(gaps[max(0, end - REACH) : end].max())
    regular = end >= 2 and width < int(gaps[end - 2])
    return _OPEN if alone or regular else _LONG


def _hand_on(line: _Line, gaps: IntArray, state: LevelArray, limit: int) -> tuple[Edges, Clusters]:
    """Edges up to `limit` leave the line, groups of short intervals among them reduced to nothing or to one edge."""
    short = np.flatnonzero(state[: limit + 1] == _SHORT)
    short = short[short > line.decided]
    keep = np.ones(limit, np.bool_)
    clusters = _no_clusters()
    if short.size:
        first, last = runs_of(short)
        opening, closing = short[first] - 1, short[last]
        toggles = closing - opening + 1
        keep[short] = False
        keep[opening[toggles % 2 == 0]] = False
        shortest = np.minimum.reduceat(gaps[short], first)
        size = np.diff(first, append=short.size)
        found = np.flatnonzero(gaps[short] == np.repeat(shortest, size))
        at = found[np.searchsorted(found, first)]
        clusters = Clusters(
            line.times[opening],
            line.times[closing],
            shortest,
            line.times[short[at] - 1],
            toggles,
            line.levels[opening],
            gaps[opening],
        )
    keep[: line.decided] = False
    clean = Edges(line.clean_level, line.times[:limit][keep], line.levels[:limit][keep])
    line.clean_level = clean.final
    line.decided = limit
    return clean, clusters


def _no_clusters() -> Clusters:
    none = np.empty(0, np.int64)
    return Clusters(none, none, none, none, none, np.empty(0, np.int8), none)
