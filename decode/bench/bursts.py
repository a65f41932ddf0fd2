"""Frames to clock, select and data: what master and encoder do, for all frames at once.

Tables have one row a frame slot (an instant at which the master is due to read) and hold instants in picoseconds as
seen at the master's end of the cable. The encoder sees the clock one cable delay later and its answer needs another
one back, so the data line follows an edge by the clock-to-data delay and twice the cable.

An interface is four things: the level pattern of its clock, which clock edges move the encoder to its next bit
(driving edges), the sequence of levels the encoder goes through, one a driving edge, and when the data line returns to
its idle level.

ssi      clock and data idle high. The first falling edge latches, every rising edge drives; after the word comes a low
         bit, and further clocks bring the word again. Data returns high a monoflop time after the last falling edge.
         A burst that begins before that goes on with the same word.
biss-c   clock and data idle high. Rising edges drive: latch (still high), acknowledge (low), busy (low), start (high),
         CDS, word, stop (low). Data returns high a time-out after the last rising edge. While it waits the master holds
         the clock at the inverse of its control bit. A burst that begins before the time-out is over brings only lows.
spi      select falls, clocks run, select rises. In modes 0 and 2 select drives the first bit and the second edge of
         each clock the next; in modes 1 and 3 the first edge of each clock drives.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from decode.bench.line import ABSENT, Line, present
from decode.bench.words import BitMatrix
from decode.errors import InputError
from decode.sheet import Serial
from decode.spans import BoolArray, IntArray, LevelArray


class Timing(NamedTuple):
    """The durations of a transfer, in ps. reply: driving edge at the master to data change at the master.
    lead, lag: select before the first and after the last clock edge. selected: whether select is among the lines."""

    period: int
    reply: int
    cable: int
    timeout: int
    lead: int
    lag: int
    busy_clocks: int
    selected: bool


class Spike(NamedTuple):
    """A pulse on the clock that the master did not mean. taken: whether the encoder took it for a clock."""

    slot: int
    start: int
    stop: int
    taken: bool


@dataclass(eq=False)
class Schedule:
    """When the master reads and with how many clocks; faults work on it in place.

    start: (n,) ps of the first clock edge. sent: (n,) whether there is a burst at all. clocks: (n,) clock pulses.
    continued: (n,) whether the burst begins before the one before it was over. cdm: (n,) the master's control bit.
    """

    serial: Serial
    timing: Timing
    start: IntArray
    sent: BoolArray
    clocks: IntArray
    continued: BoolArray
    cdm: BoolArray
    spikes: list[Spike] = field(default_factory=list)

    @classmethod
    def regular(cls, serial: Serial, timing: Timing, start: IntArray, cdm: BoolArray) -> Schedule:
        """A burst of the nominal length at each of `start`."""
        n = start.size
        clocks = np.full(n, nominal_clocks(serial, timing.busy_clocks))
        return cls(serial, timing, start, np.ones(n, bool), clocks, np.zeros(n, bool), cdm)

    @property
    def latch(self) -> IntArray:
        """(n,) ps of the edge at which the encoder takes its position."""
        return np.asarray(self.start + _INTERFACES[self.serial.interface].latch(self))

    def clock_edge(self, slot: int, number: int) -> int:
        """The instant of the number-th clock edge (from 0, both directions) of a slot."""
        return int(self.start[slot]) + number * self.timing.period // 2

    @property
    def last_edge(self) -> IntArray:
        """(n,) ps of the last clock edge of each burst."""
        return np.asarray(self.start + (2 * self.clocks - 1) * self.timing.period // 2)

    @property
    def release(self) -> IntArray:
        """(n,) ps at which the data line returns to idle; ABSENT where the next burst comes first."""
        released = _INTERFACES[self.serial.interface].release(self)
        cut_off = np.append(self.continued[1:], False)
        return np.where(cut_off | ~self.sent, ABSENT, released)

    @property
    def read(self) -> IntArray:
        """(n,) ps by which a burst is known to be over and its last bit is in."""
        return np.asarray(self.last_edge + max(self.timing.lag, self.timing.reply) + self.timing.period)

    @property
    def end(self) -> IntArray:
        """(n,) ps by which a frame and what belongs to it is over."""
        released = np.where(self.release == ABSENT, self.last_edge, self.release)
        tail = self.timing.period * np.where(self.cdm, 2, 1)
        return np.asarray(np.maximum(released, self.last_edge + self.timing.lag) + tail, np.int64)


def nominal_clocks(serial: Serial, busy_clocks: int = 0) -> int:
    """Clock pulses of a burst: bits and one more in ssi; latch, acknowledge, busy, start, CDS, bits, stop in biss-c."""
    if serial.interface == "ssi":
        return serial.sent_bits + 1
    if serial.interface == "biss-c":
        return 5 + busy_clocks + serial.word_bits
    return serial.word_bits


@dataclass(eq=False)
class Signal:
    """The data line before it is drawn; faults work on it in place.

    drive: (n, d) ps of each driving edge. levels: (n, d) level the encoder goes to. reply: (n, d) ps it takes.
    first_bit: the driving edge that brings the word's first bit.
    """

    schedule: Schedule
    drive: IntArray
    levels: LevelArray
    reply: IntArray
    first_bit: int

    def line(self) -> Line:
        """The data line. Raises InputError where frames run into each other."""
        idle = idle_data_level(self.schedule.serial)
        release = self.schedule.release
        changes = np.where(present(self.drive), self.drive, 0) + self.reply
        times = np.hstack([np.where(present(self.drive), changes, ABSENT), release[:, None]])
        levels = np.hstack([self.levels, np.full((release.size, 1), idle, np.int8)])
        there = present(times) & self.schedule.sent[:, None]
        flat = times[there]
        if np.any(np.diff(flat) < 0):
            raise InputError(
                "the frames run into each other",
                column="frame_rate_hz",
                expected="a frame, the cable's delay and the time-out within one frame period",
                hint="a lower frame rate, a higher clock frequency or a shorter time-out",
            )
        return Line.from_levels(idle, flat, levels[there])


def idle_data_level(serial: Serial) -> int:
    return 0 if serial.interface == "spi" else 1


def idle_clock_level(serial: Serial) -> int:
    return serial.mode >> 1 if serial.interface == "spi" else 1


def clock_line(schedule: Schedule) -> Line:
    """The clock with its spikes and, in biss-c, the control bit between bursts."""
    number = np.arange(2 * int(schedule.clocks.max(initial=0)))
    edges = schedule.start[:, None] + number * schedule.timing.period // 2
    edges = np.where(number < 2 * schedule.clocks[:, None], edges, ABSENT)
    toggles = edges[schedule.sent].ravel()
    extra = [instant for spike in schedule.spikes for instant in (spike.start, spike.stop)]
    held = schedule.cdm & schedule.sent & present(schedule.release)
    fall = schedule.last_edge[held] + schedule.timing.period // 2
    rise = schedule.release[held] + schedule.timing.period // 2
    every = np.concatenate([toggles[toggles != ABSENT], np.array(extra, np.int64), fall, rise])
    return Line(idle_clock_level(schedule.serial), np.sort(every))


def select_line(schedule: Schedule) -> Line:
    """The chip select of spi: low around each burst."""
    sent = schedule.sent
    fall = schedule.start[sent] - schedule.timing.lead
    rise = schedule.last_edge[sent] + schedule.timing.lag
    return Line(1, np.sort(np.concatenate([fall, rise])))


def signal(schedule: Schedule, bits: BitMatrix, cds: npt.NDArray[np.uint8]) -> Signal:
    """What the encoder sends: bits (n, sent_bits) of each slot's word, cds (n,) its control data bit."""
    interface = _INTERFACES[schedule.serial.interface]
    drive = interface.driving(schedule)
    taken = [spike for spike in schedule.spikes if spike.taken]
    drive = np.hstack([drive, np.full((drive.shape[0], len(taken)), ABSENT)])
    for number, spike in enumerate(taken, start=1):
        drive[spike.slot, -number] = interface.spike_edge(schedule, spike)
    drive.sort(axis=1)
    levels = interface.levels(schedule, bits, cds, drive.shape[1])
    reply = np.full(drive.shape, schedule.timing.reply)
    first = {"ssi": 0, "biss-c": 4 + schedule.timing.busy_clocks, "spi": 0}[schedule.serial.interface]
    return Signal(schedule, drive, levels.astype(np.int8), reply, first)


