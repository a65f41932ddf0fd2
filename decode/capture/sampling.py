"""The sampling step: how far the times of a capture can be off.

An edge is seen at the next sample, so its time is uncertain by one step. No export says the step in every row, so it
is found from the times:

    common divisor    where all row intervals are multiples of more than the last digit printed, that is the step
    rounded times     24 MHz sampled and printed to the nanosecond has intervals of 41 and 42 ns: their divisor is 1 ns,
                      and no uncertainty. What is wanted is the largest step of which every interval is a multiple
                      within the rounding of two times. Any step below the rounding fits, and a larger one may by
                      chance: each interval fits with the probability (its tolerance / step), and a step is believed
                      where all of them together would by chance in less than one case in a million
    float noise       4.426099499999999 is a time on a grid of 10 ns: the same search, with tolerances of some ticks
    a stated rate     from the preamble, the sheet or the command: believed unless two rows stand closer than that

Where none of these applies the last digit printed is the bound. The intervals searched are the shortest distinct ones
of the whole capture, so that the result does not depend on where it was cut; and short ones tell most, since the error
of a step grows with the number of steps.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from decode.spans import IntArray

INTERVALS_KEPT = 300
CHANCE = 1e-6
TOLERANCES = (1, 4, 16, 64)
"""Tolerances tried, in units of the last digit printed (of a tick where the times carry float noise)."""

_LEAST_STEPS = 2.5
"""A step of fewer tolerances than this is lost in them."""

_MOST_TRIED = 2000


@dataclass(frozen=True, slots=True)
class Step:
    """ticks: the sampling step. tolerance: ticks by which a multiple of it may be missed. is_exact: it is the common
    divisor."""

    ticks: float
    tolerance: int
    is_exact: bool


class Intervals:
    """The divisor of all row intervals, and the shortest distinct ones."""

    def __init__(self) -> None:
        self.divisor = 0
        self.shortest: IntArray = np.empty(0, np.int64)

    def add(self, steps: IntArray) -> None:
        """Take in intervals between rows, ticks; those of 0 and less say nothing."""
        self.divisor = int(np.gcd.reduce(steps, initial=self.divisor))
        fresh = steps[steps > 0]
        if self.shortest.size >= INTERVALS_KEPT:
            fresh = fresh[fresh < self.shortest[-1]]
        if fresh.size:
            self.shortest = np.unique(np.concatenate([self.shortest, np.unique(fresh)]))[:INTERVALS_KEPT]

    def step(self, printed: int) -> Step:
        """The sampling step as these intervals tell it; `printed`: ticks that the last printed digit is worth."""
        if self.shortest.size == 0:
            return Step(float(printed), printed, is_exact=True)
        if self.divisor < 2 * _LEAST_STEPS * printed:
            for tolerance in TOLERANCES:
                found = maybe_step(self.shortest.tolist(), tolerance * printed)
                if found is not None and found > 1.5 * self.divisor:
                    return Step(found, tolerance * printed, is_exact=False)
        return Step(float(self.divisor), printed, is_exact=True)


def maybe_step(intervals: Sequence[int], tolerance: int) -> float | None:
    """The largest step of which all intervals (distinct, rising, ticks) are multiples within `tolerance`; None where
    there is none, or where it may be chance."""
    shortest = intervals[0]
    for parts in range(1, min(_MOST_TRIED, int(shortest / (_LEAST_STEPS * tolerance))) + 1):
        low, high = (shortest - tolerance) / parts, (shortest + tolerance) / parts
        found = _maybe_fit(intervals[1:], low, high, tolerance)
        if found is not None:
            return found
    return None


def _maybe_fit(intervals: Sequence[int], low: float, high: float, tolerance: int) -> float | None:
    """The step between `low` and `high` that fits all intervals, where that can hardly be chance."""
    chance = 0.0
    for interval in intervals:
        first = math.ceil((interval - tolerance) / high)
        last = math.floor((interval + tolerance) / low)
        if first > last:
            return None
        if first < last:
            continue
        width = (first * (high - low) + 2 * tolerance) / low
        chance += math.log(min(1.0, width))
        low, high = max(low, (interval - tolerance) / first), min(high, (interval + tolerance) / first)
        if low > high:
            return None
    return (low + high) / 2 if chance < math.log(CHANCE) else None
