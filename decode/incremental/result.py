"""Everything the incremental lines told, as tables and distributions, after a capture is over."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from decode.anomalies import Anomalies
from decode.distribution import Distribution
from decode.incremental.index import IndexReading
from decode.incremental.widths import ANGLE_QUANTUM_DEG, CLASSES, ByClass, Widths
from decode.sheet import Incremental
from decode.spans import BoolArray, FloatArray, IntArray

SPEED_QUANTUM_RPM = 0.01
COUNT_QUANTUM = 0.01

_UP, _DOWN = range(0, CLASSES, 2), range(1, CLASSES, 2)
_A_HIGH, _B_HIGH = (2, 5), (4, 7)
"""Classes of the edge in the middle of A high and of B high: one for each direction."""


@dataclass(frozen=True, slots=True, eq=False)
class IndexTable:
    """One row a whole index pulse, in order of time.

    rise_ticks, fall_ticks: (n,). rise_counts, fall_counts: (n,) places between edges, in counts, by the steps without
    short pulses. rise_direction, fall_direction: (n,) -1, 0 or 1. rise_state, high_state, fall_state: (n,) place in
    `decode.incremental.quadrature.CYCLE`, -1 unknown; high is the state that fills most of the pulse. width_counts:
    (n,). turned: (n,) the shaft turned back inside the pulse, or A and B tell nothing around it. role: (n,) "index",
    "extra", "misplaced" or "". position_counts: (n,) counts beside its place, from the first index, modulo a turn;
    NaN where it has none.
    """

    rise_ticks: IntArray
    fall_ticks: IntArray
    rise_counts: FloatArray
    fall_counts: FloatArray
    rise_direction: IntArray
    fall_direction: IntArray
    rise_state: IntArray
    high_state: IntArray
    fall_state: IntArray
    width_counts: FloatArray
    turned: BoolArray
    role: list[str]
    position_counts: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Turns:
    """One row a complete turn, index to index one way: start_ticks, stop_ticks, direction, counts, each (n,)."""

    start_ticks: IntArray
    stop_ticks: IntArray
    direction: IntArray
    counts: IntArray


@dataclass(frozen=True, slots=True, eq=False)
class IncrementalResult:
    """What the incremental lines told.

    edges: edges of A and B. net_counts: plain four-count total, from 0 at the start. illegal: steps in which both
    lines changed, as a plain counter meets them. x1_naive: what a counter of A's rising edges makes of it.
    x4_without_short_pulses: the four-count total with pulses shorter than `short_pulse_ticks` (None: cannot be told)
    dropped. counts_per_turn: whole number used for mechanical angles, measured where the sheet is silent or every
    turn contradicts it, None where unknown. index_pulses: whole pulses and those an end of the capture cuts;
    index_partial: the latter alone. index_state_seen, index_state_expected: the A/B state in which the index is high;
    index_state_fits: seen lies within expected, None where one of them is unknown. fastest_cycle_ticks,
    mean_cycle_ticks: of one cycle of A/B, None without one. One tick is so many electrical degrees: 360 over it.
    distributions: by measurement; `edge_spacing_s` in ticks, the others in their unit. Mechanical angles and speed
    are left empty where the counts in a turn are unknown. by_direction: the same for 1 (counting up) and -1.
    by_state: width of each of the four states (place in the cycle, direction).
    """

    edges: int
    net_counts: int
    illegal: int
    x1_naive: int
    x4_without_short_pulses: int
    short_pulse_ticks: float | None
    counts_per_turn: int | None
    index_pulses: int
    index_partial: int
    index_state_seen: str | None
    index_state_expected: str | None
    index_state_fits: bool | None
    fastest_cycle_ticks: int | None
    mean_cycle_ticks: float | None
    distributions: dict[str, Distribution]
    by_direction: dict[int, dict[str, Distribution]]
    by_state: dict[tuple[int, int], Distribution]
    index: IndexTable | None
    turns: Turns
    anomalies: list[Anomalies] = field(default_factory=list)


def assemble(
    sheet: Incremental,
    tick_s: float,
    widths: Widths,
    reading: IndexReading | None,
    anomalies: list[Anomalies],
    *,
    edges: int,
    net_counts: int,
    illegal: int,
    x1_naive: int,
    x4_without_short_pulses: int,
    short_pulse_ticks: float | None,
) -> IncrementalResult:
    """Put the parts of a decoded capture together."""
    turn = reading.turn if reading is not None else sheet.counts_per_turn
    rpm = None if turn is None else 240 / (turn * tick_s)
    by_direction = {
        way: _electrical(widths, classes, turn, rpm) | _of_index(reading, turn, way)
        for way, classes in ((1, _UP), (-1, _DOWN))
    }
    pooled = _electrical(widths, range(CLASSES), turn, rpm) | _of_index(reading, turn, None)
    cycle = widths.cycle.of(1.0, *range(CLASSES))
    return IncrementalResult(
        edges=edges,
        net_counts=net_counts,
        illegal=illegal,
        x1_naive=x1_naive,
        x4_without_short_pulses=x4_without_short_pulses,
        short_pulse_ticks=short_pulse_ticks,
        counts_per_turn=turn,
        index_pulses=0 if reading is None else len(reading.role) + reading.partial,
        index_partial=0 if reading is None else reading.partial,
        index_state_seen=None if reading is None else reading.state_seen,
        index_state_expected=None if reading is None else reading.state_expected,
        index_state_fits=None if reading is None else reading.state_fits,
        fastest_cycle_ticks=int(cycle.values[0]) if cycle.n else None,
        mean_cycle_ticks=int((cycle.values * cycle.counts).sum()) / cycle.n if cycle.n else None,
        distributions=pooled,
        by_direction=by_direction,
        by_state={(one >> 1, -1 if one & 1 else 1): widths.state.of(ANGLE_QUANTUM_DEG, one) for one in range(CLASSES)},
        index=None if reading is None else _index_table(reading),
        turns=_turns(reading),
        anomalies=anomalies,
    )


def _electrical(widths: Widths, classes: range, turn: int | None, rpm: float | None) -> dict[str, Distribution]:
    mechanical = ANGLE_QUANTUM_DEG * 4 / turn if turn is not None else 1.0
    known = classes if turn is not None else range(0)
    return {
        "edge_spacing_s": widths.spacing.of(1.0, *classes),
        "state_width_deg": widths.state.of(ANGLE_QUANTUM_DEG, *classes),
        "pulse_width_a_deg": widths.pulse.of(ANGLE_QUANTUM_DEG, *(one for one in classes if one in _A_HIGH)),
        "pulse_width_b_deg": widths.pulse.of(ANGLE_QUANTUM_DEG, *(one for one in classes if one in _B_HIGH)),
        "phase_deg": widths.phase.of(ANGLE_QUANTUM_DEG, *classes),
        "edge_error_deg": widths.error.of(mechanical, *known),
        "edge_jitter_deg": _jitter(widths.error, mechanical, known),
        "speed_rpm": _speed(widths.cycle, rpm, classes),
    }


def _jitter(errors: ByClass, quantum: float, classes: range) -> Distribution:
    """Edge errors, each class moved by its own mean (to the nearest quantum)."""
    pooled = Distribution(quantum)
    for one in classes:
        here = errors.of(quantum, one)
        if here.n:
            mean = int((here.values * here.counts).sum()) / here.n
            pooled.add_counted(here.values - round(mean), here.counts)
    return pooled


def _speed(cycles: ByClass, rpm: float | None, classes: range) -> Distribution:
    """Cycle times as signed speeds; rpm is the speed at one tick a cycle."""
    speeds = Distribution(SPEED_QUANTUM_RPM)
    if rpm is None:
        return speeds
    for one in classes:
        here = cycles.of(1.0, one)
        signed = -rpm if one & 1 else rpm
        rounded = np.rint(signed / here.values / SPEED_QUANTUM_RPM).astype(np.int64)
        distinct, where = np.unique(rounded, return_inverse=True)
        counts = np.zeros(distinct.size, np.int64)
        np.add.at(counts, where, here.counts)
        speeds.add_counted(distinct, counts)
    return speeds


def _of_index(reading: IndexReading | None, turn: int | None, way: int | None) -> dict[str, Distribution]:
    """The index's figures; `way` None for both directions."""
    per_turn = Distribution(1.0)
    width = Distribution(COUNT_QUANTUM)
    degrees = 360 / turn * COUNT_QUANTUM if turn is not None else 1.0
    position, repeatability = Distribution(degrees), Distribution(degrees)
    if reading is not None:
        pulses = reading.pulses
        per_turn.add([counts for _, _, direction, counts in reading.turns if way in (None, direction)])
        in_place = np.array([role == "index" for role in reading.role], np.bool_) & pulses.passed
        for one in (1, -1) if way is None else (way,):
            here = pulses.rise_direction == one
            width.add_rounded(pulses.width[in_place & here])
            offsets = reading.offset[here & ~np.isnan(reading.offset)]
            if offsets.size:
                position.add(np.rint(offsets / COUNT_QUANTUM).astype(np.int64))
                repeatability.add(np.rint((offsets - offsets.mean()) / COUNT_QUANTUM).astype(np.int64))
    return {
        "counts_per_turn": per_turn,
        "index_width_counts": width,
        "index_position_deg": position,
        "index_repeatability_deg": repeatability,
    }


def _index_table(reading: IndexReading) -> IndexTable:
    pulses = reading.pulses
    return IndexTable(
        pulses.rise,
        pulses.fall,
        pulses.rise_place,
        pulses.fall_place,
        pulses.rise_direction.astype(np.int64),
        pulses.fall_direction.astype(np.int64),
        pulses.rise_state.astype(np.int64),
        pulses.high_state,
        pulses.fall_state.astype(np.int64),
        pulses.width,
        ~pulses.passed,
        reading.role,
        reading.offset,
    )


def _turns(reading: IndexReading | None) -> Turns:
    rows = reading.turns if reading is not None else []
    return Turns(*np.array(rows, np.int64).reshape(-1, 4).T)
