"""The answers that a reader wants first, as plain sentences: pure functions from the records, no layout.

Their order is the reader's: can this capture be trusted, the verdict, what is wrong, how many frames are good, do the
counts agree with the sheet, where is the index, do both outputs tell one story. Words carry every meaning; a screen
may add colour, and nothing is lost without it.
"""

from __future__ import annotations

from collections.abc import Iterator
from fractions import Fraction
from typing import NamedTuple

from decode.anomalies import Severity
from decode.judgement.records import AgreementRecord, Finding, Measurement, Report
from decode.report.quantities import (
    bounds,
    counted,
    fixed,
    instant,
    is_known,
    quantity,
    share,
    trimmed,
    unit_of,
    with_uncertainty,
)
from decode.rules.kinds import KINDS

ENOUGH_PER_CLOCK, GOOD_PER_CLOCK = 4, 10
ENOUGH_PER_STATE, GOOD_PER_STATE = 4, 20
"""Samples per clock period and per A/B state: to decode at all, and to measure (common practice, no source)."""

_SEVERITIES: tuple[Severity, ...] = ("fault", "warning", "note")
_BREAKS_OF_CAPTURE = ("time_gap", "time_reversal")


class Answer(NamedTuple):
    """One block of the summary: its label, its sentences, and the tone in which colour may repeat them."""

    label: str
    sentences: list[str]
    tone: str = ""


class Group(NamedTuple):
    """All findings of one kind and severity, in the order of time."""

    kind: str
    severity: Severity
    findings: list[Finding]

    @property
    def first_cause(self) -> str | None:
        return next((finding.cause for finding in self.findings if finding.cause), None)

    def first_times(self, tick_s: float, most: int = 3) -> str:
        """The first few times, and how many more there are."""
        times = [instant(finding.time_s, tick_s) for finding in self.findings[:most]]
        left = len(self.findings) - len(times)
        return ", ".join(times) + (f" and {left} more" if left else "")


def summary(report: Report) -> list[Answer]:
    """The answers in the reader's order. A part without lines in the capture says so."""
    return [
        trust(report),
        verdict(report),
        wrong(report),
        frames(report),
        counts(report),
        index(report),
        agreement(report),
    ]


def groups(report: Report) -> list[Group]:
    """The findings by kind, the most telling first: faults, a line that never moves, then the most frequent."""
    found: dict[tuple[str, Severity], list[Finding]] = {}
    for finding in report.findings:
        found.setdefault((finding.kind, finding.severity), []).append(finding)
    sorted_groups = [
        Group(kind, severity, sorted(members, key=lambda finding: finding.time_s))
        for (kind, severity), members in found.items()
    ]
    order = list(KINDS)
    return sorted(
        sorted_groups,
        key=lambda group: (
            _SEVERITIES.index(group.severity),
            # What a dead line brings with it is many, and says less than the line itself.
            group.kind != "line_stuck",
            -len(group.findings),
            order.index(group.kind),
        ),
    )


def measured(report: Report, name: str) -> Measurement | None:
    """The measurement of that name with the most values, None where there is none."""
    found = [one for one in report.measurements if one.name == name and one.n]
    return max(found, key=lambda one: one.n, default=None)


def margin(measurement: Measurement) -> float | None:
    """How far the worst value lies inside its limit (negative: outside), in the measurement's unit."""
    limit = measurement.limit
    if limit is None:
        return None
    distances = []
    if limit.min is not None and measurement.min is not None:
        distances.append(measurement.min - limit.min)
    if limit.max is not None and measurement.max is not None:
        distances.append(limit.max - measurement.max)
    return min(distances, default=None)


def trust(report: Report) -> Answer:
    """Whether the capture can carry the verdict at all, from its samples and its breaks."""
    capture = report.capture
    per_clock, per_state, shortest = _samples_per_clock(report), *_samples_per_state(report)
    samples = []
    if per_clock is not None:
        samples.append(f"{_rounded(per_clock)} samples per clock period")
    if per_state is not None:
        least = f" (shortest {_rounded(shortest)})" if shortest is not None else ""
        samples.append(f"{_rounded(per_state)} samples per A/B state{least}")
    spacing = (
        f"{', '.join(samples) or 'nothing to compare the samples with'}, at {trimmed(capture.tick_s, 's')} a sample"
    )
    notes = f"{counted(len(capture.notes), 'note')} on how it was read" if capture.notes else "no notes"
    size = f"{quantity(capture.duration_s, 's', digits=4)}, {counted(capture.rows, 'row')}, {notes}."
    reasons, tone = _doubts(report, per_clock, per_state)
    if not reasons:
        return Answer("Trust", [f"yes: {spacing}.", size], tone)
    word = {"care": "with care", "bad": "no"}[tone]
    return Answer("Trust", [f"{word}: {'; '.join(reasons)}.", f"{_capital(spacing)}.", size], tone)