class _Interface(NamedTuple):
    latch: Callable[[Schedule], int]
    driving: Callable[[Schedule], IntArray]
    spike_edge: Callable[[Schedule, Spike], int]
    levels: Callable[[Schedule, BitMatrix, npt.NDArray[np.uint8], int], BitMatrix]
    release: Callable[[Schedule], IntArray]


def _every_other_edge(schedule: Schedule, first: int) -> IntArray:
    """(n, d) each second clock edge, from the first (0) or the second (1)."""
    number = np.arange(int(schedule.clocks.max(initial=0)))
    edges = schedule.start[:, None] + (2 * number + first) * schedule.timing.period // 2
    return np.where(number < schedule.clocks[:, None], edges, ABSENT)


def _rising_edges(schedule: Schedule) -> IntArray:
    return _every_other_edge(schedule, 1)


def _ssi_stream(schedule: Schedule, bits: BitMatrix, cds: npt.NDArray[np.uint8], length: int) -> BitMatrix:
    serial = schedule.serial
    separator = np.zeros((bits.shape[0], serial.separator_bits), np.uint8)
    again = np.hstack([bits[:, : serial.word_bits], separator])
    repeats = 2 + length // again.shape[1]
    stream = np.hstack([bits, separator, *[again] * repeats])
    levels = stream[:, :length].copy()
    position = 0
    for slot in np.flatnonzero(schedule.continued):
        position = (position if schedule.continued[slot - 1] else 0) + int(schedule.clocks[slot - 1])
        phase = position - bits.shape[1] - separator.shape[1]
        columns = (phase + np.arange(length)) % again.shape[1] if phase >= 0 else position + np.arange(length)
        levels[slot] = again[slot, columns] if phase >= 0 else stream[slot, columns]
    return levels


