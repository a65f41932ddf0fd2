"""Times: decimal text to whole ticks, exact where a float is not."""

from __future__ import annotations

from decimal import ROUND_HALF_EVEN, Decimal
from fractions import Fraction

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from decode.capture.time_axis import Scale, choose_scale, date_scale, explain, is_date, maybe_decimal, to_ticks

PICOSECONDS = Scale(12, 0, 1)


def ticks(*texts: str, scale: Scale = PICOSECONDS) -> tuple[list[int], int | None]:
    """The ticks, and the first that was rounded; none of the texts may be bad."""
    found = to_ticks(pa.array(texts, pa.string()), scale)
    assert found.bad is None
    return found.ticks.tolist(), found.rounded


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("0", 0),
        ("-0.000000010", -10_000),  # a sign in front of nothing but zeros still counts
        ("-.5", -500_000_000_000),
        ("5.", 5_000_000_000_000),
        ("+3", 3_000_000_000_000),
        (" 1e-9 ", 1_000),
        ("1.50E-06", 1_500_000),
        ("0.1", 100_000_000_000),  # as a float 0.1000000000000000055
        ("4000000.000000000001", 4_000_000_000_000_000_001),  # 19 digits, a float has 16
    ],
)
def test_exact(text: str, expected: int) -> None:
    """A decimal number of seconds times 10^12, worked out by moving the point."""
    assert ticks(text) == ([expected], None)


@pytest.mark.parametrize(
    ("texts", "expected", "first"),
    [
        (["1", "0.0000000000004", "0.0000000000006"], [10**12, 0, 1], 1),
        (["0.0000000000005", "0.0000000000015", "-0.0000000000005"], [0, 2, 0], 0),  # half to even
        (["0.00000000000049999999999999999999999999999999999999"], [0], 0),  # more than arrow's digits
        (["1.2345678901234567e-05"], [12_345_679], 0),  # a float as it is printed
    ],
)
def test_rounded(texts: list[str], expected: list[int], first: int) -> None:
    """Digits beyond the tick are rounded half to even, and the first such text is named."""
    assert ticks(*texts) == (expected, first)


@pytest.mark.parametrize(
    ("texts", "position", "problem"),
    [
        (["1", "abc"], 1, "a time that is not a number"),
        (["", "1"], 0, "a time that is not a number"),
        (["1", "nan"], 1, "a time that is not a number"),
        (["inf"], 0, "a time that is not a number"),
        (["1_0"], 0, "a time that is not a number"),
        (["1", "0x10"], 1, "a time that is not a number"),
        (["1", "4611687"], 1, "a time too far from the first rows"),  # 2^62 ps are 4 611 686.02 s
        (["-4611687"], 0, "a time too far from the first rows"),
        (["1e300"], 0, "a time too far from the first rows"),
    ],
)
def test_bad(texts: list[str], position: int, problem: str) -> None:
    """The texts that cannot be used, the others in their places, and the words for it."""
    found = to_ticks(pa.array([*texts, "2"], pa.string()), PICOSECONDS)
    assert found.bad is not None
    assert np.flatnonzero(found.bad).tolist() == [position]
    assert found.ticks[-1] == 2 * 10**12
    assert explain(texts[position], PICOSECONDS)[0] == problem


@pytest.mark.parametrize(
    ("texts", "expected"),
    [
        (["2024-05-31T12:00:00.123456789", "2024-05-31T12:00:00.123456790"], [0, 1]),
        (["2024-05-31 12:00", "2024-06-01 12:00"], [0, 86_400 * 10**9]),
        (["2024-05-31T12:00:00Z", "2024-05-31T14:00:00.5+02:00"], [0, 5 * 10**8]),
        (["2024-05-31T12:00:00,5Z", "2024-05-31T12:00:00,25Z"], [0, -25 * 10**7]),
        (["2024-02-28T23:59:59", "2024-02-29T00:00:00"], [0, 10**9]),
    ],
)
def test_date_times(texts: list[str], expected: list[int]) -> None:
    """Nanoseconds from the first, whatever the zone. Source: ISO 8601; differences worked out by hand."""
    found = to_ticks(pa.array(texts, pa.string()), date_scale(texts))
    assert (found.ticks.tolist(), found.bad) == (expected, None)


def test_bad_date_times() -> None:
    """No date, one without the zone of the others, and a thirteenth month."""
    texts = ["2024-05-31T12:00:00Z", "soon", "2024-05-31T12:00:00", "2024-13-01T00:00:00Z", "2024-05-31T12:00:01Z"]
    found = to_ticks(pa.array(texts, pa.string()), date_scale(texts))
    assert found.bad is not None
    assert found.bad.tolist() == [False, True, True, True, False]
    assert found.ticks[-1] == 10**9
    assert explain("soon", date_scale(texts))[0] == "a time that is not a date-time like the others"


@pytest.mark.parametrize("text", ["2024-05-31", "12:00:00", "31.05.2024 12:00", "2024-05-31T12:00:00.1234567891", ""])
def test_not_a_date_time(text: str) -> None:
    assert not is_date(text)


@pytest.mark.parametrize(
    ("texts", "unit", "digits", "printed"),
    [
        (["0.001", "0.0025"], "s", 7, 1000),  # four decimals printed, three more kept
        (["0.000000001"], "s", 12, 1000),
        (["10", "20"], "ns", 12, 1000),
        (["10.5"], "ns", 12, 100),  # never finer than a picosecond
        (["1e-9"], "s", 12, 1000),
        (["1.000000E-09", "2.000000E-09"], "s", 12, 1000),  # zeros of a mantissa print nothing
        (["1.2345678901234567e-05"], "s", 12, 1),
        (["1700000000.123456789"], "s", 9, 1),  # 1.7e9 s and eleven days are below 2^62 ns, not below 2^62 in tenths
        (["5"], "s", 3, 1000),
    ],
)
def test_scale(texts: list[str], unit: str, digits: int, printed: int) -> None:
    """Digits of a tick and what the last printed digit is worth, worked out beside each row."""
    scale = choose_scale(texts, unit)
    assert (scale.digits, scale.printed, scale.tick) == (digits, printed, Fraction(1, 10**digits))


def test_a_scale_coarser_than_the_unit() -> None:
    """Nanoseconds since the year 0, 6e19 of them: a tick of 100 ns is the finest that fits, half of it rounds."""
    scale = choose_scale(["60000000000000000000"], "ns")
    assert scale.digits == 7
    assert ticks("60000000000000000000", "60000000000000000150", scale=scale) == ([6 * 10**17, 6 * 10**17 + 2], 1)


@given(st.lists(st.decimals("-1000000", "1000000", places=None, allow_nan=False), min_size=1, max_size=20))
def test_like_decimal(numbers: list[Decimal]) -> None:
    """The fast way gives what Decimal gives, whatever the number of digits. Source: Python's decimal module."""
    expected = [int(number.scaleb(12).quantize(Decimal(1), ROUND_HALF_EVEN)) for number in numbers]
    assert ticks(*[str(number) for number in numbers])[0] == expected


@pytest.mark.parametrize("text", ["", "abc", "1_000", "١", "nan", "-inf", "1,5", "1e5000", "0x1"])
def test_not_a_number(text: str) -> None:
    """What Python's own parser would let through is refused as well."""
    assert maybe_decimal(text) is None
