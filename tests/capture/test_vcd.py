"""Value change dumps: what stands in the file, and the lines, levels and spans that come of it."""

from __future__ import annotations

import hashlib
import tracemalloc
from collections.abc import Sequence
from fractions import Fraction
from pathlib import Path
from typing import Literal

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from decode.capture.source import Capture, open_capture
from decode.capture.vcd_changes import PADDING, ChangeScanner
from decode.capture.vcd_definitions import Line
from decode.errors import InputError
from decode.sheet import CaptureKeys
from decode.spans import UNKNOWN, Edges

NONE = CaptureKeys()
NANOSECOND = Fraction(1, 10**9)

HEAD = """$timescale 1 ns $end
$scope module tb $end
$var wire 1 ! a $end
$var wire 1 " b $end
$var reg 4 # bus [3:0] $end
$upscope $end
$enddefinitions $end
"""


def opened(tmp_path: Path, content: str, rows_per_span: int = 200_000, keys: CaptureKeys = NONE) -> Capture:
    path = tmp_path / "dump.vcd"
    path.write_bytes(content.encode())
    return open_capture(path, keys, rows_per_span=rows_per_span)


def whole(capture: Capture, columns: Sequence[str] | None = None) -> dict[str, Edges]:
    """All edges of all columns (or some), the spans joined."""
    lines: dict[str, Edges] = {}
    for span in capture.spans(capture.columns if columns is None else columns):
        for name, edges in span.lines.items():
            lines[name] = lines[name].then(edges) if name in lines else edges
    return lines


def told(edges: Edges) -> tuple[int, list[tuple[int, int]]]:
    return edges.initial, list(zip(edges.times.tolist(), edges.levels.tolist(), strict=True))


def level_at(edges: Edges, time: int) -> int:
    """The level behind all edges up to `time`, by going through them."""
    level = edges.initial
    for tick, after in zip(edges.times.tolist(), edges.levels.tolist(), strict=True):
        if tick <= time:
            level = after
    return level


# --- the standard's own example --------------------------------------------------------------------------------------

EXAMPLE = """$date today $end
$timescale 1 ns $end
$scope module top $end
$scope module m1 $end
$var trireg 1 *@ net1 $end
$var trireg 1 *# net2 $end
$var trireg 1 *$ net3 $end
$upscope $end
$scope task t1 $end
$var reg 32 (k accumulator[31:0] $end
$var integer 32 {2 index $end
$upscope $end
$upscope $end
$enddefinitions $end
$comment a note between definitions and values, with a word such as 0*$ or #7 in it $end
#500
$dumpvars
x*@
x*#
x*$
bx (k
bx {2
$end
#505
0*@
1*#
1*$
b10zx1110x11100 (k
b1111000101z01x {2
#510
0*$
#520
1*$
#530
0*$
bz (k
#535
$dumpall 0*@ 1*# 0*$
bz (k
b1111000101z01x {2
$end
#540
1*$
#1000
$dumpoff
x*@
x*#
x*$
bx (k
bx {2
$end
#2000
$dumpon
z*@
1*#
0*$
b0 (k
bx {2
$end
#2010
1*$
"""


def test_the_standards_example(tmp_path: Path) -> None:
    """The code of net3 is `*$`, and its values are x 1 0 1 0 0 1 x 0 1 at the times the example sets.

    Source: IEEE Std 1364-2005 clause 18.2.4, the worked example.
    """
    capture = opened(tmp_path, EXAMPLE)
    lines = whole(capture)
    assert capture.tick == NANOSECOND
    times = (500, 505, 510, 520, 530, 535, 540, 1000, 2000, 2010)
    levels = {"x": UNKNOWN, "0": 0, "1": 1}
    assert [level_at(lines["net3"], time) for time in times] == [levels[one] for one in "x101001x01"]
    assert told(lines["net3"]) == (
        2,
        [(505, 1), (510, 0), (520, 1), (530, 0), (540, 1), (1000, 2), (2000, 0), (2010, 1)],
    )
    assert told(lines["net1"]) == (2, [(505, 0), (1000, 2)])  # z is no level either
    assert (capture.first, capture.last, capture.grid) == (500, 2010, 5)
    assert "dumping was switched off once at 1e-06 s: lines are unknown until it is on again" in capture.notes


