"""What is told from the first rows, and what is not: the evidence each needs, one case either side."""

from __future__ import annotations

from fractions import Fraction
from pathlib import Path

import pytest

from decode.capture.columns import port_base, thresholds_between
from decode.capture.names import is_time_name, maybe_unit, without_unit
from decode.capture.preamble import read_preamble
from decode.capture.source import Capture, open_capture
from decode.sheet import CaptureKeys

NONE = CaptureKeys()


def opened(tmp_path: Path, content: str, keys: CaptureKeys = NONE) -> Capture:
    path = tmp_path / "x.csv"
    path.write_text(content)
    return open_capture(path, keys)


def rows(n: int, form: str = "{i}e-3,{level}") -> str:
    return "".join(form.format(i=i, level=i & 1) + "\n" for i in range(n))


@pytest.mark.parametrize(
    ("name", "unit", "bare"),
    [
        ("Time [s]", "s", "Time"),
        ("Time(ms)", "ms", "Time"),
        ("t_us", "us", "t"),
        ("t / ns", "ns", "t"),
        ("elapsed [µs]", "us", "elapsed"),
        ("ns", "ns", "ns"),
        ("A [V]", None, "A"),
        ("CLK_N", None, "CLK_N"),
        ("Data [7]", None, "Data [7]"),
    ],
)
def test_units_in_names(name: str, unit: str | None, bare: str) -> None:
    assert (maybe_unit(name), without_unit(name)) == (unit, bare)


@pytest.mark.parametrize(
    ("name", "is_time"),
    [("Time", True), ("TIMESTAMP", True), ("t_ns", True), ("T", True), ("Date-Time", True), ("Elapsed time [s]", True),
     ("timer", False), ("clk", False), ("data", False)],
)  # fmt: skip
def test_names_of_the_time(name: str, is_time: bool) -> None:
    assert is_time_name(name) == is_time


@pytest.mark.parametrize(
    ("line", "rate"),
    [
        ("# Sample rate: 24 MHz", 24_000_000),
        ("Sample Rate,100000000", 100_000_000),
        ("Sampling frequency (kHz);12500", 12_500_000),
        ("; sample rate = 1,000,000 Hz", 1_000_000),
        ("samplerate: 2.5e6", 2_500_000),
        ("Acquisition rate = 500 MS/s", 500_000_000),
        ("Sample interval: 10 ns", 100_000_000),
        ("Sample period [us],0.5", 2_000_000),
        ("Sample rate: 24 parsecs", None),
        ("Sample rate: fast", None),
        ("Baud rate: 115200", None),
        ("Sample rate: -5 MHz", None),
        ("Sample rate: 1e99", None),
    ],
)
def test_rates_in_preambles(line: str, rate: int | None) -> None:
    found = read_preamble([(1, "# nothing"), (7, line)])
    assert (found.rate, found.rate_line) == ((Fraction(rate), 7) if rate is not None else (None, None))


def test_a_rate_that_can_be_read_in_two_ways() -> None:
    """24 or 24000 MHz: not used, and its line is kept. A later line that is clear is."""
    assert (
        read_preamble([(3, "Sample rate: 24,000 MHz")]).rate,
        read_preamble([(3, "Sample rate: 24,000 MHz")]).unclear,
    ) == (
        None,
        3,
    )
    assert read_preamble([(3, "Sample rate: 24,000 MHz"), (4, "Sample rate: 24 MHz")]).rate == 24_000_000


def test_a_sample_count_in_the_preamble(tmp_path: Path) -> None:
    """A hundred promised, ninety there: a note; not for a capture of changes, whose rows are no samples."""
    content = "Samples: 100\nTime [ns],A\n" + "".join(f"{i},{i // 3 & 1}\n" for i in range(90))
    capture = opened(tmp_path, content)
    list(capture.spans(["A"]))
    assert "the lines above the table promise 100 samples; there are 90" in capture.notes
    capture = opened(tmp_path, "Samples: 100\nTime [ns],A\n" + "".join(f"{i * i},{i & 1}\n" for i in range(90)))
    list(capture.spans(["A"]))
    assert not any("promise" in note for note in capture.notes)


