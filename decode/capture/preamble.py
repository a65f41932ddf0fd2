"""The lines above a table: what they say of the sampling.

Exports put a few lines ahead of their rows, as comments or as keys with values, each in its own words. Two things in
them matter to a decoder, and are looked for by the words that name them: how often the lines were sampled, and how
many samples there are.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

from decode.capture.time_axis import UNIT_DIGITS, maybe_decimal

_NUMBER = r"([+-]?(?:\d[\d,]*\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)"
_BETWEEN = r"[^\w.+-]{1,12}(?:is\s+|of\s+|at\s+)?"
_RATE = re.compile(
    r"(?:sampl\w*|capture|acquisition)[ _-]*(?:rate|freq\w*)"
    r"(?:\s*[\[(]\s*(?P<bracket>[kMG]?\w+(?:/s)?)\s*[\])])?" + _BETWEEN + _NUMBER + r"\s*(?P<unit>[kMG]?\w*(?:/s)?)",
    re.IGNORECASE,
)
_PERIOD = re.compile(
    r"(?:sampl\w*)[ _-]*(?:period|interval|time|step)"
    r"(?:\s*[\[(]\s*(?P<bracket>\w+)\s*[\])])?" + _BETWEEN + _NUMBER + r"\s*(?P<unit>[\wµμ]*)",
    re.IGNORECASE,
)
_COUNT = re.compile(
    r"(?:number of |no\. of |total )?(?:samples|sample count|record length|points|rows)" + _BETWEEN + r"(\d+)\b",
    re.IGNORECASE,
)
_PREFIXES = {"": 1, "k": 10**3, "m": 10**6, "g": 10**9}
_RATE_UNITS = ("hz", "s/s", "sa/s", "sps", "samples/s")


@dataclass(frozen=True, slots=True)
class Preamble:
    """What stands above a table, each with the physical line that says so; None where nothing does.

    rate: samples per second. count: samples. unclear: a line that names a rate which could be read in two ways.
    """

    rate: Fraction | None = None
    rate_line: int | None = None
    count: int | None = None
    count_line: int | None = None
    unclear: int | None = None


def read_preamble(lines: Sequence[tuple[int, str]]) -> Preamble:
    """What lines above a table, each with its number, say of the sampling. The first that says something counts."""
    rate = count = None
    rate_line = count_line = unclear = None
    for number, text in lines:
        if rate is None and (match := _RATE.search(text) or _PERIOD.search(text)):
            rate, is_unclear = _maybe_rate(match, is_period=match.re is _PERIOD)
            rate_line = number if rate is not None else None
            unclear = number if is_unclear else unclear
        if count is None and (match := _COUNT.search(text)):
            count, count_line = int(match.group(1)), number
    return Preamble(rate, rate_line, count, count_line, None if rate is not None else unclear)


def _maybe_rate(match: re.Match[str], *, is_period: bool) -> tuple[Fraction | None, bool]:
    """(samples per second, whether the number could be read in two ways)."""
    text = match.group(2)
    if re.fullmatch(r"[+-]?\d{1,3}(,\d{3}){2,}(\.\d*)?", text):
        text = text.replace(",", "")
    if "," in text:
        return None, True
    number = maybe_decimal(text)
    if number is None or number <= 0:
        return None, False
    unit = match.group("bracket") or match.group("unit") or ""
    if is_period:
        digits = UNIT_DIGITS.get(unit.replace("µ", "u").replace("μ", "u").lower() or "s")
        return (None, False) if digits is None else (10**digits / Fraction(number), False)
    scale = maybe_rate_unit(unit)
    rate = None if scale is None else Fraction(number) * scale
    return (rate if rate is not None and rate < 10**13 else None), False


def maybe_rate_unit(unit: str) -> int | None:
    """What a unit of a rate stands for, in hertz; none stands for hertz, an unknown one is None."""
    name = unit.lower()
    if not name:
        return 1
    ending = next((known for known in _RATE_UNITS if name.endswith(known)), None)
    return None if ending is None else _PREFIXES.get(name.removesuffix(ending))
