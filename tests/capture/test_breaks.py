"""Breaks of the time axis: reversals and gaps, found wherever the capture is cut, and pauses that are neither."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from decode.anomalies import Anomalies
from decode.capture.breaks import Break, BreakFinder
from decode.capture.source import Capture, open_capture
from decode.sheet import CaptureKeys

# --- the finder ------------------------------------------------------------------------------------------------------


def breaks_of(times: Sequence[int], repeats: Sequence[bool], rows: int, printed: int = 1) -> list[Break]:
    """What the finder says when fed `rows` at a time, with the rows counted through the whole capture."""
    finder, found = BreakFinder(printed), []
    ticks, flags = np.array(times, np.int64), np.array(repeats, np.bool_)
    for start in range(0, ticks.size, rows):
        fed = finder.feed(ticks[start : start + rows], flags[start : start + rows])
        found += [Break(one.row + start, one.kind, one.ticks) for one in fed]
    return found


def every_change(steps: Sequence[int]) -> list[Break]:
    times = np.cumsum([0, *steps]).tolist()
    return breaks_of(times, [False] * len(times), len(times))


STEADY = [10, 20] * 500
"""A thousand intervals, the longest of 20 ticks: up to 160 ticks of silence are no gap."""


@pytest.mark.parametrize(
    ("steps", "expected"),
    [
        ([*STEADY, 160, 10], []),
        ([*STEADY, 161, 10], [Break(1001, "time_gap", 161)]),
        ([*STEADY[:-1], 161, 10], []),  # only 999 intervals before: a lone trigger ahead of the activity
        ([100_000, *STEADY, 161, 10], []),  # the longest was long
        ([*STEADY, 161, *STEADY[:-1], 161], [Break(1001, "time_gap", 161)]),  # after a break the thousand begin anew
        ([*STEADY, 161, *STEADY, 161], [Break(1001, "time_gap", 161), Break(2002, "time_gap", 161)]),
        ([10, -5, 10], [Break(2, "time_reversal", 5)]),
        ([10, -5, -5, 10], [Break(2, "time_reversal", 5), Break(3, "time_reversal", 5)]),
        ([*STEADY, -5, 161], [Break(1001, "time_reversal", 5)]),
        ([0] * 1200 + [50], []),  # a clock that stands still proves nothing
    ],
)
def test_every_change(steps: Sequence[int], expected: list[Break]) -> None:
    """More than eight times the longest of at least a thousand intervals, one tick either side."""
    assert every_change(steps) == expected


@pytest.mark.parametrize(
    ("steps", "repeated_every", "expected"),
    [
        ([8] * 1000 + [15], 1, []),  # a step and seven eighths is no lost sample
        ([8] * 1000 + [16], 1, [Break(1001, "time_gap", 16)]),
        ([8] * 999 + [16], 1, []),
        ([8] * 1000 + [16], 2, [Break(1001, "time_gap", 16)]),
        ([8] * 1000 + [16], 5, []),  # nearly every row changes: an even clock, not a capture of every sample
        ([8] * 1000 + [65], 5, [Break(1001, "time_gap", 65)]),
        ([333, 333, 334] * 334 + [667], 1, [Break(1003, "time_gap", 667)]),  # 3 MHz printed in ns
        ([8, 10] * 500 + [20], 1, []),  # uneven
    ],
)
def test_every_sample(steps: Sequence[int], repeated_every: int, expected: list[Break]) -> None:
    """Two steps or more, where all intervals were one step and a quarter of the rows changed nothing."""
    times = np.cumsum([0, *steps]).tolist()
    repeats = [i % repeated_every == 0 for i in range(len(times))]
    assert breaks_of(times, repeats, len(times)) == expected


def plain(times: Sequence[int], repeats: Sequence[bool], printed: int) -> list[Break]:
    """The rule as a loop over rows."""
    found: list[Break] = []
    steps: list[int] = []
    repeated = 0
    for row in range(1, len(times)):
        step = times[row] - times[row - 1]
        even = bool(steps) and max(steps) - min(steps) <= printed and 4 * repeated >= len(steps)
        steady = len(steps) >= 1000 and max(steps) > 0
        if step < 0:
            found.append(Break(row, "time_reversal", -step))
        elif steady and (step >= 2 * min(steps) if even else step > 8 * max(steps)):
            found.append(Break(row, "time_gap", step))
        else:
            steps.append(step)
            repeated += repeats[row]
            continue
        steps, repeated = [], 0
    return found


@settings(deadline=None, max_examples=25)
@given(
    st.lists(st.tuples(st.integers(1, 3), st.integers(0, 1), st.integers(900, 1300), st.integers(-3, 60)), max_size=4),
    st.integers(1, 700),
    st.booleans(),
)
def test_like_the_plain_version_wherever_cut(
    parts: list[tuple[int, int, int, int]], rows: int, repeating: bool
) -> None:
    """Stretches of steady steps with one odd step between: the same breaks by the loop, whole and in pieces."""
    steps = [value for step, wobble, count, odd in parts for value in [*[step, step + wobble] * (count // 2), odd]]
    times = np.cumsum([0, *steps]).tolist()
    repeats = [repeating] * len(times)
    expected = plain(times, repeats, 0)
    assert breaks_of(times, repeats, len(times), printed=0) == expected
    assert breaks_of(times, repeats, rows, printed=0) == expected


# --- in a file -------------------------------------------------------------------------------------------------------


def opened(tmp_path: Path, rows: Sequence[tuple[int, int, int]], rows_per_span: int) -> Capture:
    path = tmp_path / "board.csv"
    path.write_text("\nTime [ns],A,B\n" + "".join(f"{time},{a},{b}\n" for time, a, b in rows))
    return open_capture(path, CaptureKeys(), rows_per_span=rows_per_span)


def as_rows(found: Sequence[Anomalies]) -> list[tuple[object, ...]]:
    return [
        (anomalies.kind, anomalies.severity, int(time), *(column[i] for column in anomalies.evidence.values()))
        for anomalies in found
        for i, time in enumerate(anomalies.times)
    ]


@pytest.mark.parametrize("rows_per_span", [200_000, 1, 3])
def test_a_reversal_in_a_file(tmp_path: Path, rows_per_span: int) -> None:
    """Time goes from 20 ns back to 5 ns in line 6 (a blank line and the header stand above): what follows does not
    continue what was read, and its first row is its first level."""
    capture = opened(tmp_path, [(0, 0, 0), (10, 1, 0), (20, 0, 0), (5, 1, 1), (15, 0, 1)], rows_per_span)
    spans = list(capture.spans(["A", "B"]))
    assert as_rows(capture.anomalies) == [("time_reversal", None, 20_000, 6, 15e-9, 2)]
    parts = [0, *[i for i, span in enumerate(spans) if not span.joined]]
    assert len(parts) == 2
    before, after = spans[: parts[1]], spans[parts[1] :]
    assert (before[0].start, before[-1].stop, after[0].start, after[-1].stop) == (0, 20_001, 5_000, 15_001)
    assert after[0].lines["A"].initial == 1
    assert [tick for span in after for tick in span.lines["A"].times] == [15_000]
    assert all(span.lines["B"].times.size == 0 for span in spans)
    assert (capture.first, capture.last, capture.grid) == (0, 20_000, 10_000)


@pytest.mark.parametrize("rows_per_span", [200_000, 7])
@pytest.mark.parametrize(("behind", "severity", "changed"), [((0, 1), None, 2), ((1, 0), None, 0), ((0, 0), "note", 1)])
def test_a_gap_in_a_file(
    tmp_path: Path, rows_per_span: int, behind: tuple[int, int], severity: str | None, changed: int
) -> None:
    """1001 rows 10 ns apart that end with A high and B low, then 1 us of nothing. Where one line alone differs behind
    it, it may as well be a rest: a note. Line 1004 is row 1002 below a blank line and the header."""
    rows = [(10 * i, (i + 1) & 1, 0) for i in range(1001)]
    rows += [(11_000 + 10 * i, behind[0] ^ (i & 1), behind[1]) for i in range(3)]
    capture = opened(tmp_path, rows, rows_per_span)
    spans = list(capture.spans(["A", "B"]))
    assert as_rows(capture.anomalies) == [("time_gap", severity, 10_000_000, 1004, pytest.approx(1e-6), changed)]
    assert [span.start for span in spans if not span.joined] == [11_000_000]
    assert max(span.stop for span in spans if span.stop <= 11_000_000) == 10_000_001


def test_frames_with_rests_between_are_one_capture(tmp_path: Path) -> None:
    """Bursts of 40 clock edges every 100 us, then the shaft and the master rest for 0.5 ms: less than eight times the
    longest interval (92 us), so nothing is broken."""
    rows: list[tuple[int, int, int]] = []
    time = 0
    for burst in range(60):
        rows += [(time + 200 * edge, edge & 1, burst & 1) for edge in range(40)]
        time += 500_000 if burst == 40 else 100_000
    capture = opened(tmp_path, rows, 500)
    assert all(span.joined for span in capture.spans(["A", "B"]))
    assert capture.anomalies == []
