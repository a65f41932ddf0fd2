"""Parquet files and npz archives: the same lines as from a delimited export of the same table."""

from __future__ import annotations

import gzip
import hashlib
import tracemalloc
from datetime import UTC, datetime, timedelta, timezone
from decimal import Decimal
from fractions import Fraction
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from decode.capture.source import Capture, open_capture
from decode.errors import InputError
from decode.sheet import CaptureKeys
from decode.spans import UNKNOWN, Edges

NONE = CaptureKeys()
PICOSECOND = Fraction(1, 10**12)

NANOSECONDS = [0, 10, 20, 30]
A, B = [0, 1, 1, 0], [1, 1, 0, 0]
EDGES = {"A": (0, [(10_000, 1), (30_000, 0)]), "B": (1, [(20_000, 0)])}
"""A rises at 10 ns and falls at 30 ns, B falls at 20 ns: in picoseconds."""


def whole(capture: Capture) -> dict[str, tuple[int, list[tuple[int, int]]]]:
    lines: dict[str, Edges] = {}
    for span in capture.spans([capture.column("A"), capture.column("B")]):
        for name, edges in span.lines.items():
            lines[name] = lines[name].then(edges) if name in lines else edges
    return {
        name: (edges.initial, list(zip(edges.times.tolist(), edges.levels.tolist(), strict=True)))
        for name, edges in lines.items()
    }


def parquet(path: Path, columns: dict[str, object], metadata: dict[str, str] | None = None) -> Path:
    table = pa.table(columns)
    pq.write_table(table.replace_schema_metadata(metadata) if metadata else table, path)
    return path


START = datetime(2024, 5, 31, 12, 0, 0)

TIMES = {
    "whole numbers": ("time_ns", pa.array(NANOSECONDS, pa.int64())),
    "small whole numbers": ("Time [ns]", pa.array(NANOSECONDS, pa.uint8())),
    "floats": ("time_s", pa.array([one * 1e-9 for one in NANOSECONDS])),
    "floats of another unit": ("time (us)", pa.array([one / 1000 for one in NANOSECONDS])),
    "floats of 32 bits": ("time_ns", pa.array(NANOSECONDS, pa.float32())),
    "decimals": ("t [s]", pa.array([Decimal(one).scaleb(-9) for one in NANOSECONDS])),
    "durations": ("elapsed", pa.array(NANOSECONDS, pa.duration("ns"))),
    "texts": ("time_ns", pa.array([str(one) for one in NANOSECONDS])),
}


@pytest.mark.parametrize("kind", TIMES)
def test_times_of_parquet(tmp_path: Path, kind: str) -> None:
    """Whatever type the time has, times are exact: 3 x 10 ns as a float is 3.0000000000000004e-08, and 30 ns here."""
    name, times = TIMES[kind]
    path = parquet(tmp_path / "x.parquet", {name: times, "A": A, "B": B})
    capture = open_capture(path, NONE)
    lines, picoseconds = whole(capture), int(capture.tick / PICOSECOND)
    assert (capture.grid * picoseconds, capture.rows) == (10_000, 4)
    assert {
        name: (first, [(t * picoseconds, one) for t, one in edges]) for name, (first, edges) in lines.items()
    } == EDGES
    assert capture.columns == ("A", "B")
    assert capture.digest == hashlib.sha256(path.read_bytes()).hexdigest()
    assert capture.part_read == 1.0


@pytest.mark.parametrize("zone", [None, UTC])
def test_date_times(tmp_path: Path, zone: timezone | None) -> None:
    """They count from the first, in nanoseconds: 10 us are 10 000 of them."""
    times = [(START + timedelta(microseconds=one)).replace(tzinfo=zone) for one in NANOSECONDS]
    kind = pa.timestamp("ns", "UTC") if zone else pa.timestamp("ns")
    capture = open_capture(parquet(tmp_path / "x.parquet", {"when": pa.array(times, kind), "A": A, "B": B}), NONE)
    assert whole(capture) == EDGES
    assert capture.tick == Fraction(1, 10**9)


LEVELS = {
    "truth values": pa.array([False, True, True, False]),
    "bytes": pa.array(A, pa.int8()),
    "floats": pa.array(A, pa.float64()),
    "half floats": pa.array(np.array(A, np.float16)),
    "volts": pa.array([0.1, 3.2, 3.3, 0.0]),
    "texts": pa.array(["0", "1", "1", "0"]),
    "words": pa.array(["low", "high", "high", "low"]),
    "categories": pa.array(["0", "1", "1", "0"]).dictionary_encode(),
    "binary": pa.array([b"0", b"1", b"1", b"0"]),
}