def test_the_standards_example_vector(tmp_path: Path) -> None:
    """A 32-bit b10zx1110x11100 is eighteen zeros and those fourteen digits; bz and bx are 32 of them, b0 32 zeros.

    Source: IEEE Std 1364-2005 clauses 18.2.2 and 18.2.4.
    """
    lines = whole(opened(tmp_path, EXAMPLE))
    bits = [lines[f"accumulator[{bit}]"] for bit in range(31, -1, -1)]

    def digits(time: int) -> str:
        return "".join("01x"[level_at(edges, time)] for edges in bits)

    assert digits(500) == "x" * 32
    assert digits(505) == "0" * 18 + "10xx1110x11100"
    assert digits(530) == "x" * 32
    assert digits(2000) == "0" * 32


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        ("b10", "0010"),
        ("bX10", "XX10"),
        ("bZX0", "ZZX0"),
        ("b0X10", "0X10"),
        ("B1", "0001"),
        ("b1111", "1111"),
        ("1", "0001"),  # the one digit of a scalar change is the rightmost too
    ],
)
def test_left_extension(tmp_path: Path, value: str, expected: str) -> None:
    """The bits on the left follow from the first one written: 0 behind 0 or 1, else the same.

    Source: IEEE Std 1364-2005 Tables 18-1 and 18-2; the rows with b10, bX10, bZX0 and b0X10 are theirs.
    """
    change = f"{value} #" if value[0] in "bB" else f"{value}#"
    lines = whole(opened(tmp_path, f"{HEAD}#0\n{change}\n"))
    assert [lines[f"bus[{bit}]"].initial for bit in (3, 2, 1, 0)] == [
        "01XZ".index(one) for one in expected.replace("Z", "X")
    ]


# --- what simulators write -------------------------------------------------------------------------------------------

AB = {"a": (0, [(10, 1), (30, 0)]), "b": (1, [(20, 0)])}
BODY = '#0\n0!\n1"\n#10\n1!\n#20\n0"\n#30\n0!\n'


@pytest.mark.parametrize(
    "content",
    [
        HEAD + BODY,
        HEAD + BODY.rstrip("\n"),  # no final line feed: the last value is whole all the same
        (HEAD + BODY).replace("\n", "\r\n"),
        (HEAD + BODY).replace("\n", " \t "),  # free format: all on one line
        "\ufeff" + HEAD + BODY,
        HEAD.replace("1 ns", "\n\t1ns\n") + BODY,
        HEAD.replace(" [3:0]", "[3:0]") + BODY,
        HEAD.replace("[3:0]", "[ 3 : 0 ]") + BODY,
        HEAD + BODY.replace("#10\n", "$comment b1 $dumpvars 0! #999 $end #10\n$comment x $end\n"),
        HEAD + BODY.replace("#0\n", "$dumpvars\n", 1).replace("#10\n", "$end\n#10\n"),  # values ahead of any time
        HEAD + BODY.replace("#0\n", "#0\n$dumpvars x! 0! $end\n", 1).replace("x! 0!", "0!"),
        HEAD + BODY.replace("#20", '#20\n#20\n$dumpall 1! 1" bx # $end'),  # repeated values are no changes
        HEAD + BODY.replace("0!", "b0 !").replace("1!", "B1 !"),  # a scalar written as a vector
        HEAD + BODY.replace("#20", "b1010 #\n#20"),
        HEAD.replace("$upscope $end", "$scope begin empty $end $upscope $end $upscope $end $upscope $end") + BODY,
        HEAD.replace("$upscope $end", "$scope module $end $var real 64 r speed $end $upscope $end $upscope $end")
        + BODY.replace("#20", "r1.5e3 r #20"),
        HEAD.replace("$upscope $end", "$var string 1 s state $end $var event 1 e go $end $upscope $end")
        + BODY.replace("#20", "sIDLE s 1e #20"),
    ],
)
def test_one_signal_in_many_forms(tmp_path: Path, content: str) -> None:
    """a rises at 10 ns and falls at 30 ns, b falls at 20 ns."""
    lines = whole(opened(tmp_path, content), ["a", "b"])
    assert {name: told(edges) for name, edges in lines.items()} == AB


