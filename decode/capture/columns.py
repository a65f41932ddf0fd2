"""What the columns of a table are: time, levels, voltages, port values, or nothing that a line could be.

Told from the first rows, each with the evidence it needs:

    level     nine in ten of its values are 0, 1, a word for one of them, or unknown
    voltage   numbers that keep near two values: nine in ten within 15 % of their distance from one of them. A converter
              that follows a ramp keeps 60 % there, one that follows a sine 33 %, noise about one value 30 %
    port      whole numbers of 0 and more, or digits with a mark or letters of base 16
    counts    whole numbers of which four in five steps are up or down by one
    readings  other numbers, or whole ones of which every second row brings a new one
    words     anything else

Thresholds that are not given are put at 30 % and 70 % of the way from the low value to the high one (common practice,
no source: the input levels of CMOS logic). Lines of one board are of one kind, so the columns share one pair where
their levels agree; and a line at rest, which shows one level alone, takes that of the others.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from decode.capture.levels import LEVEL_TEXTS, LevelRule, Thresholds, is_level, maybe_port
from decode.capture.names import is_in_millivolts, is_time_name, maybe_time_cell, maybe_unit
from decode.capture.table import CONSISTENT, Table
from decode.capture.time_axis import is_date
from decode.errors import InputError
from decode.sheet import CaptureKeys
from decode.spans import UNKNOWN, FloatArray

LEVEL, VOLTAGE, PORT, COUNTS, READINGS, WORDS = "level", "voltage", "port", "counts", "readings", "words"

LOW_SHARE, HIGH_SHARE = 0.3, 0.7
_FEW_CELLS = 8
_NEAR = 0.15
_RISING = 0.9
_COUNTING = 0.8
_RISING_ROWS_OF_NUMBERS = 10
_FEWEST_COUNTS = 5
_MOST_PORT_VALUES = 64
_NAME_OF_NAMES = re.compile(r"(line|channel|signal|name|net|pin|wire|ch)\b", re.IGNORECASE)
_NAME_OF_LEVELS = re.compile(r"(level|value|state)\b", re.IGNORECASE)
_MOST_LINES = 64
_ALTERNATING = 0.95
_FEWEST_CHANGES = 8


@dataclass(frozen=True, slots=True)
class Column:
    """index: among all columns of the file. kind: as above. thresholds: of voltages, where they are known. levels: the
    two values that voltages keep near. base: of port values, where it is known."""

    index: int
    kind: str
    thresholds: Thresholds | None = None
    levels: tuple[float, float] | None = None
    base: int | None = None


@dataclass(frozen=True, slots=True)
class LongForm:
    """A row per change of one line. names: index of the column that names it. level: that of its level. lines: the
    names in the first rows, with the level each had before them."""

    names: int
    level: int
    lines: dict[str, int]


# --- time ------------------------------------------------------------------------------------------------------------


def maybe_time_column(table: Table, keys: CaptureKeys) -> int | None:
    """By its name; else by a unit of time in its name or below it; else by date-times; else the column whose numbers
    rise from row to row: the first column before the last one, before the others, one with decimals before all."""
    places = range(len(table.names))
    if table.header is not None:
        for index in places:
            if is_time_name(table.names[index]) and not _is_line_named_t(table, index, keys):
                return index
        for index in places:
            if time_unit(table, index) and table.share_of_numbers(index) == 1 and not _all_levels(table, index):
                return index
    for index in places:
        if any(map(is_date, table.column(index)[:50])):
            return index
    rising = [index for index in (0, len(table.names) - 1, *places[1:-1]) if _is_rising(table, index, keys)]
    with_decimals = [
        index for index in rising if any(table.decimal in cell or "." in cell for cell in table.column(index))
    ]
    return next(iter([*with_decimals, *rising]), None)


def time_unit(table: Table, index: int) -> str | None:
    """The unit of time that the header or the row of units gives a column."""
    if table.header is None:
        return None
    below = maybe_time_cell(table.units[index]) if index < len(table.units) else None
    return maybe_unit(table.names[index]) or below


def _is_rising(table: Table, index: int, keys: CaptureKeys) -> bool:
    numbers = [number for cell in table.column(index) if (number := table.number(cell)) is not None]
    values = table.present(index)
    if len(numbers) < max(2, CONSISTENT * len(values)) or all(number in (0, 1) for number in numbers):
        return False
    needed = 2 if keys.threshold_v is None or (index == 0 and len(table.names) > 2) else _RISING_ROWS_OF_NUMBERS
    steps = [later - earlier for earlier, later in pairwise(numbers)]
    return len(numbers) >= needed and sum(step > 0 for step in steps) >= _RISING * len(steps)


def _is_line_named_t(table: Table, index: int, keys: CaptureKeys) -> bool:
    """A line may be called T: with a rate at hand and nothing but levels below, it is one."""
    rate = keys.sample_rate_hz is not None or table.preamble.rate is not None
    return rate and len(table.rows) > 2 and _all_levels(table, index)


def _all_levels(table: Table, index: int) -> bool:
    return all(is_level(cell, table.decimal) for cell in set(table.column(index)))


# --- levels ----------------------------------------------------------------------------------------------------------


def classify(table: Table, time: int | None, keys: CaptureKeys) -> tuple[Column, ...]:
    """What each column but the time's is."""
    found = [_column(table, index, keys) for index in range(len(table.names)) if index != time]
    if keys.threshold_v is not None:
        return tuple(found)
    return tuple(_with_thresholds(table, found))