@pytest.mark.parametrize("kind", LEVELS)
def test_levels_of_parquet(tmp_path: Path, kind: str) -> None:
    """Levels of any type, voltages as well."""
    path = parquet(tmp_path / "x.parquet", {"time_ns": NANOSECONDS, "A": LEVELS[kind], "B": B})
    keys = CaptureKeys(threshold_v=(0.8, 2.0)) if kind == "volts" else NONE
    assert whole(open_capture(path, keys)) == EDGES


def test_unknown_levels(tmp_path: Path) -> None:
    """x is unknown, and not 0."""
    path = parquet(tmp_path / "x.parquet", {"time_ns": NANOSECONDS, "A": ["x", "1", "1", "0"], "B": B})
    assert whole(open_capture(path, NONE))["A"] == (UNKNOWN, [(10_000, 1), (30_000, 0)])


def test_a_null_is_a_row_that_cannot_be_used(tmp_path: Path) -> None:
    """As an empty cell of a delimited export is: said, and nothing is put in its place."""
    rows = 200
    columns = {"time_ns": [10 * i for i in range(rows)], "A": [i & 1 for i in range(rows)], "B": [0] * rows}
    columns["A"][100] = None  # type: ignore[call-overload]
    path = parquet(tmp_path / "x.parquet", columns)
    export = tmp_path / "x.csv"
    cells = zip(*columns.values(), strict=True)
    export.write_text("time_ns,A,B\n" + "".join(f"{t},{'' if a is None else a},{b}\n" for t, a, b in cells))
    tabular, delimited = open_capture(path, NONE), open_capture(export, NONE)
    assert whole(tabular) == whole(delimited)
    assert tabular.rows == delimited.rows == rows - 1
    assert (
        [note for note in tabular.notes if "102" in note] == [note for note in delimited.notes if "102" in note] != []
    )


def test_what_is_said(tmp_path: Path) -> None:
    """The layout, and how its rows are counted in messages; nothing about separators."""
    capture = open_capture(parquet(tmp_path / "x.parquet", {"time_ns": NANOSECONDS, "A": A, "B": B, "C": A}), NONE)
    whole(capture)
    assert capture.layout == "Parquet file, time in ns, a row per change"
    assert capture.notes == [
        "rows are counted as lines, with the names of the columns in line 1",
        "columns not used: C",
    ]


def test_a_rate_in_the_file(tmp_path: Path) -> None:
    """A Parquet file's notes and an archive's single numbers may say it: 100 MHz is 10 ns a row."""
    np.savez(tmp_path / "x.npz", sample_rate_hz=1e8, A=np.array(A), B=np.array(B, bool))
    path = parquet(tmp_path / "x.parquet", {"A": A, "B": B}, {"sample rate": "100 MHz"})
    for capture in (open_capture(tmp_path / "x.npz", NONE), open_capture(path, NONE)):
        assert whole(capture) == {"A": (0, [(1, 1), (3, 0)]), "B": (1, [(2, 0)])}
        assert capture.tick == Fraction(1, 10**8)
        assert "no time column: the rows are samples at 100000000 Hz, as line 1 says" in capture.notes


def test_a_rate_from_the_sheet(tmp_path: Path) -> None:
    """Where the file has none."""
    np.savez(tmp_path / "x.npz", A=np.array(A), B=np.array(B))
    capture = open_capture(tmp_path / "x.npz", CaptureKeys(sample_rate_hz=1e6))
    assert whole(capture)["A"] == (0, [(1, 1), (3, 0)])
    assert capture.tick == Fraction(1, 10**6)


@pytest.mark.parametrize("compressed", [False, True])
@pytest.mark.parametrize(
    ("name", "times"),
    [
        ("time_ns", np.array(NANOSECONDS)),
        ("time_ns", np.array(NANOSECONDS, ">i4")),
        ("time_s", np.array(NANOSECONDS) * 1e-9),
        ("elapsed", np.array(NANOSECONDS, "m8[ns]")),
    ],
)
@pytest.mark.parametrize("levels", [np.array(A, bool), np.array(A, np.uint8), np.array(A, "<U1"), np.array(A, "S1")])
def test_archives(tmp_path: Path, compressed: bool, name: str, times: np.ndarray, levels: np.ndarray) -> None:
    """Arrays of any byte order and type, packed or not."""
    path = tmp_path / "x.npz"
    (np.savez_compressed if compressed else np.savez)(path, **{name: times}, A=levels, B=np.array(B))
    capture = open_capture(path, NONE)
    assert whole(capture) == EDGES
    assert capture.layout.startswith("npz archive, time in ")
    assert capture.digest == hashlib.sha256(path.read_bytes()).hexdigest()