@pytest.mark.parametrize(
    "codes", ["#", "$", "(", "{", "*", "b", "r1", "0", "#1", "$end", "$comment", "$dumpvars", "!" * 9]
)
@pytest.mark.parametrize("other", ["b1", "$x", "bb", "B0", "s", "#5", "0123456789", "%"])
def test_any_code(tmp_path: Path, codes: str, other: str) -> None:
    """A code may be any printable characters, and is told by its place. Source: IEEE Std 1364-2005 clause 18.2.3.7."""
    content = f"""$timescale 1 ns $end $var wire 1 {codes} a $end $var reg 2 {other} v $end $enddefinitions $end
    #0 0{codes} b10 {other} #10 b01 {other} b1 {codes} b11 {other} $comment b $end #20 0{codes} b0 {other}
    #30 b1 {codes} bx {other} """
    lines = whole(opened(tmp_path, content))
    assert told(lines["a"]) == (0, [(10, 1), (20, 0), (30, 1)])
    assert told(lines["v[0]"]) == (0, [(10, 1), (20, 0), (30, 2)])
    assert told(lines["v[1]"]) == (1, [(10, 0), (10, 1), (20, 0), (30, 2)])


@pytest.mark.parametrize("number", [1, 10, 100])
@pytest.mark.parametrize(("unit", "exponent"), [("s", 0), ("ms", 3), ("us", 6), ("ns", 9), ("ps", 12), ("fs", 15)])
def test_timescale(tmp_path: Path, number: int, unit: str, exponent: int) -> None:
    """1, 10 or 100 of any unit from s to fs, which is what a tick is."""
    capture = opened(tmp_path, f"{HEAD}{BODY}".replace("1 ns", f"{number}{unit}"))
    assert capture.tick == Fraction(number, 10**exponent)
    assert capture.layout == f"value change dump, times in {number} {unit}"


def test_a_timescale_from_the_sheet(tmp_path: Path) -> None:
    """A unit given counts, and is held against what the dump says; a rate alone does where the dump says nothing."""
    bare = (HEAD + BODY).replace("$timescale 1 ns $end", "")
    unit, rate = CaptureKeys(time_unit="us"), CaptureKeys(sample_rate_hz=24e6)
    assert opened(tmp_path, bare, keys=unit).tick == Fraction(1, 10**6)
    assert "times count 1 us, as given" in opened(tmp_path, bare, keys=unit).notes
    assert opened(tmp_path, bare, keys=rate).tick == Fraction(1, 24_000_000)
    assert (
        "the dump has no $timescale: its times are taken for samples at 24000000 Hz, as given"
        in opened(tmp_path, bare, keys=rate).notes
    )
    assert opened(tmp_path, HEAD + BODY, keys=unit).tick == Fraction(1, 10**6)
    assert "times count 1 us, as given, where the dump says 1 ns" in opened(tmp_path, HEAD + BODY, keys=unit).notes


def test_the_sampling_step(tmp_path: Path) -> None:
    """Changes at 24 MHz written in nanoseconds stand 41, 42, 83, ... ns apart: the step is 41.67 ns, 42 in whole
    ticks, and not their divisor of 1 ns. A stated rate is believed where no two times stand closer."""
    times = [round(i * (i + 7) / 2 * 1000 / 24) for i in range(60)]
    content = HEAD + "".join(f"#{time} {i & 1}!\n" for i, time in enumerate(times))
    capture = opened(tmp_path, content)
    whole(capture)
    assert capture.grid == 42
    assert "the sampling step is taken to be 4.167e-08 s: all times fit multiples of it" in capture.notes
    stated = opened(tmp_path, content, keys=CaptureKeys(sample_rate_hz=12e6))
    assert stated.grid == 83
    assert "sampled at 12000000 Hz, as given" in stated.notes
    wrong = opened(tmp_path, HEAD + BODY, keys=CaptureKeys(sample_rate_hz=1e6))
    assert wrong.grid == 10
    assert "the sample rate of 1000000 Hz, as given, is not used: times stand closer" in wrong.notes


@pytest.mark.parametrize("rows_per_span", [200_000, 1])
def test_a_reversal_ahead_of_a_window(tmp_path: Path, rows_per_span: int) -> None:
    """Times run from 0 to 30 ns, and again from 2 to 30 ns: what is in the window the second time does not continue
    what was there the first time, although the break itself lies ahead of it."""
    again = BODY.replace("#0\n", "#2\n", 1)
    capture = opened(tmp_path, HEAD + BODY + again, rows_per_span, CaptureKeys(window_s=(15e-9, "none")))
    spans = list(capture.spans(["a"]))
    assert [span.start for span in spans if not span.joined] == [15]
    assert [told(span.lines["a"])[1] for span in spans if span.lines["a"].times.size] == [[(30, 0)], [(30, 0)]]