def _column(table: Table, index: int, keys: CaptureKeys) -> Column:
    cells = table.present(index)
    if not cells:
        return Column(index, WORDS)
    distinct = set(cells)
    is_numeric = table.share_of_numbers(index) >= CONSISTENT
    logic = sum(is_level(cell, table.decimal) for cell in cells) >= CONSISTENT * len(cells)
    numbers = [float(number) for cell in cells if (number := table.number(cell)) is not None]
    base = port_base([cell.replace(table.decimal, ".") for cell in distinct], keys)
    if keys.threshold_v is not None and numbers and not (logic and (1.0 in numbers or not is_numeric)):
        known = sum(table.number(cell) is not None or cell.lower() in LEVEL_TEXTS for cell in cells)
        if known >= CONSISTENT * len(cells):
            low, high = keys.threshold_v
            scale = 1000 if is_in_millivolts(table.names[index], table.units[index] if table.units else "") else 1
            return Column(index, VOLTAGE, (low * scale, high * scale), base=base)
    others = {number for number in numbers if number not in (0, 1)}
    if len(cells) < _FEW_CELLS and all(number.is_integer() for number in others):
        # So few cells show no two levels: among some 0 and 1 a whole number is a cell gone wrong.
        logic |= 2 * sum(is_level(cell, table.decimal) for cell in cells) >= len(cells)
    if logic and not (
        others
        and 1.0 not in numbers
        and len(cells) >= _FEW_CELLS
        and _maybe_levels(np.array(sorted({*numbers}))) is not None
    ):
        return Column(index, LEVEL, base=base)
    if is_numeric:
        levels = _maybe_levels(np.array(numbers))
        if levels is not None:
            return Column(index, VOLTAGE, None, levels, base)
        whole = all(number.is_integer() for number in numbers)
        if whole and _is_counting(numbers):
            return Column(index, COUNTS, base=base)
        various = len({*numbers}) > max(_MOST_PORT_VALUES, len(numbers) / 2)
        return Column(index, PORT if whole and min(numbers) >= 0 and not various else READINGS, base=base)
    return Column(index, PORT if base is not None else WORDS, base=base)


def _is_counting(numbers: Sequence[float]) -> bool:
    """Whether whole numbers go up or down by one, row by row: counts, not lines side by side."""
    steps = np.diff(np.array(numbers))
    moves = steps[steps != 0]
    return len({*numbers}) >= _FEWEST_COUNTS and np.count_nonzero(np.abs(moves) == 1) >= _COUNTING * max(1, moves.size)


def _maybe_levels(numbers: FloatArray) -> tuple[float, float] | None:
    """The two values that numbers keep near, rising; None where they do not."""
    low, high = float(numbers.min()), float(numbers.max())
    for _ in range(20):
        upper = numbers > (low + high) / 2
        if upper.all() or not upper.any():
            return None
        before = low, high
        low, high = float(np.median(numbers[~upper])), float(np.median(numbers[upper]))
        if (low, high) == before:
            break
    near = np.minimum(np.abs(numbers - low), np.abs(numbers - high)) <= _NEAR * (high - low)
    return (low, high) if high > low and near.mean() >= CONSISTENT else None


