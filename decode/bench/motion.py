"""How the shaft moves, as values, and exactly when it passes given angles.

A motion says what the shaft does; its `path` for a duration is a chain of pieces, each with a closed form (angle
quadratic in time, or a sine of it) and each running in one sense only. So the instant at which an angle is passed is
solved, not searched for: a piece that runs from x to y passes every whole number between them once, in order.

A count k means k <= x < k + 1. Rising through k makes the count k; falling through k makes it k - 1.

The disc may sit off the axis. What its sensor then reads is theta + e sin(2 pi theta), theta being the shaft's angle
in turns; that still rises with theta, so it is inverted by a fixed-point iteration to the last bit.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import NamedTuple, Protocol

import msgspec
import numpy as np

from decode.spans import FloatArray, IntArray

SECONDS_PER_MINUTE = 60.0


class Passages(NamedTuple):
    """Each instant at which a whole number was passed, in order of time.

    times: (n,) seconds. counts: (n,) the count from then on. steps: (n,) 1 where it rose, -1 where it fell.
    """

    times: FloatArray
    counts: IntArray
    steps: IntArray


class Piece(Protocol):
    """A stretch of motion in one sense, from `start` to `stop` seconds."""

    @property
    def start(self) -> float: ...
    @property
    def stop(self) -> float: ...
    def angle(self, times: FloatArray) -> FloatArray: ...
    def speed(self, times: FloatArray) -> FloatArray: ...
    def time_at(self, angles: FloatArray) -> FloatArray: ...


@dataclass(frozen=True, slots=True)
class Quadratic:
    """Constant acceleration. origin: turns at `start`; speed0: turns/s there; acceleration: turns/s^2."""

    start: float
    stop: float
    origin: float
    speed0: float
    acceleration: float = 0.0

    def angle(self, times: FloatArray) -> FloatArray:
        elapsed = times - self.start
        return np.asarray(self.origin + (self.speed0 + 0.5 * self.acceleration * elapsed) * elapsed, np.float64)

    def speed(self, times: FloatArray) -> FloatArray:
        return self.speed0 + self.acceleration * (times - self.start)

    def time_at(self, angles: FloatArray) -> FloatArray:
        # The form 2c / (b + sqrt(b^2 + 2ac)) loses no digits where the acceleration is small or nought.
        rise = angles - self.origin
        final = self.speed0 + self.acceleration * (self.stop - self.start)
        sense = np.sign(self.speed0 + final)
        root = np.sqrt(np.maximum(self.speed0**2 + 2 * self.acceleration * rise, 0.0))
        divisor = self.speed0 + sense * root
        elapsed = np.divide(2 * rise, divisor, out=np.zeros_like(rise), where=divisor != 0)
        return np.asarray(self.start + elapsed, np.float64)


@dataclass(frozen=True, slots=True)
class Sine:
    """The half swing number `half` of centre + amplitude sin(rate t): rate t within half*pi -+ pi/2."""

    start: float
    stop: float
    centre: float
    amplitude: float
    rate: float
    half: int

    def angle(self, times: FloatArray) -> FloatArray:
        return self.centre + self.amplitude * np.sin(self.rate * times)

    def speed(self, times: FloatArray) -> FloatArray:
        return np.asarray(self.amplitude * self.rate * np.cos(self.rate * times), np.float64)

    def time_at(self, angles: FloatArray) -> FloatArray:
        within = np.arcsin(np.clip((angles - self.centre) / self.amplitude, -1.0, 1.0))
        return np.asarray((self.half * np.pi + (-1) ** self.half * within) / self.rate, np.float64)


@dataclass(frozen=True, eq=False)
class Path:
    """The angle that the sensor reads, over time. Outside its pieces the first and the last go on.

    ripple: turns of once-per-turn reading error, from a disc off the axis.
    """

    pieces: tuple[Piece, ...]
    ripple: float = 0.0

    def angle(self, times: FloatArray) -> FloatArray:
        """(n,) turns read at each of `times` (seconds)."""
        shaft = self._each(times, lambda piece, at: piece.angle(at))
        return shaft + self.ripple * np.sin(2 * np.pi * shaft)

    def speed(self, times: FloatArray) -> FloatArray:
        """(n,) the shaft's turns per second at each of `times` (seconds)."""
        return self._each(times, lambda piece, at: piece.speed(at))

    def passages(self, per_turn: float, *, sense: int = 1, phase: float = 0.0) -> Passages:
        """When x = sense * angle * per_turn - phase passes a whole number, within the pieces."""
        borders = np.array([self.pieces[0].start, *(piece.stop for piece in self.pieces)])
        borders_x = sense * self.angle(borders) * per_turn - phase
        floors = np.floor(borders_x).astype(np.int64)
        parts = [
            self._passages_of(piece, int(first), int(last), sense, per_turn, phase)
            for piece, first, last in zip(self.pieces, floors[:-1], floors[1:], strict=True)
        ]
        return Passages(*(np.concatenate(column) for column in zip(*parts, strict=True)))

    def _passages_of(
        self, piece: Piece, first: int, last: int, sense: int, per_turn: float, phase: float
    ) -> tuple[FloatArray, IntArray, IntArray]:
        rising = last >= first
        passed = np.arange(first + 1, last + 1) if rising else np.arange(first, last, -1)
        shaft = self._shaft(np.asarray(sense * (passed + phase) / per_turn, np.float64))
        times = np.clip(piece.time_at(shaft), piece.start, piece.stop)
        counts = passed if rising else passed - 1
        return np.maximum.accumulate(times), counts.astype(np.int64), np.full(passed.size, 1 if rising else -1)

    def _shaft(self, read: FloatArray) -> FloatArray:
        """The shaft's angle at which the sensor reads `read`."""
        shaft = read
        if self.ripple == 0:
            return shaft
        # 2 pi ripple is below 0.18 for the ten degrees allowed, so twenty rounds leave less than 1e-16 turns.
        for _ in range(20):
            shaft = read - self.ripple * np.sin(2 * np.pi * shaft)
        return shaft

    def _each(self, times: FloatArray, of: _PieceFunction) -> FloatArray:
        starts = np.array([piece.start for piece in self.pieces])
        which = np.clip(np.searchsorted(starts, times, side="right") - 1, 0, None)
        found = np.empty(times.shape)
        for number in np.unique(which):
            chosen = which == number
            found[chosen] = of(self.pieces[number], times[chosen])
        return found