def test_a_window(tmp_path: Path) -> None:
    """From 5 ns to 25 ns: as for a delimited export."""
    path = parquet(tmp_path / "x.parquet", {"time_ns": NANOSECONDS, "A": A, "B": B})
    capture = open_capture(path, CaptureKeys(window_s=(5e-9, 25e-9)))
    spans = list(capture.spans(["A", "B"]))
    assert (spans[0].start, spans[-1].stop) == (5_000, 25_000)
    assert whole(capture) == {"A": (0, [(10_000, 1)]), "B": (1, [(20_000, 0)])}


@settings(deadline=None, max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    st.lists(st.tuples(st.integers(-1, 9), st.integers(0, 1), st.integers(0, 1)), min_size=3, max_size=40),
    st.integers(1, 40),
    st.integers(1, 40),
)
def test_as_the_delimited_export_wherever_cut(
    tmp_path: Path, rows: list[tuple[int, int, int]], group: int, rows_per_span: int
) -> None:
    """Any table, with times that may go back, in row groups and spans of any size: the edges, breaks and figures of
    the delimited export of the same table."""
    times = np.cumsum([step for step, _, _ in rows])
    a, b = [1, *(row[1] for row in rows[1:])], [0, *(row[2] for row in rows[1:])]
    table = pa.table({"time_ns": times, "A": a, "B": b})
    pq.write_table(table, tmp_path / "x.parquet", row_group_size=group)
    np.savez(tmp_path / "x.npz", time_ns=times, A=np.array(a, np.uint8), B=np.array(b, bool))
    (tmp_path / "x.csv").write_text(
        "time_ns,A,B\n" + "".join(f"{t},{one},{other}\n" for t, one, other in zip(times, a, b, strict=True))
    )
    told = []
    for ending in ("csv", "parquet", "npz"):
        capture = open_capture(tmp_path / f"x.{ending}", NONE, rows_per_span=rows_per_span)
        edges = whole(capture)
        breaks = [(one.kind, one.times.tolist()) for one in capture.anomalies]
        told.append((edges, breaks, capture.rows, capture.first, capture.last, capture.grid, capture.tick))
    assert told[0] == told[1] == told[2]


