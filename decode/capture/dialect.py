"""Dialect: how a delimited capture is written, told from its first rows.

Exports differ in separator, header, unit of time, decimal mark and the way they write a level, and none of them says
so. What can be told from the first rows is told once, here, and kept as words: everything inferred is a note that every
report shows. What cannot be told (the unit of whole numbers, the rate of a file without times, the base of some port
values) is asked for, never guessed.

The order: separator, first row, header and preamble (`decode.capture.table`); time column, then what the others are
(`decode.capture.columns`); here the time's unit and scale, and whether there is a row per change or per sample.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from itertools import groupby

import numpy as np
import pyarrow as pa

from decode.capture.columns import (
    PORT,
    READINGS,
    VOLTAGE,
    Column,
    LongForm,
    classify,
    maybe_long_form,
    maybe_time_column,
    refuse_without_lines,
    time_unit,
)
from decode.capture.sampling import Intervals
from decode.capture.stream import Source
from decode.capture.table import DELIMITERS, Table, read_table
from decode.capture.text import Shape
from decode.capture.time_axis import UNIT_DIGITS, Scale, choose_scale, date_scale, is_date, to_ticks
from decode.errors import InputError
from decode.sheet import CaptureKeys
from decode.spans import IntArray

MORE_ROWS = 40_000
MORE_BYTES = 1 << 22
"""Looked through where the first rows show no line of voltages at both its levels."""

RATE_HINT = "give --rate HZ, or [capture] sample_rate_hz = ... in the sheet"


@dataclass(frozen=True, slots=True)
class Dialect:
    """How a file is written.

    names: of all columns, the time column included. time: its index, or None where the row's number is the time.
    scale: how its text becomes ticks. tick: seconds per tick. columns: all but the time. long: the two columns of a
    table with a row per change of one line, or None. layout: one line for people. notes: what was inferred. counted:
    times are sample numbers. head: the intervals between the first rows. even: ticks by which two intervals of one
    length may differ. rate: samples per second as stated, or None; rate_by: who says so. every_sample: there is a row
    for each. samples: how many there are as the preamble says, or None. texts: a cell of each column.
    """

    shape: Shape
    names: tuple[str, ...]
    time: int | None
    scale: Scale
    tick: Fraction
    columns: tuple[Column, ...]
    long: LongForm | None
    layout: str
    notes: tuple[str, ...]
    counted: bool
    head: Intervals
    even: int
    rate: Fraction | None
    rate_by: str
    every_sample: bool
    samples: int | None
    texts: dict[int, str]


@dataclass(frozen=True, slots=True)
class _Axis:
    """The time column's scale; unit: its unit, "date-times", or "" for sample numbers."""

    scale: Scale
    tick: Fraction
    unit: str
    notes: tuple[str, ...] = ()


def read_dialect(source: Source, keys: CaptureKeys) -> Dialect:
    """How a capture is written. Raises InputError where it is none, or the file and `keys` do not say enough."""
    table = read_table(source)
    time = maybe_time_column(table, keys)
    columns = classify(table, time, keys)
    if any(column.kind in (READINGS, VOLTAGE) and column.thresholds is None for column in columns):
        table = read_table(source, MORE_ROWS, MORE_BYTES)
        columns = classify(table, time, keys)
    refuse_without_lines(table, time, columns, source.file)
    rate, rate_by = _stated_rate(table, keys)
    axis = _axis(table, time, rate, rate_by, keys, source.file)
    long = maybe_long_form(table, time, columns)
    head = Intervals()
    ticks = _head_ticks(table, time, axis)
    head.add(np.diff(ticks))
    step = head.step(axis.scale.printed)
    even = axis.scale.printed if step.is_exact else step.tolerance
    every_sample = time is None or (long is None and _is_every_sample(table, ticks, columns, even))
    return Dialect(
        shape=table.shape,
        names=table.names,
        time=time,
        scale=axis.scale,
        tick=axis.tick,
        columns=columns,
        long=long,
        layout=_layout(source, table, time, axis, columns, long, every_sample, rate),
        notes=tuple(_notes(source, table, time, axis, columns, long, keys, rate, rate_by)),
        counted=time is None or not axis.unit,
        head=head,
        even=even,
        rate=rate,
        rate_by=rate_by,
        every_sample=every_sample,
        samples=table.preamble.count,
        texts={column.index: next(iter(table.present(column.index)), "") for column in columns},
    )