def _doubts(report: Report, per_clock: float | None, per_state: float | None) -> tuple[list[str], str]:
    """(reasons, tone) against trusting the capture."""
    present = {finding.kind for finding in report.findings}
    fatal: list[str] = []
    careful: list[str] = []
    if report.capture.rows == 0 or not report.capture.duration_s > 0:
        fatal.append("it holds no stretch of time")
    if "undersampled" in present or _below(per_clock, ENOUGH_PER_CLOCK) or _below(per_state, ENOUGH_PER_STATE):
        fatal.append("its samples are too far apart for these signals")
    careful += [KINDS[kind].meaning for kind in _BREAKS_OF_CAPTURE if kind in present]
    if not fatal and _below(per_clock, GOOD_PER_CLOCK):
        careful.append(f"fewer than {GOOD_PER_CLOCK} samples per clock period, so timing is coarse")
    if not fatal and _below(per_state, GOOD_PER_STATE):
        careful.append(f"fewer than {GOOD_PER_STATE} samples per A/B state, so electrical angles are coarse")
    if fatal:
        return fatal + careful, "bad"
    return careful, "care" if careful else "good"


def _below(value: float | None, least: float) -> bool:
    return value is not None and value < least


def _samples_per_clock(report: Report) -> float | None:
    clock = measured(report, "clock_frequency_hz")
    if clock is None or not clock.median or not report.capture.tick_s > 0:
        return None
    return 1 / clock.median / report.capture.tick_s


def _samples_per_state(report: Report) -> tuple[float | None, float | None]:
    spacing = measured(report, "edge_spacing_s")
    if spacing is None or spacing.median is None or not report.capture.tick_s > 0:
        return None, None
    least = None if spacing.min is None else spacing.min / report.capture.tick_s
    return spacing.median / report.capture.tick_s, least


def _rounded(samples: float) -> str:
    return fixed(samples, 0 if samples >= 10 else 1)


def verdict(report: Report) -> Answer:
    """Pass, fail or undecided, with what it rests on."""
    judged = [one for one in report.measurements if one.verdict is not None]
    failed = [one for one in judged if one.verdict == "fail"]
    open_ones = [one for one in judged if one.verdict == "undecided"]
    faults = [group for group in groups(report) if group.severity == "fault"]
    if report.verdict == "pass":
        held = f"{counted(len(judged), 'limit')} judged, all hold" if judged else "no limit was set"
        text = f"PASS: {held}, and no fault was found."
        return Answer("Verdict", [text, "It speaks of this capture only: these seconds, this speed."], "good")
    if report.verdict == "fail":
        parts = []
        if faults:
            occurrences = sum(len(group.findings) for group in faults)
            parts.append(f"{counted(occurrences, 'fault')} of {counted(len(faults), 'kind')}")
        if failed:
            parts.append(f"{counted(len(failed), 'limit')} of {len(judged)} broken")
        return Answer("Verdict", [f"FAIL: {', '.join(parts) or 'no reason is recorded'}."], "bad")
    reasons = [f"{one.name}: {one.reason or 'within its uncertainty of the limit'}" for one in open_ones]
    if not reasons:
        return Answer("Verdict", ["UNDECIDED: nothing fails, but there was nothing to judge."], "care")
    more = f" ({len(reasons) - 1} more undecided below)" if len(reasons) > 1 else ""
    return Answer("Verdict", [f"UNDECIDED: nothing fails, but {reasons[0]}{more}."], "care")


def wrong(report: Report) -> Answer:
    """The one sentence: the diagnosis where there is one, else the most telling findings, else what none means."""
    telling = [group for group in groups(report) if group.severity != "note"]
    failed = [one for one in report.measurements if one.verdict == "fail"]
    others = []
    if report.diagnosis:
        first = report.diagnosis[0]
        sentence = f"{first.sentence.rstrip('. ')} ({first.confidence}; origin: {first.origin})."
        others = telling
    elif telling:
        sentence = group_sentence(telling[0], report.capture.tick_s)
        others = telling[1:]
    elif failed:
        sentence = broken_limit(failed[0])
        failed = failed[1:]
    else:
        return Answer("Wrong", [_nothing_wrong(report)], "good" if report.verdict == "pass" else "")
    also = [f"{group.kind} {len(group.findings)}" for group in others] + [f"limit of {one.name}" for one in failed]
    tail = [f"Also: {_shortened(also)}."] if also else []
    tone = "bad" if report.verdict == "fail" else "care"
    return Answer("Wrong", [sentence, *tail], tone)


