"""However a file is cut into spans, they hold the same: the property on which all other rooms build."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from decode.capture.source import open_capture
from decode.errors import InputError
from decode.sheet import CaptureKeys


@dataclass
class _Part:
    """Spans between two breaks, put together: start, stop, and per line its first level and its edges."""

    start: int
    stop: int
    lines: dict[str, tuple[int, list[tuple[int, int]]]]


def read(path: Path, keys: CaptureKeys, rows_per_span: int) -> tuple[object, ...]:
    """Everything a capture says, independent of where it was cut; or the message that refuses it."""
    try:
        capture = open_capture(path, keys, rows_per_span=rows_per_span)
        parts: list[_Part] = []
        for span in capture.spans(capture.columns):
            if not parts or not span.joined:
                parts.append(_Part(span.start, span.stop, {name: (e.initial, []) for name, e in span.lines.items()}))
            part = parts[-1]
            assert span.joined is False or len(parts) == 1 or part.stop in (span.start, span.stop)
            part.stop = span.stop
            for name, edges in span.lines.items():
                initial, known = part.lines[name]
                assert edges.initial == (known[-1][1] if known else initial)
                known.extend(zip(edges.times.tolist(), edges.levels.tolist(), strict=True))
    except InputError as error:
        return (str(error),)
    anomalies = [
        (found.kind, found.severity, found.times.tolist(), {name: list(c) for name, c in found.evidence.items()})
        for found in capture.anomalies
    ]
    return parts, anomalies, capture.notes, capture.rows, capture.first, capture.last, capture.grid, capture.digest


ROW = st.tuples(st.integers(-2, 9), st.sampled_from("0011x"), st.sampled_from("01"), st.sampled_from(["", "\n", "#\n"]))


@settings(deadline=None, max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(ROW, min_size=1, max_size=30), st.integers(1, 30), st.sampled_from(["", "\n", ",", ",1\n", "x,1,1\n"]))
def test_rows_that_change(tmp_path: Path, rows: list[tuple[int, str, str, str]], size: int, end: str) -> None:
    """Times that mostly rise, with equal ones, reversals, unknown levels, blank and comment lines, and a last row that
    may be cut short or wrong: whole, cut every `size` lines, and line by line."""
    text, time = "Time [ns],A,B\n", 0
    for step, a, b, extra in rows:
        time += step
        text += f"{time},{a},{b}\n{extra}"
    path = tmp_path / "x.csv"
    path.write_text(text + (f"{time + 1}{end}" if end else ""))
    whole = read(path, CaptureKeys(), 200_000)
    assert read(path, CaptureKeys(), size) == whole
    assert read(path, CaptureKeys(), 1) == whole


@settings(deadline=None, max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    st.lists(st.sampled_from(["0.0", "0.9", "1.0", "1.5", "2.2", "3.3", "x"]), min_size=1, max_size=30),
    st.integers(1, 30),
)
def test_voltages_with_hysteresis(tmp_path: Path, volts: list[str], size: int) -> None:
    """The level between the thresholds is the one before, also across a cut."""
    path = tmp_path / "x.csv"
    path.write_text("U\n" + "\n".join(volts))
    keys = CaptureKeys(threshold_v=(0.9, 2.0), sample_rate_hz=1e6)
    whole = read(path, keys, 200_000)
    assert read(path, keys, size) == whole
    assert read(path, keys, 1) == whole


@pytest.mark.parametrize("size", [1, 7, 1000, 1003, 5000])
def test_gaps(tmp_path: Path, size: int) -> None:
    """Three windows of 1200 rows with lost stretches between, and one reversal."""
    rows, time = [], 0
    for window in range(3):
        rows += [f"{time + 10 * i + i % 3},{i & 1},{(i + window) & 1}" for i in range(1200)]
        time += 40_000
    rows += [f"{500 + i},0,{i & 1}" for i in range(5)]
    path = tmp_path / "x.csv"
    path.write_text("Time [ns],A,B\n" + "\n".join(rows) + "\n")
    whole = read(path, CaptureKeys(), 200_000)
    assert isinstance(whole[0], list)
    assert len(whole[0]) == 4
    assert read(path, CaptureKeys(), size) == whole