@pytest.mark.parametrize("rows_per_span", [200_000, 1])
@pytest.mark.parametrize(
    ("window", "span", "edges", "rows"),
    [
        ((10e-9, 30e-9), (10, 30), (0, [(10, 1)]), 2),
        ((11e-9, "none"), (11, 31), (1, [(30, 0)]), 2),
        (("none", 30e-9), (0, 30), (0, [(10, 1)]), 4),
        ((12e-9, 13e-9), (12, 13), (1, []), 0),
    ],
)
def test_a_window(
    tmp_path: Path,
    rows_per_span: int,
    window: tuple[float | Literal["none"], float | Literal["none"]],
    span: tuple[int, int],
    edges: tuple[int, list[tuple[int, int]]],
    rows: int,
) -> None:
    """Only this part: from the first tick at or after its start up to the last before its stop."""
    capture = opened(tmp_path, HEAD + BODY, rows_per_span, CaptureKeys(window_s=window))
    spans = list(capture.spans(["a", "b"]))
    assert (spans[0].start, spans[-1].stop) == span
    assert told(whole(capture)["a"]) == edges
    assert (capture.rows, len(capture.digest)) == (rows, 64)
    assert any(note.startswith("only the times ") for note in capture.notes)


@pytest.mark.parametrize(
    ("letter", "level"),
    [*zip("01xXzZuUwW-", (0, 1, *[UNKNOWN] * 9), strict=True), ("L", 0), ("l", 0), ("H", 1), ("h", 1)],
)
def test_levels(tmp_path: Path, letter: str, level: int) -> None:
    """0, 1 and unknown. Source: IEEE Std 1364-2005 clause 18.2.1 for 0 1 x z; IEEE Std 1164, To_X01, for L and H."""
    lines = whole(opened(tmp_path, f"{HEAD}#0 {letter}! b{letter}{letter}01 #\n"))
    assert (lines["a"].initial, lines["bus[3]"].initial, lines["bus[2]"].initial) == (level, level, level)


def test_unknown_until_its_first_value(tmp_path: Path) -> None:
    """A line without a value is unknown; a value at the first time of all is its first level, a later one an edge."""
    capture = opened(tmp_path, f'{HEAD}#5\n0!\n#7\n1"\n#9\n')
    lines = whole(capture)
    assert told(lines["a"]) == (0, [])
    assert told(lines["b"]) == (2, [(7, 1)])
    assert told(lines["bus[0]"]) == (2, [])
    assert (capture.first, capture.last, capture.rows) == (5, 9, 2)
    assert "no value at all for: bus[3], bus[2], bus[1], bus[0]" in capture.notes


def test_several_changes_at_one_time(tmp_path: Path) -> None:
    """They keep their order: a pulse shorter than the grid. At the first time, the first of them is no edge."""
    capture = opened(tmp_path, f"{HEAD}#0\n0!\n1!\n0!\n#10\n1!\n0!\n#10\n1!\n#20\n")
    assert told(whole(capture)["a"]) == (0, [(0, 1), (0, 0), (10, 1), (10, 0), (10, 1)])


def test_times_without_changes_count_for_the_grid(tmp_path: Path) -> None:
    """Times 0, 40, 100 and 110 ns: their differences 40, 60 and 10 ns share 10 ns, though a changes by 40 and 60."""
    capture = opened(tmp_path, f"{HEAD}#0\n0!\n#40\n1!\n#100\n0!\n#110\n")
    whole(capture)
    assert (capture.grid, capture.last, capture.rows) == (10, 110, 3)


def test_the_grid_is_known_before_the_spans(tmp_path: Path) -> None:
    """From the first times of the file."""
    assert opened(tmp_path, HEAD + BODY).grid == 10


def test_told_by_its_first_word(tmp_path: Path) -> None:
    """Whatever the file's name is."""
    path = tmp_path / "export.txt"
    path.write_text(HEAD + BODY)
    assert open_capture(path, NONE).layout == "value change dump, times in 1 ns"


def test_digest_and_part_read(tmp_path: Path) -> None:
    """SHA-256 of the file's bytes; all of it read."""
    capture = opened(tmp_path, HEAD + BODY)
    whole(capture)
    assert capture.digest == hashlib.sha256((HEAD + BODY).encode()).hexdigest()
    assert capture.part_read == 1.0


# --- names -----------------------------------------------------------------------------------------------------------

