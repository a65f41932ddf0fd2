"""Reports written out as literals, one for each situation that a reader can be in. All tests of this room share them.

The numbers are made up, but fit together: 4096 counts a turn, 20000 frames at 10 kHz make 2 s, 0 errors in 20000
frames leave 3/20000 = 0.00015 (rule of three: 1 - 0.05 ** (1/n) is about 3/n).
"""

from __future__ import annotations

from msgspec.structs import replace

from decode.judgement.records import (
    AgreementRecord,
    Alternative,
    CaptureRecord,
    Diagnosis,
    Finding,
    IncrementalRecord,
    Limit,
    Measurement,
    Provenance,
    Report,
    SerialRecord,
    Step,
    Totals,
)

BISS_CLOCK = "Baumer, Absolute encoders with BiSS C interface"
SHEET = {
    "board": {"name": "Larkspur azimuth encoder"},
    "lines": {"clock": "MA", "data": "SLO", "a": "A", "b": "B", "index": "Z"},
    "serial": {"interface": "biss-c"},
    "incremental": {"cycles_per_turn": 1024},
}
CAPTURE = CaptureRecord(
    file="larkspur-healthy.csv",
    layout="time in s, then 5 levels; rows on every change",
    rows=1234567,
    duration_s=2.0,
    tick_s=1e-8,
    lines={"clock": "MA", "data": "SLO", "a": "A", "b": "B", "index": "Z"},
    notes=["the sheet larkspur-healthy.toml was taken because it stands beside the capture"],
)
SERIAL = SerialRecord(
    interface="biss-c",
    frames=20000,
    good=20000,
    faulty=0,
    missing=0,
    error_rate=0.0,
    error_rate_upper_95=0.00015,
)
INCREMENTAL = IncrementalRecord(
    edges=51400,
    net_counts=51400,
    counts_per_turn=4096,
    turns_seen=12,
    illegal=0,
    index_pulses=12,
    totals=Totals(x4=51400, x1_naive=12850, x4_without_short_pulses=51400, short_pulse_s=1e-6),
)
AGREEMENT = AgreementRecord(
    frames_used=19998,
    direction=1,
    counts_per_turn=4096.0,
    offset_counts=12.02,
    latency_s=1.23e-6,
    latency_uncertainty_s=5e-8,
    latency_note=None,
    residual_rms_deg=0.0254,
    residual_peak_deg=0.0439,
)


def measurement(
    name: str,
    unit: str,
    values: tuple[float, float, float],
    uncertainty: float,
    *,
    n: int = 20000,
    line: str | None = None,
    limit: Limit | None = None,
    verdict: str | None = None,
    reason: str | None = None,
) -> Measurement:
    """A measurement from its (min, median, max); mean and std are not what the screen shows."""
    low, median, high = values
    return Measurement(
        name=name,
        line=line,
        unit=unit,
        n=n,
        min=low,
        median=median,
        mean=median,
        max=high,
        std=uncertainty,
        uncertainty=uncertainty,
        limit=limit,
        verdict=verdict,  # type: ignore[arg-type]
        reason=reason,
    )


MEASUREMENTS = [
    measurement(
        "clock_frequency_hz",
        "Hz",
        (0.9804e6, 1e6, 1.0204e6),
        20e3,
        n=640000,
        line="MA",
        limit=Limit(min=62.5e3, max=10e6, source=BISS_CLOCK),
        verdict="pass",
    ),
    measurement("data_delay_s", "s", (104e-9, 110e-9, 120e-9), 10e-9, n=310000, line="SLO"),
    measurement("edge_spacing_s", "s", (31.2e-6, 38.91e-6, 44.6e-6), 10e-9, n=51399),
    measurement(
        "state_width_deg",
        "deg",
        (84.31, 90.0, 96.02),
        0.05,
        n=51390,
        limit=Limit(min=60.0, max=120.0, source="the sheet"),
        verdict="pass",
    ),
    measurement("counts_per_turn", "counts", (4096, 4096, 4096), 0, n=11),
    measurement("index_width_counts", "counts", (1, 1, 1), 0.02, n=12, line="Z"),
    measurement("index_position_deg", "deg", (123.39, 123.40, 123.41), 0.005, n=12, line="Z"),
    measurement("index_repeatability_deg", "deg", (-0.01, 0.0, 0.01), 0.005, n=12, line="Z"),
    measurement("scale_error", "1", (1.2e-5, 1.2e-5, 1.2e-5), 3e-6, n=1),
]
PROVENANCE = Provenance(
    version="0.1.0",
    sheet=SHEET,
    capture_digest="sha256:9f86d081884c7d659a2feaa0c55ad015a3bf4f1b2b0b822cd15d6c15b0f00a08",
    command="shaftproof check larkspur-healthy.csv",
)

GOOD = Report(
    capture=CAPTURE,
    serial=SERIAL,
    incremental=INCREMENTAL,
    agreement=AGREEMENT,
    measurements=MEASUREMENTS,
    findings=[],
    verdict="pass",
    provenance=PROVENANCE,
)

