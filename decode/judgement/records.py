"""The report as typed records: what every report, on screen or in a file, is made from.

Names and nesting are those of the JSON (schema "shaftproof.report/1"). Times are seconds on the capture's own
axis, angles degrees.
"""

from __future__ import annotations

from typing import Any, Literal

import msgspec

from decode.anomalies import Severity

Verdict = Literal["pass", "fail", "undecided"]
SCHEMA = "shaftproof.report/1"


class _Record(msgspec.Struct, frozen=True, kw_only=True):
    pass


class CaptureRecord(_Record, frozen=True, kw_only=True):
    """The file and how it was read. lines: column name by role."""

    file: str
    layout: str
    rows: int
    duration_s: float
    tick_s: float
    lines: dict[str, str]
    notes: list[str] = []


class SerialRecord(_Record, frozen=True, kw_only=True):
    """frames counts every burst the capture does not cut; missing ones stand beside, not among them."""

    interface: str
    frames: int
    good: int
    faulty: int
    missing: int
    error_rate: float | None
    error_rate_upper_95: float | None


class Totals(_Record, frozen=True, kw_only=True):
    """Three ways to count the same edges."""

    x4: int
    x1_naive: int
    x4_without_short_pulses: int
    short_pulse_s: float | None


class IncrementalRecord(_Record, frozen=True, kw_only=True):
    edges: int
    net_counts: int
    counts_per_turn: int | None
    turns_seen: int
    illegal: int
    index_pulses: int
    totals: Totals


class Step(_Record, frozen=True, kw_only=True):
    time_s: float
    counts: float


class AgreementRecord(_Record, frozen=True, kw_only=True):
    """latency_s is positive where the serial position is older than the count."""

    frames_used: int
    direction: int | None
    counts_per_turn: float | None
    offset_counts: float | None
    latency_s: float | None
    latency_uncertainty_s: float | None
    latency_note: str | None
    residual_rms_deg: float | None
    residual_peak_deg: float | None
    steps: list[Step] = []


class Limit(_Record, frozen=True, kw_only=True):
    min: float | None
    max: float | None
    source: str


class Measurement(_Record, frozen=True, kw_only=True):
    """One measured quantity; min to std and uncertainty are in `unit`. verdict is null without a limit."""

    name: str
    line: str | None
    unit: str
    n: int
    min: float | None
    median: float | None
    mean: float | None
    max: float | None
    std: float | None
    uncertainty: float | None
    limit: Limit | None = None
    verdict: Verdict | None = None
    reason: str | None = None


class Finding(_Record, frozen=True, kw_only=True):
    kind: str
    severity: Severity
    time_s: float
    frame: int | None = None
    line: str | None = None
    cause: str | None = None
    detail: str = ""
    evidence: dict[str, Any] = {}


class Alternative(_Record, frozen=True, kw_only=True):
    case: str
    why_not: str


class Diagnosis(_Record, frozen=True, kw_only=True):
    case: str
    sentence: str
    origin: Literal["settings", "encoder", "cable", "master", "analyser", "motion", "unknown"]
    confidence: Literal["certain", "likely", "possible"]
    evidence: dict[str, Any] = {}
    findings: list[int] = []
    instead_of: list[Alternative] = []


class Provenance(_Record, frozen=True, kw_only=True):
    version: str
    sheet: dict[str, Any]
    capture_digest: str
    command: str


class Report(_Record, frozen=True, kw_only=True):
    """A whole report. A part that the capture has no lines for is None."""

    schema: str = SCHEMA
    capture: CaptureRecord
    serial: SerialRecord | None
    incremental: IncrementalRecord | None
    agreement: AgreementRecord | None
    measurements: list[Measurement]
    findings: list[Finding]
    diagnosis: list[Diagnosis] = []
    next_capture: list[str] = []
    verdict: Verdict
    provenance: Provenance
