"""How long things took: clock phases, data delay, setup and hold at every sample, the time-out.

All results are whole ticks. Where there is nothing to measure a duration is -1 and an instant NO_TICK.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from decode.serial.clock import Bursts, Rhythm
from decode.serial.interfaces import Reading
from decode.spans import NO_TICK, BoolArray, Edges, IntArray


@dataclass(frozen=True, slots=True, eq=False)
class Samples:
    """(n, m) each, for every bit m of every burst n.

    edge: the data change that made the bit, where it differs from the one before. setup: from that change to the
    sample. hold: from the sample to a change before the next sample. delay: from the driving edge to the change.
    """

    edge: IntArray
    setup: IntArray
    hold: IntArray
    delay: IntArray

    def least(self) -> IntArray:
        """(n,) smallest setup or hold of each burst."""
        most = np.iinfo(np.int64).max
        smallest = [np.where(part >= 0, part, most).min(axis=1, initial=most) for part in (self.setup, self.hold)]
        least = np.minimum(*smallest)
        return np.where(least == most, np.int64(-1), least)

    def closer_than(self, ticks: float) -> IntArray:
        """(n,) how many samples of each burst have a data change nearer than `ticks`."""
        near = [(part >= 0) & (part < ticks) for part in (self.setup, self.hold)]
        return np.asarray((near[0] | near[1]).sum(axis=1), np.int64)


def sample_timing(reading: Reading, data: Edges, late: float) -> Samples:
    """Setup, hold and delay at every sample of a reading; `late` ticks are added to the delay (biss-c line delay)."""
    sample = reading.sample
    there = sample != NO_TICK
    earlier = np.concatenate([reading.bursts.opens[:, None], sample[:, :-1]], axis=1)
    later = np.concatenate([sample[:, 1:], np.full((sample.shape[0], 1), NO_TICK, np.int64)], axis=1)
    after = np.searchsorted(data.times, sample.ravel(), side="right").reshape(sample.shape)
    padded = np.concatenate([[np.iinfo(np.int64).min // 2], data.times, [np.iinfo(np.int64).max // 2]])
    last, following = padded[after], padded[after + 1]
    changed = there & (last > earlier)
    edge = np.where(changed, last, np.int64(NO_TICK))
    setup = np.where(changed, sample - last, np.int64(-1))
    hold = np.where(there & (later != NO_TICK) & (following < later), following - sample, np.int64(-1))
    driven = changed & (reading.drive != NO_TICK)
    delay = np.where(driven, last - reading.drive + round(late), np.int64(-1))
    return Samples(edge, setup, hold, delay)


def time_out(reading: Reading, data: Edges, stops: IntArray, *, from_rising: bool) -> IntArray:
    """(n,) ticks from the last clock edge of each burst to the data line's return to high, -1 where it did not.

    Counted from the last rising edge (biss-c) or the last falling one (ssi); both rest high.
    """
    bursts = reading.bursts
    index = bursts.first + np.maximum(bursts.count - (1 if from_rising else 2), 0)
    last = bursts.times[index]
    after = np.searchsorted(data.times, reading.over, side="right")
    inside = after < data.times.size
    where = np.where(inside, after, 0)
    if data.times.size == 0:
        return np.full(len(bursts), -1, np.int64)
    held = (reading.stop == 0) & inside & (data.levels[where] == 1) & (data.times[where] < stops)
    return np.where(held, data.times[where] - last, np.int64(-1))


def clock_timing(bursts: Bursts, rest: int) -> tuple[IntArray, IntArray, IntArray]:
    """Periods, high phases and low phases of all bursts without a pause inside."""
    steady = bursts.gap == 0
    first, count = bursts.first[steady], bursts.count[steady]
    offset = np.arange(int(count.sum())) - np.repeat(np.cumsum(count) - count, count)
    index, left = np.repeat(first, count) + offset, np.repeat(count, count) - offset
    times = bursts.times
    phase, period = left > 1, left > 2
    lengths = times[index[phase] + 1] - times[index[phase]]
    leading = offset[phase] % 2 == 0
    away, resting = lengths[leading], lengths[~leading]
    periods = times[index[period] + 2] - times[index[period]]
    return (periods, resting, away) if rest else (periods, away, resting)


def data_phase(bursts: Bursts, data: Edges, rhythm: Rhythm) -> float:
    """Usual time from a rising clock edge to a data change, modulo the clock period: the circular median."""
    last = np.searchsorted(bursts.times, data.times, side="right") - 1
    inside = np.flatnonzero(_in_burst(bursts, last))
    rising = last[inside]
    number = np.searchsorted(bursts.first, rising, side="right") - 1
    rising = rising - ((rising - bursts.first[number]) % 2 == 0)  # a leading edge: the trailing one before it
    known = rising > bursts.first[number]
    phases = (data.times[inside][known] - bursts.times[rising[known]]) % rhythm.period
    if phases.size == 0:
        return 0.0
    angle = 2 * np.pi * phases / rhythm.period
    centre = float(np.arctan2(np.sin(angle).mean(), np.cos(angle).mean())) / (2 * np.pi) * rhythm.period
    away = (phases - centre + rhythm.period / 2) % rhythm.period - rhythm.period / 2
    return float((centre + np.median(away)) % rhythm.period)


def _in_burst(bursts: Bursts, edge: IntArray) -> BoolArray:
    """Whether the interval after clock edge number `edge` lies in a burst."""
    number = np.searchsorted(bursts.first, edge, side="right") - 1
    held = np.maximum(number, 0)
    return np.asarray((number >= 0) & (edge < bursts.first[held] + bursts.count[held] - 1), np.bool_)