NESTED = """$timescale 1 ns $end
$scope module tb $end
$var wire 1 ! clk $end
$var wire 1 " reset $end
$scope module dut $end
$var wire 1 # clk $end
$var wire 1 " reset $end
$var wire 1 $ bus [0] $end
$var wire 1 % bus [1] $end
$scope module fork $end $upscope $end
$upscope $end
$upscope $end
$scope module tb $end
$var reg 3 & word [0:2] $end
$var reg 2 ' fine [-1:-2] $end
$var reg 2 ( plain $end
$var wire 1 ) lone [7:7] $end
$var wire 1 * MA $end
$var reg 4 + odd [7:0] $end
$var reg 4 , mem[3][3:0] $end
$upscope $end
$enddefinitions $end
#0 1! 0" 1# 0$ 1% b110 & b01 ' b01 ( 1) 0* b0001 + b1000 ,
"""


def test_columns(tmp_path: Path) -> None:
    """A name alone where it means one line in every scope (reset is one net), else with its scopes; bits from the
    left; a range that does not fit the size is part of the name."""
    capture = opened(tmp_path, NESTED)
    assert capture.columns == (
        "tb.clk", "reset", "tb.dut.clk", "bus[0]", "bus[1]", "word[0]", "word[1]", "word[2]", "fine[-1]", "fine[-2]",
        "plain[1]", "plain[0]", "lone[7]", "MA", "odd[7:0][3]", "odd[7:0][2]", "odd[7:0][1]", "odd[7:0][0]",
        "mem[3][3]", "mem[3][2]", "mem[3][1]", "mem[3][0]",
    )  # fmt: skip
    levels = [edges.initial for edges in whole(capture).values()]
    assert levels == [1, 0, 1, 0, 1, 1, 1, 0, 0, 1, 0, 1, 1, 0, 0, 0, 0, 1, 1, 0, 0, 0]


@pytest.mark.parametrize(
    ("line", "column"),
    [
        ("tb.clk", "tb.clk"),
        ("TB.CLK", "tb.clk"),
        ("dut.clk", "tb.dut.clk"),
        ("tb.reset", "reset"),
        ("tb.dut.reset", "reset"),
        ("ma", "MA"),
        (" MA ", "MA"),
        ("dut.bus[1]", "bus[1]"),
        ("WORD[2]", "word[2]"),
        ("lone", "lone[7]"),
        (1, "tb.clk"),
        (14, "MA"),
    ],
)
def test_column(tmp_path: Path, line: str | int, column: str) -> None:
    """A name in full or in part, in any letters, or a number."""
    assert opened(tmp_path, NESTED).column(line) == column


def test_one_name_for_two_variables_of_one_scope(tmp_path: Path) -> None:
    """A scope opened again may define a name again: both are kept apart."""
    content = '$timescale 1 ns $end $var wire 1 ! a $end $var wire 1 " a $end $enddefinitions $end #0 0! 1" '
    lines = whole(opened(tmp_path, content))
    assert {name: edges.initial for name, edges in lines.items()} == {"a": 0, "a (2)": 1}


def test_bits_of_a_large_design(tmp_path: Path) -> None:
    """Beyond 4096 lines the bits of vectors are not listed, and can be named all the same."""
    content = (
        '$timescale 1 ns $end $scope module t $end $var wire 1 ! a $end $var reg 8192 " Memory [8191:0] $end '
        "$upscope $end $enddefinitions $end #0 0! b1"
    )
    capture = opened(tmp_path, content + "0" * 5000 + ' "\n')
    assert capture.columns == ("a",)
    assert capture.column("memory[5000]") == "t.Memory[5000]"
    lines = whole(capture, ["t.Memory[5000]", "Memory[4999]", "a"])
    assert [edges.initial for edges in lines.values()] == [1, 0, 0]
    assert "8192 bits of vectors are not listed; they can be named, such as bus[3]" in capture.notes


def test_what_is_not_used_is_said(tmp_path: Path) -> None:
    """Lines not asked for, and variables that are no lines."""
    extra = "$var real 64 r r $end $var string 1 s s $end $var real 64 q q $end $upscope $end"
    capture = opened(tmp_path, HEAD.replace("$upscope $end", extra) + BODY)
    whole(capture, ["a", "bus[1]"])
    assert capture.notes == [
        "lines not used: b, bus[3], bus[2], bus[0]",
        "variables without levels, not read: 2 real, 1 string",
        "no value at all for: bus[1]",
    ]


