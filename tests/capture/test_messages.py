"""What cannot be read is refused with where, what was found, what was expected and what to try. One table."""

from __future__ import annotations

import gzip
import os
from collections.abc import Callable
from pathlib import Path

import pytest

from decode.capture.source import open_capture
from decode.errors import InputError
from decode.sheet import CaptureKeys

NONE = CaptureKeys()
COLUMNS = "columns separated by commas, semicolons, tabs or spaces"
THRESHOLD = "for a file of voltages give --threshold LOW,HIGH, or [capture] threshold_v = [low, high] in the sheet"
LEVEL = "0 or 1, or x, z or u where the level is not known"
ROWS, AGAIN = "a row per change or per sample", "export the capture again"
BINARY, TEXT, AS_CSV = (
    "binary data: this is not a CSV capture", "plain text in UTF-8 or UTF-16", "export the capture as CSV"
)  # fmt: skip
ONE_LINE = "at least one column of 0 and 1, of voltages at two levels, or of port values"
LISTED = "this looks like a list of words and amounts, such as a parts list"
READINGS = "these look like a converter's readings: they keep near no two levels"
COUNTED = "this looks like a table of counts already decoded"
ANALYSER = "give the CSV export of a logic analyser"
NO_LEVEL, REPAIR = "a value that is not a level", "remove or repair this row"
RATE = "give --rate HZ, or [capture] sample_rate_hz = ... in the sheet"
UNTIMED = "the capture has no time column and no sample rate is given"
TIMED = "a column of times, or levels at a known rate"
EITHER = "0 and 1, two levels of a voltage, or a bit of a port value"


def refusal(path: Path, keys: CaptureKeys = NONE) -> InputError:
    with pytest.raises(InputError) as error:
        capture = open_capture(path, keys, rows_per_span=1000)
        list(capture.spans(capture.columns))
    return error.value


def rows(cells: Callable[[int], str], n: int = 200) -> bytes:
    """n rows, each made of its number."""
    return "".join(cells(i) + "\n" for i in range(n)).encode()


