"""Single answers in situations that the sample reports do not have. Expected words are our own, numbers exact."""

from __future__ import annotations

import pytest
import samples
from msgspec.structs import replace

from decode.judgement.records import Finding, Limit, Report, Step
from decode.report import summary


def with_measurement(name: str, unit: str, values: tuple[float, float, float], tick_s: float = 1e-8) -> Report:
    one = samples.measurement(name, unit, values, tick_s)
    return replace(samples.GOOD, measurements=[one], capture=replace(samples.CAPTURE, tick_s=tick_s))


@pytest.mark.parametrize(
    ("clock_hz", "tick_s", "first", "tone"),
    [
        # Samples per period: 1 / (1 MHz x 10 ns) = 100, 1 / (10 MHz x 10 ns) = 10, then 9.09..., 4, 3.85
        (1e6, 1e-8, "yes: 100 samples per clock period, at 10 ns a sample.", "good"),
        (10e6, 1e-8, "yes: 10 samples per clock period, at 10 ns a sample.", "good"),
        (11e6, 1e-8, "with care: fewer than 10 samples per clock period, so timing is coarse.", "care"),
        (25e6, 1e-8, "with care: fewer than 10 samples per clock period, so timing is coarse.", "care"),
        (26e6, 1e-8, "no: its samples are too far apart for these signals.", "bad"),
    ],
)
def test_trust_follows_the_samples_in_a_clock_period(clock_hz: float, tick_s: float, first: str, tone: str) -> None:
    answer = summary.trust(with_measurement("clock_frequency_hz", "Hz", (clock_hz, clock_hz, clock_hz), tick_s))
    assert answer.sentences[0] == first
    assert answer.tone == tone


@pytest.mark.parametrize(
    ("state_s", "first"),
    [
        # Samples per state: 200 ns, 190 ns, 40 ns and 30 ns over 10 ns
        (200e-9, "yes: 20 samples per A/B state (shortest 20), at 10 ns a sample."),
        (190e-9, "with care: fewer than 20 samples per A/B state, so electrical angles are coarse."),
        (40e-9, "with care: fewer than 20 samples per A/B state, so electrical angles are coarse."),
        (30e-9, "no: its samples are too far apart for these signals."),
    ],
)
def test_trust_follows_the_samples_in_a_state(state_s: float, first: str) -> None:
    assert summary.trust(with_measurement("edge_spacing_s", "s", (state_s,) * 3)).sentences[0] == first


def test_an_undersampled_capture_is_not_trusted_whatever_its_median() -> None:
    finding = Finding(kind="undersampled", severity="warning", time_s=0.1)
    assert summary.trust(replace(samples.GOOD, findings=[finding])).tone == "bad"


def test_groups_come_faults_first_then_the_dead_line_then_the_most_frequent() -> None:
    def found(kind: str, severity: str, n: int) -> list[Finding]:
        return [Finding(kind=kind, severity=severity, time_s=float(n - i)) for i in range(n)]  # type: ignore[arg-type]

    findings = [
        *found("warning_flag", "warning", 9),
        *found("glitch", "fault", 2),
        *found("crc_mismatch", "fault", 5),
        *found("frame_missing", "fault", 2),
        *found("line_stuck", "fault", 1),
        *found("glitch", "note", 3),
    ]
    groups = summary.groups(replace(samples.GOOD, findings=findings))
    assert [(group.kind, group.severity, len(group.findings)) for group in groups] == [
        ("line_stuck", "fault", 1),
        ("crc_mismatch", "fault", 5),
        ("glitch", "fault", 2),
        ("frame_missing", "fault", 2),
        ("warning_flag", "warning", 9),
        ("glitch", "note", 3),
    ]
    assert groups[1].first_times(1.0) == "1 s, 2 s, 3 s and 2 more"


def test_a_note_is_not_something_wrong() -> None:
    note = Finding(kind="time_gap", severity="note", time_s=0.1)
    answer = summary.wrong(replace(samples.GOOD, findings=[note]))
    assert answer.sentences[0].startswith("nothing was found wrong in 20000 frames")


