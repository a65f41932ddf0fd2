"""Every measurement of the table, from what the machines gave.

The uncertainty of an interval is the capture's sampling step: either end may lie a step's part off, and both errors
together never exceed one step (in a ratio of intervals, relatively). What a capture cannot give is a measurement
without numbers, with the reason.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from decode.agreement.turns import count_turns
from decode.distribution import Distribution
from decode.judgement.assessment import measured, missing, single
from decode.judgement.evidence import Evidence, positions_per_turn
from decode.judgement.limits import Scale, limits_for
from decode.judgement.records import Limit, Measurement
from decode.spans import FloatArray, IntArray

TOO_COARSE = "too few samples per period or state"
COVERAGE = 3.0
"""Standard uncertainties of a fit that its stated uncertainty covers (JCGM 100:2008, 6.2, from memory)."""

_SERIAL_TIMES = (
    ("clock_high_s", "clock"),
    ("clock_low_s", "clock"),
    ("data_delay_s", "data"),
    ("setup_time_s", "data"),
    ("hold_time_s", "data"),
    ("acknowledge_time_s", "data"),
    ("frame_duration_s", "clock"),
    ("timeout_s", "data"),
    ("idle_time_s", "clock"),
)
_ELECTRICAL = ("state_width_deg", "pulse_width_a_deg", "pulse_width_b_deg", "phase_deg")


def measurements(evidence: Evidence, coarse: list[str]) -> list[Measurement]:
    """Every measurement that the capture's lines have; `coarse` names the roles sampled too coarsely."""
    limits = limits_for(evidence.sheet, _scale(evidence))
    found: list[Measurement] = []
    if evidence.serial is not None:
        found += _serial(evidence, limits, TOO_COARSE if "clock" in coarse else None)
    if evidence.incremental is not None:
        found += _incremental(evidence, limits, TOO_COARSE if "a" in coarse else None)
    if evidence.agreement is not None:
        found += _agreement(evidence, limits)
    return found


def _scale(evidence: Evidence) -> Scale:
    clock = stated = coarser = None
    turn = evidence.counts_per_turn()
    serial = evidence.sheet.serial
    if evidence.serial is not None and serial is not None:
        periods = evidence.serial.timings["clock_period"]
        clock = periods.percentile(50) * evidence.capture.tick_s if periods.n else None
        stated = None if serial.frame_rate_hz is None else 1 / serial.frame_rate_hz
        if turn is not None and serial.position_bits:
            coarser = 360.0 / min(turn, positions_per_turn(serial))
    return Scale(clock, stated, turn, coarser)


def expanded(standard: float | None, step: float = 0.0) -> float:
    """The uncertainty stated for a fitted figure: its coverage, and at least the sampling step."""
    return max(COVERAGE * (standard or 0.0), step)


def _ones(values: FloatArray | IntArray) -> tuple[FloatArray, IntArray]:
    return np.asarray(values, np.float64), np.ones(values.size, np.int64)


# ---- serial -------------------------------------------------------------------------------------------------------


def _serial(evidence: Evidence, limits: dict[str, Limit], spoilt: str | None) -> Iterator[Measurement]:
    assert evidence.serial is not None and evidence.sheet.serial is not None
    timings, capture, lines = evidence.serial.timings, evidence.capture, evidence.lines
    tick, step = capture.tick_s, capture.step_s
    clock = lines["clock"]
    periods = timings["clock_period"]
    seconds = np.asarray(periods.in_unit() * tick, np.float64)
    if periods.n:
        usual = periods.percentile(50) * tick
        yield measured(
            "clock_frequency_hz",
            clock,
            1 / seconds,
            periods.counts,
            uncertainty=step / usual**2,
            limit=limits.get("clock_frequency_hz"),
            spoilt=spoilt,
        )
        yield measured(
            "clock_period_jitter_s",
            clock,
            seconds - np.average(seconds, weights=periods.counts),
            periods.counts,
            uncertainty=step,
            limit=limits.get("clock_period_jitter_s"),
            spoilt=spoilt,
        )
    else:
        for name in ("clock_frequency_hz", "clock_period_jitter_s"):
            yield missing(name, clock, limits.get(name), "no burst of the clock was seen")
    for name, role in _SERIAL_TIMES:
        if name == "acknowledge_time_s" and evidence.sheet.serial.interface != "biss-c":
            continue
        if name == "timeout_s" and evidence.sheet.serial.interface == "spi":
            continue
        yield measured(
            name,
            lines[role],
            timings[name].in_unit() * tick,
            timings[name].counts,
            uncertainty=step,
            limit=limits.get(name),
            spoilt=spoilt,
        )
    periods_s = np.asarray(evidence.serial.cadence.steps * tick, np.float64)
    yield measured("frame_period_s", clock, *_ones(periods_s), uncertainty=step, limit=limits.get("frame_period_s"))
    jitter = np.asarray(periods_s - (periods_s.mean() if periods_s.size else 0.0), np.float64)
    yield measured(
        "frame_period_jitter_s", clock, *_ones(jitter), uncertainty=step, limit=limits.get("frame_period_jitter_s")
    )


