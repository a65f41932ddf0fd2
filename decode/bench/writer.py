"""A simulated capture as a CSV export, and its truth as JSON.

A time is a whole number of ticks and is written as the decimal number it is, without passing through a float. Rows of
equal length of text are made together as one block of bytes, a column of digits at a time.

A file is there whole or not at all: it is written beside its place and then moved there.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from fractions import Fraction
from pathlib import Path
from typing import BinaryIO, Literal, NamedTuple

import msgspec
import numpy as np
import numpy.typing as npt

from decode.bench.board import Simulation
from decode.bench.stages import Segment
from decode.errors import InputError
from decode.files import whole
from decode.spans import IntArray

Unit = Literal["s", "ms", "us", "ns"]
UNIT_S: dict[Unit, Fraction] = {
    "s": Fraction(1),
    "ms": Fraction(1, 10**3),
    "us": Fraction(1, 10**6),
    "ns": Fraction(1, 10**9),
}
FINEST_S = Fraction(1, 10**12)
"""Where no number of decimals expresses the grid exactly, times are rounded to this."""

ROWS_AT_A_TIME = 1 << 18
UNUSED = "unused"
_ZERO = ord("0")

Text = npt.NDArray[np.uint8]


def write_csv(
    simulation: Simulation,
    path: str | Path,
    *,
    every_sample: bool = False,
    header: bool = True,
    time_column: bool = True,
    delimiter: str = ",",
    unit: Unit = "s",
    preamble: Sequence[str] = (),
    newline: str = "\n",
) -> None:
    """Write the capture as an export. The file is whole or is not there.

    every_sample: a row each sample; else one where a line changes, and the first and last of each unbroken stretch.
    time_column: else levels only (which only tells the time with every_sample). preamble: lines above the header.
    Raises InputError where the sheet's column numbers cannot be kept.
    """
    columns = _columns(simulation, time_column)
    scale = _Scale.of(simulation.tick, unit) if time_column else None
    with whole(path) as file:
        for line in preamble:
            file.write((line + newline).encode())
        if header:
            names = ([f"Time [{unit}]"] if time_column else []) + [name or UNUSED for name in columns]
            file.write((delimiter.join(names) + newline).encode())
        for segment in simulation.segments:
            for ticks in _rows(simulation, segment, every_sample):
                levels = _levels(simulation, columns, ticks, delimiter.encode(), newline.encode())
                if scale is None:
                    file.write(levels[:, len(delimiter.encode()) :].tobytes())
                else:
                    _write_rows(file, scale.numbers(ticks + segment.shift), scale.decimals, levels)


def write_truth(simulation: Simulation, path: str | Path) -> None:
    """Write the truth as JSON, a frame a line. The file is whole or is not there."""
    truth = msgspec.structs.replace(simulation.truth, frames=[])
    frames = b",\n".join(map(msgspec.json.encode, simulation.truth.frames))
    head = msgspec.json.format(msgspec.json.encode(truth), indent=1)
    with whole(path) as file:
        file.write(head.removesuffix(b"[]\n}") + b"[\n" + frames + b"\n]\n}\n")


class _Scale(NamedTuple):
    """Ticks to the digits of their text: a tick is numerator / denominator of the last decimal."""

    numerator: int
    denominator: int
    decimals: int

    @classmethod
    def of(cls, tick: Fraction, unit: Unit) -> _Scale:
        most = next(places for places in range(13) if UNIT_S[unit] / 10**places == FINEST_S)
        exact = (places for places in range(most + 1) if (tick / UNIT_S[unit] * 10**places).denominator == 1)
        decimals = next(exact, most)
        step = tick / UNIT_S[unit] * 10**decimals
        return cls(step.numerator, step.denominator, decimals)

    def numbers(self, ticks: IntArray) -> IntArray:
        """(n,) the digits of each tick's text as one number, rounded where it must be."""
        whole, rest = np.divmod(ticks, self.denominator)
        rounded = (2 * rest * self.numerator + self.denominator) // (2 * self.denominator)
        return np.asarray(whole * self.numerator + rounded, np.int64)