# --- time ------------------------------------------------------------------------------------------------------------


def _stated_rate(table: Table, keys: CaptureKeys) -> tuple[Fraction | None, str]:
    if keys.sample_rate_hz is not None:
        return Fraction(repr(float(keys.sample_rate_hz))), "as given"
    rate = table.preamble.rate
    return rate, "" if rate is None else f"as line {table.preamble.rate_line} says"


def rate_text(rate: Fraction) -> str:
    """A rate as reports write it."""
    return f"{float(rate):.12g} Hz"


def _axis(table: Table, time: int | None, rate: Fraction | None, rate_by: str, keys: CaptureKeys, file: str) -> _Axis:
    if time is None:
        if rate is None:
            raise InputError(
                "the capture has no time column and no sample rate is given",
                file=file,
                row=table.header or table.lines[0],
                found=f"columns {', '.join(table.names)}"[:120],
                expected="a column of times, or levels at a known rate",
                hint=RATE_HINT,
            )
        note = f"no time column: the rows are samples at {rate_text(rate)}, {rate_by}"
        return _Axis(Scale(0, 0, 1), 1 / rate, "", (note,))
    name, cells = table.names[time], table.present(time)
    if any(map(is_date, cells[:50])):
        scale = date_scale(cells)
        first = next(cell for cell in cells if is_date(cell))
        said = time_unit(table, time)
        notes = [f"column {name!r} holds date-times: times count from {first}"]
        if said is not None:
            notes.append(f"the header of column {name!r} says {said}, which is not used")
        return _Axis(scale, scale.tick, "date-times", tuple(notes))
    return _number_axis(table, time, rate, rate_by, keys, file)


def _number_axis(table: Table, time: int, rate: Fraction | None, rate_by: str, keys: CaptureKeys, file: str) -> _Axis:
    name = table.names[time]
    cells = [cell for cell in table.column(time) if table.number(cell) is not None]
    if len(cells) < 0.5 * len(table.rows):
        bad = next(index for index, cell in enumerate(table.column(time)) if table.number(cell) is None)
        raise InputError(
            "a time that is not a number",
            file=file,
            row=table.lines[bad],
            column=name,
            found=repr(table.rows[bad][time]),
            expected="a decimal number",
            hint="export the time as a number of seconds",
        )
    numbers = [table.number(cell) for cell in cells]
    whole = all(number is not None and number == number.to_integral_value() for number in numbers)
    plain = whole and not any("." in cell or table.decimal in cell for cell in cells)
    unit, notes = time_unit(table, time), []
    if unit is None and plain and rate is not None and keys.time_unit is None:
        note = f"column {name!r} counts samples at {rate_text(rate)}, {rate_by}"
        return _Axis(Scale(0, 0, 1, table.decimal), 1 / rate, "", (note,))
    if unit is not None and keys.time_unit not in (None, unit):
        notes.append(f"the time is in {keys.time_unit}, as given, where the header of column {name!r} says {unit}")
        unit = keys.time_unit
    if unit is None and keys.time_unit is not None:
        unit = keys.time_unit
        notes.append(f"the time is in {unit}, as given")
    if unit is None and plain:
        raise InputError(
            "the unit of the time column is not known",
            file=file,
            row=table.header,
            column=name,
            found="whole numbers without a unit",
            expected=f"a unit in the column's name, such as [ns]; one of {', '.join(UNIT_DIGITS)}",
            hint="give --unit ns (or [capture] time_unit in the sheet), or --rate HZ where they count samples",
        )
    if unit is None:
        unit = "s"
        notes.append(f"the unit of time is taken to be s: column {name!r} has decimals and names no unit")
    scale = choose_scale(cells, unit, table.decimal)
    return _Axis(scale, scale.tick, unit, tuple(notes))


def _head_ticks(table: Table, time: int | None, axis: _Axis) -> IntArray:
    """(n,) times of the first rows, ticks; those of rows without a time left out."""
    if time is None:
        return np.arange(len(table.rows), dtype=np.int64)
    found = to_ticks(pa.array(table.column(time), pa.string()), axis.scale)
    return found.ticks if found.bad is None else found.ticks[~found.bad]


