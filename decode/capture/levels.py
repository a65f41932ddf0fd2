"""Cells to levels: 0, 1, or 2 for unknown.

A logic export writes 0 and 1 (some with decimals, some as words) and, where it comes from a simulation, the other
values of IEEE 1164: weak low and high are levels, the rest (u, x, z, w, -) is not known, which is not the same as 0. A
voltage becomes a level with two thresholds: at or below the first a line is low, at or above the second it is high, and
in between it keeps the level it had, so that noise on a slope makes no pulses. A port value holds one line in each of
its bits. And in a table with a row per change of one line, a row says something of the line it names alone; the others
keep their level.

A column has few distinct cells, so each distinct one is judged once and the rows are looked up; voltages, which have
many, are compared as numbers.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

from decode.capture.time_axis import maybe_decimal
from decode.spans import UNKNOWN, LevelArray

LEVEL_TEXTS = {
    "0": 0, "1": 1,
    "low": 0, "high": 1, "false": 0, "true": 1,
    "l": 0, "h": 1,
    "x": UNKNOWN, "z": UNKNOWN, "u": UNKNOWN, "w": UNKNOWN, "-": UNKNOWN,
}  # fmt: skip
"""What a cell may say besides a number, in any letters (source of the single letters: IEEE 1164, std_ulogic)."""

MISSING_TEXTS = ("", "nan", "n/a", "na", "null", "none", "?")
"""A cell that says that there is no value. Its row cannot be used."""

HOLD, NONE = 3, 4
"""Keeps the level before it; not a level at all."""

Thresholds = tuple[float, float]


@dataclass(frozen=True, slots=True)
class LevelRule:
    """How one line stands in a table.

    column: index of its column. thresholds: low-going and high-going, in the column's unit; None for levels as such.
    base, bit: of a port value; bit 0 is the least significant. line: its name in the column `names`, where a row
    speaks of one line alone. initial: its level before the first row that says anything.
    """

    column: int
    thresholds: Thresholds | None = None
    base: int | None = None
    bit: int = 0
    line: str | None = None
    names: int | None = None
    initial: int = UNKNOWN

    @property
    def holds(self) -> bool:
        """Whether a row can leave the line as it was."""
        return self.thresholds is not None or self.line is not None


def is_level(text: str, decimal: str = ".") -> bool:
    """Whether a cell says 0, 1 or unknown without any threshold."""
    return _logic_code(text.replace(decimal, ".")) != NONE


def is_number(text: str, decimal: str = ".") -> bool:
    """Whether a cell is a decimal number."""
    return maybe_decimal(text.strip().replace(decimal, ".")) is not None


def is_missing(text: str) -> bool:
    """Whether a cell says that it has no value."""
    return text.strip().lower() in MISSING_TEXTS


def maybe_port(text: str, base: int) -> int | None:
    """A port value of 0 and more in base 2, 10 or 16, with or without 0b, 0x or a closing h; None for other text."""
    cell = text.strip().lower()
    if base == 16:
        cell = cell.removeprefix("0x").removesuffix("h")
    elif base == 2:
        cell = cell.removeprefix("0b")
    if not cell.isascii() or not cell.isalnum():
        return None
    try:
        return int(cell, base)
    except ValueError:
        return None


def _logic_code(text: str) -> int:
    cell = text.strip().lower()
    if cell in LEVEL_TEXTS:
        return LEVEL_TEXTS[cell]
    number = maybe_decimal(cell)
    return int(number) if number is not None and number in (0, 1) else NONE


def _voltage_code(text: str, thresholds: Thresholds) -> int:
    cell = text.strip().lower()
    number = maybe_decimal(cell)
    if number is None:
        return LEVEL_TEXTS.get(cell, NONE)
    if float(number) <= thresholds[0]:
        return 0
    return 1 if float(number) >= thresholds[1] else HOLD


class LevelReader:
    """One line's cells to what each says by itself: a level, HOLD, or NONE."""

    def __init__(self, rule: LevelRule, decimal: str = ".") -> None:
        self.rule = rule
        self._decimal = decimal

    def codes(self, frame: pd.DataFrame) -> LevelArray:
        """(n,) codes of n rows; `frame` has the columns that the rule names."""
        codes = self._column_codes(frame[self.rule.column])
        if self.rule.line is None or self.rule.names is None:
            return codes
        names = frame[self.rule.names].cat
        wanted = self.rule.line.lower()
        meant = np.array([str(name).strip().lower() == wanted for name in names.categories], np.bool_)
        return np.where(meant[names.codes.to_numpy()], codes, np.int8(HOLD)).astype(np.int8)

    def _column_codes(self, cells: pd.Series) -> LevelArray:
        if not isinstance(cells.dtype, pd.CategoricalDtype):
            volts = self._maybe_volts(cells)
            if volts is not None:
                return volts
            cells = cells.astype("category")
        table = np.array([self._code(str(text)) for text in cells.cat.categories], np.int8)
        codes: LevelArray = table[cells.cat.codes.to_numpy()]
        return codes

    def _maybe_volts(self, cells: pd.Series) -> LevelArray | None:
        """Codes of cells that are all numbers, else None."""
        texts = pc.utf8_trim_whitespace(pa.array(cells, type=pa.string()))
        if self._decimal != ".":
            texts = pc.replace_substring(texts, self._decimal, ".")
        try:
            volts = pc.cast(texts, pa.float64()).to_numpy(zero_copy_only=False)
        except pa.ArrowInvalid:
            return None
        assert self.rule.thresholds is not None
        low, high = self.rule.thresholds
        codes = np.where(volts <= low, 0, np.where(volts >= high, 1, HOLD))
        codes[~np.isfinite(volts)] = NONE
        return codes.astype(np.int8)

    def _code(self, text: str) -> int:
        plain = text.replace(self._decimal, ".")
        if self.rule.base is not None:
            value = maybe_port(plain, self.rule.base)
            if value is None:
                unknown = LEVEL_TEXTS.get(plain.strip().lower()) == UNKNOWN
                return UNKNOWN if unknown else NONE
            return value >> self.rule.bit & 1
        return _logic_code(plain) if self.rule.thresholds is None else _voltage_code(plain, self.rule.thresholds)


def filled(codes: LevelArray, before: int) -> LevelArray:
    """(n,) levels: each HOLD replaced by the level before it, the first ones by `before`."""
    hold = codes == HOLD
    if not hold.any():
        return codes
    decided = np.where(hold, -1, np.arange(codes.size))
    last = np.maximum.accumulate(decided)
    return np.where(last >= 0, codes[last], np.int8(before)).astype(np.int8)