@pytest.mark.parametrize(
    ("cells", "base"),
    [
        (["0x10", "0x1f"], 16),
        (["10h", "2Fh"], 16),
        (["7", "1a"], 16),
        (["0b10", "0b11"], 2),
        (["0010", "0110"], 2),
        (["1", "2", "13"], 10),
        (["01", "02", "10"], None),  # decimal or hexadecimal
        (["0", "1", "10", "11"], None),  # binary, decimal or hexadecimal
        (["0", "1"], None),  # levels
        (["10", "x"], 2),  # an unknown value says nothing
        (["high", "low"], None),
        (["-1", "2"], None),
        ([], None),
    ],
)
def test_bases_of_port_values(cells: list[str], base: int | None) -> None:
    assert port_base(cells, NONE) == base


def test_a_base_that_the_sheet_names() -> None:
    """It goes before the digits' own look, as long as they are digits of it."""
    assert port_base(["01", "10"], CaptureKeys(port_base="binary")) == 2
    assert port_base(["01", "10"], CaptureKeys(port_base="decimal")) == 10
    assert port_base(["01", "12"], CaptureKeys(port_base="binary")) is None


def test_bits_of_a_port(tmp_path: Path) -> None:
    """0x01, 0x81, x: bit 0 is high, then not known; bit 7 rises in between."""
    capture = opened(tmp_path, "Time [ns],P 1\n0,0x01\n10,0x81\n20,x\n30,0x80\n")
    assert capture.column("p 1[7]") == "P 1[7]"
    lines = {"P 1[0]": [0, 0], "P 1[7]": [0, 0]}
    found = {name: [] for name in lines}
    for span in capture.spans(list(lines)):
        for name, edges in span.lines.items():
            found[name] += list(zip(edges.times.tolist(), edges.levels.tolist(), strict=True))
    assert found == {"P 1[0]": [(20_000, 2), (30_000, 0)], "P 1[7]": [(10_000, 1), (20_000, 2), (30_000, 1)]}


def test_thresholds() -> None:
    """30 % and 70 % of 3.3 V, and of -2.0 to 2.0 V."""
    assert thresholds_between(0.0, 3.3) == (0.99, 2.31)
    assert thresholds_between(-2.0, 2.0) == (-0.8, 0.8)


def volts(*levels: list[float]) -> str:
    return "Time [s],A,B\n" + "".join(f"{i}e-3,{a:.3f},{b:.3f}\n" for i, (a, b) in enumerate(zip(*levels, strict=True)))


def voltage_notes(capture: Capture) -> list[str]:
    return [note for note in capture.notes if note.startswith("voltages")]


def test_one_pair_of_thresholds_for_lines_of_one_kind(tmp_path: Path) -> None:
    """Levels of 0.1 and 3.2 V, and of 0.0 and 3.3 V: the medians of both, 0.05 and 3.25 V, at 30 % and 70 %. A line
    that rests at 3.3 V takes them; one that swings between 0 and 1.8 V has its own."""
    moving, alike, resting, lower = ([a, b] * 20 for a, b in ((0.1, 3.2), (0.0, 3.3), (3.3, 3.3), (0.0, 1.8)))
    assert voltage_notes(opened(tmp_path, volts(moving, alike))) == [
        "voltages in A, B: low at or below 1.01, high at or above 2.29, between the two levels found; else as before"
    ]
    assert voltage_notes(opened(tmp_path, volts(moving, resting))) == [
        "voltages in A, B: low at or below 1.03, high at or above 2.27, between the two levels found; else as before"
    ]
    assert len(voltage_notes(opened(tmp_path, volts(moving, lower)))) == 2


def test_levels_late_in_the_head(tmp_path: Path) -> None:
    """The first 2000 rows rest at one level: the search goes on to 40 000."""
    capture = opened(tmp_path, volts([0.1] * 5000 + [3.3, 0.1] * 1000, [0.1] * 7000))
    assert voltage_notes(capture)


def test_a_level_beside_voltages_stays_one(tmp_path: Path) -> None:
    """With thresholds given, a column that holds 0 and 1 alone is no voltage."""
    content = "Time [s],A,B\n" + "".join(f"{i}e-3,{3.3 * (i & 1)},{i & 1}\n" for i in range(20))
    capture = opened(tmp_path, content, CaptureKeys(threshold_v=(1.2, 1.8)))
    edges = [span.lines["B"].times.size for span in capture.spans(["A", "B"])]
    assert sum(edges) == 19
    assert voltage_notes(capture) == [
        "voltages in A: low at or below 1.2, high at or above 1.8, as given; else as before"
    ]


