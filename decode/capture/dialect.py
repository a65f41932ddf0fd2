"""Dialect: how a delimited capture is written, told from its first rows.

Exports differ in separator, header, unit of time and decimal mark, and none of them says so. What can be told from
the first rows is told once, here, and kept as words: everything inferred is a note that every report shows. What
cannot be told (the unit of whole numbers, the rate of a file without times) is asked for, never guessed.

The order: comment and blank lines ahead, separator, trailing separator, header, time column, its unit, which columns
are levels, whether there is a row per change or per sample.
"""

from __future__ import annotations

import csv
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from itertools import pairwise
from pathlib import Path

import numpy as np
import pyarrow as pa

from decode.capture.levels import UNKNOWN_TEXTS, is_level
from decode.capture.text import Shape, open_file, refuse_binary
from decode.capture.time_axis import UNIT_DIGITS, Scale, choose_scale, maybe_decimal, to_ticks
from decode.errors import InputError
from decode.sheet import CaptureKeys

HEAD_BYTES = 1 << 18
HEAD_ROWS = 2000

DELIMITERS = {"\t": "tab", ";": "semicolon", ",": "comma", " ": "space"}
"""By falling precedence: a comma may be a decimal mark beside the first two, a space may follow a comma."""

_UNITS = {
    "s": "s", "sec": "s", "second": "s", "seconds": "s", "ms": "ms", "us": "us", "µs": "us", "μs": "us",
    "ns": "ns", "ps": "ps",
}  # fmt: skip
_UNIT = re.compile(r"\s*(?:\[\s*(\w+)\s*\]|\(\s*(\w+)\s*\)|_(\w+?))\s*$")
_TIME_NAME = re.compile(r"(time|times|timestamp|time stamp|t|zeit)\b", re.IGNORECASE)
_SPACES = re.compile(r"[ \t]+(?![\[(])")
_COMMENT = ("#", ";", "%", "//")

_CONSISTENT = 0.9
_RISING = 0.9
_MOST = 0.5
_RISING_ROWS_OF_VOLTAGES = 10


@dataclass(frozen=True, slots=True)
class Dialect:
    """How a file is written.

    names: of all columns, the time column included. time: its index, or None where the row's number is the time.
    scale: how its text becomes ticks. tick: seconds per tick. signals: indexes of the other columns. layout: one
    line for people. notes: what was inferred. counted: times are sample numbers. decimal: decimal mark. grid: the
    greatest common divisor of the first rows' time differences, ticks.
    """

    shape: Shape
    names: tuple[str, ...]
    time: int | None
    scale: Scale
    tick: Fraction
    signals: tuple[int, ...]
    layout: str
    notes: tuple[str, ...]
    counted: bool
    decimal: str
    grid: int


@dataclass(frozen=True, slots=True)
class _Line:
    number: int
    text: str


@dataclass(frozen=True, slots=True)
class _Table:
    """The rows at the head of a file.

    header: the physical line of the header, or None. rows: the cells of each. lines: the physical line of each.
    """

    shape: Shape
    header: int | None
    names: tuple[str, ...]
    rows: list[list[str]]
    lines: list[int]
    decimal: str

    def column(self, index: int) -> list[str]:
        return [row[index] for row in self.rows]

    def numbers(self, index: int) -> list[Decimal] | None:
        """The column as numbers, or None where a cell is not one."""
        found = [maybe_decimal(cell.replace(self.decimal, ".")) for cell in self.column(index)]
        numbers = [number for number in found if number is not None]
        return numbers if len(numbers) == len(found) else None

    def is_mostly_numeric(self, index: int) -> bool:
        cells = self.column(index)
        return sum(maybe_decimal(cell.replace(self.decimal, ".")) is not None for cell in cells) >= _MOST * len(cells)


def read_dialect(path: Path, keys: CaptureKeys) -> Dialect:
    """How the capture at `path` is written. Raises InputError where it is none, or the file and `keys` do not say."""
    file = str(path)
    table = _read_table(path, file)
    time = _maybe_time_column(table, keys)
    signals = tuple(index for index in range(len(table.names)) if index != time)
    _refuse_without_levels(table, signals, keys, file)
    notes = [_separator_note(table), _header_note(table)]
    if table.decimal != ".":
        notes.append("the decimal mark is a comma")
    if time is None:
        scale, tick, unit = _rate_axis(keys, table, file), _rate_tick(keys), ""
        notes.append(f"no time column: the rows are samples at {_rate_text(keys)}")
    else:
        scale, tick, unit, said = _time_axis(table, time, keys, file)
        notes += said
    if keys.threshold_v is not None:
        low, high = keys.threshold_v
        notes.append(f"voltages: low at or below {low:g} V, high at or above {high:g} V, in between as before")
    every_sample = time is None or _is_every_sample(table, time, signals)
    layout = _layout(table, time, unit, every_sample, keys)
    return Dialect(
        shape=table.shape,
        names=table.names,
        time=time,
        scale=scale,
        tick=tick,
        signals=signals,
        layout=layout,
        notes=tuple(notes),
        counted=not unit,
        decimal=table.decimal,
        grid=_grid(table.column(time), scale) if time is not None and unit else 1,
    )


