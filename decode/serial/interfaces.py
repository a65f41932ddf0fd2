"""Bursts to bits, interface by interface.

Each reader says, for every bit of a word, which clock edge drives it and at which instant it is sampled, looks the
data line up there, and gathers the word. They differ in little else:

ssi     rests high; the first (falling) edge latches; rising edge k drives bit k, the falling edge after it samples.
        Rising edge n + 1 drives the line low until the monoflop time is over.
biss-c  rests high; the first rising edge latches; the reply is *found*, never counted: the first low sample after the
        latch is the acknowledge, the first high one after that the start bit, then the control bit, then the word.
        So a reply several clocks late (a long cable, seen at the master) and a busy encoder both decode. The
        sampling instant is the falling edge, or half a period after the data changes where the line delay has used
        that margin up, as a master with delay compensation does.
spi     mode bit 1 is the resting level, mode bit 0 the phase: 0 samples on leading edges and the select line drives
        the first bit; 1 drives on leading edges and samples on trailing ones.

Sources: ssi: TR-Electronic TR-ECE-BA-DGB-0131 §4.3.3, Kuebler R60.709.0009 §4.2. biss-c: BiSS interface protocol
description C mode, Renishaw L-9709-9005, Baumer BiSS C V1.00. spi: NXP LPC800 user manual, SPI mode summary.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from decode.serial.clock import Bursts, Index, Rhythm
from decode.sheet import Serial
from decode.spans import UNKNOWN, BoolArray, Edges, IntArray, LevelArray

LATE_PHASE = 0.4
"""Data that changes later than this part of a period after its clock edge is sampled half a period after it changes
and no longer at the clock's own edge (common practice, no source)."""

LONGEST_WAIT = 512
"""Clocks a biss-c reader looks for a late or busy reply: 40 us at 10 MHz is 400 (Texas Instruments
motor-control-sdk)."""


@dataclass(frozen=True, slots=True)
class Habit:
    """How this capture's frames usually are, learnt from the pilot; every frame is held against it.

    clocks: pulses in a burst. late: whole clocks by which a biss-c reply is late on its way. phase: ticks from a
    driving edge to the data change, less whole periods. trailing: clocks after the last bit. stop: level of the bit
    after the word. timeout: shortest time-out seen, ticks.
    """

    clocks: int = 0
    late: int = 0
    phase: float = 0.0
    trailing: int = 1
    stop: int = 0
    timeout: int | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Reading:
    """What was read from n bursts.

    bursts: the n bursts, without clock edges that are none of the word's.
    drive, sample: (n, m) ticks at which bit m is driven and sampled, -1 where it is not. levels: (n, m) data level at
    each sample. bits: (n, sent_bits), 0 where not read. complete: (n,) whether every bit of the word was read.
    acknowledged, started: (n,) as far as the interface has such a thing. clocks, latch, trailing: (n,). stop: (n,)
    level of the bit after the word. over: (n,) tick at which that bit was sampled, or the last clock edge.
    columns: further columns for the frame table.
    """

    bursts: Bursts
    drive: IntArray
    sample: IntArray
    levels: LevelArray
    bits: npt.NDArray[np.uint8]
    complete: BoolArray
    acknowledged: BoolArray
    started: BoolArray
    clocks: IntArray
    latch: IntArray
    trailing: IntArray
    stop: LevelArray
    over: IntArray
    acknowledge: Index
    start: Index
    columns: dict[str, npt.NDArray[np.uint64]] = field(default_factory=dict)


Reader = Callable[[Bursts, Edges, Serial, Rhythm, Habit, IntArray], Reading]


def _look(data: Edges, sample: IntArray, stops: IntArray) -> LevelArray:
    """(n, m) data level at each sample; UNKNOWN where there is none or where the window is over."""
    there = (sample >= 0) & (sample < stops[:, None])
    levels = data.level_at(sample.ravel()).reshape(sample.shape)
    return np.where(there, levels, np.int8(UNKNOWN)).astype(np.int8)