def group_sentence(group: Group, tick_s: float) -> str:
    """What the findings of one kind say, with where to look first."""
    meaning = KINDS[group.kind].meaning
    line = group.findings[0].line
    where = f" on {line}" if line else ""
    times = group.first_times(tick_s)
    number = len(group.findings)
    often = "once" if number == 1 else f"{number} times, first"
    cause = f" Cause: {_sentence(group.first_cause)}" if group.first_cause else ""
    return f"{group.kind}{where}: {meaning}, {often} at {times}.{cause}"


def broken_limit(measurement: Measurement) -> str:
    """Which end of which limit is broken, by how much."""
    unit = unit_of(measurement.name, measurement.unit)
    limit = measurement.limit
    stated = bounds(limit.min, limit.max, unit) if limit else "a limit that is not recorded"
    seen = f"{quantity(measurement.min, unit, digits=4)} to {quantity(measurement.max, unit, digits=4)}"
    where = f" of {measurement.line}" if measurement.line else ""
    return f"{measurement.name}{where} runs from {seen}; its limit is {stated}."


def _nothing_wrong(report: Report) -> str:
    if report.serial is not None and report.serial.frames:
        bound = share(report.serial.error_rate_upper_95)
        return (
            f"nothing was found wrong in {counted(report.serial.frames, 'frame')}; "
            f"with 95 % confidence the error rate is below {bound}."
        )
    if report.incremental is not None and report.incremental.edges:
        edges, turns = report.incremental.edges, report.incremental.turns_seen
        return f"nothing was found wrong in {counted(edges, 'edge')} over {counted(turns, 'whole turn')}."
    return "nothing was found wrong, but nothing was decoded either."


def frames(report: Report) -> Answer:
    """How many frames are good, of how many, and how sure the rate is."""
    serial = report.serial
    if serial is None:
        return Answer("Frames", ["not judged: the capture has no serial lines."])
    if serial.frames == 0:
        return Answer("Frames", [f"no {serial.interface} frame was found; {serial.missing} missing."], "bad")
    tone = "good" if serial.good == serial.frames and not serial.missing else "bad"
    good = f"{serial.good} good of {serial.frames} {serial.interface} frames; {serial.faulty} faulty"
    rate = f"Error rate {share(serial.error_rate)}, with 95 % confidence below {share(serial.error_rate_upper_95)}"
    if serial.faulty == 0:
        rate += f" (3/{serial.frames})"
    return Answer("Frames", [f"{good}, {serial.missing} missing beside them.", f"{rate}."], tone)


def counts(report: Report) -> Answer:
    """Counts per turn as measured, held against the sheet's."""
    incremental = report.incremental
    if incremental is None:
        return Answer("Counts", ["not judged: the capture has no A and B."])
    stated = counts_of_sheet(report)
    sheet = f"the sheet says {stated}" if stated is not None else "the sheet gives no number"
    turns = measured(report, "counts_per_turn")
    if incremental.counts_per_turn is None and turns is None:
        seen = "no whole turn was seen" if incremental.turns_seen == 0 else "the turns do not agree on a number"
        return Answer("Counts", [f"counts per turn not measured: {seen}; {sheet}."], "care")
    got = incremental.counts_per_turn
    got_text = fixed(turns.median, 1) if got is None and turns is not None else str(got)
    varies = turns is not None and turns.min != turns.max
    held, tone = _held_against(got, stated, varies)
    spread = _spread_of_turns(turns, incremental.turns_seen)
    return Answer("Counts", [f"{got_text} counts per turn, {spread}; {sheet}{': ' if held else ''}{held}."], tone)


def counts_of_sheet(report: Report) -> int | None:
    """Counts per turn by the sheet: four to a cycle."""
    part = report.provenance.sheet.get("incremental")
    cycles = part.get("cycles_per_turn") if isinstance(part, dict) else None
    return 4 * cycles if isinstance(cycles, int) else None


def _held_against(got: int | None, stated: int | None, varies: bool) -> tuple[str, str]:
    """(words, tone) for a measured number of counts per turn against the stated one."""
    if stated is None:
        return "", ""
    if got is None:
        return "not a whole number", "bad"
    if abs(got) == stated:
        return ("not in every turn", "bad") if varies else ("the same", "good")
    ratio = Fraction(abs(got), stated)
    if ratio == Fraction(1, 4):
        return "a quarter of it, so cycles_per_turn may hold counts, four to a cycle", "bad"
    if ratio.numerator == 1 or ratio.denominator == 1:
        return f"{ratio} of it" if ratio < 1 else f"{ratio} times as many", "bad"
    return f"{abs(got) - stated:+d}", "bad"


