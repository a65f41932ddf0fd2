"""Evidence to a report."""

from __future__ import annotations

import msgspec
import numpy as np

from decode.anomalies import Anomalies
from decode.judgement.assessment import upper_bound_95
from decode.judgement.evidence import Evidence, modulus, positions_per_turn
from decode.judgement.faults import docket, too_coarse
from decode.judgement.findings import findings_of
from decode.judgement.folding import Docket
from decode.judgement.measuring import expanded, measurements, turns_counted
from decode.judgement.records import (
    AgreementRecord,
    CaptureRecord,
    Finding,
    IncrementalRecord,
    Measurement,
    Provenance,
    Report,
    SerialRecord,
    Step,
    Totals,
    Verdict,
)


def judge(evidence: Evidence, *, version: str, command: str) -> Report:
    """The report on one capture."""
    measured = measurements(evidence, too_coarse(evidence))
    sorted_out = docket(evidence, measured)
    found = findings_of(sorted_out.anomalies, evidence.capture.tick_s)
    return Report(
        capture=_capture(evidence, sorted_out),
        serial=_serial(evidence, sorted_out.anomalies),
        incremental=_incremental(evidence),
        agreement=_agreement(evidence),
        measurements=measured,
        findings=found,
        next_capture=_next(evidence, measured, found),
        verdict=_verdict(measured, found),
        provenance=Provenance(
            version=version,
            sheet=msgspec.to_builtins(evidence.sheet),
            capture_digest=evidence.capture.digest,
            command=command,
        ),
    )


def _verdict(measured: list[Measurement], found: list[Finding]) -> Verdict:
    verdicts = {one.verdict for one in measured}
    if "fail" in verdicts or any(one.severity == "fault" for one in found):
        return "fail"
    return "undecided" if "undecided" in verdicts else "pass"


def _capture(evidence: Evidence, sorted_out: Docket) -> CaptureRecord:
    capture = evidence.capture
    notes = list(capture.notes)
    if evidence.serial is not None:
        notes += evidence.serial.notes
    if evidence.agreement is not None:
        notes += evidence.agreement.notes
    sheet = evidence.sheet.serial
    if sheet is not None and sheet.position_bits == 0:
        notes.append("no field is named position, so nothing is compared with the count and no jump can be found")
    if sorted_out.withdrawn:
        told = ", ".join(f"{number} {kind}" for kind, number in sorted(sorted_out.withdrawn.items()))
        notes.append(f"not listed, since they follow from what is: {told}")
    return CaptureRecord(
        file=capture.file,
        layout=capture.layout,
        rows=capture.rows,
        duration_s=(capture.last - capture.first) * capture.tick_s,
        tick_s=capture.step_s,
        lines=evidence.lines,
        notes=notes,
    )


def _serial(evidence: Evidence, anomalies: list[Anomalies]) -> SerialRecord | None:
    if evidence.serial is None or evidence.sheet.serial is None:
        return None
    frames = len(evidence.serial.frames)
    faulty = int(np.count_nonzero(evidence.serial.frames.kind))
    missing = sum(len(one) for one in anomalies if one.kind == "frame_missing")
    return SerialRecord(
        interface=evidence.sheet.serial.interface,
        frames=frames,
        good=frames - faulty,
        faulty=faulty,
        missing=missing,
        error_rate=faulty / frames if frames else None,
        error_rate_upper_95=upper_bound_95(faulty, frames),
    )


def _incremental(evidence: Evidence) -> IncrementalRecord | None:
    result = evidence.incremental
    if result is None:
        return None
    counts, _ = turns_counted(evidence)
    median = float(np.median(counts)) if counts.size else None
    short = result.short_pulse_ticks
    return IncrementalRecord(
        edges=result.edges,
        net_counts=result.net_counts,
        counts_per_turn=int(median) if median is not None and median.is_integer() else None,
        turns_seen=counts.size,
        illegal=result.illegal,
        index_pulses=result.index_pulses,
        totals=Totals(
            x4=result.net_counts,
            x1_naive=result.x1_naive,
            x4_without_short_pulses=result.x4_without_short_pulses,
            short_pulse_s=None if short is None else short * evidence.capture.tick_s,
        ),
    )


def _agreement(evidence: Evidence) -> AgreementRecord | None:
    agreement = evidence.agreement
    if agreement is None:
        return None
    tick = evidence.capture.tick_s
    return AgreementRecord(
        frames_used=agreement.frames_used,
        direction=agreement.direction,
        counts_per_turn=agreement.counts_per_turn,
        offset_counts=_offset(evidence),
        latency_s=agreement.latency_s,
        latency_uncertainty_s=None
        if agreement.latency_s is None
        else expanded(agreement.latency_uncertainty_s, evidence.capture.step_s),
        latency_note=agreement.reasons.get("latency_s"),
        residual_rms_deg=agreement.residual_rms_deg,
        residual_peak_deg=agreement.residual_peak_deg,
        steps=[
            Step(time_s=float(time) * tick, counts=float(counts))
            for time, counts in zip(agreement.steps.time, agreement.steps.counts, strict=True)
        ],
    )


def _offset(evidence: Evidence) -> float | None:
    """The offset, brought to within half of what the serial word can say: further away is the same word again."""
    agreement, serial = evidence.agreement, evidence.sheet.serial
    if agreement is None or serial is None or agreement.offset_counts is None:
        return None
    turn = agreement.counts_per_turn or evidence.counts_per_turn()
    if turn is None:
        return agreement.offset_counts
    span = turn * (modulus(serial) // positions_per_turn(serial))
    return (agreement.offset_counts + span / 2) % span - span / 2


def _next(evidence: Evidence, measured: list[Measurement], found: list[Finding]) -> list[str]:
    """What to capture where something stayed open."""
    asked = []
    if any(one.kind == "undersampled" for one in found):
        asked.append("raise the sampling rate: at least 4, better 10 samples per clock period and per A/B state")
    open_ones = {one.name for one in measured if one.verdict == "undecided"}
    unknown = {one.name for one in measured if one.n == 0}
    if "counts_per_turn" in unknown:
        asked.append("turn the shaft by more than one whole turn in one direction, better three each way")
    if "latency_s" in unknown and evidence.agreement is not None and evidence.agreement.direction is not None:
        asked.append("let the speed vary during the capture, so that latency and offset can be told apart")
    near = sorted(open_ones - unknown)
    if near and not any(one.kind == "undersampled" for one in found):
        asked.append(f"sample faster, or longer, to decide: {', '.join(near)}")
    return asked