def _ssi_release(schedule: Schedule) -> IntArray:
    timing = schedule.timing
    last_falling = schedule.start + (2 * schedule.clocks - 2) * timing.period // 2
    return np.asarray(last_falling + timing.timeout + 2 * timing.cable)


def _biss_stream(schedule: Schedule, bits: BitMatrix, cds: npt.NDArray[np.uint8], length: int) -> BitMatrix:
    busy = schedule.timing.busy_clocks
    levels = np.zeros((bits.shape[0], max(length, 5 + busy + bits.shape[1])), np.uint8)
    levels[:, 0] = 1
    levels[:, 2 + busy] = 1
    levels[:, 3 + busy] = cds
    levels[:, 4 + busy : 4 + busy + bits.shape[1]] = bits
    levels[schedule.continued] = 0
    return levels[:, :length]


def _biss_release(schedule: Schedule) -> IntArray:
    return np.asarray(schedule.last_edge + schedule.timing.timeout + 2 * schedule.timing.cable)


def _spi_driving(schedule: Schedule) -> IntArray:
    if schedule.serial.mode in (1, 3):
        return _every_other_edge(schedule, 0)
    selected = schedule.start - schedule.timing.lead
    return np.hstack([selected[:, None], _every_other_edge(schedule, 1)])


def _spi_stream(schedule: Schedule, bits: BitMatrix, cds: npt.NDArray[np.uint8], length: int) -> BitMatrix:
    levels = np.zeros((bits.shape[0], max(length, bits.shape[1])), np.uint8)
    levels[:, : bits.shape[1]] = bits
    return levels[:, :length]


def _spi_release(schedule: Schedule) -> IntArray:
    return np.asarray(schedule.last_edge + schedule.timing.lag + schedule.timing.reply)


def _spi_spike_edge(schedule: Schedule, spike: Spike) -> int:
    return spike.start if schedule.serial.mode in (1, 3) else spike.stop


_INTERFACES = {
    "ssi": _Interface(
        latch=lambda schedule: 0,
        driving=_rising_edges,
        spike_edge=lambda schedule, spike: spike.start,
        levels=_ssi_stream,
        release=_ssi_release,
    ),
    "biss-c": _Interface(
        latch=lambda schedule: schedule.timing.period // 2,
        driving=_rising_edges,
        spike_edge=lambda schedule, spike: spike.start,
        levels=_biss_stream,
        release=_biss_release,
    ),
    "spi": _Interface(
        latch=lambda schedule: -schedule.timing.lead if schedule.timing.selected else 0,
        driving=_spi_driving,
        spike_edge=_spi_spike_edge,
        levels=_spi_stream,
        release=_spi_release,
    ),
}
