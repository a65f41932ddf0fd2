"""Boards in motion with an angle that is known in closed form, read as a capture would read them.

Nothing here comes from the package but the machine that joins latches with edges: positions are worked out from the
angle, A/B edges from when the angle crosses whole counts, both rounded as the hardware rounds them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from decode.agreement.latch import Joined, LatchJoin

TICK_S = 1e-9
GRID = 10
"""Ticks: a capture at 100 MHz."""


@dataclass(frozen=True)
class Constant:
    turns_per_s: float
    start: float = 0.0

    def turns(self, t):
        return self.start + self.turns_per_s * t

    def speed(self, t):
        return np.full_like(t, self.turns_per_s)


@dataclass(frozen=True)
class Ramp:
    """From one speed to another, steadily."""

    first: float
    last: float
    duration: float
    start: float = 0.0

    def turns(self, t):
        return self.start + self.first * t + (self.last - self.first) * t * t / (2 * self.duration)

    def speed(self, t):
        return self.first + (self.last - self.first) * t / self.duration


@dataclass(frozen=True)
class Sway:
    """To and fro: amplitude in turns."""

    amplitude: float
    period: float
    start: float = 0.0

    def turns(self, t):
        return self.start + self.amplitude * (1 - np.cos(2 * np.pi * t / self.period))

    def speed(self, t):
        return self.amplitude * 2 * np.pi / self.period * np.sin(2 * np.pi * t / self.period)


@dataclass(frozen=True)
class Rest:
    """Turns, slows down to a standstill half way, and stays."""

    speed_at_first: float
    duration: float
    start: float = 0.0

    def turns(self, t):
        t = np.minimum(t, self.duration / 2)
        return self.start + self.speed_at_first * (t - t * t / self.duration)

    def speed(self, t):
        return np.where(t < self.duration / 2, self.speed_at_first * (1 - 2 * t / self.duration), 0.0)


@dataclass(frozen=True)
class Swing:
    """To and fro about `start`, `quarter` quarters of a period on from where it stands furthest on, at time `at`: 1 for
    the highest speed there, 2 for the speed rising through zero."""

    amplitude: float
    period: float
    at: float
    quarter: int
    start: float = 0.0

    def _phase(self, t):
        return 2 * np.pi * (t - self.at) / self.period + (self.quarter - 2) * np.pi / 2

    def turns(self, t):
        return self.start - self.amplitude * np.cos(self._phase(t))

    def speed(self, t):
        return self.amplitude * 2 * np.pi / self.period * np.sin(self._phase(t))


class Sum:
    """Several motions on top of each other."""

    def __init__(self, *parts):
        self.parts = parts

    def turns(self, t):
        return sum(part.turns(t) for part in self.parts)

    def speed(self, t):
        return sum(part.speed(t) for part in self.parts)


def edges(motion, duration_s: float, counts_per_turn: int, sense: int = 1, grid: int = GRID):
    """A/B edges of the motion: ticks as sampled on the grid, and the count after each; also the count at the start.

    The count is floor(turns * counts_per_turn). The angle is sampled finely enough that no two boundaries are crossed
    within a step, and the crossing is interpolated.
    """

    def place(t):
        return sense * motion.turns(t) * counts_per_turn

    fastest = max(1.0, float(np.abs(motion.speed(np.linspace(0, duration_s, 10001))).max()))
    steps = int(duration_s * fastest * counts_per_turn * 6) + 1000
    t = np.linspace(0, duration_s, steps)
    where = place(t)
    cell = np.floor(where).astype(np.int64)
    at = np.flatnonzero(np.diff(cell))
    moved = np.diff(cell)[at]
    assert np.abs(moved).max(initial=1) == 1
    boundary = np.maximum(cell[at], cell[at + 1])
    share = (boundary - where[at]) / (where[at + 1] - where[at])
    exact = (t[at] + share * (t[at + 1] - t[at])) / TICK_S
    ticks = (np.ceil(exact / grid) * grid).astype(np.int64)
    return ticks, cell[at + 1], int(cell[0])


def latches(duration_s: float, rate_hz: float, seed: int = 0, grid: int = GRID):
    """Latch instants with a little jitter, as the analyser's grid shows them, and as they really are."""
    generator = np.random.default_rng(seed)
    exact = (np.arange(1, int(duration_s * rate_hz) - 1) + generator.uniform(-0.1, 0.1)) / rate_hz
    exact = exact + generator.uniform(-2e-6, 2e-6, exact.size)
    return (np.ceil(exact / TICK_S / grid) * grid).astype(np.int64), exact


def words(motion, exact_s, bits: int, turns_bits: int = 0, latency_s: float = 0.0, error=None):
    """Serial words: the angle `latency_s` before the latch, cut down to whole positions."""
    turns = motion.turns(exact_s - latency_s)
    if error is not None:
        turns = turns + error(turns)
    return np.floor(turns * 2**bits).astype(np.int64) % 2 ** (bits + turns_bits)


@dataclass
class Case:
    time: np.ndarray
    position: np.ndarray
    joined: Joined
    arguments: dict

    def agree(self, usable=None, **changes):
        from decode.agreement.fit import agree

        usable = np.ones(self.time.size, np.bool_) if usable is None else usable
        return agree(
            self.time,
            self.position,
            usable,
            self.joined.counted,
            self.joined.speed,
            self.joined.uncertainty,
            **{**self.arguments, **changes},
        )


def case(
    motion,
    duration_s=1.0,
    rate_hz=16000,
    bits=19,
    turns_bits=0,
    counts_per_turn=4096,
    latency_s=0.0,
    sense=1,
    seed=0,
    error=None,
    lost=(),
    sheet=4096,
) -> Case:
    """A board seen whole. lost: (time_s, counts) by which the count moves from then on."""
    ticks, counts, first = edges(motion, duration_s, counts_per_turn, sense)
    seen, exact = latches(duration_s, rate_hz, seed)
    joined = join(ticks, counts, first, seen, int(duration_s / TICK_S))
    counted = joined.counted.copy()
    for time_s, size in lost:
        counted[seen >= time_s / TICK_S] += size
    joined = Joined(joined.latches, counted, joined.speed, joined.uncertainty)
    return Case(
        seen,
        words(motion, exact, bits, turns_bits, latency_s, error),
        joined,
        {
            "modulus": 2 ** (bits + turns_bits),
            "positions_per_turn": 2**bits,
            "counts_per_turn": sheet,
            "direction": 1,
            "tick_s": TICK_S,
            "grid_ticks": GRID,
        },
    )


def join(ticks, counts, first, seen, stop) -> Joined:
    machine = LatchJoin(0, first)
    parts = [machine.feed(ticks, counts, stop, seen), machine.finish()]
    return Joined(
        *(
            np.concatenate([getattr(part, name) for part in parts])
            for name in ("latches", "counted", "speed", "uncertainty")
        )
    )