def _spread_of_turns(turns: Measurement | None, seen: int) -> str:
    if turns is None or turns.min is None or turns.max is None:
        return f"{counted(seen, 'turn')} seen"
    if turns.min == turns.max:
        return f"in each of {counted(turns.n, 'turn')}" if turns.n > 1 else "in one turn"
    return f"median of {counted(turns.n, 'turn')} ({fixed(turns.min, 0)} to {fixed(turns.max, 0)})"


_INDEX_KINDS = ("index_missing", "index_extra", "index_misplaced", "index_width")


def index(report: Report) -> Answer:
    """How often the index comes, where, how wide and how repeatably."""
    incremental = report.incremental
    if incremental is None or "index" not in report.capture.lines:
        return Answer("Index", ["not judged: the capture has no index line."])
    bad = [f"{group.kind} {len(group.findings)}" for group in groups(report) if group.kind in _INDEX_KINDS]
    pulses = f"{counted(incremental.index_pulses, 'pulse')} in {counted(incremental.turns_seen, 'whole turn')}"
    parts = list(_index_parts(report))
    text = "; ".join([pulses, *parts, *bad])
    return Answer("Index", [f"{text}."], "bad" if bad else "")


def _index_parts(report: Report) -> Iterator[str]:
    position = measured(report, "index_position_deg")
    if position is not None:
        yield f"at {with_uncertainty(position.median, position.uncertainty, 'deg', digits=4)}"
    repeat = measured(report, "index_repeatability_deg")
    if repeat is not None and repeat.min is not None and repeat.max is not None:
        furthest = max(abs(repeat.min), abs(repeat.max), repeat.uncertainty or 0.0)
        yield f"repeats within ±{quantity(furthest, 'deg')}"
    width = measured(report, "index_width_counts")
    if width is not None:
        yield f"{with_uncertainty(width.median, width.uncertainty, 'counts', digits=3)} wide"


def agreement(report: Report) -> Answer:
    """Whether the serial position and the count tell one story."""
    record = report.agreement
    if record is None:
        return Answer("Agreement", ["not judged: it needs serial lines and A and B in one capture."])
    if record.frames_used == 0:
        return Answer("Agreement", ["not judged: no frame could be used."], "care")
    sense = {
        1: "serial position and count rise together (direction +1)",
        -1: "one rises as the other falls (direction -1)",
    }
    direction = sense.get(record.direction or 0, "direction not known: too little motion")
    tone = "bad" if record.steps else ""
    return Answer("Agreement", [f"{direction}; {_offset(record)}.", _latency(record), _residual(report, record)], tone)


def _offset(record: AgreementRecord) -> str:
    if not is_known(record.offset_counts) or record.offset_counts is None:
        return "offset not known"
    counts_text = quantity(record.offset_counts, "counts", digits=4, signed=True)
    if not record.counts_per_turn:
        return f"offset {counts_text}"
    degrees = quantity(record.offset_counts / abs(record.counts_per_turn) * 360, "deg", digits=4, signed=True)
    return f"offset {counts_text} ({degrees})"


def _latency(record: AgreementRecord) -> str:
    if record.latency_s is None:
        return f"Latency undecided: {record.latency_note or 'no reason is recorded'}."
    latency = with_uncertainty(record.latency_s, record.latency_uncertainty_s, "s", signed=True)
    note = f"; {record.latency_note}" if record.latency_note else ""
    return f"Latency {latency} (+: the serial position is older){note}."


def _residual(report: Report, record: AgreementRecord) -> str:
    rms, peak = quantity(record.residual_rms_deg, "deg"), quantity(record.residual_peak_deg, "deg")
    used = counted(record.frames_used, "frame")
    if not record.steps:
        return f"Residual {rms} rms, {peak} peak over {used}; no steps."
    tick_s = report.capture.tick_s
    steps = [
        f"{quantity(step.counts, 'counts', signed=True)} at {instant(step.time_s, tick_s)}" for step in record.steps[:3]
    ]
    left = f" and {len(record.steps) - 3} more" if len(record.steps) > 3 else ""
    number = counted(len(record.steps), "step")
    return f"Residual {rms} rms, {peak} peak over {used}; {number}: {', '.join(steps)}{left}."


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]


def _sentence(text: str) -> str:
    text = text.strip()
    return text if text.endswith((".", "!", "?")) else f"{text}."


def _shortened(parts: list[str], most: int = 4) -> str:
    left = len(parts) - most
    return ", ".join(parts[:most]) + (f" and {left} more" if left > 0 else "")
