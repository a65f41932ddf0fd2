"""Each value change dump that cannot be used, and the message that says why, where and what to try."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Literal

import pytest

from decode.capture.source import open_capture
from decode.errors import InputError
from decode.sheet import CaptureKeys

HEAD = b"$timescale 1 ns $end\n$scope module t $end\n$var wire 1 ! a $end\n$var reg 4 v v [3:0] $end\n"
CLOSED = HEAD + b"$upscope $end\n$enddefinitions $end\n"
AGAIN = "write the dump again"


def refusal(path: Path, keys: CaptureKeys, columns: Sequence[str | int] | None = None) -> InputError:
    with pytest.raises(InputError) as error:
        capture = open_capture(path, keys)
        for _ in capture.spans(capture.columns if columns is None else [capture.column(one) for one in columns]):
            pass
    return error.value


@pytest.mark.parametrize(
    ("content", "message"),
    [
        # definitions
        (b"Time [ns],A\n0,1\n", (None, "this is not a value change dump, as its name says", "'Time'",
            "$date, $timescale or another keyword as the first word",
            "give a delimited export another ending, such as .csv")),
        (b" \n", (None, "this is not a value change dump, as its name says", "an empty file",
            "$date, $timescale or another keyword as the first word",
            "give a delimited export another ending, such as .csv")),
        (HEAD, (4, "the file ends within its definitions", None,
            "$enddefinitions $end ahead of the value changes", "write the dump again, to its end")),
        (HEAD + b"#0\n0!\n", (5, "the definitions do not end: $enddefinitions is missing", "#0",
            "$enddefinitions $end ahead of the first time and value",
            "write the dump again; a part cut out of one needs its definitions")),
        (HEAD + b"$scope module x\n", (5, "$scope in line 5 has no $end", None, "$end",
            "write the dump again, to its end")),
        (b"$comment\n\n all of it", (3, "$comment in line 1 has no $end", None, "$end",
            "write the dump again, to its end")),
        (HEAD + b"$var wire $end\n", (5, "a variable that is not defined in full", "$var wire $end",
            "$var, kind, size in bits, identifier code, name, $end", AGAIN)),
        (HEAD + b"$var wire one x x $end\n", (5, "a variable that is not defined in full", "$var wire one x x $end",
            "$var, kind, size in bits, identifier code, name, $end", AGAIN)),
        (HEAD + b"$var port 1 <0 x $end\n", (5, "this is an extended dump, of ports with their strengths",
            "$var port 1 <0 x $end", "variables such as wire and reg",
            "write the dump with $dumpvars instead of $dumpports")),
        (HEAD.replace(b"1 ns", b"fast"), (1, "a timescale that is none", "'fast'",
            "1, 10 or 100 and one of s, ms, us, ns, ps, fs", "correct $timescale, for instance to 1 ns")),
        (CLOSED.replace(b"$timescale 1 ns $end", b"") + b"#0\n0!\n", (None,
            "the dump does not say what its times count", "no $timescale", "$timescale 1 ns $end or the like",
            'give [capture] time_unit = "ns" in the sheet')),
        (b"$timescale 1 ns $end $enddefinitions $end #0\n", (None, "the dump defines no line", "no $var at all",
            "$var of a wire, a reg or the like", "dump the signals of the interface as well")),
        (b"$timescale 1 ns $end $var real 64 r r $end $enddefinitions $end #0\n", (None, "the dump defines no line",
            "1 variables without levels", "$var of a wire, a reg or the like",
            "dump the signals of the interface as well")),
        (HEAD + b"\n\0\n", (6, "a byte that no text holds: this is not a value change dump", "a NUL byte", "plain text",
            "convert a binary dump to VCD first")),
        # value changes
        (CLOSED, (None, "the dump holds no value change", None, "times and values behind the definitions",
            "run the simulation or the capture again, for longer")),
        (CLOSED + b"#0\n#100\n", (None, "the dump holds no value change", None,
            "times and values behind the definitions", "run the simulation or the capture again, for longer")),
        (CLOSED + b"#0\n0!\n#10\n1?\n", (10, "a value for a code that no $var defines: ?", "'?'",
            "a code from the definitions", AGAIN)),
        (CLOSED + b"#0\n0!\n#10 b1 longcode9 \n", (9, "a value for a code that no $var defines: longcode9",
            "'longcode9'", "a code from the definitions", AGAIN)),
        (CLOSED + b"#0\n0 !\n", (8, "a value without the code of its line", "'0'", "a value such as 0!", AGAIN)),
        (CLOSED + b"#0\n0!\n5!\n", (9, "a word that is no value change", "'5!'",
            "a time such as #100, a value such as 0! or b10 !, or $dumpvars and the like", "repair or remove it")),
        (CLOSED + b"#0\n0!\n#1.5\n", (9, "a time that is not a whole number", "'#1.5'", "a time such as #100",
            "repair or remove it")),
        (CLOSED + b"#0\n0!\n# 5\n", (9, "a time that is not a whole number", "'#'", "a time such as #100",
            "repair or remove it")),
        (CLOSED + b"#0\n0!\n#4611686018427387904\n", (9, "a time too far from zero", "'#4611686018427387904'",
            "fewer than 4611686018427387904 of its units", "write the dump with a coarser timescale")),
        (CLOSED + b"#0\n0!\n#" + b"9" * 19 + b"\n", (9, "a time too far from zero", "'#9999999999999999999'",
            "fewer than 4611686018427387904 of its units", "write the dump with a coarser timescale")),
        (CLOSED + b"#0\n0!\n$date today $end\n", (9, "a keyword that has no place among value changes", "'$date'",
            "$comment, $dumpvars, $dumpall, $dumpoff, $dumpon, $end",
            "two dumps put one behind the other must be checked one by one")),
        (CLOSED + b"#0\n0!\nb2 v\n", (9, "a value of line v[3] that is no level", "'b2'", "0, 1, x or z",
            "name another line in [lines]")),
        (CLOSED + b"#0\n0!\nr1.5 v\n", (9, "a value of line v[3] that is no level", "'r1.5'", "0, 1, x or z",
            "name another line in [lines]")),
        (CLOSED + b"#0\n0!\nb v\n", (9, "a value of line v[3] that is no level", "'b'", "0, 1, x or z",
            "name another line in [lines]")),
        (CLOSED + b"#0\n0!\n#1\n\0\n", (10, "a byte that no text holds: this is not a value change dump", "a NUL byte",
            "plain text", "convert a binary dump to VCD first")),
        (CLOSED + b"#0\n0!\n" + b"b" + b"0" * (3 << 20), (9, "a word without an end: this is not a value change dump",
            "more than 1048576 bytes", "times and values between white space", AGAIN)),
        (CLOSED + b"0! " + b"#5\n#4\n" * 1001, (2008, "the time goes back again and again, 1001 times up to here", None,
            "times that rise", AGAIN)),
    ],
)  # fmt: skip
def test_messages(tmp_path: Path, content: bytes, message: tuple[int | None, str, str | None, str, str]) -> None:
    """Physical line, problem, found, expected, hint."""
    path = tmp_path / "dump.vcd"
    path.write_bytes(content)
    error = refusal(path, CaptureKeys())
    assert (error.row, error.problem, error.found, error.expected, error.hint) == message
    assert error.file == str(path)


@pytest.mark.parametrize(
    ("line", "message"),
    [
        ("clk", ("the capture has no line 'clk'", "lines t.sck, t.dut.sck, v[3], v[2], v[1], v[0]",
            "the name of a line, or its number from 1", "correct [lines] in the sheet")),
        ("t.dut.sckk", ("the capture has no line 't.dut.sckk'", "lines t.sck, t.dut.sck, v[3], v[2], v[1], v[0]",
            "the name of a line, or its number from 1", "did you mean 't.dut.sck'?")),
        (7, ("the capture has no line 7", "lines t.sck, t.dut.sck, v[3], v[2], v[1], v[0]",
            "the name of a line, or its number from 1", "correct [lines] in the sheet")),
        ("sck", ("'sck' can mean 2 lines", "t.sck, t.dut.sck", "the name of one line",
            "give it in full, for instance 't.sck'")),
        ("V", ("'V' can mean 4 lines", "v[3], v[2], v[1], v[0]", "the name of one line",
            "give it in full, for instance 'v[3]'")),
        ("v[4]", ("the capture has no line 'v[4]'", "lines t.sck, t.dut.sck, v[3], v[2], v[1], v[0]",
            "the name of a line, or its number from 1", "did you mean 'v[3]'?")),
    ],
)  # fmt: skip
def test_names(tmp_path: Path, line: str | int, message: tuple[str, str, str, str]) -> None:
    """Problem, found, expected, hint, for a line of [lines]."""
    path = tmp_path / "dump.vcd"
    path.write_bytes(
        b"$timescale 1 ns $end $scope module t $end $var wire 1 ! sck $end $scope module dut $end "
        b'$var wire 1 " sck $end $var reg 4 v v [3:0] $end $upscope $end $upscope $end $enddefinitions $end #0 0! '
    )
    error = refusal(path, CaptureKeys(), [line])
    assert (error.problem, error.found, error.expected, error.hint) == message


def test_many_names_are_cut(tmp_path: Path) -> None:
    """A design has more lines than a message can hold."""
    path = tmp_path / "dump.vcd"
    path.write_bytes(CLOSED.replace(b"reg 4 v v [3:0]", b"reg 64 v v") + b"#0 0! ")
    assert (
        refusal(path, CaptureKeys(), ["x"]).found
        == f"lines a, {', '.join(f'v[{i}]' for i in range(63, 52, -1))} and 53 more"
    )


@pytest.mark.parametrize(
    ("window", "found"), [((1.0, 2.0), "times from 1e-08 s to 2e-08 s"), (("none", 5e-9), "times from 1e-08 s on")]
)
def test_a_window_without_times(
    tmp_path: Path, window: tuple[float | Literal["none"], float | Literal["none"]], found: str
) -> None:
    """A window behind or ahead of all times."""
    path = tmp_path / "dump.vcd"
    path.write_bytes(CLOSED + b"#10\n0!\n#20\n1!\n")
    error = refusal(path, CaptureKeys(window_s=window))
    assert (error.problem, error.found) == ("no time of the dump lies in the window", found)
    assert error.hint == "times are those of the dump's own axis"


def test_the_earliest_fault_is_the_one_reported(tmp_path: Path) -> None:
    """Line 11 has an unknown code, line 10 a bad time, line 9 no level in v, line 12 a bad keyword: line 9 it is."""
    path = tmp_path / "dump.vcd"
    path.write_bytes(CLOSED + b"#0\n0!\nb2 v\n#x\n0?\n$date\n5!\n")
    assert refusal(path, CaptureKeys()).row == 9
    assert refusal(path, CaptureKeys(), ["a"]).row == 10
