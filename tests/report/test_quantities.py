"""Numbers to text. Expected texts are exact arithmetic on the number given, unless a source stands beside them."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from decode.report.quantities import (
    ELECTRICAL,
    NOT_KNOWN,
    bounds,
    counted,
    decimals_beside,
    fixed,
    instant,
    quantity,
    scale,
    share,
    trimmed,
    with_uncertainty,
)
from decode.rules.measurements import MEASUREMENTS


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (1.04e-7, "s", "104 ns"),
        (1e6, "Hz", "1.00 MHz"),
        (9.9996e-7, "s", "1.00 µs"),  # three digits of 999.96 ns are 1000 ns, which is 1.00 µs
        (9.994e-7, "s", "999 ns"),
        (-2.5e-3, "s", "-2.50 ms"),
        (0.0, "s", "0 s"),
        (1e-20, "s", "0.0000100 fs"),  # below the last prefix: decimals, still no exponent
        (4096, "counts", "4096 counts"),
        (-300.0, "rpm", "-300 rpm"),
        (123.4, "deg", "123°"),
        (0.0254, "deg", "0.0254°"),
        (0.00042, "deg", "0.000420°"),
        (0.0042, "deg", "0.00420°"),
        (89.96, "el_deg", "90.0°e"),
        (1.2e-5, "1", "12.0 ppm"),
        (0.25, "1", "0.250"),
        (None, "s", NOT_KNOWN),
        (math.nan, "s", NOT_KNOWN),
        (math.inf, "Hz", NOT_KNOWN),
    ],
)
def test_a_quantity_has_three_digits_and_the_prefix_that_suits(value: float | None, unit: str, text: str) -> None:
    assert quantity(value, unit) == text


def test_a_sign_is_written_where_it_is_asked_for() -> None:
    assert quantity(12.02, "counts", digits=4, signed=True) == "+12.02 counts"
    assert quantity(-0.0, "counts", signed=True) == "+0 counts"


@given(st.floats(min_value=1e-15, max_value=9.99e14), st.sampled_from(["s", "Hz"]))
def test_a_scaled_number_has_one_to_three_digits_before_its_point(value: float, unit: str) -> None:
    """Whatever the size: 1 <= number < 1000 and no exponent (within the range of NIST SP 811, 7.9)."""
    number = quantity(value, unit).split(" ")[0]
    assert 1 <= float(number) < 1000
    assert "e" not in number


@given(st.floats(allow_nan=True, allow_infinity=True), st.sampled_from(["s", "Hz", "deg", "counts", "rpm", "1"]))
def test_no_number_is_ever_written_with_an_exponent(value: float, unit: str) -> None:
    text = quantity(value, unit)
    assert text == NOT_KNOWN or "e" not in text.split(" ")[0].rstrip("°e")


@pytest.mark.parametrize(
    ("value", "uncertainty", "unit", "text"),
    [
        # The rule's own example, Particle Data Group, Introduction, "Rounding": 0.827 +- 0.119 is 0.83 +- 0.12 and
        # 0.827 +- 0.367 is 0.8 +- 0.4.
        (0.827, 0.119, "rpm", "0.83 rpm ± 0.12 rpm"),
        (0.827, 0.367, "rpm", "0.8 rpm ± 0.4 rpm"),
        (1.23e-6, 5e-8, "s", "1.23 µs ± 0.05 µs"),
        (1.23456e-6, 9.6e-8, "s", "1.23 µs ± 0.10 µs"),
        (1.23e-6, 0.0, "s", "1.23 µs"),
        (1.23e-6, None, "s", "1.23 µs"),
        (0.0, 2e-9, "s", "0.0 ns ± 2.0 ns"),
        (None, 1.0, "s", NOT_KNOWN),
    ],
)
def test_an_uncertainty_decides_the_digits(
    value: float | None, uncertainty: float | None, unit: str, text: str
) -> None:
    assert with_uncertainty(value, uncertainty, unit) == text


def test_values_without_an_uncertainty_get_four_digits() -> None:
    assert decimals_beside(None, [12.3456, 1.0]) == 2
    assert decimals_beside(None, []) == 0


def test_values_in_one_table_row_share_the_prefix_of_the_largest() -> None:
    assert scale([1.04e-7, 1.2e-6], "s") == (pytest.approx(1e6), "µs")


@pytest.mark.parametrize(
    ("low", "high", "unit", "text"),
    [
        (62.5e3, 10e6, "Hz", "62.5 kHz to 10 MHz"),
        (None, 10e6, "Hz", "at most 10 MHz"),
        (5e-6, None, "s", "at least 5 µs"),
        (4096, 4096, "counts", "exactly 4096 counts"),
        (0.0, 0.0, "deg", "exactly 0°"),
        (None, 0.0, "s", "at most 0 s"),
        (None, None, "s", NOT_KNOWN),
    ],
)
def test_a_limit_is_written_as_it_was_stated(low: float | None, high: float | None, unit: str, text: str) -> None:
    assert bounds(low, high, unit) == text


def test_a_stated_number_keeps_its_zeros_before_the_point() -> None:
    assert trimmed(100e-9, "s") == "100 ns"
    assert trimmed(1000.0, "counts") == "1000 counts"


@pytest.mark.parametrize(
    ("seconds", "tick_s", "text"),
    [
        (1.23456789, 1e-8, "1.23456789 s"),
        (0.12345678, 1e-8, "123.45678 ms"),
        (1.04e-7, 1e-8, "104 ns"),
        (1.04e-7, 5e-10, "104.0 ns"),
        (-0.5, 1e-3, "-500 ms"),
        (12.0, 1.0, "12 s"),
        # 15 digits are what a double holds (IEEE 754 binary64, DBL_DIG of ISO C): two before the point, 13 after it
        (12.0, 1e-15, "12.0000000000000 s"),
        (None, 1e-9, NOT_KNOWN),
    ],
)
def test_an_instant_is_written_to_the_capture_s_own_resolution(seconds: float | None, tick_s: float, text: str) -> None:
    assert instant(seconds, tick_s) == text


@pytest.mark.parametrize(
    ("value", "text"),
    [(0.00015, "0.0150 %"), (3e-6, "3.00 ppm"), (0.0, "0 %"), (1.0, "100 %"), (0.25, "25.0 %"), (None, NOT_KNOWN)],
)
def test_a_share_is_in_percent_or_parts_per_million(value: float | None, text: str) -> None:
    assert share(value) == text


def test_fixed_has_no_negative_zero() -> None:
    assert fixed(-0.001, 2) == "0.00"
    assert fixed(-0.001, 2, signed=True) == "+0.00"
    assert fixed(None, 2) == NOT_KNOWN


def test_counted_knows_one_from_many() -> None:
    assert [counted(n, "frame") for n in (0, 1, 2)] == ["0 frames", "1 frame", "2 frames"]


def test_the_electrical_degrees_are_those_of_the_table() -> None:
    """The table's own definitions say which measurements are in electrical degrees."""
    by_meaning = {name for name, one in MEASUREMENTS.items() if one.meaning.startswith("electrical degrees")}
    assert by_meaning == ELECTRICAL
