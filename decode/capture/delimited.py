"""Delimited text to spans: the reader of CSV captures.

Blocks of whole rows come from `decode.capture.text`, pandas turns each into columns (only those asked for, and the
time), and the columns become edges. What this module adds is the order of things: the earliest fault in the file is
the one reported, breaks of the time axis end a span, and rows that share the last time of a block wait for the next
one, so that no edge ever lies on the far side of its span's end.
"""

from __future__ import annotations

import csv
import hashlib
import io
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa

from decode.anomalies import Anomalies, Severity
from decode.capture.breaks import Break, BreakFinder
from decode.capture.dialect import Dialect, read_dialect
from decode.capture.levels import LevelError, LevelReader
from decode.capture.text import Block, read_blocks
from decode.capture.time_axis import TimeError, to_ticks
from decode.errors import InputError, maybe_nearest
from decode.sheet import CaptureKeys
from decode.spans import Edges, IntArray, LevelArray, Span

MOST_REVERSALS = 1000
"""A time column that falls more often than this is not one."""


class SpanBuilder:
    """Samples in order of time to consecutive spans, without a break between them.

    An edge at the last time seen waits, since further rows may share that time: a span ends before it.
    """

    def __init__(self, joined: bool) -> None:
        self._joined = joined
        self._start: int | None = None
        self._last = 0
        self._waiting: dict[str, Edges] = {}

    def maybe_span(self, times: IntArray, levels: dict[str, LevelArray]) -> Span | None:
        """Take in n >= 1 rows; the span that ends at the last of them, or None where time has not moved on."""
        if self._start is None:
            self._start = int(times[0])
            self._waiting = {name: Edges.none(int(column[0])) for name, column in levels.items()}
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


@dataclass(slots=True)
class _Tally:
    """What reading found out so far."""

    rows: int = 0
    bytes: int = 0
    first: int = 0
    last: int = 0
    grid: int = 0
    blank: int = 0
    comments: int = 0
    rounded: int | None = None
    cut_short: int | None = None
    unused: tuple[str, ...] = ()
    reversals: int = 0
    breaks: list[_Place] = field(default_factory=list)


@dataclass(frozen=True, slots=True)
class _Place:
    """A break with where it is: the time of the row above it, its physical line, how many lines differ behind it."""

    kind: str
    time: int
    ticks: int
    row: int
    changed: int


class DelimitedCapture:
    """A CSV capture. See `decode.capture.source.Capture` for what the attributes are."""

    def __init__(self, path: Path, keys: CaptureKeys, rows_per_span: int) -> None:
        self.file = str(path)
        self._path = path
        self._keys = keys
        self._rows_per_span = rows_per_span
        self._dialect: Dialect = read_dialect(path, keys)
        self._tally = _Tally()
        self.layout: str = self._dialect.layout
        self.columns: tuple[str, ...] = tuple(self._dialect.names[index] for index in self._dialect.signals)
        self.tick: Fraction = self._dialect.tick
        self.digest = ""

    def column(self, line: str | int) -> str:
        """The name of the column that an entry of [lines] means. Raises InputError where there is none."""
        found = self._maybe_column(line)
        if found is not None:
            return found
        nearest = maybe_nearest(str(line), self.columns)
        raise InputError(
            f"the capture has no line {line!r}" if isinstance(line, str) else f"the capture has no line {line}",
            file=self.file,
            found=f"lines {', '.join(self.columns)}",
            expected="the name of a column, or its number from 1",
            hint=f"did you mean {nearest!r}?" if nearest else "correct [lines] in the sheet",
        )

    def _maybe_column(self, line: str | int) -> str | None:
        if isinstance(line, int):
            index = line - 1
            return self._dialect.names[index] if index in self._dialect.signals else None
        if line in self.columns:
            return line
        alike = [name for name in self.columns if name.strip().lower() == line.strip().lower()]
        return alike[0] if len(alike) == 1 else None

    # --- known once the spans are exhausted ---

    @property
    def rows(self) -> int:
        return self._tally.rows

    @property
    def part_read(self) -> float:
        """How much of the file the spans so far came from, 0 to 1."""
        return min(1.0, self._tally.bytes / max(1, self._path.stat().st_size))

    @property
    def first(self) -> int:
        return self._tally.first

    @property
    def last(self) -> int:
        return self._tally.last

    @property
    def grid(self) -> int:
        return 1 if self._dialect.counted else self._tally.grid or self._dialect.grid

    @property
    def notes(self) -> list[str]:
        tally, notes = self._tally, list(self._dialect.notes)
        if tally.unused:
            notes.append(f"columns not used: {', '.join(tally.unused)}")
        if tally.blank:
            notes.append(f"{tally.blank} blank {'line' if tally.blank == 1 else 'lines'} skipped among the rows")
        if tally.comments:
            notes.append(
                f"{tally.comments} comment {'line' if tally.comments == 1 else 'lines'} skipped among the rows"
            )
        if tally.rounded is not None:
            tick = np.format_float_scientific(float(self.tick), trim="-", exp_digits=1)
            notes.append(f"times finer than {tick} s were rounded to it, the first in line {tally.rounded}")
        if tally.cut_short is not None:
            notes.append(f"the last row, line {tally.cut_short}, is cut short and was dropped")
        return notes

    @property
    def anomalies(self) -> list[Anomalies]:
        reversals = [place for place in self._tally.breaks if place.kind == "time_reversal"]
        gaps = [place for place in self._tally.breaks if place.kind == "time_gap"]
        found = (
            self._anomalies("time_reversal", "back_s", None, reversals),
            self._anomalies("time_gap", "gap_s", None, [gap for gap in gaps if gap.changed != 1]),
            self._anomalies("time_gap", "gap_s", "note", [gap for gap in gaps if gap.changed == 1]),
        )
        return [anomalies for anomalies in found if len(anomalies)]

    def _anomalies(self, kind: str, length: str, severity: Severity | None, places: list[_Place]) -> Anomalies:
        return Anomalies(
            kind,
            np.array([place.time for place in places], np.int64),
            evidence={
                "file_line": np.array([place.row for place in places], np.int64),
                length: np.array([float(place.ticks * self.tick) for place in places]),
                "lines_changed": np.array([place.changed for place in places], np.int64),
            },
            severity=severity,
        )

    # --- reading ---

    def spans(self, columns: Sequence[str]) -> Iterator[Span]:
        """The capture as consecutive spans with the edges of `columns` (names as `column` gives them).

        Each call reads the file anew. Raises InputError, at the latest when the row at fault is reached.
        """
        reading = _Reading(self.file, self._dialect, self._keys, [self.column(name) for name in columns])
        self._tally = reading.tally
        digest = hashlib.sha256()
        for block in read_blocks(self._path, self._dialect.shape, self._rows_per_span, digest):
            yield from reading.feed(block)
        yield from reading.finish()
        self.digest = digest.hexdigest()