def _columns(simulation: Simulation, time_column: bool) -> list[str | None]:
    """The line in each column behind the time; None fills up to a number that the sheet names."""
    if not simulation.numbers:
        return list(simulation.columns)
    before = 1 if time_column else 0
    by_number = {number - before: name for name, number in simulation.numbers.items()}
    if min(by_number) < 1 or len(by_number) < len(simulation.numbers):
        raise InputError(
            "the columns cannot be where the sheet has them",
            column="lines",
            found=", ".join(f"{name} = {number}" for name, number in simulation.numbers.items()),
            expected="different numbers, from 2 with a time column",
        )
    waiting = [name for name in simulation.columns if name not in simulation.numbers]
    columns: list[str | None] = []
    while waiting or len(columns) < max(by_number):
        free = len(columns) + 1 not in by_number
        columns.append((waiting.pop(0) if waiting else None) if free else by_number[len(columns) + 1])
    return columns


def _rows(simulation: Simulation, segment: Segment, every_sample: bool) -> Iterator[IntArray]:
    """The ticks that get a row, a bounded number at a time."""
    if every_sample:
        for start in range(segment.start, segment.stop, ROWS_AT_A_TIME):
            yield np.arange(start, min(start + ROWS_AT_A_TIME, segment.stop))
        return
    ends = np.array([segment.start, segment.stop - 1])
    inside = (edges.between(segment.start, segment.stop).times for edges in simulation.lines.values())
    ticks = np.unique(np.concatenate([ends, *inside]))
    for first in range(0, ticks.size, ROWS_AT_A_TIME):
        yield ticks[first : first + ROWS_AT_A_TIME]


def _levels(
    simulation: Simulation, columns: Sequence[str | None], ticks: IntArray, delimiter: bytes, newline: bytes
) -> Text:
    """(n, width) the text of each row from the first delimiter to its end."""
    cell = len(delimiter) + 1
    text = np.empty((ticks.size, cell * len(columns) + len(newline)), np.uint8)
    text[:] = np.frombuffer((delimiter + b"0") * len(columns) + newline, np.uint8)
    for number, name in enumerate(columns):
        if name is not None:
            text[:, number * cell + cell - 1] += simulation.lines[name].level_at(ticks).view(np.uint8)
    return text


def _write_rows(file: BinaryIO, numbers: IntArray, decimals: int, levels: Text) -> None:
    """Write rows of time and levels, as many at once as have a time text of equal length."""
    size = np.abs(numbers)
    digits = np.maximum(_digits(size), decimals + 1)
    sign = numbers < 0
    breaks = np.flatnonzero((np.diff(digits) != 0) | (np.diff(sign.view(np.int8)) != 0)) + 1
    for start, stop in zip([0, *breaks], [*breaks, numbers.size], strict=True):
        block = slice(int(start), int(stop))
        text = _decimal(size[block], int(digits[start]), decimals, bool(sign[start]))
        file.write(np.hstack([text, levels[block]]).tobytes())


def _digits(size: IntArray) -> IntArray:
    """(n,) decimal digits of numbers of 0 and more."""
    powers = np.array([10**power for power in range(1, 19)])
    return np.asarray(np.searchsorted(powers, size, side="right") + 1, np.int64)


def _decimal(size: IntArray, digits: int, decimals: int, negative: bool) -> Text:
    """(n, width) decimal text of numbers that all have so many digits, the point `decimals` from the right."""
    text = np.full((size.size, negative + digits + (decimals > 0)), ord("."), np.uint8)
    if negative:
        text[:, 0] = ord("-")
    rest = size
    for place in range(digits):
        rest, digit = np.divmod(rest, 10)
        text[:, text.shape[1] - 1 - place - (1 if decimals and place >= decimals else 0)] = digit + _ZERO
    return text
