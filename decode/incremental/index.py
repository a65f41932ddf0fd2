"""Once a turn, at one place: what the index line says about the count, and the count about the index.

The index has no redundancy of its own, but between two of its pulses the count must be a whole number of turns. So
each pulse is held against the place where the pulses before and after it came, modulo a turn:

    off at one pulse only, the place passed without one    index_misplaced
    off, and the right place has its pulse as well         index_extra
    the place passed without a pulse                       index_missing
    this and all later pulses off by the same              turn_count_wrong, once, at that turn
    every turn the same number, but another than stated    turn_count_wrong, once

The place of a pulse is its middle, which is the same for both directions of turning; its edges may come a little
before or after the A/B edge they belong to. Where the place of the shaft was lost (an illegal step without direction,
a level that is not known, a break in the capture) pulses are not held against each other across it.

Pulses are few, so this is a loop over them at the end of the capture.
"""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

from decode.anomalies import Anomalies
from decode.incremental.path import IndexEdges, Trace
from decode.incremental.pulses import RATIO, runs_of
from decode.incremental.quadrature import CYCLE, state_name
from decode.sheet import index_levels
from decode.spans import BoolArray, FloatArray, IntArray, LevelArray

SKEW_S = 300e-9
"""An index edge may come this long before or after its A/B edge (source: Broadcom HEDS-9040/9140 data sheet)."""

SAME_WAY_COUNTS = 0.75
OTHER_WAY_COUNTS = 1.25
"""How far two pulses may differ, beside the skew, passed one way or opposite ways (common practice: one count)."""

SAME_STATE_COUNTS = 0.25
"""Lost or invented cycles leave the index where it was within its state, so much at most beside (common practice)."""

AGREEING_TURNS = 0.8
"""This share of the turns agrees in another number where the stated one is wrong (common practice, no source)."""

LOOK_AHEAD = 4


@dataclass(frozen=True, slots=True, eq=False)
class Pulses:
    """The index pulses, one row each, in order of time.

    rise, fall: ticks. rise_place, fall_place: counts. rise_count, fall_count: whole counts. rise_direction,
    fall_direction: -1, 0, 1. rise_state, high_state, fall_state: place in the A/B cycle, -1 unknown; high is the
    state that fills most of the pulse. states: bit mask of the states (by place in the cycle) that lie for at least
    half their width inside the pulse. lasts: ticks of the A/B state around the rise. stretch, piece: see
    `decode.incremental.path`. known: A/B edges surround both edges.
    """

    rise: IntArray
    fall: IntArray
    rise_place: FloatArray
    fall_place: FloatArray
    rise_count: IntArray
    fall_count: IntArray
    rise_direction: LevelArray
    fall_direction: LevelArray
    rise_state: LevelArray
    high_state: IntArray
    fall_state: LevelArray
    states: IntArray
    lasts: IntArray
    stretch: IntArray
    piece: IntArray
    known: BoolArray

    @property
    def middle(self) -> FloatArray:
        """(n,) counts."""
        return np.asarray((self.rise_place + self.fall_place) / 2, np.float64)

    @property
    def width(self) -> FloatArray:
        """(n,) counts; near 0 where the shaft turned back inside the pulse."""
        return np.asarray(np.abs(self.fall_place - self.rise_place), np.float64)

    @property
    def passed(self) -> BoolArray:
        """(n,) the shaft left the pulse on the side it had not entered it from."""
        one_way = (self.rise_direction == self.fall_direction) & (self.rise_direction != 0)
        return np.asarray(self.known & one_way, np.bool_)


@dataclass(frozen=True, slots=True)
class Glitch:
    """A short pulse of the index line. place: counts. high: it goes up."""

    first: int
    last: int
    width: int
    toggles: int
    high: bool
    place: float


