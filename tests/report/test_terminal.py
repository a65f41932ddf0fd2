"""The report on a screen, at fixed widths and without colour. Expected words are our own; numbers are the samples'."""

from __future__ import annotations

import io

import pytest
import samples
from msgspec.structs import replace
from rich.console import Console

from decode.judgement.records import Diagnosis, Finding, Report
from decode.report.terminal import SCREENFUL, render

LABELS = ["Trust", "Verdict", "Wrong", "Frames", "Counts", "Index", "Agreement"]
WIDTHS = (40, 60, 80, 100, 120, 200)


def shown(report: Report, width: int = 80, *, short: bool = False, encoding: str = "utf-8") -> list[str]:
    """The lines on a screen that is no terminal."""
    raw = io.BytesIO()
    file = io.TextIOWrapper(raw, encoding=encoding, newline="\n")
    render(report, Console(file=file, width=width), short=short)
    file.flush()
    return raw.getvalue().decode(encoding).splitlines()


def flowing(lines: list[str]) -> str:
    """The same words as one line."""
    return " ".join(" ".join(lines).split())


@pytest.mark.parametrize("width", WIDTHS)
@pytest.mark.parametrize("name", samples.ALL)
def test_no_line_is_longer_than_the_screen_is_wide(name: str, width: int) -> None:
    lines = shown(samples.ALL[name], width)
    assert lines
    assert max(map(len, lines)) <= width
    assert all(line == line.rstrip() for line in lines)


@pytest.mark.parametrize("name", samples.ALL)
def test_the_first_screenful_answers_in_the_order_of_the_contract(name: str) -> None:
    """All seven answers, in order, within 24 lines of 80 columns, and the details only after them."""
    lines = shown(samples.ALL[name])
    starts = [number for number, line in enumerate(lines) if line and line.split()[0] in LABELS and line[0] != " "]
    first = starts[: len(LABELS)]
    assert [lines[number].split()[0] for number in first] == LABELS
    details = next(number for number, line in enumerate(lines) if line.startswith("Measurements"))
    assert first[-1] < details <= SCREENFUL
    assert shown(samples.ALL[name], short=True) == lines[: details - 1]


@pytest.mark.parametrize("name", samples.ALL)
@pytest.mark.parametrize("environment", [{"NO_COLOR": "1"}, {}])
def test_without_a_terminal_or_with_no_color_no_colour_is_sent(name: str, environment: dict[str, str]) -> None:
    """NO_COLOR takes colour away even on a terminal; what is no terminal gets no escape at all."""
    file = io.StringIO()
    render(samples.ALL[name], Console(file=file, width=80, _environ=environment))
    assert "\x1b" not in file.getvalue()


@pytest.mark.parametrize("name", samples.ALL)
def test_on_a_terminal_the_words_are_the_same(name: str) -> None:
    """Take the escapes (ECMA-48, 8.3.117, SGR) away and the plain report is left."""
    import re

    file = io.StringIO()
    render(samples.ALL[name], Console(file=file, width=80, force_terminal=True, _environ={"TERM": "xterm"}))
    assert "\x1b[" in file.getvalue()
    plain = re.sub(r"\x1b\[[0-9;]*m", "", file.getvalue())
    assert [line.rstrip() for line in plain.splitlines()] == shown(samples.ALL[name])


