"""From a sheet and a scenario to a capture and the truth beside it.

The way is one straight line, and each step's values can be put out of order by the faults of that step:

    settings -> A/B/Z over the motion -> schedule of bursts -> angles at the latch -> words -> data line
             -> lines -> pairs -> what the analyser samples and its file holds

Inside, time is whole picoseconds from the capture's start; the analyser's grid is applied once, at the end. The same
sheet and scenario always give the same capture, whichever faults are in it: every random draw has its own stream.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from typing import NamedTuple

import msgspec
import numpy as np

from decode.bench import bursts
from decode.bench.bursts import Schedule, Signal, Timing
from decode.bench.faults import (
    ANGLES,
    DEGREES,
    DRIVERS,
    QUADRATURE,
    RECORDING,
    SCHEDULE,
    SETTINGS,
    SIGNAL,
    WIRES,
    WORDS,
    Log,
    check,
)
from decode.bench.line import PS_PER_SECOND, Grid, Line, to_ps
from decode.bench.motion import Path
from decode.bench.quadrature import Quadrature, turned
from decode.bench.scenario import Fault, Scenario
from decode.bench.stages import Angles, Recording, Segment, Settings, Wiring, Words
from decode.bench.truth import FaultTruth, FrameTruth, Truth
from decode.bench.words import WordArray
from decode.errors import InputError
from decode.sheet import COMPLEMENTS, Incremental, Serial, Sheet
from decode.spans import BoolArray, Edges, FloatArray, IntArray, Span

__all__ = ["Fault", "Scenario", "Simulation", "simulate"]

FRAME_RATE_HZ = {"ssi": 5e3, "biss-c": 16e3, "spi": 5e3}
CLOCK_HZ = {"ssi": 1e6, "biss-c": 2e6, "spi": 1e6}
SLOW_COUNTER_FRAMES = 256
"""A field of no known meaning counts up once in so many frames."""

_JITTER_STREAM = 1


@dataclass(frozen=True, eq=False)
class Simulation:
    """A capture as the analyser holds it, and the truth.

    lines: by column name, on ticks of the sampling grid, whole. tick: seconds. segments: what of it stands in the
    file, in the file's order. columns: the file's column names in order. fields: (frames,) what each whole frame's
    word holds, by column name, as the encoder sent it, checks left out.
    """

    lines: Mapping[str, Edges]
    tick: Fraction
    segments: tuple[Segment, ...]
    columns: tuple[str, ...]
    numbers: Mapping[str, int]
    fields: Mapping[str, WordArray]
    truth: Truth

    def spans(self) -> Iterator[Span]:
        """The file's content in its order: one span for each stretch that goes on without a break."""
        for number, (start, stop, shift) in enumerate(self.segments):
            lines = {name: _moved(edges.between(start, stop), shift) for name, edges in self.lines.items()}
            yield Span(start + shift, stop + shift, lines, joined=number == 0)

    def span(self) -> Span:
        """The whole capture as one span. A lost stretch shows as lines that change all at once where it ends."""
        spans = list(self.spans())
        if any(later.start < before.stop for before, later in pairwise(spans)):
            raise ValueError("a time axis that goes back is no single span; use spans()")
        lines = spans[0].lines
        for later in spans[1:]:
            lines = {name: edges.then(_continued(edges, later, name)) for name, edges in lines.items()}
        return Span(spans[0].start, spans[-1].stop, lines)


def _moved(edges: Edges, shift: int) -> Edges:
    return Edges(edges.initial, edges.times + shift, edges.levels)


def _continued(before: Edges, later: Span, name: str) -> Edges:
    """A line's edges in a later span, seen from the level it had before."""
    edges = later.lines[name]
    if edges.initial == before.final:
        return edges
    first = Edges(before.final, np.array([later.start]), np.array([edges.initial], np.int8))
    return first.then(edges)