@dataclass(slots=True, eq=False)
class IndexReading:
    """What the index line told.

    pulses: the table. partial: pulses that an end of the capture cuts. role: (n,) of each pulse "index", "extra",
    "misplaced", or "" for one the shaft turned back in. turn: counts in a turn, None where not known. offset: (n,)
    counts from the pulse's expected place, NaN where none. turns: rows (start, stop, direction, counts). anomalies:
    findings. glitches: short pulses; narrow: short pulses that are the index. state_seen, state_expected: where the
    index is high, None where it cannot be told or is not stated. state_fits: the first lies within the second.
    """

    pulses: Pulses
    partial: int
    role: list[str]
    turn: int | None
    offset: FloatArray
    turns: list[tuple[int, int, int, int]]
    anomalies: list[Anomalies] = field(default_factory=list)
    glitches: list[Glitch] = field(default_factory=list)
    narrow: list[Glitch] = field(default_factory=list)
    state_seen: str | None = None
    state_expected: str | None = None
    state_fits: bool | None = None


@dataclass(frozen=True, slots=True)
class IndexRules:
    """What the sheet says about the index, and what the capture can tell of it.

    turn: counts in a turn. width: counts. states: as in the sheet. shortest: ticks of the shortest normal A/B state.
    skew: ticks that an index edge may lie beside its A/B edge.
    """

    turn: int | None
    width: float | None
    states: str | None
    shortest: int | None
    skew: float
    line: str


def pulses_of(edges: IndexEdges, shortest: int | None) -> tuple[Pulses, int, list[Glitch]]:
    """Index edges to pulses: (whole pulses, pulses cut by an end of the capture, pulses too short to be real)."""
    keep, glitches = _without_short(edges, shortest)
    kept = np.flatnonzero(keep)
    level, before, piece = edges.level[kept], edges.before[kept], edges.piece[kept]
    rising = (level == 1) & (before == 0)
    falling = (level == 0) & (before == 1)
    followed = np.zeros(kept.size, np.bool_)
    followed[:-1] = rising[:-1] & falling[1:] & (piece[:-1] == piece[1:])
    opening = np.flatnonzero(followed)
    rise, fall = kept[opening], kept[opening + 1]
    partial = int(np.count_nonzero(rising)) + int(np.count_nonzero(falling)) - 2 * int(opening.size)
    high, states = _states_inside(edges, rise, fall)
    pulses = Pulses(
        edges.times[rise],
        edges.times[fall],
        edges.place[rise],
        edges.place[fall],
        edges.count[rise],
        edges.count[fall],
        edges.direction[rise],
        edges.direction[fall],
        edges.state[rise],
        high,
        edges.state[fall],
        states,
        edges.lasts[rise],
        edges.stretch[fall],
        edges.piece[rise],
        (edges.lasts[rise] > 0) & (edges.lasts[fall] > 0) & (edges.stretch[rise] == edges.stretch[fall]),
    )
    return pulses, partial, glitches


def _without_short(edges: IndexEdges, shortest: int | None) -> tuple[BoolArray, list[Glitch]]:
    """Which index edges are real, and the groups closer together than a quarter of the shortest state."""
    keep = np.ones(edges.times.size, np.bool_)
    if shortest is None or edges.times.size < 2:
        return keep, []
    gaps = np.diff(edges.times)
    short = (RATIO * gaps < shortest) & (edges.piece[1:] == edges.piece[:-1])
    short &= (edges.before[:-1] == edges.level[1:]) & (edges.before[:-1] < 2) & (edges.level[:-1] < 2)
    closing = np.flatnonzero(short) + 1
    if closing.size == 0:
        return keep, []
    keep[closing] = False
    glitches = []
    for first, last in zip(*runs_of(closing), strict=True):
        opening, end = int(closing[first]) - 1, int(closing[last])
        toggles = end - opening + 1
        if toggles % 2 == 0:
            keep[opening] = False
        width = int(gaps[opening:end].max())
        high = bool(edges.level[opening] == 1)
        glitches.append(
            Glitch(int(edges.times[opening]), int(edges.times[end]), width, toggles, high, float(edges.place[opening]))
        )
    return keep, glitches


