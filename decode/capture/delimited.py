"""Delimited text as a capture: which line is which column, and what the report says of the file.

The file's dialect is told once (`decode.capture.dialect`), each pass over its rows is one of `decode.capture.rows`.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from fractions import Fraction

import numpy as np

from decode.anomalies import Anomalies, Severity
from decode.capture.columns import Column, refuse_column, rule_of
from decode.capture.dialect import Dialect, rate_text, read_dialect
from decode.capture.levels import LevelRule
from decode.capture.names import without_unit
from decode.capture.rows import Pass, Place, Tally
from decode.capture.sampling import Intervals
from decode.capture.stream import Reading, Source
from decode.capture.text import read_blocks
from decode.capture.window import Window
from decode.errors import InputError, maybe_nearest
from decode.sheet import CaptureKeys
from decode.spans import UNKNOWN, Span

_BIT = re.compile(r"(.+?)\s*\[\s*(\d{1,3})\s*\]")


class DelimitedCapture:
    """A CSV capture. See `decode.capture.source.Capture` for what the attributes are."""

    def __init__(self, source: Source, keys: CaptureKeys, rows_per_span: int) -> None:
        self.file = source.file
        self._source = source
        self._rows_per_span = rows_per_span
        self._dialect: Dialect = read_dialect(source, keys)
        self._window = Window.of(keys, self._dialect.tick)
        self._keys = keys
        self._tally = Tally()
        self._reading: Reading | None = None
        dialect = self._dialect
        self.layout: str = dialect.layout
        self._by_name: dict[str, Column] = {dialect.names[column.index]: column for column in dialect.columns}
        self.columns: tuple[str, ...] = tuple(self._by_name if dialect.long is None else dialect.long.lines)
        self.tick: Fraction = dialect.tick
        self.digest = ""

    # --- lines ---

    def column(self, line: str | int) -> str:
        """The name of the line that an entry of [lines] means. Raises InputError where there is none, or where what
        it names cannot be a line."""
        name, bit = self._place(line)
        if self._dialect.long is None:
            self._rule(name, bit)
        return name if bit is None else f"{name}[{bit}]"

    def _place(self, line: str | int) -> tuple[str, int | None]:
        found = self._maybe_name(line)
        if found is not None:
            return found, None
        match = _BIT.fullmatch(line) if isinstance(line, str) and self._dialect.long is None else None
        found = self._maybe_name(match.group(1)) if match is not None else None
        if match is not None and found is not None:
            return found, int(match.group(2))
        nearest = maybe_nearest(str(line), self.columns)
        if self._dialect.long is not None and isinstance(line, str) and nearest is None:
            return line, None  # it may come in a later row; if it does not, the end of the reading says so
        raise self._no_line(line, nearest)

    def _no_line(self, line: str | int, nearest: str | None) -> InputError:
        return InputError(
            f"the capture has no line {line!r}" if isinstance(line, str) else f"the capture has no line {line}",
            file=self.file,
            found=f"lines {', '.join(self.columns)}",
            expected="the name of a column, or its number from 1",
            hint=f"did you mean {nearest!r}?" if nearest else "correct [lines] in the sheet",
        )

    def _maybe_name(self, line: str | int) -> str | None:
        if isinstance(line, int):
            return self._maybe_numbered(line)
        if line in self.columns:
            return line
        wanted = line.strip().lower()
        for plain in (str.strip, without_unit):
            alike = [name for name in self.columns if plain(name).strip().lower() == wanted]
            if alike:
                return alike[0] if len(alike) == 1 else None
        return None

    def _maybe_numbered(self, number: int) -> str | None:
        """The line with the number of a column. Raises InputError where another column has that number for a name."""
        if self._dialect.long is not None:
            return str(number) if str(number) in self.columns else None
        names = self._dialect.names
        at = names[number - 1] if 0 < number <= len(names) else None
        if str(number) in self._by_name and at != str(number):
            raise InputError(
                f"line {number} may be the column of that name or the column of that number",
                file=self.file,
                found=f"a column named {number}; column number {number} is {at}",
                expected="the name in double quotes",
                hint=f'write "{number}" or "{at}" in [lines]',
            )
        return at if at in self._by_name else None

    def _rule(self, name: str, bit: int | None) -> LevelRule:
        """How a line stands in the table. Raises InputError where it does not."""
        long = self._dialect.long
        if long is not None:
            level = next(column for column in self._dialect.columns if column.index == long.level)
            return LevelRule(
                long.level,
                level.thresholds,
                line=name,
                names=long.names,
                initial=long.lines.get(name, UNKNOWN),
            )
        column = self._by_name[name]
        rule = rule_of(column, bit)
        if rule is None:
            raise refuse_column(column, name, bit, self._dialect.texts.get(column.index, ""), self.file)
        return rule

    # --- known once the spans are exhausted ---

    @property
    def rows(self) -> int:
        return self._tally.rows

    @property
    def part_read(self) -> float:
        """How much of the file the spans so far came from, 0 to 1; 0 of standard input."""
        return 0.0 if self._reading is None else self._source.part(self._reading)

    @property
    def first(self) -> int:
        return self._tally.first

    @property
    def last(self) -> int:
        return self._tally.last

    @property
    def grid(self) -> int:
        if self._dialect.counted:
            return 1
        stated = self._maybe_stated_step()
        if stated is not None:
            return max(1, round(stated))
        return max(1, round(self._intervals.step(self._dialect.scale.printed).ticks))

    @property
    def _intervals(self) -> Intervals:
        return self._tally.intervals if self._tally.intervals.shortest.size else self._dialect.head

    def _maybe_stated_step(self) -> Fraction | None:
        """The stated sampling step in ticks, unless two rows stand closer."""
        rate = self._dialect.rate
        if rate is None or self._dialect.counted:
            return None
        step = 1 / (rate * self.tick)
        shortest = self._intervals.shortest
        closest = int(shortest[0]) if shortest.size else None
        return step if closest is None or closest + self._dialect.scale.printed >= step else None

    @property
    def notes(self) -> list[str]:
        tally, notes = self._tally, [*self._dialect.notes, *self._step_notes()]
        if not self._window.is_open:
            start, stop = self._keys.window_s or ("none", "none")
            ends = [f"from {start:.12g} s"] * (start != "none") + [f"to {stop:.12g} s"] * (stop != "none")
            notes.append(f"only the rows {' '.join(ends)} were looked at")
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
        notes += tally.damage.notes()
        if tally.cut_short is not None:
            notes.append(f"the last row, line {tally.cut_short}, is cut short and was dropped")
        samples = self._dialect.samples
        if self._dialect.every_sample and self._window.is_open and samples not in (None, tally.rows):
            notes.append(f"the lines above the table promise {samples} samples; there are {tally.rows}")
        return notes

    def _step_notes(self) -> list[str]:
        """What the sampling step was found from, where it is not the common divisor of the times."""
        dialect = self._dialect
        if dialect.counted:
            return []
        if dialect.rate is not None:
            used = self._maybe_stated_step() is not None
            told = f"{rate_text(dialect.rate)}, {dialect.rate_by}"
            return [f"sampled at {told}"] if used else [f"the sample rate of {told}, is not used: rows stand closer"]
        step = self._intervals.step(dialect.scale.printed)
        if step.is_exact:
            return []
        seconds = step.ticks * float(self.tick)
        return [f"the sampling step is taken to be {seconds:.4g} s: all times fit multiples of it"]

    @property
    def anomalies(self) -> list[Anomalies]:
        inside = [place for place in self._tally.breaks if self._window.holds(place.time)]
        reversals = [place for place in inside if place.kind == "time_reversal"]
        gaps = [place for place in inside if place.kind == "time_gap"]
        found = (
            self._anomalies("time_reversal", "back_s", None, reversals),
            self._anomalies("time_gap", "gap_s", None, [gap for gap in gaps if gap.changed != 1]),
            self._anomalies("time_gap", "gap_s", "note", [gap for gap in gaps if gap.changed == 1]),
        )
        return [anomalies for anomalies in found if len(anomalies)]

    def _anomalies(self, kind: str, length: str, severity: Severity | None, places: list[Place]) -> Anomalies:
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

        Each call reads the file anew. Raises InputError, at the latest at the end of the file.
        """
        places = [self._place(name) for name in columns]
        rules = {name: self._rule(*place) for name, place in zip(map(self.column, columns), places, strict=True)}
        one = Pass(self.file, self._dialect, rules, self._window)
        self._tally = one.tally
        self._reading = stream = self._source.open()
        try:
            for block in read_blocks(stream, self.file, self._dialect.shape, self._rows_per_span):
                yield from one.feed(block)
                if one.is_over:
                    stream.drain()
                    break
            yield from one.finish()
        finally:
            stream.close()
        absent = one.absent()
        if absent is not None:
            raise self._no_line(absent, None)
        self.digest = stream.digest