MANY = rows(lambda i: f"{i}.5,{i % 2}", 3000)


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", (None, None, "the capture is empty", "0 lines", ROWS, AGAIN)),
        (b"# A\n\n; B\n", (None, None, "the capture holds no rows, only comments or blank lines", "3 lines",
            ROWS, AGAIN)),
        (b"# A\nTime [s],A\n\n", (2, None, "the capture holds a header and no rows", "Time [s],A",
            "rows of times and levels below the header", AGAIN)),
        (b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR", (3, None, BINARY, "a NUL byte", TEXT, AS_CSV)),
        (b"\x01\x02\x03\x04\x05abc\n", (1, None, BINARY, "control characters", TEXT, AS_CSV)),
        (b"BZh91AY", (None, None, "this is a bzip2 archive", None, "a plain export, or one compressed by gzip or zstd",
            "unpack it first")),
        (gzip.compress(MANY, mtime=0)[:-50], (None, None, "the gzip file is broken off or damaged",
            "Truncated compressed stream", "a whole gzip file", "copy or export it again")),
        (b"Dear all,\nthe board, which came on Monday, is dead.\nPlease look.\n", (1, None,
            "this does not look like a capture: no separator divides its rows into the same number of cells",
            "Dear all,", COLUMNS, AS_CSV)),
        (b"Part,Quantity,Value\nR1,4,10k\nC3,12,100n\n", (2, "Part", LISTED,
            "'R1' (the columns are Part, Quantity, Value)", ONE_LINE, ANALYSER)),
        (b"Part,Value\nR1,10k\nC3,100n\n", (2, "Part", LISTED, "'R1' (the columns are Part, Value)", ONE_LINE,
            ANALYSER)),
        (b"Time [s],state\n0.1,idle\n0.2,busy\n0.3,idle\n", (2, "state", "no column looks like a line",
            "'idle' (the columns are Time [s], state)", ONE_LINE, ANALYSER)),
        (b"Time [s],count\n" + rows(lambda i: f"{i}e-3,{i}"), (4, "count", COUNTED,
            "'2' (the columns are Time [s], count)",
            ONE_LINE, "give the capture that they were counted from")),
        (b"Time [s],count,deg\n" + rows(lambda i: f"{i}e-3,{-i},{i * 5.625:.3f}"), (3, "count", COUNTED,
            "'-1' (the columns are Time [s], count, deg)", ONE_LINE, "give the capture that they were counted from")),
        (b"Time [s],A\n" + rows(lambda i: f"{i}e-3,{i * 37 % 100 / 30:.2f}"), (3, "A", READINGS,
            "'1.23' (the columns are Time [s], A)", ONE_LINE, THRESHOLD)),
        (b"t_ms,adc\n" + rows(lambda i: f"{i}.5,{i * 397 % 4096}"), (3, "adc", READINGS,
            "'397' (the columns are t_ms, adc)",
            ONE_LINE, THRESHOLD)),
        (b"t_ms,A,adc\n" + rows(lambda i: f"{i}.5,{i % 2},{i * 397 % 4096}"), (None, "adc",
            "this column holds numbers that keep near no two levels", "'0'", EITHER, THRESHOLD)),
        (b"t_ms,A,count\n" + rows(lambda i: f"{i}.5,{i % 2},{i}"), (None, "count",
            "this column holds counts already decoded, not levels", "'0'", EITHER, "name another column in [lines]")),
        (b"t_ms,A,word\n" + rows(lambda i: f"{i}.5,{i % 2},idle"), (None, "word", "this column holds no levels",
            "'idle'", EITHER,
            "name another column in [lines]")),
        (b"Time [s],port\n0.0,0x01\n0.1,0x02\n0.2,0x03\n", (None, "port",
            "this column holds port values, and no bit is named", "'0x01'", EITHER,
            'name one in [lines], such as "port[0]"')),
        (b"Time [s],A\n" + rows(lambda i: f"{i}e-3,{i % 2}", 3000) + b"9,7\n" * 40, (3002, "A",
            "a value that is not a level, the first of 40 in 3040 rows that cannot be used", "'7'", LEVEL, THRESHOLD)),
        (b"Time [s],A\n\n" + rows(lambda i: f"{i}e-3,{i % 2}", 3000) + b"# x\n\n" + b"9,blue\n" * 40, (3005, "A",
            "a value that is not a level, the first of 40 in 3040 rows that cannot be used", "'blue'", LEVEL,
            "name another column in [lines], or repair this row")),
        (b"Time [s],A\n0.0,0\n1e-6,1\n2e-6,\n", (4, "A", NO_LEVEL, "''", LEVEL,
            "name another column in [lines], or export the capture again")),
        (b"Time [s],A\n0.0,0\nabc,1\n", (3, "Time [s]", "a time that is not a number", "'abc'", "a decimal number",
            REPAIR)),
        (b"Time,A\n12:00:01.5,0\n12:00:01.6,1\n", (2, "Time", "a time that is not a number", "'12:00:01.5'",
            "a decimal number", "export the time as a number of seconds")),
        (b"Timestamp,A\n2024-05-31T12:00:00Z,0\n2024-05-31T12:00:01,1\n", (3, "Timestamp",
            "a time that is not a date-time like the others", "'2024-05-31T12:00:01'",
            "such as 2024-05-31T12:00:00.000000000", REPAIR)),
        (MANY + b"abc,0\n" * 400, (3001, "1",
            "a time that is not a number, the first of 400 in 3400 rows that cannot be used", "'abc'",
            "a decimal number", REPAIR)),
        (MANY + b"1e18,0\n" * 31, (3001, "1",
            "a time too far from the first rows, the first of 31 in 3031 rows that cannot be used", "'1e18'",
            "times that can be told apart in 64 bits", REPAIR)),
        (b"Time [s],A,B\n0.0,0,1\n1e-6,1\n2e-6,0,1\n", (3, None, "a row with too few cells", "2 cells",
            "3, as in the other rows", REPAIR)),
        (b"Time [s],A,B\n0.0,0,1\n1e-6,1,1,0\n2e-6,0,1\n", (3, None, "a row with too many cells", "4 cells",
            "3, as in the other rows", REPAIR)),
        (MANY + b"1,\0\n" * 40, (3001, None,
            "a NUL byte within a row, the first of 40 in 3040 rows that cannot be used", "2 cells",
            "2, as in the other rows", REPAIR)),
        (MANY + b"x\n" * 2000, (3001, None,
            "a row with too few cells, the first of 1001 in 4001 rows that cannot be used", "1 cell",
            "2, as in the other rows", REPAIR)),
        (b"Time [s],A\n0.0,0,1\n1e-6,1,1\n", (1, None, "the header does not fit the rows below it",
            "2 names above rows of 3 cells", "a name for each column",
            "names that hold the separator must stand in double quotes")),
        (b"A,B\n0,1\n1,1\n", (1, None, UNTIMED, "columns A, B", TIMED, RATE)),
        (b"0;1\n1;1\n", (1, None, UNTIMED, "columns 1, 2", TIMED, RATE)),
        (b"# Sample rate: 24,000 MHz\nA,B\n0,1\n1,1\n", (2, None, UNTIMED, "columns A, B", TIMED, RATE)),
        (b"Time,A\n0,1\n10,0\n", (1, "Time", "the unit of the time column is not known", "whole numbers without a unit",
            "a unit in the column's name, such as [ns]; one of s, ms, us, ns, ps",
            "give --unit ns (or [capture] time_unit in the sheet), or --rate HZ where they count samples")),
        (b"Time [s],A,B\n# \n0.0,1,x,1\n", (1, None, "the header does not fit the rows below it",
            "3 names above rows of 4 cells", "a name for each column",
            "names that hold the separator must stand in double quotes")),
        (b"Time [ns],A\n" + b"".join(b"%d,0\n%d,1\n" % (i, i - 1) for i in range(1500)), (2003, "Time [ns]",
            "the time goes back again and again, 1001 times up to here", None, "rows in order of time",
            "sort the rows by time, or export the capture again")),
        (b"Time [s],A\n0.0,1\n1e-6," + b"0" * (3 << 20), (None, None,
            "a line without an end: this is not a CSV capture", "more than 1048576 bytes without a line feed",
            "lines of text, a row each", ANALYSER)),
    ],
)  # fmt: skip
def test_messages(tmp_path: Path, content: bytes, message: tuple[str | int | None, ...]) -> None:
    """Physical line, column, problem, found, expected, hint."""
    path = tmp_path / "board.csv"
    path.write_bytes(content)
    error = refusal(path)
    assert (error.row, error.column, error.problem, error.found, error.expected, error.hint) == message
    assert error.file == str(path)


