"""One table of layouts: what stands in the file, and the edges, names and notes that come of it.

Ticks are worked out beside each row: a tick is three digits finer than what the first rows print, at most 1 ps.
"""

from __future__ import annotations

import hashlib
from fractions import Fraction
from pathlib import Path

import pytest

from decode.capture.source import Capture, open_capture
from decode.errors import InputError
from decode.sheet import CaptureKeys
from decode.spans import Edges

NONE = CaptureKeys()
PICOSECOND = Fraction(1, 10**12)


def opened(tmp_path: Path, content: str | bytes, keys: CaptureKeys = NONE, rows_per_span: int = 200_000) -> Capture:
    path = tmp_path / "board.csv"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return open_capture(path, keys, rows_per_span=rows_per_span)


def whole(capture: Capture) -> dict[str, Edges]:
    """All edges of all columns, the spans joined."""
    lines: dict[str, Edges] = {}
    for span in capture.spans(capture.columns):
        for name, edges in span.lines.items():
            lines[name] = lines[name].then(edges) if name in lines else edges
    return lines


AB = {"A": (0, [(10_000, 1), (30_000, 0)]), "B": (1, [(20_000, 0)])}
"""A rises at 10 ns and falls at 30 ns, B falls at 20 ns: in picoseconds, as printed in nanoseconds or finer."""

ROWS = ((0, 0, 1), (10, 1, 1), (20, 1, 0), (30, 0, 0))


def table(header: str, delimiter: str, time: str = "{}", end: str = "\n", cell: str = "{}") -> str:
    lines = [header] if header else []
    lines += [delimiter.join([time.format(t), cell.format(a), cell.format(b)]) for t, a, b in ROWS]
    return end.join(lines) + end