# --- damage ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("end", "kept", "note"),
    [
        ("#40\n1!\n#", [(10, 1), (30, 0), (40, 1)], "'#' in line 17"),
        ("#40\n1!\n#3", [(10, 1), (30, 0), (40, 1)], "'#3' in line 17"),  # of #300 perhaps: not before 40
        ("#40\n1!\n#50", [(10, 1), (30, 0), (40, 1)], None),  # nothing depends on it
        ("#40\n1", [(10, 1), (30, 0)], "'1' in line 16"),
        ("#40\n1!", [(10, 1), (30, 0), (40, 1)], None),
        ("#40\nb1", [(10, 1), (30, 0)], "'b1' in line 16"),
        ("#40\nb1\n", [(10, 1), (30, 0)], "'b1' in line 16"),
        ("#40\nb1 !", [(10, 1), (30, 0), (40, 1)], None),
        ("#40\n1!\n$dum", [(10, 1), (30, 0), (40, 1)], "'$dum' in line 17"),
        ("#40\n1!\nq", [(10, 1), (30, 0), (40, 1)], "'q' in line 17"),
    ],
)
def test_cut_short(tmp_path: Path, end: str, kept: list[tuple[int, int]], note: str | None) -> None:
    """A last word that may have been longer is dropped, and that is said. HEAD has 7 lines and BODY 9, less one."""
    capture = opened(tmp_path, HEAD + BODY.replace('#0\n0!\n1"\n', '#0 0! 1"\n') + end)
    assert told(whole(capture)["a"]) == (0, kept)
    said = [one for one in capture.notes if "cut short" in one]
    assert said == ([] if note is None else [f"the last word, {note}, is cut short and was dropped"])


def test_a_code_that_may_go_on(tmp_path: Path) -> None:
    """With codes ! and !!, a file that ends in `1!` may have been cut within `1!!`."""
    capture = opened(tmp_path, HEAD.replace("b $end", "b $end $var wire 1 !! c $end") + "#0\n0!\n#10\n1!")
    assert told(whole(capture)["a"]) == (0, [])
    assert "the last word, '1!' in line 11, is cut short and was dropped" in capture.notes


def test_cut_within_a_comment(tmp_path: Path) -> None:
    """What stands in it was never a value."""
    capture = opened(tmp_path, HEAD + BODY + "$comment the rest 1!\n")
    assert told(whole(capture)["a"]) == AB["a"]
    assert "the dump ends within a comment" in capture.notes


@pytest.mark.parametrize("rows_per_span", [200_000, 1, 2])
def test_a_reversal(tmp_path: Path, rows_per_span: int) -> None:
    """Time goes from 30 ns back to 5 ns in line 17: a new stretch begins, with the levels as they were, and the value
    that a has at once is its first there."""
    capture = opened(tmp_path, HEAD + BODY + '#5\n1!\n#15\n1"\n', rows_per_span)
    spans = list(capture.spans(["a", "b"]))
    parts = [0, *[i for i, span in enumerate(spans) if not span.joined], len(spans)]
    assert len(parts) == 3
    before, after = spans[: parts[1]], spans[parts[1] :]
    assert (before[0].start, before[-1].stop, after[0].start, after[-1].stop) == (0, 31, 5, 16)
    assert (after[0].lines["a"].initial, after[0].lines["b"].initial) == (1, 0)
    assert sum(span.lines["a"].times.size for span in after) == 0
    assert [tick for span in after for tick in span.lines["b"].times] == [15]
    (found,) = capture.anomalies
    assert (found.kind, found.times.tolist()) == ("time_reversal", [30])
    assert found.evidence["file_line"].tolist() == [17]
    assert found.evidence["back_s"].tolist() == [pytest.approx(25e-9)]
    assert (capture.first, capture.last, capture.grid) == (0, 30, 10)


# --- spans -----------------------------------------------------------------------------------------------------------