def _with_thresholds(table: Table, columns: Sequence[Column]) -> Iterator[Column]:
    """The columns with thresholds for those whose two levels were found, and for those at rest on one of them."""
    found = [column.levels for column in columns if column.levels is not None]
    if not found:
        yield from columns
        return
    low, high = (float(np.median([levels[place] for levels in found])) for place in (0, 1))
    for column in columns:
        levels = column.levels
        if levels is not None:
            alike = max(abs(levels[0] - low), abs(levels[1] - high)) <= _NEAR * (high - low)
            yield Column(
                column.index, VOLTAGE, thresholds_between(*((low, high) if alike else levels)), levels, column.base
            )
        elif _rests(table, column, low, high):
            yield Column(column.index, VOLTAGE, thresholds_between(low, high), None, column.base)
        else:
            yield column


def _rests(table: Table, column: Column, low: float, high: float) -> bool:
    """Whether a column keeps near one of two levels, and is not a plain 0 or 1 where these are other levels."""
    if column.kind == WORDS or (_all_levels(table, column.index) and "1" in table.present(column.index)):
        return False
    numbers = [float(number) for cell in table.present(column.index) if (number := table.number(cell)) is not None]
    near = [min(abs(number - low), abs(number - high)) <= _NEAR * (high - low) for number in numbers]
    return bool(near) and sum(near) >= CONSISTENT * len(near)


def thresholds_between(low: float, high: float) -> Thresholds:
    """Low-going and high-going threshold between two levels, to three digits of their distance."""
    digits = 2 - int(np.floor(np.log10(high - low)))
    return (
        round(low + LOW_SHARE * (high - low), digits),
        round(low + HIGH_SHARE * (high - low), digits),
    )


def port_base(texts: Sequence[str], keys: CaptureKeys) -> int | None:
    """The base that port values (distinct cells) are written in: 2, 10 or 16. None where it cannot be told, or they
    are none.

    A mark (0x, 0b, a closing h) or a letter tells. So do digits above 1 without zeros in front: decimal. With zeros in
    front they may be decimal or hexadecimal, and digits of 0 and 1 alone are binary only where all are equally long.
    """
    cells = [text.strip().lower() for text in texts if LEVEL_TEXTS.get(text.strip().lower()) != UNKNOWN]
    if not cells:
        return None
    if keys.port_base is not None:
        base = {"binary": 2, "decimal": 10, "hexadecimal": 16}[keys.port_base]
        return base if sum(maybe_port(cell, base) is not None for cell in cells) >= CONSISTENT * len(cells) else None
    sixteen = sum(maybe_port(cell, 16) is not None for cell in cells) >= CONSISTENT * len(cells)
    if all(cell.startswith("0b") for cell in cells):
        return 2
    if any(cell.startswith("0x") or cell.endswith("h") or re.search(r"[a-f]", cell) for cell in cells):
        return 16 if sixteen else None
    if sum(cell.isdecimal() for cell in cells) < CONSISTENT * len(cells):
        return None
    digits = [cell for cell in cells if cell.isdecimal()]
    if all(set(cell) <= {"0", "1"} for cell in digits):
        return 2 if len({len(cell) for cell in digits}) == 1 < len(digits[0]) else None
    return None if any(len(cell) > 1 and cell.startswith("0") for cell in digits) else 10


# --- a row per change of one line ------------------------------------------------------------------------------------


def maybe_long_form(table: Table, time: int | None, columns: Sequence[Column]) -> LongForm | None:
    """The two columns of a table with a row per change of one line; None for any other.

    One column names the lines: its own name says so, or, where there is no header, it holds several words and each of
    them goes with levels that change from row to row. Names that look like levels themselves (channels 0 and 1) need a
    column beside them that is called a level.
    """
    if time is None or len(columns) != 2:
        return None
    for names, level in (columns, tuple(reversed(columns))):
        if level.kind not in (LEVEL, VOLTAGE) or not _may_name_lines(table, names, level):
            continue
        last: dict[str, str] = {}
        changes = [0, 0]
        for name, cell in zip(table.column(names.index), table.column(level.index), strict=True):
            if name in last:
                changes[last[name] != cell] += 1
            last[name] = cell
        is_changes = changes[1] >= _ALTERNATING * sum(changes)
        is_certain = table.header is not None or (sum(changes) >= _FEWEST_CHANGES and len(last) > 1 and is_changes)
        if len(last) <= _MOST_LINES and is_certain:
            return LongForm(names.index, level.index, _initials(table, time, names.index, level.index, is_changes))
    return None


def _may_name_lines(table: Table, names: Column, level: Column) -> bool:
    if table.header is None:
        return names.kind == WORDS
    called = _NAME_OF_NAMES.match(table.names[names.index]) is not None
    return called and (names.kind == WORDS or _NAME_OF_LEVELS.match(table.names[level.index]) is not None)