def test_a_broken_limit_alone_is_the_sentence() -> None:
    broken = samples.SICK.measurements[-1]
    report = replace(samples.GOOD, measurements=[broken], verdict="fail")
    assert summary.wrong(report).sentences == [
        "setup_time_s of SLO runs from 20.00 ns to 400.0 ns; its limit is at least 100 ns."
    ]
    assert summary.verdict(report).sentences == ["FAIL: 1 limit of 1 broken."]


@pytest.mark.parametrize(
    ("low", "high", "least", "most", "expected"),
    [
        (10.0, 20.0, 12.0, 15.0, 2.0),  # 12 - 10 = 2 is nearer than 20 - 15 = 5
        (10.0, 20.0, 14.0, 19.0, 1.0),
        (None, 20.0, 14.0, 25.0, -5.0),
        (10.0, None, 4.0, 25.0, -6.0),
        (None, None, 4.0, 25.0, None),
    ],
)
def test_the_margin_is_the_worst_value_s_distance_to_the_nearest_limit(
    low: float | None, high: float | None, least: float, most: float, expected: float | None
) -> None:
    limit = Limit(min=low, max=high, source="the sheet")
    assert summary.margin(samples.measurement("speed_rpm", "rpm", (least, 14.5, most), 0.1, limit=limit)) == expected


@pytest.mark.parametrize(
    ("got", "cycles", "words"),
    [
        (4096, 1024, "the sheet says 4096: the same."),
        (-4096, 1024, "the sheet says 4096: the same."),
        (1024, 1024, "the sheet says 4096: a quarter of it, so cycles_per_turn may hold counts, four to a cycle."),
        (2048, 1024, "the sheet says 4096: 1/2 of it."),
        (16384, 1024, "the sheet says 4096: 4 times as many."),
        (4095, 1024, "the sheet says 4096: -1."),
        (2400, 1024, "the sheet says 4096: -1696."),
    ],
)
def test_counts_are_held_against_the_sheet(got: int, cycles: int, words: str) -> None:
    """Counts by the sheet are 4 x cycles_per_turn."""
    report = replace(
        samples.GOOD,
        incremental=replace(samples.INCREMENTAL, counts_per_turn=got),
        measurements=[samples.measurement("counts_per_turn", "counts", (got, got, got), 0, n=3)],
        provenance=replace(samples.PROVENANCE, sheet={"incremental": {"cycles_per_turn": cycles}}),
    )
    assert summary.counts(report).sentences == [f"{got} counts per turn, in each of 3 turns; {words}"]


def test_turns_that_agree_on_no_whole_number_say_so() -> None:
    report = replace(
        samples.GOOD,
        incremental=replace(samples.INCREMENTAL, counts_per_turn=None),
        measurements=[samples.measurement("counts_per_turn", "counts", (4095, 4095.5, 4096), 0, n=2)],
    )
    assert summary.counts(report).sentences == [
        "4095.5 counts per turn, median of 2 turns (4095 to 4096); the sheet says 4096: not a whole number."
    ]


def test_an_index_with_findings_names_them() -> None:
    findings = [Finding(kind="index_missing", severity="fault", time_s=float(i)) for i in range(2)]
    answer = summary.index(replace(samples.GOOD, findings=findings))
    assert answer.sentences[0].endswith("index_missing 2.")
    assert answer.tone == "bad"


def test_more_than_three_steps_are_counted() -> None:
    steps = [Step(time_s=float(i), counts=4.0) for i in range(5)]
    answer = summary.agreement(replace(samples.GOOD, agreement=replace(samples.AGREEMENT, steps=steps)))
    assert answer.sentences[2].endswith(
        "5 steps: +4.00 counts at 0.00000000 s, +4.00 counts at 1.00000000 s, +4.00 counts at 2.00000000 s and 2 more."
    )


@pytest.mark.parametrize(
    ("direction", "words"),
    [
        (1, "serial position and count rise together (direction +1)"),
        (-1, "one rises as the other falls (direction -1)"),
        (None, "direction not known: too little motion"),
    ],
)
def test_the_direction_is_told_in_words(direction: int | None, words: str) -> None:
    report = replace(samples.GOOD, agreement=replace(samples.AGREEMENT, direction=direction))
    assert summary.agreement(report).sentences[0].startswith(words)