# ---- incremental --------------------------------------------------------------------------------------------------


def _incremental(evidence: Evidence, limits: dict[str, Limit], spoilt: str | None) -> Iterator[Measurement]:
    result, capture = evidence.incremental, evidence.capture
    assert result is not None
    told = result.distributions
    turn = evidence.counts_per_turn()
    fastest = result.fastest_cycle_ticks
    electrical = 360.0 * capture.grid / fastest if fastest else 0.0
    mechanical = electrical * 4 / turn if turn else 0.0

    def of(name: str, line: str | None, uncertainty: float, scale: float = 1.0) -> Measurement:
        one = told[name]
        return measured(
            name,
            line,
            one.in_unit() * scale,
            one.counts,
            uncertainty=max(uncertainty, 0.5 * one.quantum * scale),
            limit=limits.get(name),
            spoilt=spoilt,
        )

    yield of("edge_spacing_s", None, capture.step_s, capture.tick_s)
    for name, role in zip(_ELECTRICAL, (None, "a", "b", None), strict=True):
        yield of(name, None if role is None else evidence.lines[role], electrical)
    yield _counts_per_turn(evidence, limits.get("counts_per_turn"))
    index = evidence.lines.get("index")
    if index is not None:
        yield of("index_width_counts", index, 4 * capture.grid / fastest if fastest else 0.0)
        yield _index_position(evidence, index, limits.get("index_position_deg"), mechanical)
        yield of("index_repeatability_deg", index, mechanical)
    fastest_rpm = np.abs(told["speed_rpm"].in_unit()).max(initial=0.0)
    yield of("speed_rpm", None, fastest_rpm * capture.grid / fastest if fastest else 0.0)
    yield of("edge_error_deg", None, mechanical)
    yield of("edge_jitter_deg", None, mechanical)


def turns_counted(evidence: Evidence) -> tuple[FloatArray, str | None]:
    """Counts of every complete turn seen: by the index, else by the serial position; and why there are none."""
    result = evidence.incremental
    assert result is not None
    by_index: Distribution = result.distributions["counts_per_turn"]
    if by_index.n:
        return np.repeat(by_index.in_unit(), by_index.counts), None
    agreement, joined = evidence.agreement, evidence.joined
    if agreement is not None and joined is not None and agreement.serial_turns is not None:
        counts = count_turns(agreement.serial_turns, joined.counted).counts
        if counts.size:
            return _whole_counts(counts, evidence), None
    return np.empty(0), "no complete turn in the capture"


def _whole_counts(counts: FloatArray, evidence: Evidence) -> FloatArray:
    """A turn has a whole number of counts; rounded where the serial position is fine enough to tell which."""
    serial, turn = evidence.sheet.serial, evidence.counts_per_turn()
    fine = serial is not None and turn is not None and positions_per_turn(serial) >= 2 * turn
    return np.rint(counts) if fine else counts


def _counts_per_turn(evidence: Evidence, limit: Limit | None) -> Measurement:
    counts, reason = turns_counted(evidence)
    if reason is None:
        whole = bool(np.all(counts == np.rint(counts)))
        return measured("counts_per_turn", None, *_ones(counts), uncertainty=0.0 if whole else 1.0, limit=limit)
    agreement = evidence.agreement
    if limit is not None and agreement is not None and agreement.counts_per_turn is not None:
        uncertainty = 2 * (agreement.counts_per_turn_uncertainty or 0.0)
        if uncertainty < 0.5:
            return single("counts_per_turn", round(agreement.counts_per_turn), uncertainty=0.0, limit=limit)
    return missing("counts_per_turn", None, limit, reason)