@pytest.mark.parametrize(
    ("content", "keys", "expected", "layout"),
    [
        (table("Time [ns],A,B", ","), NONE, AB, "comma-separated, header, time in ns, a row per change"),
        (table("Time(ns);A;B", ";"), NONE, AB, "semicolon-separated, header, time in ns, a row per change"),
        (
            "time_ns,A\n0,0\n1,1\n",
            NONE,
            {"A": (0, [(1_000, 1)])},
            "comma-separated, header, time in ns, a row per change",
        ),
        (table("t_ns\tA\tB", "\t"), NONE, AB, "tab-separated, header, time in ns, a row per change"),
        (table("Time [ns]  A  B", "  "), NONE, AB, "space-separated, header, time in ns, a row per change"),
        (table("Zeit [ns], A, B", ", "), NONE, AB, "comma-separated, header, time in ns, a row per change"),
        (table("elapsed (ns),A,B", ","), NONE, AB, "comma-separated, header, time in ns, a row per change"),
        (
            table('"Time [ns]","A","B"', ",", cell='"{}"'),
            NONE,
            AB,
            "comma-separated, header, time in ns, a row per change",
        ),
        (table("Time [s],A,B", ",", "{}e-9"), NONE, AB, "comma-separated, header, time in s, a row per change"),
        (table("Time [ms],A,B", ",", "0.0000{:02}"), NONE, AB, "comma-separated, header, time in ms, a row per change"),
        (table("Time [µs],A,B", ",", "0.0{:02}"), NONE, AB, "comma-separated, header, time in us, a row per change"),
        (table("Time [us],A,B", ",", "0.0{:02}"), NONE, AB, "comma-separated, header, time in us, a row per change"),
        (table("Time [ps],A,B", ",", "{}000"), NONE, AB, "comma-separated, header, time in ps, a row per change"),
        (table("Time,A,B", ",", "0.0000000{:02}"), NONE, AB, "comma-separated, header, time in s, a row per change"),
        (
            table("Time,A,B", ","),
            CaptureKeys(time_unit="ns"),
            AB,
            "comma-separated, header, time in ns, a row per change",
        ),
        (table("Time [ns];A;B", ";", "{},0"), NONE, AB, "semicolon-separated, header, time in ns, a row per change"),
        (table("Time [ns],A,B", ",", end="\r\n"), NONE, AB, "comma-separated, header, time in ns, a row per change"),
        (table("Time [ns],A,B", ",", end="\r"), NONE, AB, "comma-separated, header, time in ns, a row per change"),
        (table("Time [ns],A,B", ",", end=",\n"), NONE, AB, "comma-separated, header, time in ns, a row per change"),
        (table("Time [ns],A,B\n", ",", end="\n\n"), NONE, AB, "comma-separated, header, time in ns, a row per change"),
        (table("Time [ns],A,B", ",", cell="{}.0"), NONE, AB, "comma-separated, header, time in ns, a row per change"),
        ("\ufeff" + table("Time [ns],A,B", ","), NONE, AB, "comma-separated, header, time in ns, a row per change"),
        (
            "# one\n; two, with a comma\n// three\n% four\n\n" + table("Time [ns],A,B", ","),
            NONE,
            AB,
            "comma-separated, header, time in ns, a row per change",
        ),
        (
            table("Time [ns],A,B", ",", cell="{}.3"),
            CaptureKeys(threshold_v=(0.5, 1.2)),
            AB,
            "comma-separated, header, time in ns, voltages, a row per sample",
        ),
        (
            table("", ",", "0.0000000{:02}"),
            NONE,
            {"2": AB["A"], "3": AB["B"]},
            "comma-separated, no header, time in s, a row per change",
        ),
        (
            table("Sample,A,B", ","),
            CaptureKeys(sample_rate_hz=1e9),
            {"A": (0, [(10, 1), (30, 0)]), "B": (1, [(20, 0)])},
            "comma-separated, header, sample numbers at 1000000000 Hz, a row per change",
        ),
        (
            "A,B\n0,1\n0,1\n1,1\n1,0\n",
            CaptureKeys(sample_rate_hz=1e9),
            {"A": (0, [(2, 1)]), "B": (1, [(3, 0)])},
            "comma-separated, header, no time, 1000000000 Hz, a row per sample",
        ),
        (
            "0\t1\t\r\n1\t1\t\r\n1\tx\t\r\n1\tZ\t\r\n0\tU\t\r\n",
            CaptureKeys(sample_rate_hz=1e9),
            {"1": (0, [(1, 1), (4, 0)]), "2": (1, [(2, 2)])},
            "tab-separated, no header, no time, 1000000000 Hz, a row per sample",
        ),
        (
            "1\n0\n0\n1\n",
            CaptureKeys(sample_rate_hz=5),
            {"1": (1, [(1, 0), (3, 1)])},
            "one column, no header, no time, 5 Hz, a row per sample",
        ),
        (
            "Time [ns],A\n" + "".join(f"{8 * i},{int(i > 4)}\n" for i in range(9)),
            NONE,
            {"A": (0, [(40_000, 1)])},
            "comma-separated, header, time in ns, a row per sample",
        ),
        (
            "X,Z\n0,1\n1,1\n",
            CaptureKeys(sample_rate_hz=1e9),
            {"X": (0, [(1, 1)]), "Z": (1, [])},
            "comma-separated, header, no time, 1000000000 Hz, a row per sample",
        ),
    ],
)
def test_layouts(
    tmp_path: Path,
    content: str,
    keys: CaptureKeys,
    expected: dict[str, tuple[int, list[tuple[int, int]]]],
    layout: str,
) -> None:
    """Initial level and (tick, level) of every edge, whole and a row at a time."""
    for rows_per_span in (200_000, 1):
        capture = opened(tmp_path, content, keys, rows_per_span)
        found = {
            name: (edges.initial, list(zip(edges.times.tolist(), edges.levels.tolist(), strict=True)))
            for name, edges in whole(capture).items()
        }
        assert found == expected
        assert capture.layout == layout


def test_what_is_known_at_the_end(tmp_path: Path) -> None:
    """Rows at -10, 0, 25 and 45 ns: differences 10, 25 and 20 ns have the divisor 5 ns; the digest is of the bytes."""
    content = "Time [s],A\n-0.000000010,0\n0.000000000,1\n0.000000025,0\n0.000000045,1\n"
    capture = opened(tmp_path, content)
    assert capture.grid == 5_000
    edges = whole(capture)["A"]
    assert edges.times.tolist() == [0, 25_000, 45_000]
    assert (capture.tick, capture.grid, capture.rows) == (PICOSECOND, 5_000, 4)
    assert (capture.first, capture.last) == (-10_000, 45_000)
    assert capture.digest == hashlib.sha256(content.encode()).hexdigest()
    assert capture.anomalies == []


def test_a_capture_far_from_zero(tmp_path: Path) -> None:
    """1.7 billion seconds and nanoseconds need 19 digits, more than a float holds; a tick of 1 ns still fits."""
    capture = opened(tmp_path, "Time [s],A\n1700000000.123456789,0\n1700000000.123456790,1\n")
    assert whole(capture)["A"].times.tolist() == [1_700_000_000_123_456_790]
    assert (capture.tick, capture.grid) == (Fraction(1, 10**9), 1)