def _is_every_sample(table: Table, ticks: IntArray, columns: tuple[Column, ...], even: int) -> bool:
    """Whether the first rows are evenly spaced and some of them change nothing."""
    steps = np.diff(ticks)
    if steps.size < 2 or steps.min() <= 0 or steps.max() - steps.min() > even:
        return False
    levels = [[row[column.index] for column in columns] for row in table.rows]
    return any(column.kind == VOLTAGE for column in columns) or any(map(list.__eq__, levels, levels[1:]))


# --- words -----------------------------------------------------------------------------------------------------------


def _notes(
    source: Source,
    table: Table,
    time: int | None,
    axis: _Axis,
    columns: tuple[Column, ...],
    long: LongForm | None,
    keys: CaptureKeys,
    rate: Fraction | None,
    rate_by: str,
) -> list[str]:
    notes = []
    if source.encoding is not None:
        notes.append("the text is read as UTF-16")
    notes += [_separator_note(table), _header_note(table)]
    if table.preamble_lines:
        lines = "line" if table.preamble_lines == 1 else "lines"
        notes.append(f"{table.preamble_lines} {lines} above the table, read for a sample rate only")
    if table.preamble.unclear is not None:
        notes.append(f"the sample rate in line {table.preamble.unclear} could be read in two ways and is not used")
    said = table.preamble.rate
    if said is not None and rate != said:
        notes.append(f"line {table.preamble.rate_line} says {rate_text(said)}, which is not used")
    if table.decimal != ".":
        notes.append("the decimal mark is a comma")
    if time is not None and (table.header is None or time > 0):
        notes.append(f"column {table.names[time]!r} is taken for the time")
    notes += axis.notes
    notes += _level_notes(table, columns, keys)
    if long is not None:
        names, level = table.names[long.names], table.names[long.level]
        notes.append(f"a row per change of one line: column {names!r} names it, column {level!r} is its new level")
    return notes


def _level_notes(table: Table, columns: tuple[Column, ...], keys: CaptureKeys) -> list[str]:
    notes = []
    voltages = [column for column in columns if column.kind == VOLTAGE and column.thresholds is not None]
    for thresholds, alike in groupby(sorted(voltages, key=lambda column: column.thresholds or ()), _thresholds):
        low, high = thresholds
        names = ", ".join(table.names[column.index] for column in alike)
        how = "as given" if keys.threshold_v is not None else "between the two levels found"
        notes.append(f"voltages in {names}: low at or below {low:g}, high at or above {high:g}, {how}; else as before")
    bases = {2: "binary", 10: "decimal", 16: "hexadecimal"}
    for column in columns:
        if column.kind == PORT and column.base is not None:
            how = "as given" if keys.port_base is not None else "by their digits"
            notes.append(f"port values in {table.names[column.index]}: {bases[column.base]}, {how}")
    return notes


def _thresholds(column: Column) -> tuple[float, float]:
    assert column.thresholds is not None
    return column.thresholds


def _separator_note(table: Table) -> str:
    if table.shape.cells == 1:
        return "the file has one column"
    trailing = ", with one at the end of each row" if table.shape.trailing else ""
    return f"the separator is taken to be a {DELIMITERS[table.shape.delimiter]}{trailing}"


def _header_note(table: Table) -> str:
    if table.header is None:
        return "there is no header: columns are numbered from 1"
    comment = ", a comment," if table.is_comment else ""
    units = f", line {table.units_line} for the units" if table.units_line is not None else ""
    return f"line {table.header}{comment} is taken for the header{units}"


def _layout(
    source: Source,
    table: Table,
    time: int | None,
    axis: _Axis,
    columns: tuple[Column, ...],
    long: LongForm | None,
    every_sample: bool,
    rate: Fraction | None,
) -> str:
    separated = "one column" if table.shape.cells == 1 else f"{DELIMITERS[table.shape.delimiter]}-separated"
    if time is None:
        timing = f"no time, {rate_text(rate or Fraction(0))}"
    elif axis.unit:
        timing = axis.unit if axis.scale.origin is not None else f"time in {axis.unit}"
    else:
        timing = f"sample numbers at {rate_text(rate or Fraction(0))}"
    rows = "a row per change of one line" if long else "a row per sample" if every_sample else "a row per change"
    kinds = {column.kind for column in columns}
    parts = [
        *filter(None, (source.compression, "UTF-16" if source.encoding else None)),
        separated,
        "header" if table.header is not None else "no header",
        timing,
        *(["voltages"] if VOLTAGE in kinds else []),
        *(["port values"] if PORT in kinds else []),
        rows,
    ]
    return ", ".join(parts)