# --- rows ------------------------------------------------------------------------------------------------------------


def _read_table(path: Path, file: str) -> _Table:
    lines, carriage_returns, ended = _head_lines(path, file)
    content = [line for line in lines if line.text.strip() and not line.text.lstrip().startswith(_COMMENT)]
    if not content:
        raise InputError(
            "the capture is empty" if not lines else "the capture holds no rows, only comments or blank lines",
            file=file,
            found=f"{len(lines)} lines",
            expected="a row per change or per sample",
            hint="export the capture again",
        )
    if not ended and len(content) > 2:
        content.pop()  # it may be cut short, and would mislead
    content = content[: HEAD_ROWS + 1]
    delimiter = _delimiter([line.text for line in content], content[0].number, file)
    split = [_split(line.text, delimiter) for line in content]
    header = content[0].number if _is_header(split) else None
    body = list(zip(content, split, strict=True))[0 if header is None else 1 :]
    if not body:
        raise InputError(
            "the capture holds a header and no rows",
            file=file,
            row=header,
            found=content[0].text.strip()[:60],
            expected="rows of times and levels below the header",
            hint="export the capture again",
        )
    cells = Counter(len(row) for _, row in body).most_common(1)[0][0]
    rows = [row for _, row in body if len(row) == cells]
    numbers = [line.number for line, row in body if len(row) == cells]
    named = _without_empty_last(split[0]) if header is not None else None
    trailing = cells > 1 and all(not row[-1] for row in rows) and (named is None or len(named) < cells)
    columns = cells - trailing
    if named is not None and len(named) < columns == len(split[0]):
        named = split[0]
    if named is not None and len(named) != columns:
        raise InputError(
            "the header does not fit the rows below it",
            file=file,
            row=header,
            found=f"{len(named)} names above rows of {columns} cells",
            expected="a name for each column",
            hint="names that hold the separator must stand in double quotes",
        )
    names = _unique(named) if named is not None else tuple(str(number + 1) for number in range(columns))
    shape = Shape(delimiter, cells, trailing, carriage_returns, skip=body[0][0].number - 1)
    return _Table(shape, header, names, rows, numbers, _decimal_mark(rows, delimiter))


def _head_lines(path: Path, file: str) -> tuple[list[_Line], bool, bool]:
    """(the first lines of a file, whether they end with bare carriage returns, whether the last one is ended)."""
    with open_file(path) as stream:
        head = stream.read(HEAD_BYTES)
        more = bool(stream.read(1))
    refuse_binary(head, 1, file)
    carriage_returns = b"\n" not in head and b"\r" in head
    if carriage_returns:
        head = head.replace(b"\r", b"\n")
    if more and b"\n" in head:
        head = head[: head.rindex(b"\n") + 1]
    try:
        text = head.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = head.decode("latin-1")
    lines = text.split("\n")
    ended = not lines[-1]
    if ended:
        lines.pop()
    return [_Line(number, line.rstrip("\r")) for number, line in enumerate(lines, 1)], carriage_returns, ended


def _delimiter(lines: Sequence[str], number: int, file: str) -> str:
    """The separator that divides the lines into the same number of cells; a comma for a single column."""
    body = lines[1:] or lines
    shares: dict[str, float] = {}
    for delimiter in DELIMITERS:
        cells, times = Counter(len(_split(line, delimiter)) for line in body).most_common(1)[0]
        shares[delimiter] = times / len(body) if cells > 1 else 0.0
    for delimiter, share in shares.items():
        if share >= _CONSISTENT:
            return delimiter
    best = max(shares, key=lambda delimiter: shares[delimiter])
    if shares[best] > 0.5:
        return best
    if not any(shares.values()) and all(len(_split(line, " ")) == 1 for line in lines):
        return ","
    raise InputError(
        "this does not look like a capture: no separator divides its rows into the same number of cells",
        file=file,
        row=number,
        found=lines[0].strip()[:60],
        expected="columns separated by commas, semicolons, tabs or spaces",
        hint="export the capture as CSV",
    )