PHRASES = {
    "good": [
        "Trust yes: 100 samples per clock period, 3891 samples per A/B state (shortest 3120), at 10 ns a sample. "
        "2.000 s, 1234567 rows, 1 note",
        "Verdict PASS: 2 limits judged, all hold, and no fault was found. It speaks of this capture only",
        "Wrong nothing was found wrong in 20000 frames; with 95 % confidence the error rate is below 0.0150 %.",
        "Frames 20000 good of 20000 biss-c frames; 0 faulty, 0 missing",
        "with 95 % confidence below 0.0150 % (3/20000)",
        "Counts 4096 counts per turn, in each of 11 turns; the sheet says 4096: the same.",
        "Index 12 pulses in 12 whole turns; at 123.400° ± 0.005°",
        "Agreement serial position and count rise together (direction +1); offset +12.02 counts (+1.056°). "
        "Latency +1.23 µs ± 0.05 µs (+: the serial position is older). "
        "Residual 0.0254° rms, 0.0439° peak over 19998 frames; no steps.",
        "data_delay_s ns 310000 104 110 120 10",
        "pass: limit 62.5 kHz to 10 MHz; margin +918 kHz",
        "Findings none",
        "x4, every edge with its direction +51400 counts",
        "x1, a naive counter of A's rising edges +12850 counts",
        "x4, pulses under 1.00 µs dropped +51400 counts",
        "not a certified functional-safety instrument. A pass is a statement about this capture only",
        "Rotating machinery",
        "Local codes and licensed practice come first.",
    ],
    "sick": [
        "Trust with care: a stretch of time is missing from the capture.",
        "Verdict FAIL: 6 faults of 3 kinds, 1 limit of 3 broken.",
        "Wrong crc_mismatch on SLO: the CRC does not fit the word, 4 times, first at "
        "123.45678 ms, 1.25000000 s, 1.50000000 s and 1 more. Cause: bit 7 alone is wrong: with it flipped the CRC "
        "holds and the position fits its neighbours. "
        "Also: frame_missing 1, offset_step 1, warning_flag 1, limit of setup_time_s.",
        "19994 good of 19998 biss-c frames; 4 faulty, 1 missing beside them. "
        "Error rate 0.0200 %, with 95 % confidence below 0.0458 %.",
        "median of 11 turns (4092 to 4096); the sheet says 4096: not in every turn.",
        "1 step: -4.00 counts at 500.00000 ms.",
        "fail: limit at least 100 ns; margin -80.0 ns",
        "fault crc_mismatch 4 x at 123.45678 ms",
        "first cause: bit 7 alone is wrong",
        "(frame 1234, 12500, 15000; on SLO)",
        "2 rows without a number skipped",
        "What to capture next - capture the same turn with the drive disabled",
    ],
    "undecided": [
        "UNDECIDED: nothing fails, but counts_per_turn: no whole turn was seen.",
        "counts per turn not measured: no whole turn was seen; the sheet says 4096.",
        "Latency undecided: not separable: the speed varied too little.",
        "undecided: limit exactly 4096 counts; margin - undecided: no whole turn was seen",
        "turn the shaft by at least three turns in each direction",
    ],
    "incremental_only": [
        "Frames not judged: the capture has no serial lines.",
        "nothing was found wrong in 51400 edges over 12 whole turns.",
        "1024 counts per turn, in each of 11 turns; the sheet says 4096: a quarter of it",
        "Agreement not judged: it needs serial lines and A and B in one capture.",
    ],
    "serial_only": [
        "Counts not judged: the capture has no A and B.",
        "Index not judged: the capture has no index line.",
        "20000 good of 20000 ssi frames",
    ],
    "unplugged": [
        "Trust no: it holds no stretch of time.",
        "Wrong nothing is connected to the data line (likely; origin: cable). Also: line_stuck 1, frame_missing 7.",
        "no biss-c frame was found; 7 missing.",
        "unplugged: nothing is connected to the data line (likely; origin: cable). "
        "not zero_position: no data edge inside any burst",
    ],
}


@pytest.mark.parametrize(("name", "phrase"), [(name, phrase) for name in PHRASES for phrase in PHRASES[name]])
def test_the_screen_says(name: str, phrase: str) -> None:
    assert phrase in flowing(shown(samples.ALL[name]))


def test_a_wide_screen_has_the_judgement_in_the_measurement_s_own_line() -> None:
    line = next(line for line in shown(samples.SICK, 120) if line.startswith("  setup_time_s"))
    assert flowing([line]) == "setup_time_s ns 310000 20 380 400 10 at least 100 ns -80.0 ns fail"


def test_a_terminal_without_our_symbols_gets_them_spelt_out() -> None:
    text = flowing(shown(samples.GOOD, encoding="ascii"))
    assert "at 123.400 deg +/- 0.005 deg" in text
    assert "+1.23 us +/- 0.05 us" in text
    assert "state_width_deg el.deg" in text
    assert "?" not in text


def test_names_from_a_file_cannot_drive_the_terminal() -> None:
    """A capture's name, a line's name and a note may hold an escape sequence: it is shown, not sent."""
    nasty = "\x1b[2Jgone\x07"
    report = replace(
        samples.GOOD,
        capture=replace(samples.CAPTURE, file=nasty, notes=[nasty]),
        findings=[Finding(kind="glitch", severity="note", time_s=0.0, line=nasty)],
    )
    file = io.StringIO()
    render(report, Console(file=file, width=80))
    assert "\x1b" not in file.getvalue()
    assert "?[2Jgone?" in file.getvalue()


def test_square_brackets_in_names_are_kept() -> None:
    report = replace(samples.GOOD, capture=replace(samples.CAPTURE, file="[red]probe[/red].csv"))
    assert shown(report)[0] == "[red]probe[/red].csv: Larkspur azimuth encoder"


def test_many_findings_are_one_group() -> None:
    """20000 bad frames make one entry with three times, not 20000 lines."""
    findings = [Finding(kind="crc_mismatch", severity="fault", time_s=i * 1e-4, frame=i) for i in range(20000)]
    lines = shown(replace(samples.GOOD, findings=findings, verdict="fail"))
    assert len(lines) < 80
    assert "at 0.00000000 s, 100.00 µs, 200.00 µs and 19997 more" in flowing(lines)


def test_a_finding_s_detail_stands_in_where_no_cause_is_known() -> None:
    finding = Finding(kind="index_misplaced", severity="fault", time_s=0.1, detail="at 12.3° instead of 10.1°")
    assert "first: at 12.3° instead of 10.1°" in flowing(shown(replace(samples.GOOD, findings=[finding])))


def test_a_long_diagnosis_comes_first_and_is_not_repeated_as_a_finding() -> None:
    diagnosis = Diagnosis(case="slip", sentence="The word is slipped.", origin="settings", confidence="certain")
    text = flowing(shown(replace(samples.SICK, diagnosis=[diagnosis])))
    assert "Wrong The word is slipped (certain; origin: settings). Also: crc_mismatch 4" in text
