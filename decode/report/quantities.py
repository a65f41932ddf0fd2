"""Numbers as people read them.

A number on a screen carries its unit, and where its sign means something its sign. Seconds, hertz and the like get
the prefix that leaves one to three digits before the point (within the range of NIST SP 811, 7.9), so that an interval
reads 104 ns and never 0.000000104 s. Next to an uncertainty a value is given to as many digits as that leaves certain,
by the rounding rule of the Particle Data Group (Review of Particle Physics, Introduction, "Rounding"); what lies below
was not measured.

Everything here is a pure function from numbers to text. None and what is not finite become `NOT_KNOWN`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable

NOT_KNOWN = "-"

ELECTRICAL = frozenset({"state_width_deg", "pulse_width_a_deg", "pulse_width_b_deg", "phase_deg"})
"""The measurements whose degrees are electrical: 360 to a cycle of A, not to a turn."""

_PREFIXES = {-15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T"}
_SYMBOLS = {"deg": "°", "el_deg": "°e", "1": ""}
_SCALED = frozenset({"s", "Hz", "V"})
_DEGREES = frozenset({"°", "°e"})
_MOST_DECIMALS = 9


def is_known(value: float | None) -> bool:
    """Whether there is a finite number."""
    return value is not None and math.isfinite(value)


def unit_of(name: str, unit: str) -> str:
    """The unit in which a measurement is shown: electrical degrees are told from mechanical ones."""
    return "el_deg" if name in ELECTRICAL else unit


def scale(values: Iterable[float | None], unit: str) -> tuple[float, str]:
    """(factor, symbol): the one prefix that suits all `values`, taken from the largest of them.

    value * factor is what stands in front of the symbol. Units that take no prefix get factor 1.
    """
    known = [abs(value) for value in values if value is not None and math.isfinite(value)]
    largest = max(known, default=0.0)
    if unit == "1":
        return (1e6, "ppm") if 0 < largest < 1e-3 else (1.0, "")
    symbol = _SYMBOLS.get(unit, unit)
    power = _prefix_power(largest)
    if symbol not in _SCALED:
        return 1.0, symbol
    return 10.0**-power, _PREFIXES[power] + symbol


def _prefix_power(largest: float) -> int:
    if largest == 0:
        return 0
    # Rounded to three digits first, so that 999.96 ns becomes 1.00 µs.
    return min(max(3 * (_exponent(largest, 3) // 3), min(_PREFIXES)), max(_PREFIXES))


def _exponent(value: float, digits: int) -> int:
    """The power of ten of the first digit, once `value` is rounded to so many."""
    return int(f"{value:.{digits - 1}e}".partition("e")[2])


def decimals_for(value: float, digits: int) -> int:
    """Digits after the point that give `value` `digits` significant digits."""
    if value == 0:
        return 0
    return min(max(digits - 1 - _exponent(value, digits), 0), _MOST_DECIMALS)


def decimals_beside(uncertainty: float | None, values: Iterable[float | None]) -> int:
    """Digits after the point for values with this uncertainty (all in one scale).

    An uncertainty that begins with 100 to 354 is given two digits, one of 355 to 949 one digit, and 950 to 999 is
    rounded up to 1000 and given two. Without an uncertainty the largest value gets four digits.
    """
    if uncertainty is not None and math.isfinite(uncertainty) and uncertainty > 0:
        leading = float(f"{uncertainty:.2e}".partition("e")[0])
        rounded_up = float(f"{uncertainty:.0e}") if leading >= 9.5 else uncertainty
        return min(decimals_for(rounded_up, 1 if 3.55 <= leading < 9.5 else 2), 6)
    known = [abs(value) for value in values if value is not None and math.isfinite(value)]
    return decimals_for(max(known, default=0.0), 4)


def fixed(value: float | None, decimals: int, *, signed: bool = False) -> str:
    """A number with so many digits after the point; never an exponent, never a negative zero."""
    if value is None or not math.isfinite(value):
        return NOT_KNOWN
    text = f"{value:+.{decimals}f}" if signed else f"{value:.{decimals}f}"
    if float(text) == 0:
        return text.replace("-", "+" if signed else "")
    return text


def quantity(value: float | None, unit: str, *, digits: int = 3, signed: bool = False) -> str:
    """A number with its unit, as "104 ns": `digits` significant ones, whole numbers never cut short."""
    if value is None or not math.isfinite(value):
        return NOT_KNOWN
    factor, symbol = scale([value], unit)
    scaled = value * factor
    text = fixed(scaled, decimals_for(scaled, digits), signed=signed)
    return _joined(text, symbol)


def with_uncertainty(
    value: float | None, uncertainty: float | None, unit: str, *, digits: int = 3, signed: bool = False
) -> str:
    """A number with what it is uncertain by, in one scale, as "1.23 µs ± 0.05 µs"."""
    if value is None or not math.isfinite(value):
        return NOT_KNOWN
    if uncertainty is None or not math.isfinite(uncertainty) or uncertainty <= 0:
        return quantity(value, unit, digits=digits, signed=signed)
    factor, symbol = scale([value, uncertainty], unit)
    decimals = decimals_beside(uncertainty * factor, [])
    number = _joined(fixed(value * factor, decimals, signed=signed), symbol)
    return f"{number} ± {_joined(fixed(uncertainty * factor, decimals), symbol)}"


def trimmed(value: float, unit: str) -> str:
    """A stated number with its unit and no digit more than it was stated with, as "62.5 kHz"."""
    factor, symbol = scale([value], unit)
    scaled = value * factor
    text = fixed(scaled, decimals_for(scaled, 6))
    return _joined(text.rstrip("0").rstrip(".") if "." in text else text, symbol)


def bounds(low: float | None, high: float | None, unit: str) -> str:
    """A limit, as "1 MHz to 10 MHz", "at least 5 µs" or "at most 10 MHz"."""
    if low is None and high is None:
        return NOT_KNOWN
    if low == high:
        return f"exactly {trimmed(low or 0.0, unit)}"
    if low is None:
        return f"at most {trimmed(high or 0.0, unit)}"
    if high is None:
        return f"at least {trimmed(low, unit)}"
    return f"{trimmed(low, unit)} to {trimmed(high, unit)}"


def instant(seconds: float | None, tick_s: float) -> str:
    """A time on the capture's axis to the capture's own resolution, as "1.23456789 s": one can jump to it."""
    if seconds is None or not math.isfinite(seconds):
        return NOT_KNOWN
    factor, symbol = scale([seconds], "s")
    scaled = seconds * factor
    tick = tick_s * factor
    decimals = math.ceil(-math.log10(tick) - 1e-9) if 0 < tick < 1 else 0
    # A double holds 15 digits; more would be invented.
    decimals = min(decimals, 15 - len(str(int(abs(scaled)))))
    return _joined(fixed(scaled, max(decimals, 0)), symbol)


def share(value: float | None) -> str:
    """A part of a whole, as "1.20 %", or "3.00 ppm" below ten in a million."""
    if value is None or not math.isfinite(value):
        return NOT_KNOWN
    if value == 0:
        return "0 %"
    factor, symbol = (1e6, "ppm") if value < 1e-5 else (1e2, "%")
    scaled = value * factor
    return f"{fixed(scaled, decimals_for(scaled, 3))} {symbol}"


def counted(number: int, noun: str, plural: str | None = None) -> str:
    """A number of things, as "1 frame" or "20 frames"."""
    return f"{number} {noun if number == 1 else plural or noun + 's'}"


def _joined(text: str, symbol: str) -> str:
    if not symbol:
        return text
    return f"{text}{symbol}" if symbol in _DEGREES else f"{text} {symbol}"
