"""Clock edges to bursts.

A clocked interface has no start of file: a frame is a burst of clock edges between two idle times. What counts as
idle is learnt once, from the first clock edges of the capture (the pilot), so that the rule is the same wherever the
capture is cut: the level at which the clock rests, its period, and the widest gap in the sorted intervals at that
level, which separates pauses inside a burst from pauses between bursts. A long interval at the other level never
ends a burst (biss-c holds the clock low through the time-out to say a control bit).

Edges in a burst alternate, so the k-th leading edge (away from rest) is edge 2k and the k-th trailing edge 2k + 1.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields, replace

import numpy as np
import numpy.typing as npt

from decode.spans import NO_TICK, UNKNOWN, BoolArray, Edges, IntArray, Span, cut

PILOT_EDGES = 4096
"""How many clock edges the rhythm is learnt from: some 50 frames, and a small part of any capture."""

SHORT_PULSE = 0.5
"""A clock phase shorter than this part of the usual one is not real (common practice, no source)."""

LONE_BURST_PERIODS = 4
"""Idle time, in clock periods, that ends a burst where the pilot holds only one (common practice, no source)."""

LONGEST_RINGING = 16
"""Edges in a run of short intervals that is looked at pulse by pulse; a longer one is a clock that got faster."""

Index = npt.NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class Rhythm:
    """What the pilot says about the clock. Times in ticks.

    rest: level between bursts. period: one clock period. high, low: usual length of each phase.
    split: an interval at the rest level longer than this ends a burst. pause: usual interval between bursts, None
    where the pilot holds only one burst.
    """

    rest: int
    period: float
    high: float
    low: float
    split: float
    pause: float | None

    @classmethod
    def of(cls, clock: Edges) -> Rhythm | None:
        """Learn from the first edges of a clock; None where there are too few to tell (fewer than four)."""
        times, levels = clock.times[:PILOT_EDGES], clock.levels[:PILOT_EDGES]
        lengths, at = np.diff(times), levels[:-1]
        if times.size < 4 or not (at == 1).any() or not (at == 0).any():
            return None
        high, low = (float(np.median(lengths[at == level])) for level in (1, 0))
        period = high + low
        if high > 8 * low or low > 8 * high:  # a few short bursts: the medians are pauses
            shorter = 2 * min(high, low)
            period, high, low = shorter, shorter / 2, shorter / 2
        long = lengths > 1.5 * period
        rest_time = [int(lengths[long & (at == level)].sum()) for level in (0, 1)]
        rest = int(levels[-1]) if max(rest_time) == 0 else int(rest_time[1] >= rest_time[0])
        split, pause = _split(lengths[at == rest], period)
        return cls(rest, period, high, low, split, pause)

    def phase(self, level: int) -> float:
        """Usual length of the clock's phase at `level`, in ticks."""
        return self.high if level else self.low


def _split(rests: IntArray, period: float) -> tuple[float, float | None]:
    """The length that separates phases of a burst from pauses, and the usual pause."""
    rising = np.unique(rests[rests > 0]).astype(np.float64)
    floor = rising[rising <= period]
    above = np.concatenate([floor[-1:] if floor.size else [period / 2], rising[rising > period]])
    if above.size < 2 or above[-1] < 1.5 * period:
        return LONE_BURST_PERIODS * period, None
    widest = int(np.argmax(above[1:] / above[:-1]))
    split = max(float(np.sqrt(above[widest] * above[widest + 1])), 1.2 * period)
    return split, float(np.median(rests[rests > split]))