def _split(line: str, delimiter: str) -> list[str]:
    if delimiter == " ":
        return [cell.strip('"') for cell in _SPACES.split(line.strip(" \t"))]
    if '"' not in line:
        return [cell.strip() for cell in line.split(delimiter)]
    try:
        return [cell.strip() for cell in next(csv.reader([line], delimiter=delimiter, skipinitialspace=True))]
    except (csv.Error, StopIteration):
        return [cell.strip() for cell in line.replace('"', "").split(delimiter)]


def _without_empty_last(cells: list[str]) -> list[str]:
    return cells[:-1] if len(cells) > 1 and not cells[-1] else cells


def _is_header(rows: list[list[str]]) -> bool:
    """Whether the first row names columns: by a cell that is no datum, or by different letters above numbers."""
    first = [cell for cell in rows[0] if cell]
    if any(maybe_decimal(cell.replace(",", ".")) is None and cell.lower() not in UNKNOWN_TEXTS for cell in first):
        return True
    letters = all(cell.lower() in UNKNOWN_TEXTS for cell in first) and len(set(first)) == len(first)
    return letters and len(rows) > 1 and all(maybe_decimal(cell) is not None for cell in rows[1] if cell)


def _unique(names: Sequence[str]) -> tuple[str, ...]:
    """The names, an empty one replaced by its column's number, a repeated one by itself with _2, _3, ..."""
    unique: list[str] = []
    for number, name in enumerate(names, 1):
        candidate, repeat = name or str(number), 1
        while candidate in unique:
            repeat += 1
            candidate = f"{name or number}_{repeat}"
        unique.append(candidate)
    return tuple(unique)


def _decimal_mark(rows: list[list[str]], delimiter: str) -> str:
    if delimiter == ",":
        return "."
    return "," if any(re.fullmatch(r"[+-]?\d+,\d+", cell) for row in rows for cell in row) else "."


# --- time ------------------------------------------------------------------------------------------------------------


def _maybe_unit(name: str) -> str | None:
    """The unit that a column's name ends with, in brackets, in parentheses or behind an underscore."""
    match = _UNIT.search(name)
    return _UNITS.get(next(group for group in match.groups() if group).lower()) if match else None


def _maybe_time_column(table: _Table, keys: CaptureKeys) -> int | None:
    """By its name; else by a unit of time in its name; else the first column, where its numbers rise."""
    if table.header is not None:
        for index, name in enumerate(table.names):
            if _TIME_NAME.match(_UNIT.sub("", name)) and not _is_line_named_t(table, index, keys):
                return index
        for index, name in enumerate(table.names):
            if _maybe_unit(name) and table.numbers(index) is not None and not _all_levels(table, index):
                return index
    found = [maybe_decimal(cell.replace(table.decimal, ".")) for cell in table.column(0)]
    numbers = [number for number in found if number is not None]
    needed = 2 if keys.threshold_v is None else _RISING_ROWS_OF_VOLTAGES
    if len(numbers) < max(needed, _MOST * len(found)) or all(number in (0, 1) for number in numbers):
        return None
    steps = [later - earlier for earlier, later in pairwise(numbers)]
    return 0 if sum(step > 0 for step in steps) >= _RISING * len(steps) else None


def _is_line_named_t(table: _Table, index: int, keys: CaptureKeys) -> bool:
    """A line may be called T: with a rate at hand and nothing but levels below, it is one."""
    return keys.sample_rate_hz is not None and len(table.rows) > 2 and _all_levels(table, index)


def _all_levels(table: _Table, index: int) -> bool:
    return all(is_level(cell, table.decimal) for cell in set(table.column(index)))


def _time_axis(table: _Table, time: int, keys: CaptureKeys, file: str) -> tuple[Scale, Fraction, str, list[str]]:
    """(scale, seconds per tick, unit or "" for sample numbers, notes) of the time column."""
    name = table.names[time]
    numbers = table.numbers(time)
    if numbers is None:
        cells = [cell.replace(table.decimal, ".") for cell in table.column(time)]
        bad = next(index for index, cell in enumerate(cells) if maybe_decimal(cell) is None)
        raise InputError(
            "a time that is not a number",
            file=file,
            row=table.lines[bad],
            column=name,
            found=repr(table.rows[bad][time]),
            expected="a decimal number",
            hint="export the time as a number of seconds",
        )
    whole = all(number == number.to_integral_value() for number in numbers)
    plain = whole and not any("." in cell or table.decimal in cell for cell in table.column(time))
    unit = _maybe_unit(name) if table.header is not None else None
    notes: list[str] = []
    if unit is None and plain and keys.sample_rate_hz is not None and keys.time_unit is None:
        notes.append(f"column {name!r} counts samples at {_rate_text(keys)}")
        return Scale(0, 0, 1), _rate_tick(keys), "", notes
    if keys.sample_rate_hz is not None:
        notes.append(f"sample_rate_hz is not used: column {name!r} holds the time")
    if unit is not None and keys.time_unit not in (None, unit):
        notes.append(f"time_unit is not used: the header of column {name!r} says {unit}")
    if unit is None and keys.time_unit is not None:
        unit = keys.time_unit
        notes.append(f"the time is in {unit}, as the sheet says")
    if unit is None and plain:
        raise InputError(
            "the unit of the time column is not known",
            file=file,
            row=table.header,
            column=name,
            found="whole numbers without a unit",
            expected=f"a unit in the column's name, such as [ns]; one of {', '.join(UNIT_DIGITS)}",
            hint='give [capture] time_unit = "ns" in the sheet, or sample_rate_hz = ... where they count samples',
        )
    if unit is None:
        unit = "s"
        notes.append(f"the unit of time is taken to be s: column {name!r} has decimals and names no unit")
    scale = choose_scale(table.column(time), unit, table.decimal)
    return scale, scale.tick, unit, notes


