"""A part of a capture: [capture] window_s."""

from __future__ import annotations

from collections.abc import Iterator
from fractions import Fraction
from pathlib import Path

import msgspec
import pytest
from exports import LAYOUTS, SHEET, Export, Signal, simulated
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from decode.capture.source import open_capture
from decode.capture.window import Window, within
from decode.errors import InputError
from decode.pipeline import check
from decode.sheet import CaptureKeys
from decode.spans import Edges, Span

NONE = "none"


@pytest.mark.parametrize(
    ("window", "expected"),
    [
        ((NONE, NONE), Window(None, None)),
        ((0.25, NONE), Window(250, None)),
        ((0.2501, 0.5), Window(251, 500)),  # the first tick that is not before it
        ((-0.0005, 0.1), Window(0, 100)),
        ((NONE, 0.1), Window(None, 100)),  # the decimal 0.1, which no double is
    ],
)
def test_ticks(window: tuple[float | str, float | str], expected: Window) -> None:
    """Milliseconds: from the first tick at or behind the one end to the last before the other."""
    keys = msgspec.convert({"window_s": window}, CaptureKeys)
    assert Window.of(keys, Fraction(1, 1000)) == expected


def test_spans_are_cut_and_later_ones_not_asked_for() -> None:
    """[5, 25) of spans of ten ticks with an edge amid each: the level at 5 is the one it had."""

    def spans() -> Iterator[Span]:
        for t in (0, 10, 20):
            yield Span(t, t + 10, {"A": Edges.from_toggles(t // 10 & 1, [t + 4])})
        raise AssertionError("a span behind the window")

    cut = list(within(spans(), Window(5, 25)))
    assert [(span.start, span.stop, span.lines["A"].initial, span.lines["A"].times.tolist()) for span in cut] == [
        (5, 10, 1, []),
        (10, 20, 1, [14]),
        (20, 25, 0, [24]),
    ]


def text(kind: str, rows: list[tuple[int, int, int]]) -> str:
    """Rows of (time, A, B) in one of three forms, of which the latter two need every row before the window."""
    if kind == "changes":
        return "Time [ms],A,B\n" + "".join(f"{t},{a},{b}\n" for t, a, b in rows)
    if kind == "voltages":
        return "Time [ms],A,B\n" + "".join(f"{t},{3.3 * a:.1f},{3.3 * b:.1f}\n" for t, a, b in rows)
    return "t_ms,line,level\n" + "".join(f"{t},A,{a}\n{t},B,{b}\n" for t, a, b in rows)


def inside(path: Path, keys: CaptureKeys, rows: int) -> object:
    capture = open_capture(path, keys, rows_per_span=rows)
    lines: dict[str, list[int]] = {}
    ends: list[int] = []
    try:
        for span in capture.spans(["A", "B"]):
            ends = [ends[0] if ends else span.start, span.stop]
            for name, edges in span.lines.items():
                known = lines.setdefault(name, [edges.initial])
                known += [v for pair in zip(edges.times.tolist(), edges.levels.tolist(), strict=True) for v in pair]
    except InputError as error:
        return str(error)
    return ends, lines, capture.first, capture.last, capture.digest, capture.notes


STEPS = st.lists(st.tuples(st.integers(1, 9), st.integers(0, 1), st.integers(0, 1)), min_size=12, max_size=40)


@settings(deadline=None, max_examples=100, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    STEPS,
    st.sampled_from(["changes", "voltages", "one line"]),
    st.integers(0, 250),
    st.integers(1, 250),
    st.integers(1, 9),
)
def test_a_window_is_the_part_of_the_whole(
    tmp_path: Path, steps: list[tuple[int, int, int]], kind: str, start: int, length: int, size: int
) -> None:
    """The edges are those of the whole capture inside the window, the levels at its start those the whole has there;
    wherever the file is cut into blocks. The digest is the whole file's."""
    rows, time = [(0, 0, 1)], 0
    for step, a, b in steps:
        time += step
        rows.append((time, a, b))
    path = tmp_path / "x.csv"
    path.write_text(text(kind, rows))
    threshold = (1.0, 2.0) if kind == "voltages" else None
    whole = open_capture(path, CaptureKeys(threshold_v=threshold))
    keys = CaptureKeys(threshold_v=threshold, window_s=(start / 1000, (start + length) / 1000))
    spans = list(within(list(whole.spans(["A", "B"])), Window.of(keys, whole.tick)))
    found = inside(path, keys, 200_000)
    assert inside(path, keys, size) == found
    assert inside(path, keys, 1) == found
    if not spans:
        assert isinstance(found, str) and "no row of the capture lies in the window" in found
        return
    assert isinstance(found, tuple)
    ends, lines = found[0], found[1]
    assert ends[0] == spans[0].start
    for name in ("A", "B"):
        joined = spans[0].lines[name]
        for span in spans[1:]:
            joined = joined.then(span.lines[name])
        pairs = zip(joined.times.tolist(), joined.levels.tolist(), strict=True)
        assert lines[name] == [joined.initial, *[value for pair in pairs for value in pair]]
    assert found[4] == whole.digest


@pytest.mark.parametrize("name", ["only changes, lines that change together in one row", "every sample"])
def test_frames_inside_are_those_of_the_whole(name: str, tmp_path: Path) -> None:
    """From 3.1 ms to 7 ms: the frames that begin and end inside, none blamed. The window's start lies between two
    bursts, its end within one (frames come every 250 us from 0.0625 ms on, for 25 us): 7 ms - 4 us + 62.5 us."""
    layout = next(layout for layout in LAYOUTS if layout.name == name)
    simulation = simulated(faulty=False)
    signal = Signal.of_samples(simulation) if layout.every_sample else Signal.of_changes(simulation)
    path = tmp_path / "capture.csv"
    path.write_bytes(layout.write(signal))
    whole = check(path, SHEET)
    sheet = msgspec.structs.replace(SHEET, capture=CaptureKeys(window_s=(0.0031, 0.0070700)))
    part = check(path, sheet)
    expected = whole.frames[(whole.frames["time_s"] > 0.0031) & (whole.frames["time_s"] < 0.0070)]
    kept = ["time_s", "latch_s", "raw", "position", "faulty"]
    assert part.frames[kept].reset_index(drop=True).equals(expected[kept].reset_index(drop=True))
    assert [finding.kind for finding in part.report.findings] == []
    assert part.report.capture.duration_s == pytest.approx(0.00397, abs=1e-6)
    assert "only the rows from 0.0031 s to 0.00707 s were looked at" in part.report.capture.notes
    assert part.report.provenance.capture_digest == whole.report.provenance.capture_digest


def test_an_empty_window_says_what_there_is(tmp_path: Path) -> None:
    path = tmp_path / "capture.csv"
    path.write_bytes(Export().write(Signal.of_changes(simulated(faulty=False))))
    for window, found in (
        ((1.0, NONE), "rows from 0 s to 0.00999992 s"),
        ((NONE, -1.0), "rows from 0 s on"),
    ):
        keys = msgspec.convert({"window_s": window}, CaptureKeys)
        with pytest.raises(InputError) as error:
            capture = open_capture(path, keys)
            list(capture.spans(["A"]))
        assert (error.value.problem, error.value.found) == ("no row of the capture lies in the window", found)