def _states_inside(edges: IndexEdges, rise: IntArray, fall: IntArray) -> tuple[IntArray, IntArray]:
    """For each pulse the state that fills most of it, and the mask of those at least half inside."""
    high = np.full(rise.size, -1, np.int64)
    masks = np.zeros(rise.size, np.int64)
    for row, (one, other) in enumerate(zip(rise, fall, strict=True)):
        if edges.state[one] < 0 or edges.stretch[one] != edges.stretch[other]:
            continue
        low, top = sorted((float(edges.place[one]), float(edges.place[other])))
        phase = int(edges.state[one]) - int(edges.count[one])
        counts = range(math.floor(low), min(math.floor(low) + 5, math.ceil(top) + 1))
        inside = {count: min(top, count + 1) - max(low, count) for count in counts}
        most = max(inside, key=lambda count: inside[count])
        high[row] = (most + phase) % 4
        covered = [count for count in counts if inside[count] >= 0.5] or [most]
        masks[row] = sum(1 << place for place in {(count + phase) % 4 for count in covered})
    return high, masks


def read_index(edges: IndexEdges, trace: Trace, rules: IndexRules) -> IndexReading:
    """Judge the index of a whole capture; see the module's text for what is told apart."""
    pulses, partial, glitches = pulses_of(edges, rules.shortest)
    turn, wrong = _turn_of(pulses, rules)
    size = pulses.rise.size
    reading = IndexReading(pulses, partial, [""] * size, turn, np.full(size, np.nan), [], glitches=glitches)
    if turn is not None:
        _Judge(reading, trace, rules, turn, wrong).run()
    else:
        reading.role = ["index" if passed else "" for passed in pulses.passed]
    _judge_widths(reading, rules)
    _judge_states(reading, rules)
    return reading


def _distances(pulses: Pulses) -> list[tuple[int, int, float]]:
    """(pulse, next pulse, counts between) of neighbours passed the same way, one after the other along it."""
    whole = np.flatnonzero(pulses.passed)
    middle = pulses.middle
    found = []
    for one, other in pairwise(whole):
        same = (
            pulses.rise_direction[one] == pulses.rise_direction[other] and pulses.stretch[one] == pulses.stretch[other]
        )
        distance = float(middle[other] - middle[one]) * int(pulses.rise_direction[other])
        if same and distance > 1:
            found.append((int(one), int(other), distance))
    return found


def _turn_of(pulses: Pulses, rules: IndexRules) -> tuple[int | None, tuple[int, int] | None]:
    """Counts in a turn, and the pulses of the first turn where every turn contradicts the sheet alike."""
    distances = _distances(pulses)
    numbers = Counter(round(distance) for _, _, distance in distances)
    if not numbers:
        return rules.turn, None
    most, _ = max(numbers.items(), key=lambda item: (item[1], item[0]))
    if rules.turn is None:
        return most, None
    agreeing = [pair for pair in distances if abs(pair[2] - most) <= SAME_WAY_COUNTS]
    if most != rules.turn and len(agreeing) >= max(2, AGREEING_TURNS * len(distances)):
        return most, (agreeing[0][0], agreeing[0][1])
    return rules.turn, None