def simulate(sheet: Sheet, scenario: Scenario | None = None) -> Simulation:
    """A capture of the sheet's board during the scenario.

    Raises InputError where the scenario cannot be (frames that run into each other, a fault the board cannot have).
    """
    scenario = Scenario() if scenario is None else scenario
    _refuse_impossible(sheet, scenario)
    log = Log(scenario.faults, to_ps(scenario.start_time_s), to_ps(scenario.duration_s))
    settings = Settings(scenario.sample_rate_hz, scenario.latency_s, _clock_hz(sheet, scenario), None)
    path = scenario.motion.path(scenario.start_angle_turns, scenario.duration_s, scenario.eccentricity_deg / DEGREES)
    settings.state_s = _shortest_state(sheet.incremental, path, scenario.duration_s)
    log.apply(SETTINGS, settings)

    quadrature = _quadrature(sheet.incremental, path, scenario, log)
    frames = None if sheet.serial is None else _frames(sheet, sheet.serial, scenario, settings, path, log)
    schedule = None if frames is None else frames.schedule

    stop = to_ps(scenario.duration_s)
    if scenario.cut_end and schedule is not None:
        stop = _middle_of_last(schedule, stop)
    wiring = Wiring(_drivers(quadrature, frames, settings), quadrature, schedule, stop)
    log.apply(DRIVERS, wiring)
    names = _column_names(sheet, scenario, tuple(wiring.lines))
    for complement in [role for role in names if role in COMPLEMENTS]:
        wiring.lines[complement] = wiring.lines[COMPLEMENTS[complement]].inverted()
    log.apply(WIRES, wiring)

    grid = _grid(settings.sample_rate_hz, log.start, stop)
    recording = Recording(grid, [Segment(grid.first, grid.stop)])
    log.apply(RECORDING, recording)
    return _Result(sheet, scenario, settings, path, quadrature, frames, log, recording, names).simulation(wiring.lines)


# -- the steps ------------------------------------------------------------------------------------------------------


@dataclass(eq=False)
class _Frames:
    """The serial line's slots: when, what and how."""

    schedule: Schedule
    angles: Angles
    words: Words
    signal: Signal


def _quadrature(incremental: Incremental | None, path: Path, scenario: Scenario, log: Log) -> Quadrature | None:
    if incremental is None or incremental.cycles_per_turn is None:
        return None
    random = np.random.default_rng([scenario.seed, _JITTER_STREAM])
    quadrature = turned(path, incremental, scenario.edge_jitter_s, random)
    log.apply(QUADRATURE, quadrature)
    return quadrature


def _frames(sheet: Sheet, serial: Serial, scenario: Scenario, settings: Settings, path: Path, log: Log) -> _Frames:
    schedule = _schedule(sheet, serial, scenario)
    log.apply(SCHEDULE, schedule)
    _drop_what_does_not_fit(schedule, scenario)
    per_turn = sheet.incremental.counts_per_turn if sheet.incremental is not None else None
    angles = Angles(schedule, _serial_turns(schedule, scenario, settings, path), per_turn)
    log.apply(ANGLES, angles)
    words = Words(schedule, _values(schedule, angles.turns))
    log.apply(WORDS, words)
    if serial.interface == "ssi":
        _repeat_continued(words)
    signal = bursts.signal(schedule, words.sent(), _pattern(scenario.cds, schedule.start.size).astype(np.uint8))
    log.apply(SIGNAL, signal)
    return _Frames(schedule, angles, words, signal)


def _schedule(sheet: Sheet, serial: Serial, scenario: Scenario) -> Schedule:
    rate = scenario.frame_rate_hz or serial.frame_rate_hz or FRAME_RATE_HZ[serial.interface]
    cable = to_ps(scenario.line_delay_s)
    timing = Timing(
        period=round(PS_PER_SECOND / _clock_hz_of(serial, scenario)),
        reply=to_ps(scenario.data_delay_s) + 2 * cable,
        cable=cable,
        timeout=to_ps(scenario.timeout_s),
        lead=to_ps(scenario.select_lead_s),
        lag=to_ps(scenario.select_lag_s) if serial.interface == "spi" else 0,
        busy_clocks=scenario.busy_clocks if serial.interface == "biss-c" else 0,
        selected=not sheet.lines or "select" in sheet.lines,
    )
    period = PS_PER_SECOND / rate
    burst = bursts.nominal_clocks(serial, timing.busy_clocks) * timing.period
    first = -burst // 2 if scenario.cut_start else round(period / 4)
    # Two more than fit: faults may pull all later bursts forward.
    slots = int(scenario.duration_s * rate) + 2 + len(scenario.faults)
    start = first + np.rint(np.arange(slots) * period).astype(np.int64)
    return Schedule.regular(serial, timing, start, _pattern(scenario.cdm, slots))


def _drop_what_does_not_fit(schedule: Schedule, scenario: Scenario) -> None:
    """Leave out the bursts behind the capture, and the one its end would cut unless that is wanted."""
    stop = to_ps(scenario.duration_s)
    schedule.sent &= schedule.start < stop if scenario.cut_end else schedule.end < stop