_FLIPPED = "bit 7 alone is wrong: with it flipped the CRC holds and the position fits its neighbours"
SICK = Report(
    capture=replace(
        CAPTURE, file="larkspur-sick.csv", notes=["2 rows without a number skipped", "time unit from name"]
    ),
    serial=SerialRecord(
        interface="biss-c",
        frames=19998,
        good=19994,
        faulty=4,
        missing=1,
        error_rate=4 / 19998,
        error_rate_upper_95=0.000458,
    ),
    incremental=replace(INCREMENTAL, illegal=1, index_pulses=13),
    agreement=replace(AGREEMENT, steps=[Step(time_s=0.5, counts=-4.0)]),
    measurements=[
        *MEASUREMENTS[:4],
        measurement("counts_per_turn", "counts", (4092, 4096, 4096), 0, n=11),
        *MEASUREMENTS[5:],
        measurement(
            "setup_time_s",
            "s",
            (20e-9, 380e-9, 400e-9),
            10e-9,
            n=310000,
            line="SLO",
            limit=Limit(min=100e-9, max=None, source="the sheet"),
            verdict="fail",
        ),
    ],
    findings=[
        # Out of the order of time on purpose: machines report one after the other.
        Finding(kind="crc_mismatch", severity="fault", time_s=1.5, frame=15000, line="SLO"),
        Finding(kind="crc_mismatch", severity="fault", time_s=0.12345678, frame=1234, line="SLO", cause=_FLIPPED),
        Finding(kind="crc_mismatch", severity="fault", time_s=1.25, frame=12500, line="SLO"),
        Finding(kind="crc_mismatch", severity="fault", time_s=1.75, frame=17500, line="SLO"),
        Finding(kind="frame_missing", severity="fault", time_s=0.7, line="MA"),
        Finding(kind="offset_step", severity="fault", time_s=0.5, evidence={"counts": -4}),
        Finding(kind="warning_flag", severity="warning", time_s=0.9, frame=9000),
        Finding(kind="time_gap", severity="note", time_s=0.001),
    ],
    next_capture=["capture the same turn with the drive disabled"],
    verdict="fail",
    provenance=PROVENANCE,
)

UNDECIDED = Report(
    capture=replace(CAPTURE, file="larkspur-short.csv", duration_s=0.05),
    serial=replace(SERIAL, frames=500, good=500, error_rate_upper_95=0.006),
    incremental=replace(INCREMENTAL, edges=1200, counts_per_turn=None, turns_seen=0, index_pulses=1),
    agreement=replace(
        AGREEMENT,
        frames_used=500,
        latency_s=None,
        latency_uncertainty_s=None,
        latency_note="not separable: the speed varied too little",
    ),
    measurements=[
        *MEASUREMENTS[:3],
        Measurement(
            name="counts_per_turn",
            line=None,
            unit="counts",
            n=0,
            min=None,
            median=None,
            mean=None,
            max=None,
            std=None,
            uncertainty=None,
            limit=Limit(min=4096, max=4096, source="the sheet"),
            verdict="undecided",
            reason="no whole turn was seen",
        ),
    ],
    findings=[],
    next_capture=["turn the shaft by at least three turns in each direction"],
    verdict="undecided",
    provenance=PROVENANCE,
)

INCREMENTAL_ONLY = Report(
    capture=replace(CAPTURE, file="abz.csv", lines={"a": "A", "b": "B", "index": "Z"}, notes=[]),
    serial=None,
    incremental=replace(INCREMENTAL, counts_per_turn=1024),
    agreement=None,
    measurements=[
        MEASUREMENTS[2],
        MEASUREMENTS[3],
        measurement("counts_per_turn", "counts", (1024, 1024, 1024), 0, n=11),
    ],
    findings=[],
    verdict="pass",
    provenance=PROVENANCE,
)

SERIAL_ONLY = Report(
    capture=replace(CAPTURE, file="ssi.csv", lines={"clock": "CLK", "data": "DATA"}),
    serial=replace(SERIAL, interface="ssi"),
    incremental=None,
    agreement=None,
    measurements=MEASUREMENTS[:2],
    findings=[],
    verdict="pass",
    provenance=replace(PROVENANCE, sheet={}),
)

UNPLUGGED = Report(
    capture=replace(CAPTURE, file="unplugged.csv", rows=3, duration_s=0.0, tick_s=1e-6),
    serial=replace(SERIAL, frames=0, good=0, missing=7, error_rate=None, error_rate_upper_95=None),
    incremental=replace(INCREMENTAL, edges=0, net_counts=0, counts_per_turn=None, turns_seen=0, index_pulses=0),
    agreement=replace(AGREEMENT, frames_used=0, direction=None, offset_counts=None, latency_s=None),
    measurements=[],
    findings=[Finding(kind="line_stuck", severity="fault", time_s=0.0, line="SLO")]
    + [Finding(kind="frame_missing", severity="fault", time_s=0.0001 * i) for i in range(7)],
    diagnosis=[
        Diagnosis(
            case="unplugged",
            sentence="nothing is connected to the data line",
            origin="cable",
            confidence="likely",
            findings=[0],
            instead_of=[Alternative(case="zero_position", why_not="no data edge inside any burst")],
        )
    ],
    verdict="fail",
    provenance=PROVENANCE,
)

ALL = {
    "good": GOOD,
    "sick": SICK,
    "undecided": UNDECIDED,
    "incremental_only": INCREMENTAL_ONLY,
    "serial_only": SERIAL_ONLY,
    "unplugged": UNPLUGGED,
}
