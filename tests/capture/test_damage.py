"""Damage: located, counted, and no frame is blamed for it.

The signal is the healthy one of `exports`, 40 frames; the damage is put into the middle of a frame's burst, and then
between two frames.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from functools import cache
from pathlib import Path

import pytest
from exports import SHEET, Export, Signal, simulated
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from decode.capture.damage import REFUSED_ROWS, REFUSED_SHARE, REFUSED_SMALL_SHARE
from decode.capture.source import open_capture
from decode.errors import InputError
from decode.pipeline import check
from decode.sheet import CaptureKeys

Damage = Callable[[list[str], int], list[str]]
FRAMES = 40


@cache
def healthy() -> tuple[str, ...]:
    """The lines of a plain CSV; line 1 is the header."""
    return tuple(Export().write(Signal.of_changes(simulated(faulty=False))).decode().splitlines())


def within_a_burst() -> int:
    """Index of the line amid the 20th burst: 50 clock edges in 25 us, every 250 us."""
    return next(i for i, line in enumerate(healthy()) if line.startswith("0.00482")) + 5


def between_bursts() -> int:
    """Index of the first line after the 20th burst: A, B or Z changes there, and no clock."""
    return next(i for i, line in enumerate(healthy()) if line.startswith("0.0048749"))


def cell(line: str, place: int, text: str) -> str:
    cells = line.split(",")
    cells[place] = text
    return ",".join(cells)


DAMAGE: dict[str, tuple[Damage, str]] = {
    "a NaN among the levels": (
        lambda lines, at: [*lines[:at], cell(lines[at], 2, "NaN"), *lines[at + 1 :]],
        "1 row left out: a value that is no level, in line {line}; decoding starts afresh behind",
    ),
    "an empty cell": (
        lambda lines, at: [*lines[:at], cell(lines[at], 1, ""), *lines[at + 1 :]],
        "1 row left out: a value that is no level, in line {line}; decoding starts afresh behind",
    ),
    "a NaN for the time": (
        lambda lines, at: [*lines[:at], cell(lines[at], 0, "nan"), *lines[at + 1 :]],
        "1 row left out: no time, in line {line}; decoding starts afresh behind",
    ),
    "a marker text": (
        lambda lines, at: [*lines[:at], "--- window 2 ---", *lines[at:]],
        "1 row left out: a wrong number of cells, in line {line}; decoding starts afresh behind",
    ),
    "the header again": (
        lambda lines, at: [*lines[:at], lines[0], *lines[at:]],
        "1 row left out: no time, in line {line}; decoding starts afresh behind",
    ),
    "two rows glued into one": (
        lambda lines, at: [*lines[:at], lines[at] + lines[at + 1], *lines[at + 2 :]],
        "1 row left out: a wrong number of cells, in line {line}; decoding starts afresh behind",
    ),
    "NUL bytes": (
        lambda lines, at: [*lines[:at], lines[at][:4] + "\0" * 6 + lines[at][10:], *lines[at + 1 :]],
        "1 row left out: a NUL byte, in line {line}; decoding starts afresh behind",
    ),
    "eleven rows lost to text": (
        lambda lines, at: [*lines[:at], *["?"] * 11, *lines[at + 11 :]],
        "11 rows left out: a wrong number of cells, the first in line {line}; decoding starts afresh behind",
    ),
    "time going backwards": (lambda lines, at: [*lines[:at], *lines[at - 200 :]], "time_reversal"),
    "a stretch missing": (lambda lines, at: [*lines[:at], *lines[at + 400 :]], "time_gap"),
    "a file cut mid-row": (
        lambda lines, at: [*lines[:at], lines[at][:9]],
        "the last row, line {line}, is cut short and was dropped",
    ),
}


@pytest.mark.parametrize("place", [within_a_burst, between_bursts])
@pytest.mark.parametrize("name", DAMAGE)
def test_no_frame_is_blamed(name: str, place: Callable[[], int], tmp_path: Path) -> None:
    """All frames seen are good, nothing is missing, and there is a note or a finding that says where: the physical
    line is the index of the damage and one."""
    spoil, told = DAMAGE[name]
    at = place()
    path = tmp_path / "capture.csv"
    path.write_text("\n".join(spoil(list(healthy()), at)) + ("" if "cut" in name else "\n"))
    report = check(path, SHEET).report
    assert report.serial is not None and report.incremental is not None
    assert report.serial.good == report.serial.frames >= FRAMES // 2 - 1
    assert (report.serial.missing, report.incremental.illegal) == (0, 0)
    kinds = [finding.kind for finding in report.findings]
    if told.startswith("time_"):
        assert kinds == [told]
        assert report.findings[0].evidence["file_line"] == at + 1
    else:
        assert kinds == []
        assert told.format(line=at + 1) in report.capture.notes


def test_windows_put_one_after_the_other(tmp_path: Path) -> None:
    """Three windows, each counting from 0: two reversals, and frames of all three."""
    lines = list(healthy())
    parts = [lines[1:900], lines[900:1800], lines[1800:]]
    rows = [
        cell(line, 0, f"{float(line.split(',')[0]) - float(part[0].split(',')[0]):.9f}")
        for part in parts
        for line in part
    ]
    path = tmp_path / "capture.csv"
    path.write_text("\n".join([lines[0], *rows]) + "\n")
    report = check(path, SHEET).report
    assert [finding.kind for finding in report.findings] == ["time_reversal", "time_reversal"]
    assert report.serial is not None
    assert report.serial.good == report.serial.frames >= FRAMES - 4


def bad_rows(good: int, bad: int) -> str:
    """A file of so many good rows and bad ones, these spread evenly among them."""
    rows = [f"{i}e-6,{i & 1}" for i in range(good)]
    for number in range(bad):
        rows.insert((number + 1) * good // (bad + 1) + number, "lost")
    return "\n".join(["Time [s],A", *rows]) + "\n"


@pytest.mark.parametrize(
    ("good", "bad", "refused"),
    [
        (9, 1, False),  # one in ten
        (8, 1, True),  # one in nine
        (90, 10, False),
        (90, 11, True),  # eleven are more than ten, and more than one in a hundred
        (1089, 11, False),  # exactly one in a hundred
        (1088, 11, True),
        (9900, 100, False),
        (9899, 100, True),
    ],
)
def test_the_share_that_is_refused(good: int, bad: int, refused: bool, tmp_path: Path) -> None:
    """More than one row in ten, or more than ten rows and one in a hundred."""
    assert (REFUSED_SHARE, REFUSED_ROWS, REFUSED_SMALL_SHARE) == (0.01, 10, 0.1)
    path = tmp_path / "capture.csv"
    path.write_text(bad_rows(good, bad))
    for rows in (200_000, 7):
        capture = open_capture(path, CaptureKeys(), rows_per_span=rows)
        if refused:
            with pytest.raises(InputError, match="cells") as error:
                list(capture.spans(["A"]))
            assert error.value.row == 2 + good // (bad + 1)
        else:
            parts = [span for span in capture.spans(["A"]) if not span.joined]
            assert len(parts) == bad
            assert capture.rows == good


ROW = st.sampled_from(
    ["{t},0,1", "{t},1,1", "{t},1,0", "{t},1,x"] * 6 + ["{t},nan,1", "lost", "{t},1", "n,1,1", "", "#"]
)


@settings(deadline=None, max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(ROW, min_size=1, max_size=60), st.integers(1, 20))
def test_damage_wherever_it_is_cut(tmp_path: Path, rows: list[str], size: int) -> None:
    """The same parts between the breaks, the same notes, or the same refusal, whole, in pieces, and line by line."""
    clean = [f"{t},{t & 1},0" for t in range(120)]
    text = "\n".join(["Time [ns],A,B", *clean, *(row.format(t=120 + i) for i, row in enumerate(rows))]) + "\n"
    path = tmp_path / "x.csv"
    path.write_text(text)
    whole = told(path, 200_000)
    assert told(path, size) == whole
    assert told(path, 1) == whole


def told(path: Path, rows_per_span: int) -> object:
    """The edges of each part between two breaks, and the notes; or the refusal."""
    capture = open_capture(path, CaptureKeys(), rows_per_span=rows_per_span)
    parts: list[dict[str, Sequence[int]]] = []
    try:
        for span in capture.spans(["A", "B"]):
            if not parts or not span.joined:
                parts.append({"start": [span.start], "A": [span.lines["A"].initial], "B": [span.lines["B"].initial]})
            parts[-1]["stop"] = [span.stop]
            for name in ("A", "B"):
                edges = span.lines[name]
                pairs = [
                    value for pair in zip(edges.times.tolist(), edges.levels.tolist(), strict=True) for value in pair
                ]
                parts[-1][name] = [*parts[-1][name], *pairs]
    except InputError as error:
        return str(error)
    return parts, capture.notes, capture.rows, capture.grid


def test_a_damaged_row_among_samples_keeps_its_place(tmp_path: Path) -> None:
    """Without a time column the row's number is the time: a row that cannot be used is a sample all the same, so the
    rise in row 15 is at sample 14 still."""
    path = tmp_path / "x.csv"
    path.write_text("A\n" + "0\n" * 10 + "NaN\n" + "0\n" * 3 + "1\n" * 20)
    capture = open_capture(path, CaptureKeys(sample_rate_hz=1e6))
    assert [t for span in capture.spans(["A"]) for t in span.lines["A"].times.tolist()] == [14]


def test_the_docs_name_every_damage_tested() -> None:
    """The table of damage in docs/layouts.md has a row for each of the above."""
    page = (Path(__file__).parents[2] / "docs" / "layouts.md").read_text(encoding="utf-8")
    part = page.split("\n## Damage\n")[1].split("\n## ")[0]
    rows = [re.split(r"\s*\|\s*", line.strip("| "))[0] for line in part.splitlines() if line.startswith("| ")][1:]
    assert [row for row in rows if not set(row) <= set("- ")] == [*DAMAGE, "windows put one after the other"]
