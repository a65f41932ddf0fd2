"""The limits a measurement is held against where the sheet is silent, each with its source.

Most of them belong to one maker's device or to common practice; a sheet's [limits] replaces any of them.
"""

from __future__ import annotations

from dataclasses import dataclass

from decode.judgement.records import Limit
from decode.sheet import Sheet

_PRACTICE = "common practice, no source"

PUBLISHED: dict[str, dict[str, Limit]] = {
    "ssi": {
        "clock_frequency_hz": Limit(
            min=50e3,
            max=2e6,
            source="ASM58 absolute encoder data sheet (50 kHz); Beckhoff EL5042 documentation (2 MHz)",
        ),
    },
    "biss-c": {
        "clock_frequency_hz": Limit(
            min=62.5e3, max=10e6, source="Microchip digital-signal-controller data sheet, BiSS chapter"
        ),
        "timeout_s": Limit(
            min=None, max=40e-6, source="Baumer, Absolute encoders with BiSS C interface V1.00, chapter 5"
        ),
    },
    "spi": {},
    "incremental": {
        "state_width_deg": Limit(min=45.0, max=135.0, source=_PRACTICE),
        "pulse_width_a_deg": Limit(min=108.0, max=252.0, source="US Digital EM2 module page"),
        "pulse_width_b_deg": Limit(min=108.0, max=252.0, source="US Digital EM2 module page"),
        "phase_deg": Limit(min=45.0, max=135.0, source="US Digital EM2 module page"),
    },
    "agreement": {
        "latency_s": Limit(min=None, max=40e-6, source="Texas Instruments motor-control-sdk, longest processing time"),
    },
}
"""Limits by interface or part, then by measurement."""

LEAST_SETUP_PERIODS = 0.1
"""Setup time the sampling edge needs, in clock periods (common practice, no source)."""

FRAME_JITTER = 0.05
"""How far a frame period may lie from the stated one, as a part of it (common practice, no source)."""

COARSER_UNITS = 2.0
"""Largest residual, in units of the coarser of both positions (common practice, no source)."""


@dataclass(frozen=True, slots=True)
class Scale:
    """What this capture's limits that are relative are relative to; None where there is no such thing.

    clock_period_s, stated_frame_period_s: seconds. counts_per_turn: the sheet's. coarser_deg: the larger of one count
    and one step of the serial position, mechanical degrees.
    """

    clock_period_s: float | None = None
    stated_frame_period_s: float | None = None
    counts_per_turn: int | None = None
    coarser_deg: float | None = None


def limits_for(sheet: Sheet, scale: Scale) -> dict[str, Limit]:
    """Every limit that applies, by measurement: the published ones, the sheet's statements, then its [limits]."""
    limits: dict[str, Limit] = {}
    if sheet.serial is not None:
        limits |= PUBLISHED[sheet.serial.interface]
    if sheet.incremental is not None:
        limits |= PUBLISHED["incremental"] | _stated(sheet)
    if sheet.serial is not None and sheet.incremental is not None:
        limits |= PUBLISHED["agreement"]
    limits |= _relative(scale)
    for name in sheet.limits:
        low, high = sheet.limit(name) or (None, None)
        limits[name] = Limit(min=low, max=high, source=f"sheet, limits.{name}")
    return limits


def _stated(sheet: Sheet) -> dict[str, Limit]:
    assert sheet.incremental is not None
    limits = {}
    counts, width = sheet.incremental.counts_per_turn, sheet.incremental.index_width_counts
    if counts is not None:
        limits["counts_per_turn"] = Limit(min=counts, max=counts, source="sheet, incremental.cycles_per_turn times 4")
        limits["scale_error"] = Limit(min=-0.5 / counts, max=0.5 / counts, source="half a count in a turn")
    if width is not None:
        slack = max(0.5, 0.25 * width)
        limits["index_width_counts"] = Limit(
            min=width - slack, max=width + slack, source="sheet, incremental.index_width_counts, half a count or 25 %"
        )
    return limits


def _relative(scale: Scale) -> dict[str, Limit]:
    limits = {}
    if scale.clock_period_s is not None:
        least = LEAST_SETUP_PERIODS * scale.clock_period_s
        limits["setup_time_s"] = Limit(min=least, max=None, source=f"a tenth of the clock period; {_PRACTICE}")
    if scale.stated_frame_period_s is not None:
        most = FRAME_JITTER * scale.stated_frame_period_s
        limits["frame_period_jitter_s"] = Limit(min=-most, max=most, source=f"5 % of the period; {_PRACTICE}")
    if scale.counts_per_turn is not None:
        count = 360.0 / scale.counts_per_turn
        limits["index_repeatability_deg"] = Limit(min=-count, max=count, source=f"one count; {_PRACTICE}")
    if scale.coarser_deg is not None:
        most = COARSER_UNITS * scale.coarser_deg
        limits["residual_deg"] = Limit(min=-most, max=most, source=f"two of the coarser unit; {_PRACTICE}")
    return limits