@dataclass(frozen=True, slots=True, eq=False)
class Bursts:
    """Bursts of clock edges, cleaned of pulses too short to be real.

    times: (e,) ticks of all edges kept. first, count: (n,) where each burst begins in `times` and how many edges it
    has. opens: (n,) tick at which its window begins: the select line's, else its first clock edge. selected: (n,)
    tick at which the select line chose it, or NO_TICK. glitches: (n,) short pulses taken out of each. glitch_time: (n,)
    tick of the first of them, or NO_TICK. gap: (n,) longest pause inside a burst that should have ended it, 0 for none.
    """

    times: IntArray
    first: Index
    count: Index
    opens: IntArray
    selected: IntArray
    glitches: IntArray
    glitch_time: IntArray
    gap: IntArray

    def __len__(self) -> int:
        return int(self.first.size)

    @property
    def first_edge(self) -> IntArray:
        return self.times[self.first]

    @property
    def last_edge(self) -> IntArray:
        return np.asarray(self.times[self.first + self.count - 1], np.int64)

    def take(self, which: BoolArray | Index | slice) -> Bursts:
        """Some of the bursts, with the same edges."""
        rows = {row.name: getattr(self, row.name)[which] for row in fields(self) if row.name != "times"}
        return replace(self, **rows)

    def edge(self, numbers: Index) -> IntArray:
        """(n, m) tick of edge number numbers[m] of each burst; NO_TICK where the burst is over by then."""
        wanted = self.first[:, None] + numbers[None, :]
        inside = numbers[None, :] < self.count[:, None]
        return np.where(inside, self.times[np.where(inside, wanted, 0)], np.int64(NO_TICK))

    def rejoined(self, edges: int, pause: float) -> Bursts:
        """Neighbouring pieces that make up one burst of `edges` edges, less than `pause` ticks apart, put together."""
        pairs = np.flatnonzero(self._may_join(edges, pause) & (self.count[:-1] + self.count[1:] == edges))
        if pairs.size == 0:
            return self
        gap = self.first_edge[1:] - self.last_edge[:-1]
        keep, count, gaps = np.ones(len(self), np.bool_), self.count.copy(), self.gap.copy()
        glitches, glitch_time = self.glitches.copy(), self.glitch_time.copy()
        for pair in pairs:
            if keep[pair]:
                keep[pair + 1] = False
                count[pair], gaps[pair] = edges, gap[pair]
                glitches[pair] += glitches[pair + 1]
                glitch_time[pair] = glitch_time[pair + (glitch_time[pair] == NO_TICK)]
        joined = replace(self, count=count, gap=gaps, glitches=glitches, glitch_time=glitch_time)
        return joined.take(keep)

    def parted(self, edges: int, least: float) -> Bursts:
        """Bursts of k times `edges` edges that rest for more than `least` ticks at every word's end, taken apart.

        A burst that follows so soon comes before the encoder's time-out has run out, but it is a burst of its own.
        """
        words = np.where(self.count % max(edges, 1) == 0, self.count // max(edges, 1), 1)
        for k in np.unique(words[words > 1]):
            rows = np.flatnonzero(words == k)
            border = self.first[rows, None] + edges * np.arange(1, k)[None, :]
            rested = (self.times[border] - self.times[border - 1] > least).all(axis=1)
            words[rows[~rested]] = 1
        if (words == 1).all():
            return self
        row = np.repeat(np.arange(len(self)), words)
        number = np.arange(row.size) - np.repeat(np.cumsum(words) - words, words)
        apart = self.take(row)
        later, first = number > 0, apart.first + edges * number
        return replace(
            apart,
            first=first.astype(np.intp),
            count=np.where(words[row] > 1, edges, apart.count).astype(np.intp),
            opens=np.where(later, self.times[first], apart.opens),
            glitches=np.where(later, 0, apart.glitches),
            glitch_time=np.where(later, NO_TICK, apart.glitch_time),
        )

    def longest(self) -> IntArray:
        """(n,) the longest time between two neighbouring edges of each burst."""
        if len(self) == 0:
            return self.opens
        lengths = np.diff(self.times, append=self.times[-1:])
        bounds = np.stack([self.first, self.first + self.count - 1], axis=1)  # no edge that follows is part of it
        return np.where(self.count > 1, np.maximum.reduceat(lengths, bounds.ravel())[::2], 0)

    def last_may_grow(self, edges: int, pause: float) -> bool:
        """Whether the last burst but one may turn out to be the first piece of a burst of `edges` edges."""
        return len(self) > 1 and bool(self._may_join(edges, pause)[-1])

    def _may_join(self, edges: int, pause: float) -> BoolArray:
        close = self.first_edge[1:] - self.last_edge[:-1] < pause
        return np.asarray(close & (self.count[:-1] < edges), np.bool_)


def known_parts(span: Span, names: Sequence[str]) -> Iterator[Span]:
    """A span cut wherever a line of `names` begins or ceases to be unknown.

    In a part such a line is unknown all along (its initial level says so) or never; an edge from or to an unknown
    level is none of a part's edges, and breaks the capture there (`joined` is False).
    """
    told = [span.lines[name] for name in names]
    if all(edges.initial != UNKNOWN and not (edges.levels == UNKNOWN).any() for edges in told):
        yield span
        return
    at = [int(tick) for edges in told for tick in edges.times[_from_or_to_unknown(edges)]]
    for part in cut(span, at):
        settled = {name: _settled(part.lines[name], part.start) for name in names}
        joined = part.joined and all(settled[name] is part.lines[name] for name in names)
        yield Span(part.start, part.stop, {**part.lines, **settled}, joined)


def _from_or_to_unknown(edges: Edges) -> BoolArray:
    unknown = np.concatenate([[edges.initial], edges.levels]) == UNKNOWN
    return np.asarray(unknown[1:] | unknown[:-1], np.bool_)


def _settled(edges: Edges, start: int) -> Edges:
    """The edges behind `start`, where one at that very tick is from or to an unknown level; else all of them."""
    first = int(np.searchsorted(edges.times, start, side="right"))
    if not _from_or_to_unknown(edges)[:first].any():
        return edges
    return Edges(int(edges.levels[first - 1]), edges.times[first:], edges.levels[first:])


def find_bursts(clock: Edges, select: Edges | None, rhythm: Rhythm) -> tuple[Bursts, IntArray]:
    """The bursts of a stretch of clock edges, and the ticks of short clock pulses that lie outside any.

    With a select line (active low) a burst is what lies between its falling and its next rising edge.
    """
    opens: IntArray
    if select is None:
        starts = _resting_starts(clock, rhythm)
        stops = np.concatenate([starts[1:], [clock.times.size]]).astype(np.intp)[: starts.size]
        opens = clock.times[starts]
        selected = np.full(starts.size, NO_TICK, np.int64)
    else:
        down, up = _windows(select, rhythm)
        starts, stops = (np.searchsorted(clock.times, edge, side="left") for edge in (down, up))
        busy = stops > starts
        starts, stops = starts[busy], stops[busy]
        unseen = down[busy] == NO_TICK
        opens = np.where(unseen, clock.times[starts], down[busy])
        selected = opens
    return _clean(clock.times, starts, stops, opens, selected, rhythm)


def _resting_starts(clock: Edges, rhythm: Rhythm) -> Index:
    """Indices of the edges of `clock` that begin a burst; the first edge always does."""
    if clock.times.size == 0:
        return np.empty(0, np.intp)
    resting = (clock.levels[:-1] == rhythm.rest) & (np.diff(clock.times) > rhythm.split)
    return np.concatenate([[0], np.flatnonzero(resting) + 1]).astype(np.intp)


def short_pulses(edges: Edges, least: float) -> IntArray:
    """Ticks at which the line begins to change faster than `least` ticks, one for each such run of edges."""
    known = (edges.levels != UNKNOWN) & (np.concatenate([[edges.initial], edges.levels[:-1]]) != UNKNOWN)
    short = (np.diff(edges.times) < least) & known[:-1] & known[1:]
    return np.asarray(edges.times[:-1][short & ~np.concatenate([[False], short[:-1]])], np.int64)


def _windows(select: Edges, rhythm: Rhythm) -> tuple[IntArray, IntArray]:
    """Falling and rising ticks of the select line; pulses shorter than a clock phase do not count."""
    least = SHORT_PULSE * min(rhythm.high, rhythm.low)
    short = np.append(np.diff(select.times) < least, False)[: select.times.size]
    drop = [edge for spike in _spikes(select.times, short, least) for edge in spike]
    times, levels = np.delete(select.times, drop), np.delete(select.levels, drop)
    down: IntArray = times[levels == 0]
    up: IntArray = times[levels == 1]
    if select.initial != 0:  # a rise ends a window only where one is open
        up = up[np.searchsorted(up, down[:1]).sum() :]
    if select.initial == 0:  # selected before the stretch begins: open since ever
        down = np.concatenate([[NO_TICK], down])
    if up.size < down.size:
        up = np.concatenate([up, [np.iinfo(np.int64).max]])
    return down, up[: down.size]


def _clean(
    times: IntArray, starts: Index, stops: Index, opens: IntArray, selected: IntArray, rhythm: Rhythm
) -> tuple[Bursts, IntArray]:
    """Bursts of `times` [starts, stops) without the pulses that are too short to be real."""
    inside = np.zeros(times.size + 1, np.int64)
    np.add.at(inside, starts, 1)
    np.add.at(inside, stops, -1)
    keep = np.asarray(np.cumsum(inside)[:-1] > 0, np.bool_)  # edges outside every select window go first
    least = SHORT_PULSE * min(rhythm.high, rhythm.low)
    short = np.zeros(times.size, np.bool_)  # the interval from this edge to the next, within one burst
    if times.size:
        short[:-1] = np.diff(times) < least
    short[stops - 1] = False
    short &= keep
    glitches, glitch_time = np.zeros(starts.size, np.int64), np.full(starts.size, NO_TICK, np.int64)
    for up, down in _spikes(times, short, least):
        number = int(np.searchsorted(starts, up, side="right")) - 1
        keep[[up, down]] = False
        glitches[number] += 1
        if glitch_time[number] == NO_TICK or times[up] < glitch_time[number]:
            glitch_time[number] = times[up]
    kept_before = np.concatenate([[0], np.cumsum(keep)])
    begin, end = kept_before[starts].astype(np.intp), kept_before[stops].astype(np.intp)
    bursts = Bursts(times[keep], begin, end - begin, opens, selected, glitches, glitch_time, np.zeros_like(opens))
    real = bursts.count > 0
    return bursts.take(real), glitch_time[~real & (glitches > 0)]


def _spikes(times: IntArray, short: BoolArray, least: float) -> Iterator[tuple[int, int]]:
    """The pairs of edges that make up pulses shorter than `least`; `short` says which intervals after an edge are.

    The shortest pulse of a run goes first, of equal ones the last: so a spike ahead of a true edge goes and the edge
    stays, and ringing after a true edge leaves the true edge.
    """
    run_first = np.flatnonzero(short & ~np.concatenate([[False], short[:-1]])[: short.size])
    run_last = np.flatnonzero(short & ~np.concatenate([short[1:], [False]])[: short.size]) + 1
    for first, last in zip(run_first.tolist(), run_last.tolist(), strict=True):
        left = list(range(first, last + 1))
        if len(left) > LONGEST_RINGING:
            odd = len(left) % 2
            yield from zip(left[odd::2], left[odd + 1 :: 2], strict=True)
            continue
        while len(left) > 1:
            widths = [int(times[after] - times[before]) for before, after in itertools.pairwise(left)]
            narrowest = min(reversed(range(len(widths))), key=widths.__getitem__)
            if widths[narrowest] >= least:
                break
            yield left.pop(narrowest), left.pop(narrowest)