class _PieceFunction(Protocol):
    def __call__(self, piece: Piece, at: FloatArray, /) -> FloatArray: ...


class _Motion(msgspec.Struct, frozen=True, tag_field="motion"):
    pass


class Constant(_Motion, frozen=True, tag="constant"):
    """One speed throughout."""

    speed_rpm: float

    def path(self, start_turns: float, duration_s: float, ripple: float = 0.0) -> Path:
        return Path((Quadratic(0.0, duration_s, start_turns, self.speed_rpm / SECONDS_PER_MINUTE),), ripple)


class Ramp(_Motion, frozen=True, tag="ramp"):
    """From one speed to another, evenly, over the whole capture; through standstill where the signs differ."""

    from_rpm: float
    to_rpm: float

    def path(self, start_turns: float, duration_s: float, ripple: float = 0.0) -> Path:
        first, last = self.from_rpm / SECONDS_PER_MINUTE, self.to_rpm / SECONDS_PER_MINUTE
        return Path(_accelerated(0.0, duration_s, start_turns, first, last), ripple)


class Reverse(_Motion, frozen=True, tag="reverse"):
    """One speed, then the opposite one. at_s: the instant of standstill (default: the middle of the capture).
    over_s: how long the turn-around takes (default: a tenth of the capture)."""

    speed_rpm: float
    at_s: float | None = None
    over_s: float | None = None

    def path(self, start_turns: float, duration_s: float, ripple: float = 0.0) -> Path:
        speed = self.speed_rpm / SECONDS_PER_MINUTE
        middle = duration_s / 2 if self.at_s is None else self.at_s
        over = duration_s / 10 if self.over_s is None else self.over_s
        begin, end = middle - over / 2, middle + over / 2
        there = start_turns + speed * begin
        return Path(
            (
                Quadratic(0.0, begin, start_turns, speed),
                *_accelerated(begin, end, there, speed, -speed),
                Quadratic(end, duration_s, there, -speed),
            ),
            ripple,
        )


class Sway(_Motion, frozen=True, tag="sway"):
    """To and fro as a sine, starting in the middle at full speed."""

    amplitude_turns: float
    frequency_hz: float

    def path(self, start_turns: float, duration_s: float, ripple: float = 0.0) -> Path:
        rate = 2 * np.pi * self.frequency_hz
        halves = int(np.ceil(2 * self.frequency_hz * duration_s - 0.5)) + 1
        borders = [0.0, *((half + 0.5) * np.pi / rate for half in range(halves - 1)), duration_s]
        return Path(
            tuple(
                Sine(begin, end, start_turns, self.amplitude_turns, rate, half)
                for half, (begin, end) in enumerate(pairwise(borders))
            ),
            ripple,
        )


class Standstill(_Motion, frozen=True, tag="standstill"):
    """The shaft does not move."""

    def path(self, start_turns: float, duration_s: float, ripple: float = 0.0) -> Path:
        return Path((Quadratic(0.0, duration_s, start_turns, 0.0),), ripple)


Motion = Constant | Ramp | Reverse | Sway | Standstill


def constant(speed_rpm: float) -> Constant:
    """One speed throughout."""
    return Constant(speed_rpm)


def ramp(from_rpm: float, to_rpm: float) -> Ramp:
    """From one speed to another, evenly, over the whole capture."""
    return Ramp(from_rpm, to_rpm)


def reverse(speed_rpm: float, *, at_s: float | None = None, over_s: float | None = None) -> Reverse:
    """One speed, a smooth turn-around, the opposite speed."""
    return Reverse(speed_rpm, at_s, over_s)


def sway(amplitude_turns: float, frequency_hz: float) -> Sway:
    """To and fro as a sine."""
    return Sway(amplitude_turns, frequency_hz)


def standstill() -> Standstill:
    """No motion."""
    return Standstill()


def _accelerated(start: float, stop: float, origin: float, first: float, last: float) -> tuple[Quadratic, ...]:
    """Constant acceleration from speed `first` to `last`, split where the shaft turns around."""
    acceleration = (last - first) / (stop - start)
    whole = Quadratic(start, stop, origin, first, acceleration)
    if first * last >= 0:
        return (whole,)
    turn = start - first / acceleration
    there = float(whole.angle(np.array([turn]))[0])
    return (
        Quadratic(start, turn, origin, first, acceleration),
        Quadratic(turn, stop, there, 0.0, acceleration),
    )