class _Judge:
    """Sorts the pulses of one capture into right, extra and misplaced ones and finds the turns without."""

    def __init__(
        self, reading: IndexReading, trace: Trace, rules: IndexRules, turn: int, wrong: tuple[int, int] | None
    ) -> None:
        self.reading, self.trace, self.rules, self.turn = reading, trace, rules, turn
        pulses = reading.pulses
        self.place = pulses.middle
        self.lower = np.minimum(pulses.rise_place, pulses.fall_place)
        self.upper = np.maximum(pulses.rise_place, pulses.fall_place)
        self.way = pulses.rise_direction.astype(int)
        self.speed = 1 / np.maximum(pulses.lasts, 1)
        self.whole = [int(one) for one in np.flatnonzero(pulses.passed)]
        self.wrong = wrong
        widths = pulses.width[pulses.passed]
        self.margin = 2 + (rules.width or (float(np.median(widths)) if widths.size else 1.0))
        self.right: list[int] = []
        self.outliers: list[int] = []
        self.shifts: list[tuple[int, int]] = []
        self.missing: list[tuple[int, float]] = []

    def run(self) -> None:
        self._sort()
        self._find_missing()
        self._name_outliers()
        self._fill_tables()
        self._report()

    def _apart(self, one: int, reference: int) -> float:
        """Counts from a pulse to another by middle, lower or upper edge, whichever is nearest to whole turns.

        A pulse with one edge in its place is of the wrong width, not misplaced.
        """
        distances = [float(place[one] - place[reference]) for place in (self.place, self.lower, self.upper)]
        return min(distances, key=lambda distance: abs(self._wrapped(distance)))

    def _wrapped(self, distance: float) -> float:
        half = self.turn / 2
        return (distance + half) % self.turn - half

    def _off(self, one: int, reference: int) -> float:
        """Counts by which a pulse lies beside the place of another, modulo a turn."""
        return self._wrapped(self._apart(one, reference))

    def _skew(self, one: int, other: int) -> float:
        """Counts that the index may be early or late at the faster of two passages."""
        return min(self.rules.skew * max(float(self.speed[one]), float(self.speed[other])), 1.0)

    def _tolerance(self, one: int, other: int) -> float:
        same = self.way[one] == self.way[other]
        return (SAME_WAY_COUNTS if same else OTHER_WAY_COUNTS) + self._skew(one, other)

    def _close(self, one: int, reference: int) -> bool:
        return abs(self._off(one, reference)) <= self._tolerance(one, reference)

    def _joined(self, one: int, other: int) -> bool:
        return bool(self.reading.pulses.stretch[one] == self.reading.pulses.stretch[other])

    def _another_pass(self, one: int, other: int) -> bool:
        """Another turn, or the way back: not two pulses of one passage."""
        return bool(self.way[one] != self.way[other] or abs(self.place[one] - self.place[other]) > self.turn / 2)

    def _counts_lost(self, one: int, reference: int) -> bool:
        """Off as lost or invented cycles leave it: by a few whole cycles, so in the same A/B state."""
        off = self._off(one, reference)
        if not self._another_pass(one, reference):
            return False
        return abs(off) <= self.turn / 8 and abs(off - 4 * round(off / 4)) <= SAME_STATE_COUNTS + self._skew(
            one, reference
        )

    def _sort(self) -> None:
        """Right pulses and outliers, and between which right pulses the place moved."""
        start = self._first_right()
        if start is None:
            return
        for number, one in enumerate(self.whole):
            if number < start:
                self.outliers.append(one)
                continue
            if not self.right:
                self.right.append(one)
                continue
            reference = self._reference(one)
            if not self._joined(one, reference) or self._close(one, reference):
                self.right.append(one)
            elif self._stays_moved(number, reference):
                self.shifts.append((self.right[-1], one))
                self.right.append(one)
            else:
                self.outliers.append(one)

    def _reference(self, one: int) -> int:
        """The right pulse to compare with: the last one since the place last moved, the same way where there is one."""
        since = self.shifts[-1][1] if self.shifts else -1
        last = self.right[-1]
        for other in reversed(self.right[-LOOK_AHEAD:]):
            if other >= since and self.way[other] == self.way[one] and self._joined(other, last):
                return other
        return last

    def _first_right(self) -> int | None:
        """The first pulse that one of the next agrees with; the very first where the shift after it looks like lost
        counts."""
        if not self.whole:
            return None
        for number, one in enumerate(self.whole[:LOOK_AHEAD]):
            for other in self.whole[number + 1 : number + 1 + LOOK_AHEAD]:
                if not self._joined(one, other) or self._close(one, other):
                    if number and self._counts_lost(self.whole[0], one):
                        return 0
                    return number
        return 0

    def _stays_moved(self, number: int, reference: int) -> bool:
        """Do the next pulses come where this one came, and not where the ones before came?"""
        one = self.whole[number]
        for other in self.whole[number + 1 : number + 1 + LOOK_AHEAD]:
            if not self._joined(one, other):
                break
            if self._close(other, reference):
                return False
            if self._close(other, one) and self._another_pass(other, one):
                return True
        return self._counts_lost(one, reference)

    def _find_missing(self) -> None:
        """Every time the count passed the index's place and no pulse came, stretch by stretch: where the capture is
        broken, times may start again."""
        stretches = self.reading.pulses.stretch
        for stretch in dict.fromkeys(int(stretches[one]) for one in self.right):
            self._find_missing_in(stretch)

    def _find_missing_in(self, stretch: int) -> None:
        pulses = self.reading.pulses
        rows = self.trace.stretch == stretch
        times, way = self.trace.times[rows], self.trace.place[rows]
        outliers, moved = set(self.outliers), {other for _, other in self.shifts}
        right = {one for one in self.right if pulses.stretch[one] == stretch}
        marks = [one for one in np.flatnonzero(pulses.stretch == stretch).tolist() if one not in outliers]
        reference = min(right)
        previous: int | None = None
        for one in [*marks, None]:
            first = 0 if previous is None else int(np.searchsorted(times, pulses.fall[previous], "right"))
            last = times.size if one is None else int(np.searchsorted(times, pulses.rise[one], "left"))
            ticks, places = times[first:last], way[first:last]
            if previous is not None:
                ticks = np.concatenate([pulses.fall[[previous]], ticks])
                places = np.concatenate([pulses.fall_place[[previous]], places])
            if one is not None:
                ticks = np.concatenate([ticks, pulses.rise[[one]]])
                places = np.concatenate([places, pulses.rise_place[[one]]])
            for tick, place in self._passes(ticks, places, float(self.place[reference])):
                if one is None or one not in moved or abs(place - float(self.place[one])) > self.turn / 2:
                    self.missing.append((tick, place))
            if one is not None and one in right:
                reference = one
            previous = one

    def _passes(self, ticks: IntArray, places: FloatArray, place: float) -> list[tuple[int, float]]:
        """(tick, place) of each full passage over `place` modulo a turn."""
        found = []
        for first, last in _one_way(places):
            ends = sorted((float(places[first]), float(places[last])))
            low = math.ceil((ends[0] + self.margin - place) / self.turn)
            high = math.floor((ends[1] - self.margin - place) / self.turn)
            if high < low:
                continue
            way = (
                slice(first, last + 1)
                if places[last] >= places[first]
                else slice(last, first - 1 if first else None, -1)
            )
            for number in range(low, high + 1):
                there = place + number * self.turn
                tick = round(float(np.interp(there, places[way], (ticks[way] - ticks[first]).astype(np.float64))))
                found.append((tick + int(ticks[first]), there))
        return sorted(found)

    def _name_outliers(self) -> None:
        """An outlier stands for the missing pulse of its turn, where one is missing; else there is one too many."""
        role = self.reading.role
        for one in self.right:
            role[one] = "index"
        for one in self.outliers:
            role[one] = "extra"
            distance = {number: abs(place - float(self.place[one])) for number, (_, place) in enumerate(self.missing)}
            nearest = min(distance, key=lambda number: distance[number], default=None)
            if nearest is not None and distance[nearest] < self.turn / 2:
                role[one] = "misplaced"
                del self.missing[nearest]
            elif self._due_at_an_end(one):
                role[one] = "misplaced"

    def _due_at_an_end(self, one: int) -> bool:
        """Near the place of the next index beyond the outermost right pulse, which the capture does not reach."""
        outer = None
        if one > self.right[-1]:
            outer = self.right[-1]
        elif one < self.right[0]:
            outer = self.right[0]
        if outer is None:
            return False
        return abs(self.place[one] - self.place[outer]) > self.turn / 2 and abs(self._off(one, outer)) <= self.turn / 8

    def _fill_tables(self) -> None:
        reading, pulses = self.reading, self.reading.pulses
        for one, other in pairwise(self.right):
            distance = self._apart(other, one) * int(self.way[other])
            if self.way[one] == self.way[other] and self._joined(one, other) and round(distance / self.turn) == 1:
                reading.turns.append(
                    (int(pulses.rise[one]), int(pulses.rise[other]), int(self.way[other]), round(distance))
                )
        base = self.right[0] if self.right else 0
        moved = {other: one for one, other in self.shifts}
        for one in self.whole:
            if one in moved or (one in self.right and not self._joined(one, base)):
                base = one
                shifted = float(np.nan_to_num(reading.offset[moved[one]])) if one in moved else 0.0
                reading.offset[one] = shifted
            elif reading.role[one] != "extra":
                beside = self._wrapped(float(self.place[one] - self.place[base]))
                reading.offset[one] = beside + float(np.nan_to_num(reading.offset[base]))

    def _report(self) -> None:
        pulses, line = self.reading.pulses, self.rules.line
        turns = [(one, other, self._whole_turns(one, other)) for one, other in self.shifts]
        if self.wrong is not None and self.rules.turn is not None:
            turns.append((*self.wrong, self.rules.turn))
        self.reading.anomalies += [
            _turn_count_wrong(pulses, sorted(turns), line),
            self._pulse_anomaly("index_extra", "extra"),
            self._pulse_anomaly("index_misplaced", "misplaced"),
        ]
        self.reading.narrow = self._narrow_in_place()
        self.reading.anomalies.append(
            Anomalies(
                "index_missing",
                np.array([tick for tick, _ in self.missing], np.int64),
                line=line,
                evidence={"count": [round(place) for _, place in self.missing]},
            )
        )

    def _whole_turns(self, one: int, other: int) -> int:
        """Counts that two pulses should be apart: the nearest number of whole turns."""
        return round(abs(float(self.place[other] - self.place[one])) / self.turn) * self.turn

    def _pulse_anomaly(self, kind: str, role: str) -> Anomalies:
        pulses = self.reading.pulses
        chosen = [one for one in range(pulses.rise.size) if self.reading.role[one] == role]
        off = []
        for one in chosen:
            reference = min(self.right, key=lambda other: abs(other - one))
            off.append(round(self._off(one, reference), 2))
        return Anomalies(
            kind,
            pulses.rise[chosen],
            line=self.rules.line,
            evidence={
                "off_counts": off,
                "width_counts": np.round(pulses.width[chosen], 2),
                "direction": pulses.rise_direction[chosen],
            },
        )

    def _narrow_in_place(self) -> list[Glitch]:
        """Short high pulses where an index was missed are that index, too narrow; they leave both lists."""
        narrow = []
        for glitch in [one for one in self.reading.glitches if one.high and one.toggles % 2 == 0]:
            for number, (_, place) in enumerate(self.missing):
                if abs(place - glitch.place) <= self.margin:
                    narrow.append(glitch)
                    self.reading.glitches.remove(glitch)
                    del self.missing[number]
                    break
        return narrow


