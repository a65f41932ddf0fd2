"""Everything the machines gave, side by side: what the judgement works from."""

from __future__ import annotations

from dataclasses import dataclass, field

from decode.agreement.fit import Agreement
from decode.agreement.latch import Joined
from decode.anomalies import Anomalies
from decode.distribution import Distribution
from decode.incremental.result import IncrementalResult
from decode.lines.activity import LineActivity
from decode.serial.clock import Rhythm
from decode.serial.continuity import Cadence
from decode.serial.frames import Frames
from decode.serial.interfaces import Habit
from decode.sheet import Serial, Sheet


@dataclass(frozen=True, slots=True, eq=False)
class CaptureFacts:
    """The file as it was read. tick_s: seconds per tick; grid: sampling interval in ticks; first, last: ticks."""

    file: str
    layout: str
    rows: int
    tick_s: float
    grid: int
    first: int
    last: int
    digest: str
    notes: list[str]
    anomalies: list[Anomalies]

    @property
    def step_s(self) -> float:
        """The sampling interval in seconds: the least uncertainty of any time."""
        return self.tick_s * self.grid


@dataclass(frozen=True, slots=True, eq=False)
class SerialFacts:
    """One serial line. timings: distributions in ticks by name."""

    frames: Frames
    cadence: Cadence
    timings: dict[str, Distribution]
    rhythm: Rhythm | None
    habit: Habit | None
    notes: list[str]
    anomalies: list[Anomalies]


@dataclass(frozen=True, slots=True, eq=False)
class Evidence:
    """One capture of one board. lines: column by role. silent: tick from which a channel is silent, by its role.
    joined: the count at each frame's latch."""

    sheet: Sheet
    lines: dict[str, str]
    capture: CaptureFacts
    activity: dict[str, LineActivity]
    pair_anomalies: list[Anomalies] = field(default_factory=list)
    serial: SerialFacts | None = None
    incremental: IncrementalResult | None = None
    silent: dict[str, int] = field(default_factory=dict)
    agreement: Agreement | None = None
    joined: Joined | None = None

    def counts_per_turn(self) -> int | None:
        """The sheet's, else what was measured."""
        if self.sheet.incremental is not None and self.sheet.incremental.counts_per_turn is not None:
            return self.sheet.incremental.counts_per_turn
        return None if self.incremental is None else self.incremental.counts_per_turn


def positions_per_turn(serial: Serial) -> int:
    return 1 << serial.position_bits


def modulus(serial: Serial) -> int:
    """Positions after which the word of turns and position begins again."""
    return 1 << (serial.position_bits + serial.turns_bits)
