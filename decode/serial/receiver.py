"""The serial machine: spans in, tables of frames out.

It keeps the clock, data and select edges of the burst that is not over yet, learns the clock's rhythm and the
frames' habits from the pilot (a fixed number of clock edges, so that the rule does not depend on where the capture
was cut), and then reads every burst whose successor has begun. A burst that an end of the capture cuts is counted
and never blamed.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from decode.anomalies import Anomalies, Severity
from decode.distribution import Distribution
from decode.serial.clock import PILOT_EDGES, SHORT_PULSE, Bursts, Rhythm, find_bursts, known_parts, short_pulses
from decode.serial.frames import Frames, Word, words
from decode.serial.interfaces import READERS, TIMED_OUT, Habit, Reading, resting_level
from decode.serial.timing import Samples, clock_timing, data_phase, sample_timing, time_out
from decode.sheet import Serial
from decode.spans import NO_TICK, UNKNOWN, BoolArray, Edges, IntArray, Span

LEAST_SETUP = 0.1
"""A data change nearer to the sampling edge than this part of a clock period is a violation where the sheet sets no
limit (common practice, no source)."""

EARLY = 0.9
"""Only a pause below this part of the usual one can be too short for the time-out (common practice, no source)."""

WORD_REST = 1.5
"""Clock periods of rest at the end of a word that make what follows a burst of its own (common practice, no source)."""

SPIKE = 0.25
"""A data pulse shorter than this part of a clock period is not real: a bit lasts a whole one (common practice, no
source)."""

PIECES = 0.5
"""Two short bursts less than this part of the usual pause apart are one burst with a pause in it, if together they
have the right number of clocks (common practice, no source)."""

BATCH = 4096
"""Bursts read at a time, to bound memory."""

CHECKS = ("crc_mismatch", "parity_mismatch", "fixed_mismatch")

TIMINGS = (
    "clock_period",
    "clock_high_s",
    "clock_low_s",
    "data_delay_s",
    "setup_time_s",
    "hold_time_s",
    "acknowledge_time_s",
    "frame_duration_s",
    "timeout_s",
    "idle_time_s",
)


class Receiver:
    """Reads the frames of one clocked line.

    Parameters
    ----------
    serial: the sheet's part. clock, data, select: column names in the spans.
    least_setup: ticks a data change must lie before the sampling edge; None for a part of the clock period.

    Attributes
    ----------
    timings: exact distributions in ticks, by the names in TIMINGS.
    partial: bursts cut off by an end of the capture.
    rhythm, habit: what was learnt, None until it is.
    """

    def __init__(
        self, serial: Serial, clock: str, data: str, select: str | None = None, *, least_setup: int | None = None
    ) -> None:
        self.serial = serial
        self.timings = {name: Distribution(1.0) for name in TIMINGS}
        self.partial = 0
        self.rhythm: Rhythm | None = None
        self.habit: Habit | None = None
        self._names = (clock, data, select)
        self._least_setup = least_setup
        self._stray: list[IntArray] = []
        self._spikes: dict[str, list[IntArray]] = {}
        self._clock = self._data = Edges.none(UNKNOWN)
        self._select: Edges | None = None
        self._start, self._until, self._kept, self._last_edge = 0, 0, 0, NO_TICK
        self._spikes_from = 0
        self._selected_at_start = False
        self._segment = -1
        self._open = False

    def feed(self, span: Span) -> Frames:
        """The frames that are over now that this span is known.

        While the level of the clock or the select line is unknown there is no capture of this interface: what waits
        is finished as if it ended, and begins afresh behind.
        """
        clock, _, select = self._names
        names = [clock] if select is None else [clock, select]
        done = []
        for part in known_parts(span, names):
            if any(part.lines[name].initial == UNKNOWN for name in names):
                done.append(self.finish())
                self._kept = part.stop
            else:
                done.append(self._feed(part))
        return self._together(done)

    def _feed(self, span: Span) -> Frames:
        done = []
        if self._open and not span.joined:
            done.append(self.finish())
        clock, data, select = (None if name is None else span.lines[name] for name in self._names)
        assert clock is not None and data is not None  # their names are never None
        if self._open:
            self._clock, self._data = self._clock.then(clock), self._data.then(data)
            self._select = select if self._select is None or select is None else self._select.then(select)
        else:
            self._clock, self._data, self._select = clock, data, select
            self._start, self._kept, self._last_edge = span.start, span.start, NO_TICK
            self._spikes_from = span.start
            self._selected_at_start = select is not None and select.initial == 0
            self._segment += 1
            self._open = True
        self._until = span.stop
        if self.rhythm is not None or self._clock.times.size >= PILOT_EDGES:
            done.append(self._read(closing=False))
        return self._together(done)

    def finish(self) -> Frames:
        """The frames left when the capture is over."""
        if not self._open:
            return self._together([])
        frames = self._read(closing=True)
        self._open = False
        return frames

    @property
    def settled(self) -> int:
        """No frame still to come has its latch before this tick."""
        return self._kept

    def notes(self) -> list[str]:
        """What was taken for granted or left out."""
        notes = []
        if self.partial:
            notes.append(f"{self.partial} frame(s) cut off by an end of the capture: left out and not blamed")
        if self.rhythm is not None and self.rhythm.rest != resting_level(self.serial):
            rest = "high" if self.rhythm.rest else "low"
            notes.append(f"the clock rests {rest}, which is not what the interface asks for: read as if inverted")
        return notes

    def anomalies(self) -> list[Anomalies]:
        """What belongs to no frame."""
        times = np.concatenate([np.empty(0, np.int64), *self._stray])
        causes = ["a pulse between two frames"] * times.size
        found = [Anomalies("clock_glitch", times, line=self._names[0], causes=causes)]
        for line, spikes in self._spikes.items():
            # Only what selects or clocks the encoder does harm by itself; a spike on data may miss every sample.
            severity: Severity | None = "warning" if line == self._names[1] else None
            found.append(Anomalies("glitch", np.concatenate(spikes), line=line, severity=severity))
        return [one for one in found if len(one)]

    def _together(self, parts: list[Frames]) -> Frames:
        if len(parts) == 1:
            return parts[0]
        return Frames.concatenate([Frames.none(self.serial), *parts])

    # ---- one batch -------------------------------------------------------------------------------------------

    def _read(self, *, closing: bool) -> Frames:
        """Read every burst that is over, and forget its edges."""
        if self.rhythm is None:
            self.rhythm = Rhythm.of(self._clock)
            if self.rhythm is None:  # closing: the stretch holds less than a frame
                self.partial += int(self._clock.times.size > 0)
                return Frames.none(self.serial)
            self.habit = self._learn(self.rhythm)
        assert self.habit is not None
        bursts, stray = find_bursts(self._clock, self._select, self.rhythm)
        if len(bursts) == 0:
            return Frames.none(self.serial)
        over = len(bursts)
        if not closing:
            over -= 1
            over -= self._select is None and bursts.last_may_grow(2 * self.habit.clocks, self._piece_pause())
        opens = bursts.opens
        keep = int(opens[over]) if over < opens.size else self._until
        self._stray.append(stray[stray < keep])
        whole = bursts.take(slice(0, over))
        if self._select is None:
            edges = 2 * self.habit.clocks
            whole = whole.rejoined(edges, self._piece_pause()).parted(edges, WORD_REST * self.rhythm.period)
        stops = np.concatenate([whole.opens[1:], [keep]]).astype(np.int64)[: len(whole)]
        parts = [
            self._frames(whole.take(slice(at, at + BATCH)), stops[at : at + BATCH], self.rhythm, self.habit, closing)
            for at in range(0, len(whole), BATCH)
        ]
        self._find_spikes(keep, closing, self.rhythm)
        self._kept = keep
        self._clock = self._clock.between(keep, self._until)
        self._data = self._data.between(self._spikes_from, self._until)
        self._select = None if self._select is None else self._select.between(keep, self._until)
        return self._together(parts)

    def _find_spikes(self, keep: int, closing: bool, rhythm: Rhythm) -> None:
        """Pulses too short to be real on the lines that are no clock, up to where every run of them is known."""
        horizon = self._until if closing else max(keep - round(rhythm.period), self._spikes_from)
        for line, edges, least in (
            (self._names[1], self._data, SPIKE * rhythm.period),
            (self._names[2], self._select, SHORT_PULSE * min(rhythm.high, rhythm.low)),
        ):
            if line is None or edges is None:
                continue
            ticks = short_pulses(edges, least)
            new = ticks[(ticks >= self._spikes_from) & (ticks < horizon)]
            if new.size:
                self._spikes.setdefault(line, []).append(new)
        self._spikes_from = horizon

    def _piece_pause(self) -> float:
        assert self.rhythm is not None
        return PIECES * (self.rhythm.pause or 0.0)

    def _frames(self, bursts: Bursts, stops: IntArray, rhythm: Rhythm, habit: Habit, closing: bool) -> Frames:
        """The frame table of bursts whose windows end at `stops`."""
        reading = READERS[self.serial.interface](bursts, self._data, self.serial, rhythm, habit, stops)
        before = np.concatenate([[self._last_edge], reading.bursts.last_edge[:-1]])
        pause = np.where(before != NO_TICK, bursts.first_edge - before, np.int64(-1))
        whole = self._whole(reading, stops, rhythm, habit, closing)
        samples = sample_timing(reading, self._data, habit.late * rhythm.period)
        ended = time_out(reading, self._data, stops, from_rising=self.serial.interface == "biss-c")
        self.partial += int((~whole).sum())
        self._last_edge = int(reading.bursts.last_edge[-1])
        self._measure(reading, samples, pause, ended, whole, rhythm)
        word = words(reading.bits, self.serial)
        frames = Frames(
            first_edge=bursts.first_edge,
            last_edge=reading.bursts.last_edge,
            latch=reading.latch,
            clocks=reading.clocks,
            raw=word.raw,
            position=word.position,
            usable=np.zeros(len(bursts), np.bool_),
            crc_ok=np.where(reading.complete, word.crc_ok, np.int8(-1)).astype(np.int8),
            kind=np.zeros(len(bursts), np.int8),
            segment=np.full(len(bursts), self._segment, np.int64),
            least_setup=samples.least(),
            pause=pause,
            glitch_time=bursts.glitch_time,
            gap=self._pauses_inside(reading.bursts, habit),
            wrong=word.wrong,
            warned=word.failed["warning_flag"],
            quiet=np.searchsorted(self._data.times, bursts.opens) == np.searchsorted(self._data.times, stops),
            fields=word.fields | reading.columns,
        )
        return self._blame(frames, reading, word, samples, stops, rhythm, habit).take(whole)

    def _pauses_inside(self, bursts: Bursts, habit: Habit) -> IntArray:
        """(n,) ticks of a pause inside a burst after which the encoder has started over, 0 for none."""
        if habit.timeout is None:
            return bursts.gap
        longest = bursts.longest()
        return np.where(longest > habit.timeout, longest, bursts.gap)

    def _whole(self, reading: Reading, stops: IntArray, rhythm: Rhythm, habit: Habit, closing: bool) -> BoolArray:
        """(n,) whether a burst is not cut by an end of the capture, nor by a stretch of unknown level."""
        bursts = reading.bursts
        unknown = (reading.levels == UNKNOWN) & (reading.sample != NO_TICK) & (reading.sample < stops[:, None])
        whole = np.asarray(~unknown.any(axis=1), np.bool_)
        as_usual = reading.complete & (reading.clocks == habit.clocks)
        if self._last_edge == NO_TICK and not as_usual[0]:
            lead = bursts.first_edge[0] - self._start
            whole[0] &= lead > rhythm.split if self._select is None else not self._selected_at_start
        if closing and stops[-1] == self._until and not as_usual[-1]:
            tail = self._until - bursts.last_edge[-1] > rhythm.split + habit.late * rhythm.period
            whole[-1] &= tail if self._select is None else self._select.final == 1
        return whole

    def _measure(
        self, reading: Reading, samples: Samples, pause: IntArray, ended: IntArray, whole: BoolArray, rhythm: Rhythm
    ) -> None:
        """Count the timing of whole frames into the distributions."""
        bursts = reading.bursts.take(whole)
        period, high, low = clock_timing(bursts, rhythm.rest)
        read = whole & reading.complete
        rows = np.flatnonzero(read & reading.started)
        rise, fall = samples.edge[rows, reading.start[rows]], samples.edge[rows, reading.acknowledge[rows]]
        held = (rise - fall)[(rise != NO_TICK) & (fall != NO_TICK)] if self.serial.interface == "biss-c" else rise[:0]
        for name, ticks in (
            ("clock_period", period),
            ("clock_high_s", high),
            ("clock_low_s", low),
            ("data_delay_s", samples.delay[read]),
            ("setup_time_s", samples.setup[read]),
            ("hold_time_s", samples.hold[read]),
            ("acknowledge_time_s", held),
            ("frame_duration_s", bursts.last_edge - bursts.first_edge),
            ("timeout_s", ended[whole] if self.serial.interface in TIMED_OUT else ended[:0]),
            ("idle_time_s", pause[whole]),
        ):
            self.timings[name].add(ticks[ticks >= 0])

    # ---- what is wrong with a frame --------------------------------------------------------------------------

    def _blame(
        self,
        frames: Frames,
        reading: Reading,
        word: Word,
        samples: Samples,
        stops: IntArray,
        rhythm: Rhythm,
        habit: Habit,
    ) -> Frames:
        """Give each faulty frame its most telling kind: causes before what follows from them."""
        complete, interface = reading.complete, self.serial.interface
        quiet = frames.quiet
        at_start = self._data.levels_before(np.searchsorted(self._data.times, frames.first_edge))
        failing = np.any([word.failed[name] for name in CHECKS], axis=0)
        flagged = word.failed["error_flag"]
        if interface == "biss-c":
            stuck = quiet & (at_start == 0)
        elif interface == "ssi":
            stuck = quiet & ((at_start == 0) | (reading.stop == 1))
        else:
            stuck = quiet & (failing | flagged)
        early = np.zeros(len(frames), np.bool_)
        if interface in TIMED_OUT and rhythm.pause is not None and habit.timeout is not None:
            early = (frames.pause < EARLY * rhythm.pause) & (at_start == 0)
            early |= frames.pause + self._grace(reading) < habit.timeout
            early &= frames.pause >= 0
        short, long = self._wrong_length(reading, habit)
        least = LEAST_SETUP * rhythm.period if self._least_setup is None else self._least_setup
        near = samples.closer_than(least)
        ending = complete & (reading.stop == 1) & (habit.stop == 0) & (interface == "ssi")
        for name, rows in (
            ("data_stuck", stuck),
            ("timeout_short", early),
            ("clock_glitch", reading.bursts.glitches > 0),
            ("frame_short", short | (frames.gap > 0)),
            ("frame_long", long),
            ("no_acknowledge", ~reading.acknowledged),
            ("no_start_bit", ~reading.started),
            ("frame_short", ~complete),
            ("setup_violation", (near >= 2) | ((near > 0) & ~failing)),
            ("crc_mismatch", word.failed["crc_mismatch"]),
            ("parity_mismatch", word.failed["parity_mismatch"]),
            ("fixed_mismatch", word.failed["fixed_mismatch"] | ending),
            ("error_flag", flagged),
        ):
            frames = frames.with_kind(np.asarray(rows, np.bool_), name)
        believed = frames.is_any("", "setup_violation", "error_flag") & complete & ~failing
        return replace(frames, usable=believed, warned=frames.warned & believed)

    def _grace(self, reading: Reading) -> int:
        """Between a burst's last edge and the edge its time-out counts from (ssi: the falling edge before)."""
        assert self.rhythm is not None
        return round(self.rhythm.high) if self.serial.interface == "ssi" else 0

    def _wrong_length(self, reading: Reading, habit: Habit) -> tuple[BoolArray, BoolArray]:
        """(n,) too few clocks, (n,) too many.

        A biss-c reply may be late or busy, so there both the pulses and what is left after the word must be unusual.
        """
        short, long = reading.clocks < habit.clocks, reading.clocks > habit.clocks
        if self.serial.interface != "biss-c":
            return short, long
        started = reading.started
        return started & short & (reading.trailing < habit.trailing), started & long & (
            reading.trailing > habit.trailing
        )

    # ---- learning --------------------------------------------------------------------------------------------

    def _learn(self, rhythm: Rhythm) -> Habit:
        """How the frames of the pilot usually are."""
        edges = self._clock.times[:PILOT_EDGES]
        clock = Edges(self._clock.initial, edges, self._clock.levels[:PILOT_EDGES])
        bursts, _ = find_bursts(clock, self._select, rhythm)
        stops = np.concatenate([bursts.opens[1:], [self._until]]).astype(np.int64)
        if edges.size < self._clock.times.size or edges.size == PILOT_EDGES:
            bursts, stops = bursts.take(slice(0, -1)), stops[:-1]
        bits = self.serial.sent_bits
        if self.serial.interface == "ssi":
            for word in (2 * (bits + 1), 2 * bits):
                bursts = bursts.parted(word, WORD_REST * rhythm.period)
            stops = np.concatenate([bursts.opens[1:], stops[-1:]])
        usual = _most_common(bursts.count // 2 if self.serial.interface != "spi" else (bursts.count + 1) // 2)
        read = READERS[self.serial.interface]
        if self.serial.interface == "spi":
            return Habit(clocks=bits)
        if self.serial.interface == "ssi":
            habit = Habit(clocks=usual if usual in (bits, bits + 1) else bits + 1)
        else:
            habit = Habit(clocks=usual, phase=data_phase(bursts, self._data, rhythm))
            first = read(bursts, self._data, self.serial, rhythm, habit, stops)
            late = _most_common(first.acknowledge[first.acknowledged] - 1)
            habit = replace(habit, late=late)
        reading = read(bursts, self._data, self.serial, rhythm, habit, stops)
        ended = time_out(reading, self._data, stops, from_rising=self.serial.interface == "biss-c")
        return replace(
            habit,
            trailing=_most_common(reading.trailing[reading.complete]) if reading.complete.any() else 1,
            stop=_most_common(reading.stop[reading.complete]),
            timeout=int(ended[ended >= 0].min()) if (ended >= 0).any() else None,
        )


def _most_common(numbers: npt.NDArray[np.integer]) -> int:
    """The most frequent number, the smallest where several are; 0 for none."""
    if numbers.size == 0:
        return 0
    values, counts = np.unique(numbers, return_counts=True)
    return int(values[np.argmax(counts)])