def test_thresholds_for_millivolts(tmp_path: Path) -> None:
    """threshold_v is in volts whatever the column is in."""
    content = "Time [s],A [mV]\n" + "".join(f"{i}e-3,{3300 * (i & 1)}\n" for i in range(20))
    capture = opened(tmp_path, content, CaptureKeys(threshold_v=(1.2, 1.8)))
    assert sum(span.lines["A [mV]"].times.size for span in capture.spans(["A [mV]"])) == 19


@pytest.mark.parametrize(
    ("content", "columns"),
    [
        ("Time [s],line,level\n" + rows(20, "{i}e-3,A,{level}"), ("A",)),
        ("Time [s],channel,level\n" + rows(20, "{i}e-3,{level},1"), ("0", "1")),
        (rows(20, "{i}e-3,clk,{level}\n{i}.5e-3,dat,{level}"), ("clk", "dat")),
        ("Time [s],A,state\n" + rows(20, "{i}e-3,{level},idle"), ("A", "state")),  # not called a line
        ("Time [s],signal,clk\n" + rows(20, "{i}e-3,1,{level}"), ("signal", "clk")),  # a line that is called signal
    ],
)
def test_a_row_per_change_of_one_line(tmp_path: Path, content: str, columns: tuple[str, ...]) -> None:
    assert opened(tmp_path, content).columns == columns


def test_the_level_before_the_first_change(tmp_path: Path) -> None:
    """A is stated at the first time; B changes to 1 later, so it was 0; C is first named late in the file, and was
    not known before."""
    content = "t_ms,line,level\n" + "0,A,1\n5,B,1\n7,A,0\n" + "".join(f"{10 + i},B,{i & 1}\n" for i in range(3000))
    capture = opened(tmp_path, content + "9999,C,1\n")
    assert capture.column("C") == "C"
    first = next(iter(capture.spans(["A", "B", "C"])))
    assert {name: edges.initial for name, edges in first.lines.items()} == {"A": 1, "B": 0, "C": 2}


@pytest.mark.parametrize(
    ("content", "time"),
    [
        ("0,0.001,1\n1,0.002,0\n2,0.003,1\n", "2"),  # decimals go before whole numbers that rise
        ("1,0,0.5\n0,1,1.5\n1,1,2.5\n", "3"),
        ("1,0.5,0\n0,1.5,0\n1,2.5,1\n", "2"),
    ],
)
def test_a_time_column_without_a_name(tmp_path: Path, content: str, time: str) -> None:
    """The column whose numbers rise; and a note that says so."""
    assert f"column {time!r} is taken for the time" in opened(tmp_path, content).notes


def test_a_rate_beside_times(tmp_path: Path) -> None:
    """24 MHz is the step of each time, 41 667 ps; not where rows stand 10 ns apart."""
    content = "# Sample rate: 24 MHz\nTime [ns],A\n"
    capture = opened(tmp_path, content + "0,0\n500,1\n1000,0\n")
    list(capture.spans(["A"]))
    assert (capture.grid, capture.notes[-1]) == (41_667, "sampled at 24000000 Hz, as line 1 says")
    capture = opened(tmp_path, content + "0,0\n500,1\n510,0\n")
    list(capture.spans(["A"]))
    assert capture.grid == 10_000
    assert capture.notes[-1] == "the sample rate of 24000000 Hz, as line 1 says, is not used: rows stand closer"


def test_what_is_given_goes_before_the_preamble(tmp_path: Path) -> None:
    capture = opened(tmp_path, "# Sample rate: 24 MHz\nA\n0\n1\n", CaptureKeys(sample_rate_hz=1e6))
    assert capture.tick == Fraction(1, 10**6)
    assert "line 1 says 24000000 Hz, which is not used" in capture.notes


def test_a_comment_that_is_no_header(tmp_path: Path) -> None:
    """Three cells above three columns, but one of them is a sentence's end; and a key with its value is no name."""
    for comment in ("# time: 12, a, b", "# A, A, B", "# 1, 2, 3"):
        capture = opened(tmp_path, f"{comment}\n0.1,0,1\n0.2,1,1\n")
        assert capture.columns == ("2", "3")