def test_the_earliest_fault_is_the_one_reported(tmp_path: Path) -> None:
    """Line 1502 has a bad level in A, line 1503 one in B, further on are a bad time and a short row: line 1502 it is,
    wherever the blocks end."""
    path = tmp_path / "board.csv"
    path.write_bytes(
        b"Time [s],A,B\n" + rows(lambda i: f"{i}e-3,0,1", 1500) + b"1,?,0\n1,0,?\n" + b"?,0,0\n0.4,0\n" * 800
    )
    assert (refusal(path).row, refusal(path).column) == (1502, "A")


@pytest.mark.parametrize(
    ("line", "keys", "message"),
    [
        ("port[0]", NONE, "a bit is named of a column whose values are not known to be whole numbers in one base"),
        ("word[0]", NONE, "a bit is named of a column whose values are not known to be whole numbers in one base"),
        (4, NONE, "line 4 may be the column of that name or the column of that number"),
    ],
)
def test_lines_that_cannot_be_told(tmp_path: Path, line: str | int, keys: CaptureKeys, message: str) -> None:
    """01 to 10 may be decimal or hexadecimal, and the fourth column is not the one named 4."""
    path = tmp_path / "board.csv"
    path.write_bytes(b"Time [s],port,4,word\n" + rows(lambda i: f"{i},{i % 11:02},{i % 2},idle", 40))
    with pytest.raises(InputError) as error:
        open_capture(path, keys).column(line)
    assert error.value.problem == message
    assert error.value.hint


def test_a_line_at_rest_has_no_thresholds(tmp_path: Path) -> None:
    """B alone shows one level; the other column is no voltage, so nothing tells where B's thresholds are."""
    path = tmp_path / "board.csv"
    path.write_bytes(b"Time [s],A,B [V]\n" + rows(lambda i: f"{i},{i % 2},{0.02 + i % 3 / 100}", 40))
    with pytest.raises(InputError) as error:
        open_capture(path, NONE).column("B")
    assert (error.value.problem, error.value.hint) == (
        "this column holds numbers that keep near no two levels",
        THRESHOLD,
    )
    assert open_capture(path, CaptureKeys(threshold_v=(1, 2))).column("B") == "B [V]"


def test_a_line_that_no_row_names(tmp_path: Path) -> None:
    """In a table with a row per change of one line only the end tells that a line never changed nor was stated."""
    path = tmp_path / "board.csv"
    path.write_bytes(b"Time [s],line,level\n" + rows(lambda i: f"{i},A,{i % 2}", 40))
    capture = open_capture(path, NONE)
    assert capture.column("strobe") == "strobe"
    with pytest.raises(InputError) as error:
        list(capture.spans(["A", "strobe"]))
    assert error.value.problem == "the capture has no line 'strobe'"


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