def everything(path: Path, rows_per_span: int) -> tuple[object, ...]:
    """All that a capture says, independent of where it was cut; or the message that refuses it."""
    parts: list[tuple[list[int], dict[str, tuple[int, list[tuple[int, int]]]]]] = []
    try:
        capture = open_capture(path, NONE, rows_per_span=rows_per_span)
        for span in capture.spans(capture.columns):
            assert span.start < span.stop
            if not parts or not span.joined:
                parts.append(([span.start, span.stop], {name: (e.initial, []) for name, e in span.lines.items()}))
            else:
                assert parts[-1][0][1] == span.start
            parts[-1][0][1] = span.stop
            for name, edges in span.lines.items():
                initial, known = parts[-1][1][name]
                assert edges.initial == (known[-1][1] if known else initial)
                assert all(span.start <= time < span.stop for time in edges.times.tolist())
                known.extend(told(edges)[1])
    except InputError as error:
        return (str(error),)
    found = [(one.times.tolist(), [column.tolist() for column in one.evidence.values()]) for one in capture.anomalies]
    return parts, found, capture.notes, capture.rows, capture.first, capture.last, capture.grid, capture.digest


CHANGE = st.sampled_from(
    ["0!", "1!", "x!", '0"', '1"', "b1 #", "bx10 #", "b0 #", "$dumpoff x! $end", "$comment 1! b $end"]
)
STEP = st.tuples(st.integers(-2, 9), st.lists(CHANGE, max_size=4), st.sampled_from(["\n", " "]))


@settings(deadline=None, max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    st.lists(CHANGE, max_size=2),
    st.lists(STEP, max_size=20),
    st.integers(1, 12),
    st.sampled_from(["", "#", "1", "b0", "bad", "1! "]),
)
def test_wherever_cut(
    tmp_path: Path, early: list[str], steps: list[tuple[int, list[str], str]], rows_per_span: int, end: str
) -> None:
    """Times that mostly rise, unknown levels, comments and damaged ends: the same in one span, cut every few changes,
    and at each."""
    words, time = list(early), 0
    for step, changes, _ in steps:
        time = max(0, time + step)
        words += [f"#{time}", *changes]
    path = tmp_path / "x.vcd"
    path.write_text(HEAD + "\n".join(words) + f"\n{end}")
    expected = everything(path, 200_000)
    assert everything(path, rows_per_span) == expected
    assert everything(path, 1) == expected


@pytest.mark.parametrize("size", [1, 2, 3, 7, 64, 1000])
def test_in_pieces(size: int) -> None:
    """The scanner on whole words, a few at a time: what it does not take comes again, and nothing changes."""
    lines = {"net3": Line(2, 0), "bit": Line(3, 5)}
    codes = {b"*@": 0, b"*#": 1, b"*$": 2, b"(k": 3, b"{2": 4}
    body = EXAMPLE[EXAMPLE.index("$comment") :].encode() + b"b1 *$ bx *$ $comment b $end b1 (k #2020 "

    def scanned(size: int) -> list[tuple[str, int, int]]:
        scanner, words, left, found = ChangeScanner(codes, lines), body.split(), b"", []
        for start in range(0, len(words), size):
            text = left + b" ".join(words[start : start + size]) + b" "
            result = scanner.scan(PADDING[:1] + text + PADDING)
            left = text[result.used - 1 :]
            for name, (at, levels) in result.changes.items():
                found += [(name, int(result.moments[i]), int(level)) for i, level in zip(at, levels, strict=True)]
        assert not left.strip()
        return sorted(found, key=lambda one: one[:2])

    assert scanned(size) == scanned(len(body))
    assert len(scanned(size)) > 15


def test_pieces_of_a_file(tmp_path: Path) -> None:
    """A dump of some megabytes, longer than the pieces it is read in, and a definition part longer than the first
    look: every edge is there. Line c toggles every 7 ns; memory stays bounded."""
    head = "$timescale 1 ns $end\n$comment " + "x " * 200_000 + "$end\n$var wire 1 cc c $end $var reg 16 b v $end\n"
    count = 200_000
    body = "".join(f"#{7 * i}\n{i & 1}cc\nb{i & 0xFFFF:b} b\n" for i in range(count))
    path = tmp_path / "long.vcd"
    path.write_text(head + "$enddefinitions $end\n" + body)
    tracemalloc.start()
    capture = open_capture(path, NONE)
    edges, spans = 0, 0
    for span in capture.spans(["c", "v[4]"]):
        times = span.lines["c"].times
        assert times.tolist() == list(range(7 * (edges + 1), 7 * (edges + 1 + times.size), 7))
        edges, spans = edges + times.size, spans + 1
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert (edges, capture.rows, capture.last, capture.grid) == (count - 1, 2 * count, 7 * (count - 1), 7)
    assert spans > 4
    assert peak < 100e6