def read_ssi(bursts: Bursts, data: Edges, serial: Serial, rhythm: Rhythm, habit: Habit, stops: IntArray) -> Reading:
    n = serial.sent_bits
    number = np.arange(n + 1)
    drive = bursts.edge(2 * number + 1)
    after = bursts.edge(2 * number + 2)
    half = round(rhythm.phase(rhythm.rest))
    sample = np.where(after >= 0, after, np.where(drive >= 0, drive + half, np.int64(-1)))
    return _word_first(bursts, drive, sample, data, n, bursts.count // 2, bursts.first_edge, stops)


def read_spi(bursts: Bursts, data: Edges, serial: Serial, rhythm: Rhythm, habit: Habit, stops: IntArray) -> Reading:
    n = serial.sent_bits
    number = np.arange(n)
    if serial.mode & 1:
        drive, sample = bursts.edge(2 * number), bursts.edge(2 * number + 1)
        clocks = bursts.count // 2
    else:
        sample = bursts.edge(2 * number)
        drive = np.concatenate([bursts.selected[:, None], bursts.edge(2 * number[1:] - 1)], axis=1)
        clocks = (bursts.count + 1) // 2
    latch = np.where(bursts.selected >= 0, bursts.selected, bursts.first_edge)
    return _word_first(bursts, drive, sample, data, n, clocks, latch, stops)


def _word_first(
    bursts: Bursts,
    drive: IntArray,
    sample: IntArray,
    data: Edges,
    n: int,
    clocks: Index,
    latch: IntArray,
    stops: IntArray,
) -> Reading:
    """A word whose first bit is the first sample."""
    levels = _look(data, sample, stops)
    read = levels[:, :n]
    rows = sample.shape[0]
    yes, zero = np.ones(rows, np.bool_), np.zeros(rows, np.intp)
    stop = levels[:, n] if levels.shape[1] > n else np.full(rows, UNKNOWN, np.int8)
    return Reading(
        bursts=bursts,
        drive=drive,
        sample=sample,
        levels=levels,
        bits=(read == 1).astype(np.uint8),
        complete=(read != UNKNOWN).all(axis=1),
        acknowledged=yes,
        started=yes,
        clocks=clocks.astype(np.int64),
        latch=latch,
        trailing=clocks.astype(np.int64) - n,
        stop=stop,
        over=np.maximum(bursts.last_edge, sample[:, n] if sample.shape[1] > n else -1),
        acknowledge=zero,
        start=zero,
    )


def read_biss(bursts: Bursts, data: Edges, serial: Serial, rhythm: Rhythm, habit: Habit, stops: IntArray) -> Reading:
    n = serial.sent_bits
    bursts, cdm = _without_control_level(bursts, rhythm)
    clocks = (bursts.count // 2).astype(np.int64)
    most = min(int(clocks.max(initial=0)), habit.clocks + n + LONGEST_WAIT)
    number = np.arange(most + habit.late + 2)
    drive = bursts.edge(2 * number + 1)
    last = bursts.times[bursts.first + np.minimum(2 * np.maximum(clocks, 1).astype(np.intp), bursts.count) - 1]
    beyond = np.rint((number[None, :] - clocks[:, None] + 1) * rhythm.period).astype(np.int64)
    extended = np.where(drive >= 0, drive, last[:, None] + beyond)
    late = habit.phase >= LATE_PHASE * rhythm.period
    sample = extended + round(habit.phase + rhythm.period / 2 if late else rhythm.high)
    if not late:
        falling = bursts.edge(2 * number + 2)
        sample = np.where(falling >= 0, falling, sample)
    reach = number[None, :] < clocks[:, None] + habit.late
    levels = np.where(reach, _look(data, sample, stops), np.int8(UNKNOWN)).astype(np.int8)
    low = (levels == 0) & (number >= 1)
    acknowledged, acknowledge = low.any(axis=1), low.argmax(axis=1)
    high = (levels == 1) & (number[None, :] > acknowledge[:, None]) & acknowledged[:, None]
    started, start = high.any(axis=1), high.argmax(axis=1)
    word = _from(levels, start + 2, n)
    read = np.where(started[:, None], word, np.int8(UNKNOWN))
    latch = bursts.times[bursts.first + np.minimum(1, bursts.count - 1)]
    last_bit = np.minimum(start + 2 + n, np.maximum(clocks + habit.late, 1) - 1).astype(np.intp)
    return Reading(
        bursts=bursts,
        drive=np.where(reach, extended, np.int64(-1)),
        sample=np.where(reach, sample, np.int64(-1)),
        levels=levels,
        bits=(read == 1).astype(np.uint8),
        complete=(read != UNKNOWN).all(axis=1),
        acknowledged=acknowledged,
        started=started,
        clocks=clocks,
        latch=latch,
        trailing=clocks + habit.late - (start + 2 + n),
        stop=_from(levels, start + 2 + n, 1)[:, 0],
        over=np.maximum(bursts.last_edge, np.take_along_axis(sample, last_bit[:, None], axis=1)[:, 0]),
        acknowledge=acknowledge,
        start=start,
        columns={
            "cds": (_from(levels, start + 1, 1)[:, 0] == 1).astype(np.uint64),
            "cdm": cdm.astype(np.uint64),
            "acknowledge_clocks": np.where(started, start - acknowledge, 0).astype(np.uint64),
        },
    )


def _from(levels: LevelArray, first: Index, count: int) -> LevelArray:
    """(n, count) levels of each row from column first[n] on; UNKNOWN past the end."""
    wanted = first[:, None] + np.arange(count)[None, :]
    inside = wanted < levels.shape[1]
    found = np.take_along_axis(levels, np.where(inside, wanted, 0), axis=1)
    return np.where(inside, found, np.int8(UNKNOWN)).astype(np.int8)


def _without_control_level(bursts: Bursts, rhythm: Rhythm) -> tuple[Bursts, BoolArray]:
    """Bursts without the low level after the last clock that says a control bit of 1, and where there was one.

    The level lasts until the data line is high again, so for longer than the time-out, which is 1.5 periods at the
    least (BiSS Association application note AN23 as restated in a slave data sheet).
    """
    last = bursts.first + bursts.count - 1
    held = bursts.times[last] - bursts.times[np.maximum(last - 1, 0)]
    control = (bursts.count >= 4) & (bursts.count % 2 == 0) & (held > 1.4 * rhythm.period)
    shorter = replace(bursts, count=(bursts.count - 2 * control).astype(np.intp))
    return shorter, control


READERS: dict[str, Reader] = {"ssi": read_ssi, "biss-c": read_biss, "spi": read_spi}
TIMED_OUT = ("ssi", "biss-c")
"""Interfaces whose data line is low after the word and high again after a time-out."""


def resting_level(serial: Serial) -> int:
    """The clock level between bursts that the interface asks for."""
    return serial.mode >> 1 if serial.interface == "spi" else 1