def test_two_rows_with_one_time(tmp_path: Path) -> None:
    """A pulse shorter than the printed digit keeps both its edges, also where the block ends between the two rows."""
    content = "Time [ns],A\n0,0\n10,1\n10,0\n20,1\n20,0\n20,1\n"
    for rows_per_span in (200_000, 1, 2, 3):
        capture = opened(tmp_path, content, rows_per_span=rows_per_span)
        assert whole(capture)["A"].times.tolist() == [10_000, 10_000, 20_000, 20_000, 20_000]
        for span in capture.spans(["A"]):
            assert all(span.start <= tick < span.stop for tick in span.lines["A"].times)


def test_spans(tmp_path: Path) -> None:
    """Header and first row, two rows, one row: a span ends before the last time read, the last one tick after it."""
    capture = opened(tmp_path, "Time [ns],A\n0,0\n10,1\n20,0\n30,1\n", rows_per_span=2)
    spans = list(capture.spans(["A"]))
    assert [(span.start, span.stop, span.joined) for span in spans] == [
        (0, 20_000, True),
        (20_000, 30_000, True),
        (30_000, 30_001, True),
    ]
    assert [span.lines["A"].times.tolist() for span in spans] == [[10_000], [20_000], [30_000]]


def test_thresholds(tmp_path: Path) -> None:
    """Low at or below 0.8 V, high at or above 2 V, in between as before; unknown until one of them is met."""
    volts = ("1.0", "0.8", "1.9", "2.0", "1.0", "0.9", "0.7", "3.3", "x", "1.5", "0.1")
    content = "Time [ns],A\n" + "".join(f"{i},{v}\n" for i, v in enumerate(volts))
    for rows_per_span in (200_000, 1):
        capture = opened(tmp_path, content, CaptureKeys(threshold_v=(0.8, 2.0)), rows_per_span)
        edges = whole(capture)["A"]
        assert edges.initial == 2
        assert list(zip(edges.times.tolist(), edges.levels.tolist(), strict=True)) == [
            (1_000, 0), (3_000, 1), (6_000, 0), (7_000, 1), (8_000, 2), (10_000, 0),
        ]  # fmt: skip


@pytest.mark.parametrize(
    ("content", "keys", "notes"),
    [
        ("Time [ns],A\n0,0\n", NONE, ["the separator is taken to be a comma", "line 1 is taken for the header"]),
        ("\n0.5 0\n1.5 1\n", NONE, [
            "the separator is taken to be a space",
            "there is no header: columns are numbered from 1",
            "column '1' is taken for the time",
            "the unit of time is taken to be s: column '1' has decimals and names no unit",
        ]),
        ("T [us];A\n0,5;0\n", CaptureKeys(time_unit="ns", sample_rate_hz=1e6), [
            "the separator is taken to be a semicolon",
            "line 1 is taken for the header",
            "the decimal mark is a comma",
            "the time is in ns, as given, where the header of column 'T [us]' says us",
            "sampled at 1000000 Hz, as given",
        ]),
        ("n\tA\t\n0\t0\t\n5\t1\t\n", CaptureKeys(sample_rate_hz=2.5e6), [
            "the separator is taken to be a tab, with one at the end of each row",
            "line 1 is taken for the header",
            "column 'n' counts samples at 2500000 Hz, as given",
        ]),
        ("1\n0\n", CaptureKeys(sample_rate_hz=2.5e6), [
            "the file has one column",
            "there is no header: columns are numbered from 1",
            "no time column: the rows are samples at 2500000 Hz, as given",
        ]),
        ("Time,A\n0,0.3\n10,1.6\n", CaptureKeys(time_unit="ns", threshold_v=(1, 1.5)), [
            "the separator is taken to be a comma",
            "line 1 is taken for the header",
            "the time is in ns, as given",
            "voltages in A: low at or below 1, high at or above 1.5, as given; else as before",
        ]),
        ("Time [ns],A\n0,0\n\n# here\n10,1\n  \n20,0\n30", NONE, [
            "the separator is taken to be a comma",
            "line 1 is taken for the header",
            "2 blank lines skipped among the rows",
            "1 comment line skipped among the rows",
            "the last row, line 8, is cut short and was dropped",
        ]),
        ("Time [s],A\n0.1,0\n0.2,1\n0.3000000000004,0\n", NONE, [
            "the separator is taken to be a comma",
            "line 1 is taken for the header",
            "times finer than 1e-12 s were rounded to it, the first in line 4",
        ]),
    ],
)  # fmt: skip
def test_notes(tmp_path: Path, content: str, keys: CaptureKeys, notes: list[str]) -> None:
    """Nothing is inferred, skipped or dropped in silence."""
    capture = opened(tmp_path, content, keys, rows_per_span=1)
    whole(capture)
    assert capture.notes == notes


