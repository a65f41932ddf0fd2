"""Cells to levels: 0, 1, or 2 for unknown.

A logic export writes 0 and 1 (some with decimals) and, where it comes from a simulation, x, z or u for a level that
is not known. A voltage becomes a level with two thresholds: at or below the first a line is low, at or above the
second it is high, and in between it keeps the level it had, so that noise on a slope makes no pulses.

A column has few distinct cells, so each distinct one is judged once and the rows are looked up.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from decode.capture.time_axis import maybe_decimal
from decode.spans import UNKNOWN, LevelArray

UNKNOWN_TEXTS = ("x", "z", "u")

_HOLD, _NONE = 3, 4
"""Between the thresholds; not a level at all."""

Thresholds = tuple[float, float]


def is_level(text: str, decimal: str = ".") -> bool:
    """Whether a cell says 0, 1 or unknown without any threshold."""
    return _logic_code(text.replace(decimal, ".")) != _NONE


def _logic_code(text: str) -> int:
    cell = text.strip().lower()
    if cell in ("0", "1"):
        return int(cell)
    if cell in UNKNOWN_TEXTS:
        return UNKNOWN
    number = maybe_decimal(cell)
    return int(number) if number is not None and number in (0, 1) else _NONE


def _voltage_code(text: str, thresholds: Thresholds) -> int:
    cell = text.strip().lower()
    if cell in UNKNOWN_TEXTS:
        return UNKNOWN
    number = maybe_decimal(cell)
    if number is None:
        return _NONE
    if number <= thresholds[0]:
        return 0
    return 1 if number >= thresholds[1] else _HOLD


class LevelError(ValueError):
    """A cell that is no level. position: its row among those given; text: the cell; is_number: whether it is one."""

    def __init__(self, position: int, text: str) -> None:
        super().__init__(text)
        self.position = position
        self.text = text
        self.is_number = maybe_decimal(text.strip()) is not None


class LevelReader:
    """One column's cells to levels. A cell between the thresholds keeps the level before it, also from call to call.

    thresholds: low-going and high-going, in volts; None for a column of levels.
    """

    def __init__(self, thresholds: Thresholds | None, decimal: str = ".") -> None:
        self._thresholds = thresholds
        self._decimal = decimal
        self._level = UNKNOWN

    def restart(self) -> None:
        """Forget the level: what comes next does not continue what was read."""
        self._level = UNKNOWN

    def codes(self, cells: pd.Series) -> LevelArray:
        """(n,) what each of n cells says by itself. Raises LevelError with the first that says nothing."""
        distinct = [str(text) for text in cells.cat.categories]
        table = np.array([self._code(text) for text in distinct], np.int8)
        numbers = cells.cat.codes.to_numpy()
        codes: LevelArray = table[numbers]
        if (table == _NONE).any() and (codes == _NONE).any():
            position = int(np.argmax(codes == _NONE))
            raise LevelError(position, distinct[int(numbers[position])])
        return codes

    def _code(self, text: str) -> int:
        plain = text.replace(self._decimal, ".")
        return _logic_code(plain) if self._thresholds is None else _voltage_code(plain, self._thresholds)

    def levels(self, codes: LevelArray) -> LevelArray:
        """(n,) levels: each hold replaced by the level before it."""
        if self._thresholds is not None and codes.size:
            decided = np.where(codes == _HOLD, -1, np.arange(codes.size))
            last = np.maximum.accumulate(decided)
            codes = np.where(last >= 0, codes[last], np.int8(self._level)).astype(np.int8)
        if codes.size:
            self._level = int(codes[-1])
        return codes
