"""The measurements, as a table: the code, the messages and docs/measurements.md all read it."""

from __future__ import annotations

from typing import NamedTuple


class Definition(NamedTuple):
    """What one measurement is.

    role: the line it belongs to, or "" where it is about several. unit: as in the report. meaning: its definition.
    source: where that definition comes from.
    """

    name: str
    role: str
    unit: str
    meaning: str
    source: str


_COMMON = "common practice, no source"
_OPTICAL = "incremental optical encoder data-sheet definitions (Agilent HEDS/HEDT-5140 definitions page)"
_JITTER = "JEDEC JESD65B as restated in SiTime AN10007"

_TABLE = (
    Definition(
        "clock_frequency_hz",
        "clock",
        "Hz",
        "one over the time between two clock edges of the same direction within a burst",
        _COMMON,
    ),
    Definition("clock_high_s", "clock", "s", "time the clock is high between two edges of a burst", _COMMON),
    Definition("clock_low_s", "clock", "s", "time the clock is low between two edges of a burst", _COMMON),
    Definition(
        "clock_period_jitter_s",
        "clock",
        "s",
        "a clock period within a burst minus the mean period of the capture",
        _JITTER,
    ),
    Definition(
        "data_delay_s",
        "data",
        "s",
        "from the clock edge that drives a bit to the change of the data line it causes",
        _COMMON,
    ),
    Definition(
        "setup_time_s",
        "data",
        "s",
        "from the last change of the data line to the instant at which the bit is sampled",
        _COMMON,
    ),
    Definition(
        "hold_time_s",
        "data",
        "s",
        "from the instant at which a bit is sampled to the next change of the data line",
        _COMMON,
    ),
    Definition(
        "acknowledge_time_s",
        "data",
        "s",
        "biss-c: from the second rising clock edge to the start bit's rising edge, less the data delay "
        "common to both: how long the encoder held the line low",
        "Renishaw data sheet L-9709-9005; Beckhoff EP7041-4032 documentation",
    ),
    Definition("frame_period_s", "clock", "s", "from the first clock edge of a frame to that of the next", _COMMON),
    Definition(
        "frame_period_jitter_s",
        "clock",
        "s",
        "a frame period minus the mean period; periods over a missing frame are left out",
        _JITTER,
    ),
    Definition("frame_duration_s", "clock", "s", "from the first to the last clock edge of a burst", _COMMON),
    Definition(
        "timeout_s",
        "data",
        "s",
        "from the last clock edge that the encoder counts to the data line's return to high: the monoflop "
        "time (ssi, from the last falling edge) or the time-out (biss-c, from the last rising edge)",
        "TR-Electronic TR-ECE-BA-DGB-0141; Baumer, Absolute encoders with BiSS C interface",
    ),
    Definition("idle_time_s", "clock", "s", "from the last clock edge of a burst to the first of the next", _COMMON),
    Definition("edge_spacing_s", "", "s", "between two successive edges of A and B, whichever line", _COMMON),
    Definition(
        "state_width_deg",
        "",
        "deg",
        "electrical degrees between an edge of A and the neighbouring edge of B, 90 nominal",
        _OPTICAL,
    ),
    Definition(
        "pulse_width_a_deg", "a", "deg", "electrical degrees that A is high in one cycle, 180 nominal", _OPTICAL
    ),
    Definition(
        "pulse_width_b_deg", "b", "deg", "electrical degrees that B is high in one cycle, 180 nominal", _OPTICAL
    ),
    Definition(
        "phase_deg",
        "",
        "deg",
        "electrical degrees from the centre of A high to the centre of B high, 90 nominal",
        _OPTICAL,
    ),
    Definition(
        "counts_per_turn",
        "",
        "counts",
        "counts from one index to the next in the same direction, or between two wraps of the serial "
        "position where there is no index",
        'US Digital glossary, "Cycle"',
    ),
    Definition("index_width_counts", "index", "counts", "counts for which the index is high", _OPTICAL),
    Definition(
        "index_position_deg",
        "index",
        "deg",
        "mechanical angle of the middle of the index pulse: by the serial position where there is one, "
        "else by the count from the first index",
        _COMMON,
    ),
    Definition(
        "index_repeatability_deg",
        "index",
        "deg",
        "an index position minus the mean of those in the same direction",
        _COMMON,
    ),
    Definition("speed_rpm", "", "rpm", "speed over one cycle of A/B, sign as the count", _COMMON),
    Definition(
        "edge_error_deg",
        "",
        "deg",
        "mechanical angle between an edge and the place midway between the edges half a cycle before and after it",
        _COMMON,
    ),
    Definition(
        "edge_jitter_deg",
        "",
        "deg",
        "edge error minus the mean edge error of the same of the four edges in the same direction",
        _COMMON,
    ),
    Definition(
        "residual_deg",
        "",
        "deg",
        "serial position minus counted position at the latch, after offset, direction and latency",
        _COMMON,
    ),
    Definition(
        "latency_s",
        "",
        "s",
        "age of the serial position at its latch edge: slope of the difference over speed",
        _COMMON,
    ),
    Definition("scale_error", "", "1", "counts in one serial turn over the sheet's counts per turn, minus 1", _COMMON),
    Definition(
        "angle_error_deg",
        "",
        "deg",
        "largest mean residual over the turn, angle by angle: the part that repeats every turn",
        _COMMON,
    ),
    Definition(
        "angle_jitter_deg",
        "",
        "deg",
        "residual minus the mean residual at the same angle: the part that does not repeat",
        _COMMON,
    ),
)

MEASUREMENTS: dict[str, Definition] = {definition.name: definition for definition in _TABLE}
