"""Rows to spans: one pass over a delimited capture.

Blocks of whole rows come from `decode.capture.text`, pandas turns each into columns (only those asked for, and the
time), and the columns become edges. What this module adds is the order of things: rows that cannot be used are left out
(`decode.capture.damage`), breaks of the time axis end a span, and rows that share the last time of a block wait for the
next one, so that no edge ever lies on the far side of its span's end.

Rows ahead of a window are looked at for their time alone, unless a line's level may depend on all rows before it
(voltages between their thresholds, a row per change of one line). Reading ends with the first row behind the window.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from dataclasses import replace as with_changes
from itertools import pairwise

import numpy as np
import pandas as pd
import pyarrow as pa

from decode.capture.breaks import Break, BreakFinder
from decode.capture.columns import THRESHOLD_HINT
from decode.capture.damage import Damage
from decode.capture.dialect import Dialect
from decode.capture.levels import NONE, LevelReader, LevelRule, filled, is_missing, is_number
from decode.capture.sampling import Intervals
from decode.capture.text import Block
from decode.capture.time_axis import Ticks, explain, to_ticks
from decode.capture.window import Window
from decode.errors import InputError
from decode.spans import UNKNOWN, BoolArray, Edges, IntArray, LevelArray, Span

MOST_REVERSALS = 1000
"""A time column that falls more often than this is not one."""

_MOST_NAMES = 1000


class SpanBuilder:
    """Samples in order of time to consecutive spans, without a break between them.

    An edge at the last time seen waits, since further rows may share that time: a span ends before it.
    """

    def __init__(self, joined: bool, initial: dict[str, int] | None = None) -> None:
        self._joined = joined
        self._initial = initial or {}
        self._start: int | None = None
        self._last = 0
        self._waiting: dict[str, Edges] = {}

    def maybe_span(self, times: IntArray, levels: dict[str, LevelArray]) -> Span | None:
        """Take in n >= 1 rows; the span that ends at the last of them, or None where time has not moved on."""
        if self._start is None:
            self._start = int(times[0])
            self._waiting = {
                name: Edges.none(self._initial.get(name, int(column[0]))) for name, column in levels.items()
            }
        for name, column in levels.items():
            waiting = self._waiting[name]
            self._waiting[name] = waiting.then(Edges.from_samples(times, column, waiting.final))
        self._last = int(times[-1])
        if self._last == self._start:
            return None
        span = Span(
            self._start,
            self._last,
            {name: edges.between(self._start, self._last) for name, edges in self._waiting.items()},
            self._joined,
        )
        self._waiting = {name: edges.between(self._last, self._last + 1) for name, edges in self._waiting.items()}
        self._start, self._joined = self._last, True
        return span

    def last_span(self) -> Iterator[Span]:
        """What is left when the rows end: a span of one tick, for the last row. Nothing where no row came."""
        if self._start is not None:
            yield Span(self._start, self._last + 1, self._waiting, self._joined)


@dataclass(frozen=True, slots=True)
class Place:
    """A break with where it is: the time of the row above it, its physical line, how many lines differ behind it."""

    kind: str
    time: int
    ticks: int
    row: int
    changed: int


@dataclass(slots=True)
class Tally:
    """What reading found out so far."""

    rows: int = 0
    first: int = 0
    last: int = 0
    intervals: Intervals = field(default_factory=Intervals)
    blank: int = 0
    comments: int = 0
    rounded: int | None = None
    cut_short: int | None = None
    unused: tuple[str, ...] = ()
    reversals: int = 0
    breaks: list[Place] = field(default_factory=list)
    damage: Damage = field(default_factory=Damage)
    seen_first: int | None = None
    seen_last: int = 0


@dataclass(frozen=True, slots=True, eq=False)
class _Rows:
    """n rows that can be used: ticks, codes by line, physical lines; fresh: (n,) rows are missing ahead of this one."""

    times: IntArray
    codes: dict[str, LevelArray]
    numbers: IntArray
    fresh: BoolArray


class Pass:
    """One pass over the rows of a capture."""

    def __init__(self, file: str, dialect: Dialect, rules: dict[str, LevelRule], window: Window) -> None:
        self._file = file
        self._dialect = dialect
        self._window = window
        self._readers = {name: LevelReader(rule, dialect.shape.decimal) for name, rule in rules.items()}
        self._finder = BreakFinder(dialect.even)
        initial = {name: rule.initial for name, rule in rules.items() if rule.line is not None}
        self._builder = SpanBuilder(joined=True, initial=initial)
        self._levels = {name: rule.initial for name, rule in rules.items() if rule.holds}
        self._seen: dict[str, int] = dict(self._levels)
        self._above: dict[str, LevelArray] = {}
        self._above_time = 0
        self._is_damaged = False
        self._names: set[str] = set(dialect.long.lines) if dialect.long is not None else set()
        self._skips = window.start is not None and not self._levels
        self._held: Block | None = None
        self._had_span = False
        used = {dialect.names[rule.column] for rule in rules.values()}
        unused = tuple(dialect.names[c.index] for c in dialect.columns if dialect.names[c.index] not in used)
        self.is_over = False
        self.tally = Tally(unused=unused if dialect.long is None else ())

    def feed(self, block: Block) -> Iterator[Span]:
        narrowed = block if self._window.is_open else self._maybe_narrowed(block)
        if narrowed is None:
            return
        self._count(narrowed)
        rows = self._rows(narrowed)
        starts = [0, *(int(place) for place in np.flatnonzero(rows.fresh) if place), rows.times.size]
        for start, stop in pairwise(starts):
            if start < stop:
                part = slice(start, stop)
                codes = {name: column[part] for name, column in rows.codes.items()}
                yield from self._told(
                    self._stretch(rows.times[part], codes, rows.numbers[part], bool(rows.fresh[start]))
                )

    def finish(self) -> Iterator[Span]:
        tally = self.tally
        if not tally.rows:
            if tally.damage.rows:
                tally.damage.refuse(0)
            if tally.seen_first is not None:
                raise self._outside()
            raise InputError(
                "the capture holds no whole row",
                file=self._file,
                expected="a row per change or per sample",
                hint="export the capture again",
            )
        tally.damage.refuse(tally.rows)
        if self._dialect.long is not None:
            tally.unused = tuple(sorted(self._names - {reader.rule.line for reader in self._readers.values()}))
        tally.first, tally.last = self._window.clipped(tally.first), self._window.clipped(tally.last)
        yield from self._told(self._builder.last_span())
        if not self._had_span:
            raise self._outside()

    def absent(self) -> str | None:
        """A line that was asked for and that no row names."""
        lines = [reader.rule.line for reader in self._readers.values() if reader.rule.line is not None]
        seen = {name.lower() for name in self._names}
        return next((line for line in lines if line.lower() not in seen), None)

    def _told(self, spans: Iterator[Span]) -> Iterator[Span]:
        """What the window leaves of the spans."""
        for span in spans:
            cut = self._window.maybe_cut(span)
            if cut is not None:
                yield cut if self._had_span else with_changes(cut, joined=True)
                self._had_span = True

    def _outside(self) -> InputError:
        tick = self._dialect.tick
        first, last = (float((end or 0) * tick) for end in (self.tally.seen_first, self.tally.seen_last))
        return InputError(
            "no row of the capture lies in the window",
            file=self._file,
            found=f"rows from {first:.12g} s on" if self.is_over else f"rows from {first:.12g} s to {last:.12g} s",
            expected="a window, --from and --to, in which there are rows",
            hint="times are those of the capture's own axis",
        )

    def _count(self, block: Block) -> None:
        self.tally.blank += int(block.blank.size)
        self.tally.comments += int(block.comments.size)
        if block.cut_short is not None:
            self.tally.cut_short = block.cut_short

    # the window

    def _maybe_narrowed(self, block: Block) -> Block | None:
        """What the window needs of a block, or None for nothing; `is_over` is set at the first row behind it."""
        if not block.numbers.size:
            return None if self._skips else block
        time = self._dialect.time
        found = self._times(self._frame(block, () if time is None else (time,)), block)
        good = np.ones(block.numbers.size, np.bool_) if found.bad is None else ~found.bad
        self._look(found.ticks[good])
        first = 0
        if self._skips:
            assert self._window.start is not None
            inside = np.flatnonzero(good & (found.ticks >= self._window.start))
            before = np.flatnonzero(good[: inside[0]] if inside.size else good)
            if before.size:
                self._held = block.row(int(before[-1]))
            if not inside.size:
                return None
            self._skips = False
            first = int(before[-1]) if before.size else 0
        held, self._held = (None if first else self._held), None
        behind = np.flatnonzero(good[first:] & (found.ticks[first:] >= self._stop()))
        if not behind.size:
            kept = block.between(first, block.numbers.size)
        else:
            self.is_over = True
            kept = block.between(first, first + int(behind[0]) + 1).ended()
        return kept if held is None or held.numbers[0] == kept.numbers[0] else kept.behind(held)

    def _stop(self) -> float:
        return np.inf if self._window.stop is None else self._window.stop

    def _look(self, ticks: IntArray) -> None:
        """Remember what times there are, also outside the window."""
        if ticks.size:
            tally = self.tally
            first, last = int(ticks.min()), int(ticks.max())
            tally.seen_first = first if tally.seen_first is None else min(tally.seen_first, first)
            tally.seen_last = last if tally.seen_first == first else max(tally.seen_last, last)

    # cells to numbers

    def _rows(self, block: Block) -> _Rows:
        """The rows of a block that can be used; the others go into the tally's damage."""
        frame = self._frame(block, self._used())
        found = self._times(frame, block)
        codes = {name: reader.codes(frame) for name, reader in self._readers.items()}
        self._meet_names(frame)
        bad = np.zeros(block.numbers.size, np.bool_) if found.bad is None else found.bad.copy()
        for column in codes.values():
            bad |= column == NONE
        if found.rounded is not None and self.tally.rounded is None:
            self.tally.rounded = int(block.numbers[found.rounded])
        if not (self._is_damaged or bad.any() or block.broken.size):
            return _Rows(found.ticks, codes, block.numbers, np.zeros(block.numbers.size, np.bool_))
        self._tell_damage(block, frame, found, codes, bad)
        lost = np.sort(np.concatenate([block.broken, block.numbers[bad]]))
        numbers = block.numbers[~bad]
        ahead = np.searchsorted(lost, numbers)
        fresh = np.diff(ahead, prepend=0) > 0
        if fresh.size:
            fresh[0] |= self._is_damaged
        self._is_damaged = bool(lost.size > ahead[-1]) if fresh.size else self._is_damaged or bool(lost.size)
        return _Rows(found.ticks[~bad], {name: column[~bad] for name, column in codes.items()}, numbers, fresh)

    def _used(self) -> tuple[int, ...]:
        rules = [reader.rule for reader in self._readers.values()]
        indexes = {rule.column for rule in rules} | {rule.names for rule in rules if rule.names is not None}
        return tuple(sorted(indexes | ({self._dialect.time} if self._dialect.time is not None else set())))

    def _frame(self, block: Block, columns: Sequence[int]) -> pd.DataFrame:
        shape = self._dialect.shape
        plain = {self._dialect.time} | {
            reader.rule.column for reader in self._readers.values() if reader.rule.thresholds is not None
        }
        if not block.rows:
            return pd.DataFrame({index: pd.Series([], dtype="category") for index in columns})
        return pd.read_csv(
            io.BytesIO(block.rows),
            sep=r"\s+" if shape.delimiter == " " else shape.delimiter,
            header=None,
            names=range(shape.cells),
            usecols=sorted(columns),
            dtype={index: "str" if index in plain else "category" for index in columns},
            index_col=False,
            na_filter=False,
            quoting=csv.QUOTE_NONE,
            lineterminator="\n",
            skipinitialspace=True,
            low_memory=False,
            encoding="latin-1",
        )

    def _times(self, frame: pd.DataFrame, block: Block) -> Ticks:
        time = self._dialect.time
        if time is None:
            return Ticks(block.places)
        return to_ticks(pa.array(frame[time], type=pa.string()), self._dialect.scale)

    def _meet_names(self, frame: pd.DataFrame) -> None:
        long = self._dialect.long
        if long is not None and len(self._names) < _MOST_NAMES and long.names in frame:
            self._names |= {str(name).strip() for name in frame[long.names].cat.categories}

    # damage

    def _tell_damage(
        self, block: Block, frame: pd.DataFrame, found: Ticks, codes: dict[str, LevelArray], bad: BoolArray
    ) -> None:
        damage, before = self.tally.damage, self.tally.damage.rows
        faults = []
        if block.broken.size:
            ragged = block.cells != self._dialect.shape.cells
            damage.add("a wrong number of cells", block.broken[ragged])
            damage.add("a NUL byte", block.broken[~ragged])
            faults.append(self._ragged(int(block.broken[0]), int(block.cells[0])))
        late = found.bad if found.bad is not None else np.zeros(bad.size, np.bool_)
        if late.any():
            damage.add("no time", block.numbers[late])
            faults.append(self._time_fault(int(np.argmax(late)), frame, block))
        unread = bad & ~late
        if unread.any():
            damage.add("a value that is no level", block.numbers[unread])
            position = int(np.argmax(unread))
            name = next(name for name, column in codes.items() if column[position] == NONE)
            faults.append(self._level_fault(position, name, frame, block))
        if faults:
            damage.keep(faults)
            places = np.sort(np.concatenate([block.broken_places, block.places[bad]]))
            damage.refuse_early(before, places + 1)

    def _time_fault(self, position: int, frame: pd.DataFrame, block: Block) -> InputError:
        time = self._dialect.time
        assert time is not None
        text = str(frame[time].iloc[position])
        problem, expected = explain(text, self._dialect.scale)
        return InputError(
            problem,
            file=self._file,
            row=int(block.numbers[position]),
            column=self._dialect.names[time],
            found=repr(text),
            expected=expected,
            hint="remove or repair this row",
        )

    def _level_fault(self, position: int, name: str, frame: pd.DataFrame, block: Block) -> InputError:
        rule = self._readers[name].rule
        text = str(frame[rule.column].iloc[position])
        if is_missing(text):
            hint = "name another column in [lines], or export the capture again"
        elif rule.base is not None:
            hint = '[capture] port_base = "binary", "decimal" or "hexadecimal" says how port values are written'
        elif is_number(text, self._dialect.shape.decimal):
            hint = THRESHOLD_HINT
        else:
            hint = "name another column in [lines], or repair this row"
        return InputError(
            "a value that is not a level",
            file=self._file,
            row=int(block.numbers[position]),
            column=name,
            found=repr(text),
            expected="a port value" if rule.base is not None else "0 or 1, or x, z or u where the level is not known",
            hint=hint,
        )

    def _ragged(self, row: int, cells: int) -> InputError:
        expected = self._dialect.shape.cells
        fewer = "a row with too few cells" if cells < expected else "a row with too many cells"
        return InputError(
            "a NUL byte within a row" if cells == expected else fewer,
            file=self._file,
            row=row,
            found=f"{cells} {'cell' if cells == 1 else 'cells'}",
            expected=f"{expected}, as in the other rows",
            hint="remove or repair this row",
        )

    # rows to spans

    def _stretch(
        self, times: IntArray, codes: dict[str, LevelArray], numbers: IntArray, is_fresh: bool
    ) -> Iterator[Span]:
        """The spans of rows none of which is missing. is_fresh: rows are missing ahead of the first."""
        tally = self.tally
        if is_fresh and tally.rows:
            yield from self._restarted()
            self._finder.resume()
        seen = {name: self._filled(name, column, self._seen) for name, column in codes.items()}
        above = {
            name: np.concatenate([self._above.get(name, column[:1]), column[:-1]]) for name, column in seen.items()
        }
        repeats = np.logical_and.reduce([column == above[name] for name, column in seen.items()] or [times == times])
        breaks = self._finder.feed(times, repeats)
        if is_fresh and tally.rows and times[0] < self._above_time:
            self._note_break(Break(0, "time_reversal", self._above_time - int(times[0])), times, seen, above, numbers)
        self._measure(times, breaks, is_fresh)
        start = 0
        for found in breaks:
            yield from self._segment(
                times[start : found.row], {name: c[start : found.row] for name, c in codes.items()}
            )
            self._note_break(found, times, seen, above, numbers)
            yield from self._restarted()
            start = found.row
        yield from self._segment(times[start:], {name: column[start:] for name, column in codes.items()})
        self._above = {name: column[-1:] for name, column in seen.items()}
        self._above_time = int(times[-1])

    def _restarted(self) -> Iterator[Span]:
        """The end of what was read; what comes next does not continue it."""
        yield from self._builder.last_span()
        self._builder = SpanBuilder(joined=False)
        self._levels = dict.fromkeys(self._levels, UNKNOWN)

    def _filled(self, name: str, codes: LevelArray, before: dict[str, int]) -> LevelArray:
        """The levels of a line, of which `before` knows the last one."""
        if name not in before:
            return codes
        levels = filled(codes, before[name])
        before[name] = int(levels[-1])
        return levels

    def _segment(self, times: IntArray, codes: dict[str, LevelArray]) -> Iterator[Span]:
        if times.size:
            levels = {name: self._filled(name, column, self._levels) for name, column in codes.items()}
            span = self._builder.maybe_span(times, levels)
            if span is not None:
                yield span

    def _measure(self, times: IntArray, breaks: Sequence[Break], is_fresh: bool) -> None:
        tally = self.tally
        if not tally.rows:
            self._above_time = tally.first = tally.last = int(times[0])
        steps = np.diff(times, prepend=self._above_time)
        steps[[found.row for found in breaks]] = 0
        if is_fresh:
            steps[0] = 0
        tally.intervals.add(steps)
        tally.first = min(tally.first, int(times.min()))
        tally.last = max(tally.last, int(times.max()))
        tally.rows += times.size

    def _note_break(
        self,
        found: Break,
        times: IntArray,
        seen: dict[str, LevelArray],
        above: dict[str, LevelArray],
        numbers: IntArray,
    ) -> None:
        row = found.row
        time = int(times[row - 1]) if row else self._above_time
        pairs = [(int(column[row]), int(above[name][row])) for name, column in seen.items()]
        changed = sum(now != before and now < 2 and before < 2 for now, before in pairs)
        self.tally.breaks.append(Place(found.kind, time, found.ticks, int(numbers[row]), changed))
        self.tally.reversals += found.kind == "time_reversal"
        if self.tally.reversals > MOST_REVERSALS:
            raise InputError(
                f"the time goes back again and again, {self.tally.reversals} times up to here",
                file=self._file,
                row=int(numbers[row]),
                column=None if self._dialect.time is None else self._dialect.names[self._dialect.time],
                expected="rows in order of time",
                hint="sort the rows by time, or export the capture again",
            )