def _one_way(places: FloatArray) -> list[tuple[int, int]]:
    """First and last index of each part of `places` that goes one way."""
    if places.size < 2:
        return []
    sign = np.sign(np.diff(places))
    turns = [0]
    heading = 0.0
    for row in np.flatnonzero(sign):
        if heading and sign[row] != heading:
            turns.append(int(row))
        heading = float(sign[row])
    turns.append(places.size - 1)
    return [(one, other) for one, other in pairwise(turns) if other > one]


def _turn_count_wrong(pulses: Pulses, turns: list[tuple[int, int, int]], line: str) -> Anomalies:
    middle = pulses.middle
    counts = [round(abs(float(middle[other] - middle[one]))) for one, other, _ in turns]
    expected = [counts_due for _, _, counts_due in turns]
    first = [one for one, _, _ in turns]
    last = [other for _, other, _ in turns]
    return Anomalies(
        "turn_count_wrong",
        pulses.rise[first],
        line=line,
        evidence={
            "counts": counts,
            "expected_counts": expected,
            "difference": [count - right for count, right in zip(counts, expected, strict=True)],
            "start_ticks": pulses.rise[first],
            "stop_ticks": pulses.rise[last],
        },
    )


def _judge_widths(reading: IndexReading, rules: IndexRules) -> None:
    """Widths against the sheet once, where all differ from it, and against each other."""
    pulses = reading.pulses
    chosen = np.flatnonzero(pulses.passed & np.array([role == "index" for role in reading.role], np.bool_))
    width = pulses.width[chosen]
    if chosen.size == 0:
        return
    skew = np.minimum(2 * rules.skew / np.maximum(pulses.lasts[chosen], 1), 1.0)
    median = float(np.median(width))
    rows: list[tuple[int, float, float, int]] = []
    expected = median
    if rules.width is not None:
        if abs(median - rules.width) <= _width_tolerance(rules.width) + float(np.median(skew)):
            expected = rules.width
        else:
            rows.append((int(pulses.rise[chosen[0]]), median, rules.width, int(chosen.size)))
    if rules.width is not None or chosen.size > 2:
        off = np.abs(width - expected) > _width_tolerance(expected) + skew
        rows += [
            (int(pulses.rise[one]), float(wide), expected, 1) for one, wide in zip(chosen[off], width[off], strict=True)
        ]
    rows += [(glitch.first, 0.0, expected, 1) for glitch in reading.narrow]
    rows.sort()
    reading.anomalies.append(
        Anomalies(
            "index_width",
            np.array([row[0] for row in rows], np.int64),
            line=rules.line,
            evidence={
                "width_counts": [round(row[1], 2) for row in rows],
                "expected_counts": [round(row[2], 2) for row in rows],
                "pulses": [row[3] for row in rows],
            },
        )
    )


