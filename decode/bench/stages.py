"""What the faults act on: the values between one step of the simulation and the next.

settings -> quadrature -> schedule -> angles -> words -> signal -> drivers -> wires -> recording

Each is a plain mutable record that one step makes, the faults of that step change, and the next step reads.
`Quadrature`, `Schedule` and `Signal` live beside the steps that make them; the smaller ones are here.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from decode.bench.bursts import Schedule
from decode.bench.line import Grid, Line
from decode.bench.quadrature import Quadrature
from decode.bench.words import BitMatrix, WordArray, word_bits
from decode.sheet import Serial
from decode.spans import FloatArray


@dataclass
class Settings:
    """What a fault of the whole capture changes. state_s: the shortest A/B state to come, None where there is none.

    serial_scale: turns of the serial position in one of the shaft. serial_ripple_turns: once-per-turn error of the
    serial position alone. swapped: A and B are exchanged.
    """

    sample_rate_hz: float
    latency_s: float
    clock_hz: float | None
    state_s: float | None
    serial_scale: float = 1.0
    serial_ripple_turns: float = 0.0
    swapped: bool = False


@dataclass(eq=False)
class Angles:
    """turns: (n,) the serial position of each slot before it becomes a number."""

    schedule: Schedule
    turns: FloatArray
    counts_per_turn: int | None


class Flip(NamedTuple):
    """A bit turned over on its way: slot, and which bit of the burst, from 0 for the first."""

    slot: int
    bit: int


@dataclass(eq=False)
class Words:
    """values: (n,) each field by column name, without the checks. flips: bits that arrive wrong."""

    schedule: Schedule
    values: dict[str, WordArray]
    flips: list[Flip] = field(default_factory=list)

    @property
    def serial(self) -> Serial:
        return self.schedule.serial

    def column(self, name: str) -> str | None:
        """The first column of a field's name, None where the sheet has no such field."""
        return next((column for column, field in self._fields() if field == name), None)

    def first_bit(self, name: str) -> int | None:
        """Which bit of the word the first field of that name begins with."""
        start = 0
        for field_ in self.serial.fields:
            if field_.name == name:
                return start
            start += field_.bits
        return None

    def sent(self) -> BitMatrix:
        """(n, sent_bits) every burst's bits: all copies of the word with the separators, and the flips."""
        word = word_bits(self.serial, self.values)
        separator = np.zeros((word.shape[0], self.serial.separator_bits), np.uint8)
        bits = np.hstack([word, *[part for _ in range(self.serial.copies - 1) for part in (separator, word)]])
        for slot, bit in self.flips:
            bits[slot, bit] ^= 1
        return bits

    def _fields(self) -> zip[tuple[str, str]]:
        return zip(self.serial.columns(), (field.name for field in self.serial.fields), strict=True)


@dataclass(eq=False)
class Wiring:
    """The lines by role, with what is needed to place a fault on them. stop: ps of the capture's end."""

    lines: dict[str, Line]
    quadrature: Quadrature | None
    schedule: Schedule | None
    stop: int


class Segment(NamedTuple):
    """Ticks [start, stop) in the order in which they stand in the file. shift: ticks added to their time there."""

    start: int
    stop: int
    shift: int = 0


@dataclass
class Recording:
    """How the capture was taken down. segments: together every tick that is in the file."""

    grid: Grid
    segments: list[Segment]