def test_a_short_capture_cut_short(tmp_path: Path) -> None:
    """Half a row is no row, and does not hide the shape of the one whole row above it."""
    capture = opened(tmp_path, "Time [s],A,B\n0.0,1,0\n0.1,1")
    assert {name: edges.initial for name, edges in whole(capture).items()} == {"A": 1, "B": 0}
    assert capture.rows == 1
    assert capture.notes[-1] == "the last row, line 3, is cut short and was dropped"


def test_unused_columns_are_named_and_not_read(tmp_path: Path) -> None:
    """C holds words, and that hurts nobody who does not ask for it."""
    capture = opened(tmp_path, "Time [ns],A,B,C\n0,0,1,idle\n10,1,1,busy\n")
    assert [span.lines.keys() for span in capture.spans(["A"])] == [{"A"}, {"A"}]
    assert "columns not used: B, C" in capture.notes


def test_a_capture_can_be_read_again(tmp_path: Path) -> None:
    """Two passes give the same spans and do not add up."""
    capture = opened(tmp_path, table("Time [ns],A,B", ","))
    first, second = whole(capture), whole(capture)
    assert first["A"].times.tolist() == second["A"].times.tolist()
    assert capture.rows == 4


@pytest.mark.parametrize(
    ("line", "column"),
    [("MA", "MA"), ("ma", "MA"), (2, "MA"), ("slo", "slo"), ("SLO", "SLO"), (4, "SLO"), ("a b", "A B"), (5, "A B")],
)
def test_lines_resolve(tmp_path: Path, line: str | int, column: str) -> None:
    """The exact name, else in other letters where only one matches, else the number among all columns."""
    capture = opened(tmp_path, "Time [ns],MA,slo,SLO,A B\n0,0,0,0,0\n")
    assert capture.column(line) == column


@pytest.mark.parametrize(
    ("line", "message", "hint"),
    [
        ("Slo", "the capture has no line 'Slo'", "did you mean 'SLO'?"),
        ("MAA", "the capture has no line 'MAA'", "did you mean 'MA'?"),
        ("index", "the capture has no line 'index'", "correct [lines] in the sheet"),
        ("Time [ns]", "the capture has no line 'Time [ns]'", "correct [lines] in the sheet"),
        (1, "the capture has no line 1", "correct [lines] in the sheet"),
        (0, "the capture has no line 0", "correct [lines] in the sheet"),
        (5, "the capture has no line 5", "correct [lines] in the sheet"),
    ],
)
def test_lines_that_are_not_there(tmp_path: Path, line: str | int, message: str, hint: str) -> None:
    """The columns there are, and the nearest name; the time is no line, and two that match are no match."""
    capture = opened(tmp_path, "Time [ns],MA,slo,SLO\n0,0,0,0\n")
    with pytest.raises(InputError) as error:
        capture.column(line)
    assert (error.value.problem, error.value.found, error.value.hint) == (message, "lines MA, slo, SLO", hint)


def test_repeated_and_empty_names(tmp_path: Path) -> None:
    """A name that comes twice gets a number, a column without one its own."""
    capture = opened(tmp_path, "Time [ns],A,A,,A\n0,0,0,1,0\n5,1,0,0,1\n")
    assert capture.columns == ("A", "A_2", "4", "A_3")


def test_the_real_frame() -> None:
    """One BiSS C frame recorded inside an FPGA at 125 MHz. 16384 rows; the first clock edge at sample 4096, 90 clock
    edges (45 periods), 14 data edges: counted in the file with awk; the 45 and the 1 MHz are in its source note."""
    path = Path(__file__).parents[3] / "shared" / "captures" / "biss0.prn"
    if not path.exists():
        pytest.skip("the recorded frame is not beside this checkout")
    capture = open_capture(path, CaptureKeys(sample_rate_hz=125e6))
    assert capture.columns == ("1", "2")
    lines = whole(capture)
    assert (capture.rows, capture.tick, capture.grid, capture.last) == (16384, Fraction(1, 125_000_000), 1, 16383)
    assert lines["1"].times[0] == 4096
    assert (lines["1"].times.size, lines["2"].times.size) == (90, 14)
    assert set((lines["1"].times[1:] - lines["1"].times[:-1]).tolist()) == {62, 63}