def _grid(texts: Sequence[str], scale: Scale) -> int:
    ticks, _ = to_ticks(pa.array(texts, pa.string()), scale)
    steps = np.diff(ticks)
    return int(np.gcd.reduce(steps[steps > 0], initial=0)) or scale.printed


def _rate_axis(keys: CaptureKeys, table: _Table, file: str) -> Scale:
    if keys.sample_rate_hz is None:
        raise InputError(
            "the capture has no time column and no sample rate is given",
            file=file,
            row=table.header or table.lines[0],
            found=f"columns {', '.join(table.names)}"[:120],
            expected="a column of times, or levels at a known rate",
            hint="give [capture] sample_rate_hz = ... in the sheet",
        )
    return Scale(0, 0, 1)


def _rate_tick(keys: CaptureKeys) -> Fraction:
    return 1 / Fraction(repr(keys.sample_rate_hz))


def _rate_text(keys: CaptureKeys) -> str:
    return f"{keys.sample_rate_hz:.12g} Hz"


# --- levels and words ------------------------------------------------------------------------------------------------


def _refuse_without_levels(table: _Table, signals: Sequence[int], keys: CaptureKeys, file: str) -> None:
    """Raises InputError where no column but the time's can be a line."""
    numeric = [index for index in signals if table.is_mostly_numeric(index)]
    if keys.threshold_v is not None and numeric:
        return
    cells = len(table.rows)
    if any(sum(is_level(cell, table.decimal) for cell in table.column(index)) >= _MOST * cells for index in signals):
        return
    shown = (numeric or [*signals, 0])[0]
    row = next((row for row, cell in enumerate(table.column(shown)) if not is_level(cell, table.decimal)), 0)
    raise InputError(
        "no column looks like a line: none holds mostly 0 and 1",
        file=file,
        row=table.lines[row],
        column=table.names[shown],
        found=f"{table.rows[row][shown]!r} (the columns are {', '.join(table.names)})"[:120],
        expected="at least one column of 0 and 1",
        hint="for a file of voltages give [capture] threshold_v = [low, high] in the sheet"
        if numeric
        else "give the CSV export of a logic analyser",
    )


def _is_every_sample(table: _Table, time: int, signals: Sequence[int]) -> bool:
    """Whether the first rows are evenly spaced and some of them change nothing."""
    numbers = table.numbers(time) or []
    steps = {later - earlier for earlier, later in pairwise(numbers)}
    levels = [[row[index] for index in signals] for row in table.rows]
    repeats = any(earlier == later for earlier, later in pairwise(levels))
    return repeats and len(steps) <= 2 and len(numbers) > 2 and min(steps) > 0


def _separator_note(table: _Table) -> str:
    if table.shape.cells == 1:
        return "the file has one column"
    trailing = ", with one at the end of each row" if table.shape.trailing else ""
    return f"the separator is taken to be a {DELIMITERS[table.shape.delimiter]}{trailing}"


def _header_note(table: _Table) -> str:
    if table.header is None:
        return "there is no header: columns are numbered from 1"
    return f"line {table.header} is taken for the header"


def _layout(table: _Table, time: int | None, unit: str, every_sample: bool, keys: CaptureKeys) -> str:
    separated = "one column" if table.shape.cells == 1 else f"{DELIMITERS[table.shape.delimiter]}-separated"
    if time is None:
        timing = f"no time, {_rate_text(keys)}"
    else:
        timing = f"time in {unit}" if unit else f"sample numbers at {_rate_text(keys)}"
    rows = "a row per sample" if every_sample else "a row per change"
    kind = ["voltages"] if keys.threshold_v is not None else []
    return ", ".join([separated, "header" if table.header is not None else "no header", timing, *kind, rows])
