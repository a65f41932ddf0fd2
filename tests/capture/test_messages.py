"""What cannot be read is refused with where, what was found, what was expected and what to try. One table."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from decode.capture.source import open_capture
from decode.errors import InputError
from decode.sheet import CaptureKeys

NONE = CaptureKeys()
COLUMNS = "columns separated by commas, semicolons, tabs or spaces"
THRESHOLD = "for a file of voltages give [capture] threshold_v = [low, high] in the sheet"
LEVEL = "0 or 1, or x, z or u where the level is not known"
ROWS, AGAIN = "a row per change or per sample", "export the capture again"
BINARY = "a byte that no text holds: this is not a CSV capture"
UTF8 = "export the capture as CSV; text in UTF-16 must be saved as UTF-8"
NO_LINE = "no column looks like a line: none holds mostly 0 and 1"
ONE_LINE = "at least one column of 0 and 1"
NO_LEVEL = "a value that is not a level"
RATE = "give [capture] sample_rate_hz = ... in the sheet"


def refusal(path: Path, keys: CaptureKeys = NONE) -> InputError:
    with pytest.raises(InputError) as error:
        capture = open_capture(path, keys, rows_per_span=1000)
        list(capture.spans(capture.columns))
    return error.value


MANY = "".join(f"{i}.5,{i % 2}\n" for i in range(3000))


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", (None, None, "the capture is empty", "0 lines", ROWS, AGAIN)),
        (b"# A\n\n; B\n", (None, None, "the capture holds no rows, only comments or blank lines", "3 lines",
            ROWS, AGAIN)),
        (b"# A\nTime [s],A\n\n", (2, None, "the capture holds a header and no rows", "Time [s],A",
            "rows of times and levels below the header", AGAIN)),
        (b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR", (3, None, BINARY, "a NUL byte", "plain text in UTF-8", UTF8)),
        ("Time [s],A\n0,1\n".encode("utf-16"), (1, None, BINARY, "a NUL byte", "plain text in UTF-8", UTF8)),
        (b"Dear all,\nthe board, which came on Monday, is dead.\nPlease look.\n", (1, None,
            "this does not look like a capture: no separator divides its rows into the same number of cells",
            "Dear all,", COLUMNS, "export the capture as CSV")),
        (b"Part,Quantity,Value\nR1,4,10k\nC3,12,100n\n", (2, "Quantity", NO_LINE,
            "'4' (the columns are Part, Quantity, Value)", ONE_LINE, THRESHOLD)),
        (b"Part,Value\nR1,10k\nC3,100n\n", (2, "Part", NO_LINE,
            "'R1' (the columns are Part, Value)", ONE_LINE,
            "give the CSV export of a logic analyser")),
        (b"Time [s],A\n0.0,0.0\n1e-6,3.3\n2e-6,3.2\n", (3, "A", NO_LINE,
            "'3.3' (the columns are Time [s], A)", ONE_LINE, THRESHOLD)),
        (b"Time [s],A\n0.0,0.0\n1e-6,0.0\n2e-6,3.2\n", (4, "A", NO_LEVEL, "'3.2'", LEVEL, THRESHOLD)),
        (b"Time [s],A\n\n0.0,0\n1e-6,1\n# x\n2e-6,high\n", (6, "A", NO_LEVEL, "'high'", LEVEL,
            "name another column in [lines], or repair this row")),
        (b"Time [s],A\n0.0,0\n1e-6,1\n2e-6,\n", (4, "A", NO_LEVEL, "''", LEVEL,
            "name another column in [lines], or repair this row")),
        (b"Time [s],A\n0.0,0\nabc,1\n", (3, "Time [s]", "a time that is not a number", "'abc'", "a decimal number",
            "export the time as a number of seconds")),
        (b"Time,A\n12:00:01.5,0\n12:00:01.6,1\n", (2, "Time", "a time that is not a number", "'12:00:01.5'",
            "a decimal number", "export the time as a number of seconds")),
        (MANY.encode() + b"abc,0\n", (3001, "1", "a time that is not a number", "'abc'", "a decimal number",
            "remove or repair this row")),
        (MANY.encode() + b"1e18,0\n", (3001, "1", "a time too far from the first rows", "'1e18'",
            "times that can be told apart in 64 bits", "remove or repair this row")),
        (b"Time [s],A,B\n0.0,0,1\n1e-6,1\n2e-6,0,1\n", (3, None, "a row with too few cells", "2 cells",
            "3, as in the other rows", "remove or repair this row")),
        (b"Time [s],A,B\n0.0,0,1\n1e-6,1,1,0\n2e-6,0,1\n", (3, None, "a row with too many cells", "4 cells",
            "3, as in the other rows", "remove or repair this row")),
        (b"Time [s],A\n0.0,0,1\n1e-6,1,1\n", (1, None, "the header does not fit the rows below it",
            "2 names above rows of 3 cells", "a name for each column",
            "names that hold the separator must stand in double quotes")),
        (b"A,B\n0,1\n1,1\n", (1, None, "the capture has no time column and no sample rate is given", "columns A, B",
            "a column of times, or levels at a known rate", RATE)),
        (b"0;1\n1;1\n", (1, None, "the capture has no time column and no sample rate is given", "columns 1, 2",
            "a column of times, or levels at a known rate", RATE)),
        (b"Time,A\n0,1\n10,0\n", (1, "Time", "the unit of the time column is not known", "whole numbers without a unit",
            "a unit in the column's name, such as [ns]; one of s, ms, us, ns, ps",
            'give [capture] time_unit = "ns" in the sheet, or sample_rate_hz = ... where they count samples')),
        (b"Time [s],A,B\n# \n0.0,1,x,1\n", (1, None, "the header does not fit the rows below it",
            "3 names above rows of 4 cells", "a name for each column",
            "names that hold the separator must stand in double quotes")),
        (b"Time [ns],A\n" + b"".join(b"%d,0\n%d,1\n" % (i, i - 1) for i in range(1500)), (2003, "Time [ns]",
            "the time goes back again and again, 1001 times up to here", None, "rows in order of time",
            "sort the rows by time, or export the capture again")),
        (b"Time [s],A\n0.0,1\n1e-6," + b"0" * (3 << 20), (None, None,
            "a line without an end: this is not a CSV capture", "more than 1048576 bytes without a line feed",
            "lines of text, a row each",
            "give the CSV export of a logic analyser")),
    ],
)  # fmt: skip
def test_messages(tmp_path: Path, content: bytes, message: tuple[int | None, str | None, str, str, str, str]) -> None:
    """Physical line, column, problem, found, expected, hint."""
    path = tmp_path / "board.csv"
    path.write_bytes(content)
    error = refusal(path)
    assert (error.row, error.column, error.problem, error.found, error.expected, error.hint) == message
    assert error.file == str(path)


def test_the_earliest_fault_is_the_one_reported(tmp_path: Path) -> None:
    """Line 4 has a bad level in B, line 3 one in A, line 5 a bad time and line 6 is short: line 3 it is."""
    path = tmp_path / "board.csv"
    path.write_text("Time [s],A,B\n0.0,0,0\n0.1,?,0\n0.2,0,?\n" + "0.3,1,1\n" * 3000 + "?,0,0\n0.4,0\n")
    assert (refusal(path).row, refusal(path).column) == (3, "A")


def test_no_file(tmp_path: Path) -> None:
    """A missing file, a folder, and one that is no regular file."""
    assert refusal(tmp_path / "no.csv").problem == "there is no such capture"
    assert refusal(tmp_path).problem == "this is a folder, not a capture"
    assert refusal(Path("a\0b")).problem in ("the capture cannot be read", "there is no such capture")
    if hasattr(os, "mkfifo"):
        os.mkfifo(tmp_path / "pipe")
        assert refusal(tmp_path / "pipe").problem == "this is not a regular file"


def test_a_file_that_may_not_be_read(tmp_path: Path) -> None:
    """Without the right to read, the system's words are passed on."""
    path = tmp_path / "board.csv"
    path.write_text("Time [s],A\n0.0,1\n")
    path.chmod(0)
    if os.access(path, os.R_OK):
        pytest.skip("this user may read everything")
    assert refusal(path).problem == "the capture cannot be read"