def _index_position(evidence: Evidence, index: str, limit: Limit | None, mechanical: float) -> Measurement:
    """By the serial position where there is one, else by the count from the first index."""
    result, agreement, serial = evidence.incremental, evidence.agreement, evidence.serial
    assert result is not None
    told = result.distributions["index_position_deg"]
    table = result.index
    if table is None or agreement is None or serial is None or agreement.serial_turns is None:
        return measured(
            "index_position_deg",
            index,
            told.in_unit(),
            told.counts,
            uncertainty=max(mechanical, told.quantum),
            limit=limit,
        )
    usable = np.isfinite(agreement.serial_turns)
    usable[agreement.outliers] = False
    latency = (agreement.latency_s or 0.0) / evidence.capture.tick_s
    right = np.array([role == "index" for role in table.role], np.bool_) & ~table.turned
    middle = (table.rise_ticks[right] + table.fall_ticks[right]) / 2
    known = serial.frames.latch[usable].astype(np.float64) - latency
    inside = (middle >= known[0]) & (middle <= known[-1]) if known.size else np.zeros(middle.size, np.bool_)
    if not inside.any():
        return missing("index_position_deg", index, limit, "no index pulse among the frames")
    angle = 360.0 * np.interp(middle[inside], known, agreement.serial_turns[usable])
    step = 360.0 / positions_per_turn(evidence.sheet.serial) if evidence.sheet.serial is not None else 0.0
    return measured(
        "index_position_deg", index, *_ones(_gathered(angle)), uncertainty=max(step, mechanical), limit=limit
    )


def _gathered(angle: FloatArray) -> FloatArray:
    """Angles within a turn, kept together where they lie on both sides of zero."""
    within = np.mod(angle, 360.0)
    around = float(np.angle(np.exp(1j * np.deg2rad(within)).mean(), deg=True))
    return np.asarray(around + np.mod(within - around + 180.0, 360.0) - 180.0 + (360.0 if around < 0 else 0.0))


# ---- agreement ----------------------------------------------------------------------------------------------------


def _agreement(evidence: Evidence, limits: dict[str, Limit]) -> Iterator[Measurement]:
    agreement = evidence.agreement
    assert agreement is not None

    def absent(name: str, reason: str) -> Measurement:
        return missing(name, None, limits.get(name), agreement.reasons.get(reason, "the capture cannot tell"))

    if agreement.residual_deg is None:
        yield absent("residual_deg", "residual_deg")
    else:
        told = agreement.residual_deg.copy()
        told[agreement.outliers] = np.nan
        yield measured(
            "residual_deg",
            None,
            *_ones(told[np.isfinite(told)]),
            uncertainty=agreement.residual_uncertainty_deg or 0.0,
            limit=limits.get("residual_deg"),
        )
    if agreement.latency_s is None:
        yield absent("latency_s", "latency_s")
    else:
        yield single(
            "latency_s",
            agreement.latency_s,
            n=agreement.frames_used,
            uncertainty=expanded(agreement.latency_uncertainty_s, evidence.capture.step_s),
            limit=limits.get("latency_s"),
        )
    if agreement.scale_error is None:
        yield absent("scale_error", "scale_error")
    else:
        yield single(
            "scale_error",
            agreement.scale_error,
            n=agreement.frames_used,
            uncertainty=expanded(agreement.scale_error_uncertainty),
            limit=limits.get("scale_error"),
        )
    if agreement.angle_error is None:
        yield absent("angle_error_deg", "angle_error")
    else:
        error = agreement.angle_error
        yield measured(
            "angle_error_deg",
            None,
            *_ones(error.error_deg),
            limit=limits.get("angle_error_deg"),
            uncertainty=expanded(float(error.uncertainty_deg[error.largest])),
        )
    if agreement.jitter_deg is None:
        yield absent("angle_jitter_deg", "angle_error")
    else:
        jitter = agreement.jitter_deg[np.isfinite(agreement.jitter_deg)]
        yield measured(
            "angle_jitter_deg",
            None,
            *_ones(jitter),
            limit=limits.get("angle_jitter_deg"),
            uncertainty=agreement.residual_uncertainty_deg or 0.0,
        )