def _width_tolerance(width: float) -> float:
    """Half a count, or a quarter of the width where that is more (common practice, no source)."""
    return max(0.5, width / 4)


def _judge_states(reading: IndexReading, rules: IndexRules) -> None:
    """In which A/B states the index is high, against the sheet: one word for the whole capture."""
    pulses = reading.pulses
    chosen = [one for one in np.flatnonzero(pulses.passed) if reading.role[one] == "index" and pulses.states[one]]
    seen = Counter(int(pulses.states[one]) for one in chosen).most_common(1)
    levels = index_levels(rules.states) if rules.states is not None else None
    if seen:
        reading.state_seen = _states_text(seen[0][0])
    if levels is None:
        return
    mask = sum(
        1 << place
        for place, state in enumerate(CYCLE)
        if levels[0] in (None, state >> 1) and levels[1] in (None, state & 1)
    )
    reading.state_expected = _states_text(mask)
    if seen:
        reading.state_fits = seen[0][0] & ~mask == 0


def _states_text(mask: int) -> str:
    """States by their bits, as the sheet writes them: one level where the states share it, else a list."""
    places = [place for place in range(4) if mask >> place & 1]
    states = {CYCLE[place] for place in places}
    for name, shared in (("a=1", {2, 3}), ("a=0", {0, 1}), ("b=1", {1, 3}), ("b=0", {0, 2})):
        if states == shared:
            return name
    return ", ".join(state_name(place) for place in places)