class _Reading:
    """One pass over the rows of a capture."""

    def __init__(self, file: str, dialect: Dialect, keys: CaptureKeys, columns: Sequence[str]) -> None:
        self._file = file
        self._dialect = dialect
        self._indexes = {name: dialect.names.index(name) for name in columns}
        self._readers = {name: LevelReader(keys.threshold_v, dialect.decimal) for name in columns}
        self._finder = BreakFinder(dialect.scale.printed)
        self._builder = SpanBuilder(joined=True)
        self._above: dict[str, LevelArray] = {}
        self._above_time = 0
        self.tally = _Tally(
            unused=tuple(dialect.names[i] for i in dialect.signals if dialect.names[i] not in self._indexes)
        )

    def feed(self, block: Block) -> Iterator[Span]:
        self._count(block)
        if block.numbers.size:
            times, codes = self._columns(block)
            yield from self._spans(times, codes, block.numbers)
        if block.ragged is not None:
            raise self._ragged(*block.ragged)

    def finish(self) -> Iterator[Span]:
        if not self.tally.rows:
            raise InputError(
                "the capture holds no whole row",
                file=self._file,
                expected="a row per change or per sample",
                hint="export the capture again",
            )
        yield from self._builder.last_span()

    def _count(self, block: Block) -> None:
        self.tally.bytes += len(block.rows)
        self.tally.blank += block.blank
        self.tally.comments += block.comments
        if block.cut_short is not None:
            self.tally.cut_short = block.cut_short

    # cells to numbers

    def _columns(self, block: Block) -> tuple[IntArray, dict[str, LevelArray]]:
        """(ticks, codes by column) of a block's rows. Raises InputError for the cell at fault that stands first."""
        frame = self._frame(block)
        codes: dict[str, LevelArray] = {}
        faults: list[tuple[int, InputError]] = []
        times = np.empty(0, np.int64)
        try:
            times = self._times(frame, block)
        except TimeError as error:
            faults.append((error.position, self._time_fault(error, frame, block)))
        for name, reader in self._readers.items():
            try:
                codes[name] = reader.codes(frame[self._indexes[name]])
            except LevelError as error:
                faults.append((error.position, self._level_fault(error, name, block)))
        if faults:
            raise min(faults, key=lambda fault: fault[0])[1]
        return times, codes

    def _frame(self, block: Block) -> pd.DataFrame:
        shape, time = self._dialect.shape, self._dialect.time
        kinds: dict[int, str] = dict.fromkeys(self._indexes.values(), "category")
        if time is not None:
            kinds[time] = "str"
        return pd.read_csv(
            io.BytesIO(block.rows),
            sep=r"\s+" if shape.delimiter == " " else shape.delimiter,
            header=None,
            names=range(shape.cells),
            usecols=sorted(kinds),
            dtype=kinds,
            index_col=False,
            na_filter=False,
            quoting=csv.QUOTE_NONE,
            lineterminator="\n",
            skipinitialspace=True,
            low_memory=False,
            encoding="latin-1",
        )

    def _times(self, frame: pd.DataFrame, block: Block) -> IntArray:
        count, time = block.numbers.size, self._dialect.time
        if time is None:
            return np.arange(self.tally.rows, self.tally.rows + count, dtype=np.int64)
        times, rounded = to_ticks(pa.array(frame[time], type=pa.string()), self._dialect.scale)
        if rounded is not None and self.tally.rounded is None:
            self.tally.rounded = int(block.numbers[rounded])
        return times

    # rows to spans

    def _spans(self, times: IntArray, codes: dict[str, LevelArray], numbers: IntArray) -> Iterator[Span]:
        above = {
            name: np.concatenate([self._above.get(name, column[:1]), column[:-1]]) for name, column in codes.items()
        }
        repeats = np.logical_and.reduce([column == above[name] for name, column in codes.items()] or [times == times])
        breaks = self._finder.feed(times, repeats)
        self._measure(times, breaks)
        start = 0
        for found in breaks:
            yield from self._segment(
                times[start : found.row], {name: c[start : found.row] for name, c in codes.items()}
            )
            self._note_break(found, times, codes, above, numbers)
            yield from self._builder.last_span()
            self._builder = SpanBuilder(joined=False)
            for reader in self._readers.values():
                reader.restart()
            start = found.row
        yield from self._segment(times[start:], {name: column[start:] for name, column in codes.items()})
        self._above = {name: column[-1:] for name, column in codes.items()}
        self._above_time = int(times[-1])

    def _segment(self, times: IntArray, codes: dict[str, LevelArray]) -> Iterator[Span]:
        if times.size:
            levels = {name: self._readers[name].levels(column) for name, column in codes.items()}
            span = self._builder.maybe_span(times, levels)
            if span is not None:
                yield span

    def _measure(self, times: IntArray, breaks: Sequence[Break]) -> None:
        tally = self.tally
        if not tally.rows:
            self._above_time = tally.first = tally.last = int(times[0])
        steps = np.diff(times, prepend=self._above_time)
        steps[[found.row for found in breaks]] = 0
        tally.grid = int(np.gcd.reduce(steps, initial=tally.grid))
        tally.first = min(tally.first, int(times.min()))
        tally.last = max(tally.last, int(times.max()))
        tally.rows += times.size

    def _note_break(
        self,
        found: Break,
        times: IntArray,
        codes: dict[str, LevelArray],
        above: dict[str, LevelArray],
        numbers: IntArray,
    ) -> None:
        row = found.row
        time = int(times[row - 1]) if row else self._above_time
        pairs = [(int(column[row]), int(above[name][row])) for name, column in codes.items()]
        changed = sum(now != before and now < 2 and before < 2 for now, before in pairs)
        self.tally.breaks.append(_Place(found.kind, time, found.ticks, int(numbers[row]), changed))
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

    # faults

    def _time_fault(self, error: TimeError, frame: pd.DataFrame, block: Block) -> InputError:
        time = self._dialect.time
        assert time is not None
        return InputError(
            error.problem,
            file=self._file,
            row=int(block.numbers[error.position]),
            column=self._dialect.names[time],
            found=repr(str(frame[time].iloc[error.position])),
            expected=error.expected,
            hint="remove or repair this row",
        )

    def _level_fault(self, error: LevelError, name: str, block: Block) -> InputError:
        if error.is_number:
            hint = "for a file of voltages give [capture] threshold_v = [low, high] in the sheet"
        else:
            hint = "name another column in [lines], or repair this row"
        return InputError(
            "a value that is not a level",
            file=self._file,
            row=int(block.numbers[error.position]),
            column=name,
            found=repr(error.text),
            expected="0 or 1, or x, z or u where the level is not known",
            hint=hint,
        )

    def _ragged(self, row: int, cells: int) -> InputError:
        expected = self._dialect.shape.cells
        return InputError(
            "a row with too few cells" if cells < expected else "a row with too many cells",
            file=self._file,
            row=row,
            found=f"{cells} {'cell' if cells == 1 else 'cells'}",
            expected=f"{expected}, as in the other rows",
            hint="remove or repair this row",
        )