def test_columns_that_are_not_used_are_not_read(tmp_path: Path) -> None:
    """The second half of column C is destroyed: A and B can be read all the same, and C cannot."""
    count = 120_000
    bits = np.arange(count) & 1
    path = tmp_path / "x.parquet"
    table = pa.table({"time_ns": np.arange(count) * 10, "A": bits, "B": bits, "C": bits})
    pq.write_table(table, path, use_dictionary=False, row_group_size=count // 2)
    with pq.ParquetFile(path) as file:
        chunk = file.metadata.row_group(1).column(3)
    content = bytearray(path.read_bytes())
    content[chunk.data_page_offset : chunk.data_page_offset + chunk.total_compressed_size] = (
        b"\xff" * chunk.total_compressed_size
    )
    path.write_bytes(content)
    capture = open_capture(path, NONE)
    assert len(whole(capture)["A"][1]) == count - 1
    assert "columns not used: C" in capture.notes
    with pytest.raises(InputError, match="the Parquet file is broken off or damaged"):
        list(capture.spans(["C"]))


def test_memory(tmp_path: Path) -> None:
    """Two million rows, 34 MB as numbers, in spans of at most 50 000 rows."""
    count = 2_000_000
    times = np.arange(count) * 10
    bits = (np.arange(count) // 7 & 1).astype(np.uint8)
    pq.write_table(pa.table({"time_ns": times, "A": bits, "B": bits}), tmp_path / "x.parquet")
    np.savez(tmp_path / "x.npz", time_ns=times, A=bits, B=bits)
    for ending in ("parquet", "npz"):
        tracemalloc.start()
        capture = open_capture(tmp_path / f"x.{ending}", NONE, rows_per_span=50_000)
        edges = sum(span.lines["A"].times.size for span in capture.spans(["A"]))
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        assert (edges, capture.rows) == ((count - 1) // 7, count)
        assert peak < 30e6


# --- what cannot be read ---------------------------------------------------------------------------------------------


def refusal(path: Path, keys: CaptureKeys = NONE) -> InputError:
    with pytest.raises(InputError) as error:
        capture = open_capture(path, keys)
        for _ in capture.spans(capture.columns):
            pass
    return error.value


def test_messages_of_parquet(tmp_path: Path) -> None:
    """Problem, column, found, expected, hint of each table that cannot be used."""
    whole_file = parquet(tmp_path / "a.parquet", {"time_ns": NANOSECONDS, "A": A}).read_bytes()
    (tmp_path / "cut.parquet").write_bytes(whole_file[:-20])
    nested = parquet(tmp_path / "nested.parquet", {"time_ns": NANOSECONDS, "A": [[0], [1], [1], [0]]})
    empty = parquet(tmp_path / "empty.parquet", {})
    words = parquet(tmp_path / "words.parquet", {"part": ["R1", "R2"], "maker": ["us", "them"]})
    error = refusal(tmp_path / "cut.parquet")
    assert error.problem == "the Parquet file is broken off or damaged"
    assert (error.expected, error.hint) == ("a whole Parquet file", "write or copy it again")
    error = refusal(nested)
    assert (error.problem, error.column) == ("a column whose values are lists or records", "A")
    assert (error.expected, error.hint) == (
        "one number, word or truth value in each row",
        "write a column for each line",
    )
    error = refusal(empty)
    assert (error.problem, error.expected) == ("a table without columns", "a column of times and one for each line")
    assert refusal(words).problem == "this looks like a list of words and amounts, such as a parts list"


@pytest.mark.parametrize(
    ("arrays", "message"),
    [
        ({"time_ns": np.arange(4), "A": np.arange(3) & 1}, ("arrays of different lengths", None, "time_ns: 4, A: 3",
            "a value of every line for each time", "write arrays of one length")),
        ({"time_ns": np.arange(4), "lines": np.zeros((4, 2), int)}, ("an array that is no column", "lines",
            "int64 in 2 dimensions", "one number, word or truth value in each row",
            "write an array of one dimension for each line")),
        ({"time_ns": np.arange(4), "A": np.zeros(4, complex)}, ("an array that is no column", "A",
            "values of type complex128", "one number, word or truth value in each row",
            "write an array of one dimension for each line")),
        ({"time_ns": np.arange(4), "A": np.array([None, 1, 0, 1])}, ("an array that is no column", "A",
            "values of type object", "one number, word or truth value in each row",
            "write an array of one dimension for each line")),
        ({"sample_rate_hz": np.array(1e6)}, ("an archive without columns", None, None,
            "arrays of times and levels, one for each line", "unpack the archive and give the export in it")),
    ],
)  # fmt: skip
def test_messages_of_archives(
    tmp_path: Path, arrays: dict[str, np.ndarray], message: tuple[str, str | None, str | None, str, str]
) -> None:
    """Problem, column, found, expected, hint."""
    np.savez(tmp_path / "x.npz", **arrays)
    error = refusal(tmp_path / "x.npz")
    assert (error.problem, error.column, error.found, error.expected, error.hint) == message
    assert error.file == str(tmp_path / "x.npz")


def test_only_from_a_plain_file(tmp_path: Path) -> None:
    """Both formats need to be read out of order."""
    path = parquet(tmp_path / "x.parquet", {"time_ns": NANOSECONDS, "A": A})
    packed = tmp_path / "x.parquet.gz"
    packed.write_bytes(gzip.compress(path.read_bytes()))
    error = refusal(packed)
    assert error.problem == "a Parquet file or an npz archive is read from a plain file only"
    assert (error.found, error.hint) == ("a gzip file", "save it, unpacked, and give its path")


@settings(deadline=None, max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    st.sampled_from(["x.parquet", "x.npz", "packed.npz"]),
    st.lists(st.tuples(st.floats(0, 1), st.integers(0, 3), st.binary(max_size=4)), min_size=1, max_size=4),
    st.booleans(),
)
def test_mutated_files(tmp_path: Path, name: str, changes: list[tuple[float, int, bytes]], cut: bool) -> None:
    """Bytes inserted, overwritten or removed anywhere: spans or an InputError, never another exception."""
    source = tmp_path / name
    if not source.exists():
        times, bits = np.arange(50) * 10, np.arange(50) & 1
        parquet(tmp_path / "x.parquet", {"time_ns": times, "A": bits})
        np.savez(tmp_path / "x.npz", time_ns=times, A=bits)
        np.savez_compressed(tmp_path / "packed.npz", time_ns=times, A=bits)
    content = source.read_bytes()
    for part, removed, inserted in changes:
        place = int(part * len(content))
        content = content[:place] + inserted + content[place + removed :]
    path = tmp_path / "mutated"
    path.write_bytes(content[: len(content) // 2] if cut else content)
    try:
        capture = open_capture(path, NONE)
        for span in capture.spans(capture.columns):
            assert span.start < span.stop
    except InputError as error:
        assert str(path) in str(error)
