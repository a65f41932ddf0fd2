"""Time axis: the decimal text of a time becomes a whole number of ticks without passing through a float.

A float of 64 bits holds about 16 digits: 1.7 billion seconds with nine decimals do not fit, and even 0.1 s is not
0.1. So the text is read as a decimal number of fixed scale (arrow's 128-bit decimals), whose unscaled integer is the
tick count. A tick is a power of ten of a second, three digits finer than what the first rows print, at most a
picosecond, and coarse enough that the axis cannot leave an int64.

Date-times (ISO 8601, arrow's reading of it) become nanoseconds from the first of them.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from decimal import Decimal, InvalidOperation
from fractions import Fraction

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from decode.spans import BoolArray, IntArray

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
    noisy: bool = False
    origin: int | None = None
    zoned: bool = False

    @property
    def tick(self) -> Fraction:
        """Seconds per tick."""
        return Fraction(1, 10**self.digits) if self.digits >= 0 else Fraction(10**-self.digits)

    @property
    def places(self) -> int:
        """Decimal places, in the column's unit, that a tick stands for."""
        return self.digits - self.unit_digits


NUMBER = r"^[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]{1,4})?$"
_DATE = re.compile(r"\d{4}-\d\d-\d\d[T ]\d\d:\d\d(:\d\d([.,]\d{1,9})?)?(?P<zone>Z|[+-]\d\d:?\d\d)?", re.ASCII)


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
    noisy = any(_decimals(number) + unit_digits > digits for number in numbers)
    return Scale(digits, unit_digits, 10 ** max(0, digits - printed), decimal, noisy)


def is_date(text: str) -> bool:
    """Whether a cell is an ISO 8601 date with a time of day."""
    return _DATE.fullmatch(text.strip()) is not None


def date_scale(texts: Sequence[str]) -> Scale:
    """The scale for a column whose first cells are `texts`, of which at least one is a date-time: a tick is 1 ns, and
    times count from the first."""
    found = [match for text in texts if (match := _DATE.fullmatch(text.strip()))]
    zoned = found[0].group("zone") is not None
    decimals = max(len(match.group(2) or ".") - 1 for match in found)
    scale = Scale(9, 0, 10 ** (9 - decimals), ".", origin=0, zoned=zoned)
    first = to_ticks(pa.array([found[0].group()], pa.string()), scale).ticks[0]
    return replace(scale, origin=int(first))


def _decimals(number: Decimal) -> int:
    """Decimal places that a number prints; those of an exponent's mantissa only as far as they are not zero."""
    exponent = number.as_tuple().exponent
    assert isinstance(exponent, int)
    if exponent < -FINEST_DIGITS:
        exponent = int(number.normalize().as_tuple().exponent)
    return max(0, -exponent)


@dataclass(frozen=True, slots=True, eq=False)
class Ticks:
    """n times. rounded: index of the first that was finer than a tick, or None. bad: (n,) which of the texts are no
    time within the axis (their ticks mean nothing), or None where all are."""

    ticks: IntArray
    rounded: int | None = None
    bad: BoolArray | None = None


def to_ticks(texts: pa.Array, scale: Scale) -> Ticks:
    """The times of n texts, in the column's unit or as ISO 8601 date-times."""
    if scale.origin is not None:
        return _date_ticks(texts, scale, scale.origin)
    if scale.decimal != ".":
        texts = pc.replace_substring(texts, scale.decimal, ".")
    if scale.noisy:
        return _rounded(pc.utf8_trim_whitespace(texts), scale)
    try:
        return Ticks(_unscaled(pc.cast(texts, pa.decimal128(38, scale.places))))
    except (pa.ArrowInvalid, OverflowError):
        texts = pc.utf8_trim_whitespace(texts)
    try:
        return Ticks(_unscaled(pc.cast(texts, pa.decimal128(38, scale.places))))
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


def _rounded(texts: pa.Array, scale: Scale) -> Ticks:
    """As `to_ticks`, for texts with more digits than a tick (rounded half to even) or that are no numbers."""
    bad = ~np.asarray(pc.match_substring_regex(texts, NUMBER).to_numpy(zero_copy_only=False), np.bool_)
    if bad.any():
        texts = pc.if_else(pa.array(bad), "0", texts)
    try:
        exact = pc.cast(texts, pa.decimal256(76, _EXACT_DIGITS))
        rounded = pc.round(exact, scale.places)
        ticks = _unscaled(pc.cast(rounded, pa.decimal128(38, scale.places)))
    except (pa.ArrowInvalid, OverflowError):
        return _rounded_one_by_one(texts.to_pylist(), scale, bad)
    first = pc.index(pc.not_equal(exact, rounded), True).as_py()
    return Ticks(ticks, None if first < 0 else first, bad if bad.any() else None)


def _rounded_one_by_one(texts: Sequence[str], scale: Scale, bad: BoolArray) -> Ticks:
    """The plain version, in words of Decimal."""
    ticks = np.zeros(len(texts), np.int64)
    bad = bad.copy()
    finer: int | None = None
    for position, text in enumerate(texts):
        number = maybe_decimal(text)
        whole = None if number is None else round(Fraction(number) * Fraction(10) ** scale.places)
        if number is None or whole is None or not -_FARTHEST < whole < _FARTHEST:
            bad[position] = True
            continue
        if finer is None and whole != Fraction(number) * Fraction(10) ** scale.places:
            finer = position
        ticks[position] = whole
    return Ticks(ticks, finer, bad if bad.any() else None)


def _date_ticks(texts: pa.Array, scale: Scale, origin: int) -> Ticks:
    """Nanoseconds from `origin`, which is in nanoseconds of the Unix epoch."""
    texts = pc.replace_substring(pc.utf8_trim_whitespace(texts), ",", ".")
    kind = pa.timestamp("ns", "UTC") if scale.zoned else pa.timestamp("ns")
    bad = None
    try:
        since = pc.cast(texts, kind)
    except pa.ArrowInvalid:
        since, bad = _dates_one_by_one(texts.to_pylist(), kind)
    return Ticks(pc.cast(since, pa.int64()).to_numpy(zero_copy_only=False) - origin, None, bad)


def _dates_one_by_one(texts: Sequence[str], kind: pa.DataType) -> tuple[pa.Array, BoolArray]:
    values, bad = [], np.zeros(len(texts), np.bool_)
    for position, text in enumerate(texts):
        try:
            values.append(pc.cast(pa.scalar(text), kind).cast(pa.int64()).as_py())
        except pa.ArrowInvalid:
            values.append(0)
            bad[position] = True
    return pa.array(values, pa.int64()), bad


def explain(text: str, scale: Scale) -> tuple[str, str]:
    """(problem, expected) for a text that `to_ticks` found bad."""
    if scale.origin is not None:
        return "a time that is not a date-time like the others", "such as 2024-05-31T12:00:00.000000000"
    if maybe_decimal(text.strip().replace(scale.decimal, ".")) is None:
        return "a time that is not a number", "a decimal number"
    return "a time too far from the first rows", "times that can be told apart in 64 bits"