def _initials(table: Table, time: int, names: int, level: int, is_changes: bool) -> dict[str, int]:
    """The level of each line before the rows in which it changes: that of a row at the first time, which states it;
    the other one than that of a later row, which changes it, unless rows may repeat a level."""
    begin = table.column(time)[0]
    initials: dict[str, int] = {}
    for when, name, cell in zip(table.column(time), table.column(names), table.column(level), strict=True):
        if not name or name in initials:
            continue
        number = table.number(cell)
        known = UNKNOWN if number is None or number not in (0, 1) else int(number)
        stated = LEVEL_TEXTS.get(cell.lower(), known)
        if when != begin and stated != UNKNOWN:
            stated = 1 - stated if is_changes else UNKNOWN
        initials[name] = stated
    return initials


# --- refusals --------------------------------------------------------------------------------------------------------

THRESHOLD_HINT = "for a file of voltages give --threshold LOW,HIGH, or [capture] threshold_v = [low, high] in the sheet"


def refuse_without_lines(table: Table, time: int | None, columns: Sequence[Column], file: str) -> None:
    """Raises InputError, with what the table is instead, where no column can be a line."""
    kinds = {column.kind for column in columns}
    if kinds & {LEVEL, VOLTAGE} or (PORT in kinds and COUNTS not in kinds):
        return
    shown = next((column for kind in (COUNTS, READINGS) for column in columns if column.kind == kind), None)
    if shown is not None and shown.kind == COUNTS:
        problem, hint = (
            "this looks like a table of counts already decoded",
            "give the capture that they were counted from",
        )
    elif shown is not None:
        problem = "these look like a converter's readings: they keep near no two levels"
        hint = THRESHOLD_HINT
    elif columns and not _is_told(table, time):
        problem = "this looks like a list of words and amounts, such as a parts list"
        hint = "give the CSV export of a logic analyser"
    else:
        problem, hint = "no column looks like a line", "give the CSV export of a logic analyser"
    index = shown.index if shown is not None else columns[0].index if columns else 0
    row = next((row for row, cell in enumerate(table.column(index)) if not is_level(cell, table.decimal)), 0)
    raise InputError(
        problem,
        file=file,
        row=table.lines[row],
        column=table.names[index],
        found=f"{table.rows[row][index]!r} (the columns are {', '.join(table.names)})"[:120],
        expected="at least one column of 0 and 1, of voltages at two levels, or of port values",
        hint=hint,
    )


def _is_told(table: Table, time: int | None) -> bool:
    """Whether the time column is one by its name, its unit or its date-times, not just by numbers that rise."""
    if time is None:
        return False
    named = table.header is not None and is_time_name(table.names[time])
    return named or time_unit(table, time) is not None or any(map(is_date, table.column(time)[:50]))


def refuse_column(column: Column, name: str, bit: int | None, text: str, file: str) -> InputError:
    """Why a column, or a bit of it, cannot be a line. text: a cell of it."""
    problem, hint = _REFUSALS[column.kind]
    if bit is not None:
        problem = "a bit is named of a column whose values are not known to be whole numbers in one base"
        hint = 'give [capture] port_base = "binary", "decimal" or "hexadecimal" in the sheet'
    return InputError(
        problem,
        file=file,
        column=name,
        found=repr(text),
        expected="0 and 1, two levels of a voltage, or a bit of a port value",
        hint=hint.format(name=name),
    )


_REFUSALS = {
    LEVEL: ("this column holds levels", "name it without a bit"),
    VOLTAGE: ("the two levels of this column cannot be told apart", THRESHOLD_HINT),
    PORT: ("this column holds port values, and no bit is named", 'name one in [lines], such as "{name}[0]"'),
    COUNTS: ("this column holds counts already decoded, not levels", "name another column in [lines]"),
    READINGS: ("this column holds numbers that keep near no two levels", THRESHOLD_HINT),
    WORDS: ("this column holds no levels", "name another column in [lines]"),
}


def rule_of(column: Column, bit: int | None) -> LevelRule | None:
    """How the column, or a bit of it, becomes a line; None where it cannot."""
    if bit is not None:
        return None if column.base is None else LevelRule(column.index, base=column.base, bit=bit)
    if column.kind == LEVEL:
        return LevelRule(column.index)
    if column.kind == VOLTAGE and column.thresholds is not None:
        return LevelRule(column.index, column.thresholds)
    return None