def _middle_of_last(schedule: Schedule, stop: int) -> int:
    sent = np.flatnonzero(schedule.sent)
    if sent.size == 0:
        return stop
    return int(schedule.start[sent[-1]] + schedule.last_edge[sent[-1]]) // 2


def _serial_turns(schedule: Schedule, scenario: Scenario, settings: Settings, path: Path) -> FloatArray:
    """(n,) the serial position at each latch, in turns."""
    read = path.angle(schedule.latch / PS_PER_SECOND - settings.latency_s)
    read = read + settings.serial_ripple_turns * np.sin(2 * np.pi * read)
    return np.asarray(read * settings.serial_scale + scenario.serial_offset_turns, np.float64)


def _values(schedule: Schedule, turns: FloatArray) -> dict[str, WordArray]:
    """Every field's value by column name, checks left out."""
    serial, slots = schedule.serial, schedule.start.size
    whole = np.floor(turns)
    # A slot without a burst is not read, so the encoder's counter does not go on.
    read = np.cumsum(schedule.sent) - 1
    values: dict[str, WordArray] = {}
    for column, field in zip(serial.columns(), serial.fields, strict=True):
        top = 2**field.bits
        if field.name == "position":
            values[column] = np.floor((turns - whole) * top).astype(np.uint64)
        elif field.name == "turns":
            values[column] = np.mod(whole, top).astype(np.uint64)
        elif field.name in ("error", "warning"):
            active = serial.active_level(field)
            values[column] = np.full(slots, 0 if active else top - 1, np.uint64)
        elif field.name == "fixed":
            values[column] = np.full(slots, field.value, np.uint64)
        elif field.name == "life":
            values[column] = (read % top).astype(np.uint64)
        elif field.name not in ("crc", "parity"):
            values[column] = (read // SLOW_COUNTER_FRAMES % top).astype(np.uint64)
    return values


def _repeat_continued(words: Words) -> None:
    """A burst that goes on with the one before it has its word."""
    for slot in np.flatnonzero(words.schedule.continued):
        for values in words.values.values():
            values[slot] = values[slot - 1]


def _drivers(quadrature: Quadrature | None, frames: _Frames | None, settings: Settings) -> dict[str, Line]:
    """The lines by role, as their drivers put them out."""
    lines: dict[str, Line] = {}
    if frames is not None:
        lines["clock"] = bursts.clock_line(frames.schedule)
        lines["data"] = frames.signal.line()
        if frames.schedule.serial.interface == "spi":
            lines["select"] = bursts.select_line(frames.schedule)
    if quadrature is not None:
        turning = quadrature.lines()
        if settings.swapped:
            turning["a"], turning["b"] = turning["b"], turning["a"]
        lines |= turning
    return lines


def _column_names(sheet: Sheet, scenario: Scenario, roles: tuple[str, ...]) -> dict[str, str]:
    """Column name by role, of the lines that are captured. Without [lines], every line under its role's name."""
    given: Mapping[str, str | int] = sheet.lines or {role: role for role in roles}
    names = {role: line if isinstance(line, str) else role for role, line in given.items()}
    for role in scenario.complements:
        if role in names:
            names.setdefault(f"{role}_n", f"{names[role]}_n")
    return {role: name for role, name in names.items() if COMPLEMENTS.get(role, role) in roles}


def _grid(rate_hz: float, start: int, stop: int) -> Grid:
    # By way of the shortest decimal text: 12.288e6 is meant, not the binary fraction next to it.
    rate = Fraction(repr(rate_hz))
    per_ps = rate / PS_PER_SECOND
    if per_ps.numerator * per_ps.denominator >= 2**62:
        raise InputError(
            "a sample rate that whole picoseconds cannot express", column="sample_rate_hz", found=f"{rate_hz!r}"
        )
    return Grid(rate, round(start * per_ps), int(stop * per_ps))


# -- the result -----------------------------------------------------------------------------------------------------


class _Place(NamedTuple):
    """Where a whole frame stands: its slot, and the ticks its segment is shifted by."""

    slot: int
    shift: int


@dataclass(eq=False)
class _Result:
    sheet: Sheet
    scenario: Scenario
    settings: Settings
    path: Path
    quadrature: Quadrature | None
    frames: _Frames | None
    log: Log
    recording: Recording
    names: dict[str, str]

    def simulation(self, lines: Mapping[str, Line]) -> Simulation:
        places, cut = self._places()
        slots = np.array([place.slot for place in places], np.int64)
        fields = {} if self.frames is None else {name: v[slots] for name, v in self.frames.words.values.items()}
        numbers = {self.names[role]: line for role, line in self.sheet.lines.items() if isinstance(line, int)}
        return Simulation(
            lines={name: self.recording.grid.sampled(lines[role]) for role, name in self.names.items()},
            tick=1 / self.recording.grid.rate,
            segments=tuple(self.recording.segments),
            columns=tuple(sorted(self.names.values(), key=lambda name: numbers.get(name, 0))),
            numbers=numbers,
            fields=fields,
            truth=self._truth(places, cut),
        )

    def _places(self) -> tuple[list[_Place], int]:
        """The whole frames in the file's order, and how many bursts a border of the file cuts."""
        if self.frames is None:
            return [], 0
        schedule, grid = self.frames.schedule, self.recording.grid
        lead = schedule.timing.lead if schedule.serial.interface == "spi" else 0
        begin, burst_end = grid.tick_of(schedule.start - lead), grid.tick_of(schedule.last_edge)
        end = grid.tick_of(schedule.read)
        places: list[_Place] = []
        touched = np.zeros(schedule.sent.size, bool)
        for start, stop, shift in self.recording.segments:
            whole = schedule.sent & (begin >= start) & (end < stop)
            touched |= schedule.sent & (begin < stop) & (burst_end >= start)
            places += [_Place(int(slot), shift) for slot in np.flatnonzero(whole)]
        return places, int(touched.sum()) - len(places)

    def _truth(self, places: list[_Place], cut: int) -> Truth:
        grid, quadrature, scenario = self.recording.grid, self.quadrature, self.scenario
        incremental = self.sheet.incremental if quadrature is not None else None
        sense = -1 if self.settings.swapped else 1
        index = None if quadrature is None else quadrature.index
        net_counts, edges = (None, None) if quadrature is None else self._edges(quadrature)
        return Truth(
            interface=self.sheet.serial.interface if self.sheet.serial is not None else None,
            start_s=self._seconds(grid.first),
            stop_s=self._seconds(grid.stop),
            tick_s=float(1 / grid.rate),
            lines=self.names,
            frames=self._frame_truths(places),
            cut_frames=cut,
            missing=self._missing(),
            faults=self._fault_truths({place.slot: frame for frame, place in enumerate(places)}),
            counts_per_turn=None if quadrature is None else quadrature.counts_per_turn,
            net_counts=None if net_counts is None else sense * net_counts,
            edges=edges,
            index_pulses=None if index is None else int(np.sum((index[:, 0] >= 0) & (index[:, 1] < self._stop))),
            direction=None if incremental is None else sense * incremental.direction,
            latency_s=self.settings.latency_s,
            serial_offset_turns=scenario.serial_offset_turns,
            scenario=msgspec.to_builtins(scenario),
        )

    def _edges(self, quadrature: Quadrature) -> tuple[int, int]:
        """The net counts and the number of A/B edges between the first sample and the last."""
        grid = self.recording.grid
        ticks = grid.tick_of(quadrature.times)
        first, stop = (int(place) for place in np.searchsorted(ticks, [grid.first + 1, grid.stop]))
        counts = np.concatenate([[quadrature.initial], quadrature.counts])
        return int(counts[stop] - counts[first]), stop - first

    @property
    def _stop(self) -> int:
        grid = self.recording.grid
        return int(grid.ticks * PS_PER_SECOND / grid.rate)

    def _seconds(self, tick: int) -> float:
        return float(tick / self.recording.grid.rate)

    def _frame_truths(self, places: list[_Place]) -> list[FrameTruth]:
        if self.frames is None:
            return []
        serial, grid = self.frames.schedule.serial, self.recording.grid
        start, latch = grid.tick_of(self.frames.schedule.start), grid.tick_of(self.frames.schedule.latch)
        kinds, lost = self._kinds()
        words = ["".join(map(str, row[: serial.word_bits])) for row in self.frames.words.sent().tolist()]
        digits = -(-serial.word_bits // 4)
        counted = self._counted(self.frames.schedule.latch)
        position, turns = (self.frames.words.values.get(name) for name in ("position", "turns"))
        return [
            FrameTruth(
                time_s=self._seconds(int(start[slot]) + shift),
                latch_s=self._seconds(int(latch[slot]) + shift),
                position=None if position is None or lost[slot] else int(position[slot]),
                turns=None if turns is None or lost[slot] else int(turns[slot]),
                angle_turns=float(self.frames.angles.turns[slot]),
                counted_turns=None if counted is None else float(counted[slot]),
                raw=None if lost[slot] else f"{int(words[slot], 2):0{digits}x}",
                kind=kinds.get(slot),
            )
            for slot, shift in places
        ]

    def _counted(self, instants: IntArray) -> FloatArray | None:
        """(n,) the A/B count at each instant over the counts of a turn."""
        if self.quadrature is None:
            return None
        counts = np.concatenate([[self.quadrature.initial], self.quadrature.counts])
        number = np.searchsorted(self.quadrature.times, instants, side="right")
        return np.asarray(counts[number] / self.quadrature.counts_per_turn, np.float64)

    def _kinds(self) -> tuple[dict[int, str], BoolArray]:
        """What is wrong with which slot, and in which no whole word comes."""
        kinds: dict[int, str] = {}
        lost = np.zeros(0 if self.frames is None else self.frames.schedule.sent.size, bool)
        for number, made in self.log.made.items():
            for slot in made.slots:
                kinds.setdefault(slot, self.scenario.faults[number].kind)
                lost[slot] |= made.lost
        return kinds, lost

    def _missing(self) -> int:
        missing = [made for number, made in self.log.made.items() if self._kind(number) == "frame_missing"]
        return sum(len(made.slots) for made in missing)

    def _kind(self, number: int) -> str:
        return self.scenario.faults[number].kind

    def _fault_truths(self, frame_of: dict[int, int]) -> list[FaultTruth]:
        return [
            self._fault_truth(number, frame_of) for number in sorted(self.log.made, key=lambda n: self.log.made[n].time)
        ]

    def _fault_truth(self, number: int, frame_of: dict[int, int]) -> FaultTruth:
        made = self.log.made[number]
        tick = int(self.recording.grid.tick_of(np.array([made.time]))[0])
        shift = next((s.shift for s in self.recording.segments if s.start <= tick < s.stop), 0)
        frames = [frame_of[slot] for slot in made.slots if slot in frame_of]
        since = made.since if made.since is not None else (made.slots[0] if made.slots else None)
        return FaultTruth(
            kind=self._kind(number),
            time_s=self._seconds(tick + shift),
            frame=None if since is None else frame_of.get(since),
            frames=frames,
            line=None if made.role is None else self.names.get(made.role),
            detail=made.detail,
        )


def _pattern(text: str, length: int) -> BoolArray:
    return np.resize(np.array([letter == "1" for letter in text]), length)


def _clock_hz_of(serial: Serial, scenario: Scenario) -> float:
    return scenario.clock_hz or CLOCK_HZ[serial.interface]


def _clock_hz(sheet: Sheet, scenario: Scenario) -> float | None:
    return None if sheet.serial is None else _clock_hz_of(sheet.serial, scenario)


def _shortest_state(incremental: Incremental | None, path: Path, duration_s: float) -> float | None:
    """Seconds an A/B state lasts at the highest speed, or None."""
    if incremental is None or incremental.counts_per_turn is None:
        return None
    fastest = float(np.max(np.abs(path.speed(np.linspace(0, duration_s, 1001)))))
    return 1 / (fastest * incremental.counts_per_turn) if fastest else None


def _refuse_impossible(sheet: Sheet, scenario: Scenario) -> None:
    for name in ("duration_s", "sample_rate_hz"):
        if not getattr(scenario, name) > 0:
            raise InputError("an impossible value", column=name, expected="above 0")
    for name in ("frame_rate_hz", "clock_hz"):
        if getattr(scenario, name) is not None and not getattr(scenario, name) > 0:
            raise InputError("an impossible value", column=name, expected="above 0")
    if not -10 <= scenario.eccentricity_deg <= 10:
        raise InputError("an impossible value", column="eccentricity_deg", expected="-10 to 10 degrees")
    for name in ("cdm", "cds"):
        if not getattr(scenario, name) or set(getattr(scenario, name)) - {"0", "1"}:
            raise InputError("not a pattern of bits", column=name, expected='such as "0" or "0011"')
    for number, fault in enumerate(scenario.faults):
        check(fault, sheet, number)
