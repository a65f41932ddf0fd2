"""Time axis: the decimal text of a time becomes a whole number of ticks without passing through a float.

A float of 64 bits holds about 16 digits: 1.7 billion seconds with nine decimals do not fit, and even 0.1 s is not
0.1. So the text is read as a decimal number of fixed scale (arrow's 128-bit decimals), whose unscaled integer is the
tick count. A tick is a power of ten of a second, three digits finer than what the first rows print, at most a
picosecond, and coarse enough that the axis cannot leave an int64.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal, InvalidOperation
from fractions import Fraction

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from decode.spans import IntArray

UNIT_DIGITS = {"s": 0, "ms": 3, "us": 6, "ns": 9, "ps": 12}
"""Decimal places of a second that each unit stands for."""

FINEST_DIGITS = 12
"""No export of a logic analyser resolves more than a picosecond; what is printed beyond that is float noise."""

GUARD_DIGITS = 3
"""Digits kept below those of the first rows, for later rows that print more."""

_HEADROOM_S = 10**6
"""The axis may run on for this long (eleven days) after the first rows."""

_FARTHEST = 2**62
"""No time is this many ticks from zero, so that the difference of two times fits an int64."""

_EXACT_DIGITS = 40


@dataclass(frozen=True, slots=True)
class Scale:
    """How the text of a time column becomes ticks.

    digits: a tick is 10**-digits seconds. unit_digits: the same for the column's unit. printed: ticks that the last
    digit printed in the first rows is worth. decimal: the decimal mark.
    """

    digits: int
    unit_digits: int
    printed: int
    decimal: str = "."

    @property
    def tick(self) -> Fraction:
        """Seconds per tick."""
        return Fraction(1, 10**self.digits) if self.digits >= 0 else Fraction(10**-self.digits)

    @property
    def places(self) -> int:
        """Decimal places, in the column's unit, that a tick stands for."""
        return self.digits - self.unit_digits


class TimeError(ValueError):
    """A text that is not a time. position: its index among those given; problem, expected: as in an InputError."""

    def __init__(self, position: int, problem: str, expected: str) -> None:
        super().__init__(problem)
        self.position = position
        self.problem = problem
        self.expected = expected


def maybe_decimal(text: str) -> Decimal | None:
    """The finite decimal number that `text` is, or None. Underscores and exotic digits are not numbers here."""
    if not text.isascii() or "_" in text:
        return None
    try:
        number = Decimal(text)
    except InvalidOperation:
        return None
    return number if number.is_finite() and abs(number.adjusted()) < 400 else None


def choose_scale(texts: Sequence[str], unit: str, decimal: str = ".") -> Scale:
    """The scale for a time column whose first cells are `texts` (each a number) in `unit`."""
    numbers = [number for text in texts if (number := maybe_decimal(text.replace(decimal, "."))) is not None]
    unit_digits = UNIT_DIGITS[unit]
    printed = min(FINEST_DIGITS, unit_digits + max((_decimals(number) for number in numbers), default=0))
    largest = max((abs(number) for number in numbers), default=Decimal(0)).scaleb(-unit_digits) + _HEADROOM_S
    digits = min(FINEST_DIGITS, printed + GUARD_DIGITS)
    while largest.scaleb(digits) >= _FARTHEST:
        digits -= 1
    return Scale(digits, unit_digits, 10 ** max(0, digits - printed), decimal)


def _decimals(number: Decimal) -> int:
    """Decimal places that a number prints; those of an exponent's mantissa only as far as they are not zero."""
    exponent = number.as_tuple().exponent
    assert isinstance(exponent, int)
    if exponent < -FINEST_DIGITS:
        exponent = int(number.normalize().as_tuple().exponent)
    return max(0, -exponent)


def to_ticks(texts: pa.Array, scale: Scale) -> tuple[IntArray, int | None]:
    """((n,) ticks, index of the first that had to be rounded or None) of n decimal texts in the column's unit.

    Raises TimeError with the first text that is not a number or lies outside the axis.
    """
    if scale.decimal != ".":
        texts = pc.replace_substring(texts, scale.decimal, ".")
    try:
        return _unscaled(pc.cast(texts, pa.decimal128(38, scale.places))), None
    except (pa.ArrowInvalid, OverflowError):
        texts = pc.utf8_trim_whitespace(texts)
    try:
        return _unscaled(pc.cast(texts, pa.decimal128(38, scale.places))), None
    except (pa.ArrowInvalid, OverflowError):
        return _rounded(texts, scale)


def _unscaled(numbers: pa.Array) -> IntArray:
    """The integers behind 128-bit decimals: two 64-bit words each, the low one first."""
    words = np.frombuffer(numbers.buffers()[1], np.int64).reshape(-1, 2)
    words = words[numbers.offset : numbers.offset + len(numbers)]
    low, high = words[:, 0], words[:, 1]
    if np.any(high != low >> 63) or np.any(low <= -_FARTHEST) or np.any(low >= _FARTHEST):
        raise OverflowError("a time outside the axis")
    return np.ascontiguousarray(low)


def _rounded(texts: pa.Array, scale: Scale) -> tuple[IntArray, int | None]:
    """As `to_ticks`, for texts with more digits than a tick: rounded half to even."""
    try:
        exact = pc.cast(texts, pa.decimal256(76, _EXACT_DIGITS))
        rounded = pc.round(exact, scale.places)
        ticks = _unscaled(pc.cast(rounded, pa.decimal128(38, scale.places)))
        return ticks, pc.index(pc.not_equal(exact, rounded), True).as_py()
    except (pa.ArrowInvalid, OverflowError):
        return _rounded_one_by_one(texts.to_pylist(), scale)


def _rounded_one_by_one(texts: Sequence[str], scale: Scale) -> tuple[IntArray, int | None]:
    """The plain version, in words of Decimal: it knows which text is at fault."""
    ticks = np.empty(len(texts), np.int64)
    finer: int | None = None
    for position, text in enumerate(texts):
        number = maybe_decimal(text)
        if number is None:
            raise TimeError(position, "a time that is not a number", "a decimal number")
        exact = Fraction(number) * Fraction(10) ** scale.places
        whole = round(exact)
        if not -_FARTHEST < whole < _FARTHEST:
            raise TimeError(position, "a time too far from the first rows", "times that can be told apart in 64 bits")
        if whole != exact and finer is None:
            finer = position
        ticks[position] = whole
    return ticks, finer
