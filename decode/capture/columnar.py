"""Tables of columns, Parquet and npz, to spans.

Such a file says of a column its type and not what it means: which column is the time and in what unit, what is a
voltage and where its threshold lies, is told for a delimited export, and by the same rules here. So a table is written
out as one, a piece at a time, and goes through the reader of those. Nothing is lost: a whole number, a decimal and a
date-time are written as they are, a floating-point number by the shortest decimal that reads back as the same number
(what a program that exports text would have printed), and the times become whole ticks from there. A null is an empty
cell. Columns that are not asked for are not read from the file: their cells are empty too.

A Parquet file is read a batch of rows at a time, an npz archive likewise from all of its arrays at once. Single numbers
in an archive, and the file's own key-value notes in a Parquet file, stand above the table as `key: value`, where a
sample rate is looked for.
"""

from __future__ import annotations

import csv
import hashlib
import io
import re
import zipfile
import zlib
from collections.abc import Callable, Collection, Generator, Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import IO, BinaryIO, cast

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv
import pyarrow.parquet as pq

from decode.capture.delimited import DelimitedCapture
from decode.capture.stream import Reading, Source, open_file
from decode.errors import InputError
from decode.sheet import CaptureKeys
from decode.spans import Span

ROWS_AT_A_TIME = 50_000

_PARQUET, _ZIP = b"PAR1", b"PK\x03\x04"
_MOST_NOTES = 50
_UNIT = re.compile(r"_([kMG]?hz|[mup]?s|ns)$", re.IGNORECASE)
_OPTIONS = pyarrow.csv.WriteOptions(include_header=False, batch_size=ROWS_AT_A_TIME)
_AS_TEXT = ("the separator is taken to be a comma", "line 1 is taken for the header", "the file has one column")


@dataclass(frozen=True, slots=True)
class Table:
    """A file of columns. layout: what it is. names: of its columns. notes: what stands above them, `key: value`.
    rows: how many there are. batches: pieces of the table with the columns of these numbers alone, in their order."""

    layout: str
    names: tuple[str, ...]
    notes: tuple[str, ...]
    rows: int
    batches: Callable[[Sequence[int]], Iterator[pa.RecordBatch]]


def maybe_table(source: Source) -> Table | None:
    """The table that a file holds, None for a file of another kind.

    Raises InputError for one that is broken, or that cannot be read here: only a plain file can.
    """
    if source.path is None or source.compression is not None:
        start = source.head(len(_PARQUET))[: len(_PARQUET)]
    else:
        with open_file(source.path) as file:
            start = file.read(len(_PARQUET))
    if start not in (_PARQUET, _ZIP):
        return None
    if source.path is None or source.compression is not None:
        raise InputError(
            "a Parquet file or an npz archive is read from a plain file only",
            file=source.file,
            found="standard input" if source.path is None else f"a {source.compression} file",
            expected="the file as it was written",
            hint="save it, unpacked, and give its path",
        )
    return _parquet(source.path) if start == _PARQUET else _archive(source.path)


# --- Parquet ---------------------------------------------------------------------------------------------------------


def _parquet(path: Path) -> Table:
    try:
        with pq.ParquetFile(path) as file:
            schema, rows = file.schema_arrow, file.metadata.num_rows
            notes = [(key, value) for key, value in (schema.metadata or {}).items() if len(value) <= 80]
    except (pa.ArrowException, OSError) as error:
        raise _broken(path, "Parquet file", error) from None
    names = _expect_flat(path, list(schema.names), list(schema.types))

    def batches(columns: Sequence[int]) -> Iterator[pa.RecordBatch]:
        try:
            with pq.ParquetFile(path) as file:
                yield from file.iter_batches(ROWS_AT_A_TIME, columns=[schema.names[index] for index in columns])
        except (pa.ArrowException, OSError) as error:
            raise _broken(path, "Parquet file", error) from None

    return Table("Parquet file", names, _notes(notes), rows, batches)


def _broken(path: Path, kind: str, error: Exception) -> InputError:
    return InputError(
        f"the {kind} is broken off or damaged",
        file=str(path),
        found=str(error).splitlines()[0][:120] if str(error) else type(error).__name__,
        expected=f"a whole {kind}",
        hint="write or copy it again",
    )


def _expect_flat(path: Path, names: list[str], types: list[pa.DataType]) -> tuple[str, ...]:
    """The names for the columns. Raises InputError where there is none, two alike, or one of values within values."""
    if not names or len(set(names)) < len(names):
        raise InputError(
            "a table without columns" if not names else "two columns of the same name",
            file=str(path),
            found=", ".join(names)[:120] or None,
            expected="a column of times and one for each line",
            hint="write the table again",
        )
    nested = next((name for name, kind in zip(names, types, strict=True) if pa.types.is_nested(kind)), None)
    if nested is not None:
        raise InputError(
            "a column whose values are lists or records",
            file=str(path),
            column=nested,
            expected="one number, word or truth value in each row",
            hint="write a column for each line",
        )
    return tuple(
        f"{name} [{kind.unit}]" if pa.types.is_duration(kind) else name for name, kind in zip(names, types, strict=True)
    )


def _notes(found: Sequence[tuple[bytes, bytes]]) -> tuple[str, ...]:
    """Names with values as lines above a table, a unit at the end of a name in brackets: sample_rate_hz."""
    lines = []
    for key, value in found[:_MOST_NOTES]:
        name = _UNIT.sub(r" [\1]", key.decode("utf-8", "replace"))
        lines.append(" ".join([f"{name}:", *value.decode("utf-8", "replace").split()]))
    return tuple(lines)


# --- npz -------------------------------------------------------------------------------------------------------------

BROKEN_ARCHIVE = (
    zipfile.BadZipFile,
    zlib.error,
    OSError,
    ValueError,
    EOFError,
    KeyError,
    NotImplementedError,
    RuntimeError,
    SyntaxError,
)
"""What reading a damaged npz archive may raise: from the zip around it, what is packed in it, or an array's header."""


@dataclass(frozen=True, slots=True)
class _Array:
    """One array of an archive. kind: the type of its column. length: how many values; None for a single one."""

    member: str
    dtype: np.dtype[np.generic]
    kind: pa.DataType
    length: int | None


def _archive(path: Path) -> Table:
    try:
        with zipfile.ZipFile(path) as archive:
            arrays = [_array(archive, path, name) for name in archive.namelist() if name.endswith(".npy")]
            notes = [
                (one.member.removesuffix(".npy").encode(), str(_single(archive, one)).encode())
                for one in arrays
                if one.length is None
            ]
    except BROKEN_ARCHIVE as error:
        raise _broken(path, "npz archive", error) from None
    columns = [one for one in arrays if one.length is not None]
    if not columns:
        raise InputError(
            "an archive without columns",
            file=str(path),
            expected="arrays of times and levels, one for each line",
            hint="unpack the archive and give the export in it",
        )
    lengths = {one.length for one in columns}
    if len(lengths) > 1:
        raise InputError(
            "arrays of different lengths",
            file=str(path),
            found=", ".join(f"{one.member.removesuffix('.npy')}: {one.length}" for one in columns)[:120],
            expected="a value of every line for each time",
            hint="write arrays of one length",
        )
    names = [one.member.removesuffix(".npy") for one in columns]
    flat = _expect_flat(path, names, [one.kind for one in columns])

    def batches(wanted: Sequence[int]) -> Iterator[pa.RecordBatch]:
        try:
            yield from _batches(path, [columns[index] for index in wanted], columns[0].length or 0)
        except BROKEN_ARCHIVE as error:
            raise _broken(path, "npz archive", error) from None

    return Table("npz archive", flat, _notes(notes), columns[0].length or 0, batches)


def _maybe_arrow_type(dtype: np.dtype[np.generic]) -> pa.DataType | None:
    """The type of a column of such values; None for what is no number, word, time or truth value."""
    if dtype.kind not in "biufmMUS":
        return None
    try:
        return pa.array(np.empty(0, dtype.newbyteorder("="))).type
    except pa.ArrowException:
        return None


def _array(archive: zipfile.ZipFile, path: Path, member: str) -> _Array:
    with archive.open(member) as stream:
        shape, dtype = _header(stream)
    kind = _maybe_arrow_type(dtype)
    if kind is None or len(shape) > 1:
        raise InputError(
            "an array that is no column",
            file=str(path),
            column=member.removesuffix(".npy"),
            found=f"{dtype} in {len(shape)} dimensions" if len(shape) > 1 else f"values of type {dtype}",
            expected="one number, word or truth value in each row",
            hint="write an array of one dimension for each line",
        )
    return _Array(member, dtype, kind, shape[0] if shape else None)


def _header(stream: IO[bytes]) -> tuple[tuple[int, ...], np.dtype[np.generic]]:
    version = np.lib.format.read_magic(stream)
    read = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
    shape, _, dtype = read(stream)
    return shape, dtype


def _single(archive: zipfile.ZipFile, one: _Array) -> np.generic:
    with archive.open(one.member) as stream:
        _header(stream)
        return cast(np.generic, _values(stream, one.dtype, 1)[0])


def _values(stream: IO[bytes], dtype: np.dtype[np.generic], count: int) -> npt.NDArray[np.generic]:
    wanted = count * dtype.itemsize
    found = stream.read(wanted)
    if len(found) < wanted:
        raise EOFError("an array ends before its last value")
    return np.frombuffer(found, dtype).astype(dtype.newbyteorder("="), copy=False)


def _batches(path: Path, arrays: Sequence[_Array], rows: int) -> Iterator[pa.RecordBatch]:
    with ExitStack() as stack:
        archive = stack.enter_context(zipfile.ZipFile(path))
        streams = [stack.enter_context(archive.open(one.member)) for one in arrays]
        for stream in streams:
            _header(stream)
        for start in range(0, rows, ROWS_AT_A_TIME):
            count = min(ROWS_AT_A_TIME, rows - start)
            columns = [pa.array(_values(stream, one.dtype, count)) for stream, one in zip(streams, arrays, strict=True)]
            yield pa.RecordBatch.from_arrays(columns, [one.member for one in arrays])


# --- as a text -------------------------------------------------------------------------------------------------------


class _Text:
    """A table as a delimited text with a header, a piece at a time. wanted: numbers of the columns to be filled."""

    def __init__(self, table: Table, wanted: Sequence[int]) -> None:
        self._table = table
        self._wanted = wanted
        self._pieces = self._written()
        self._left = b""
        self.rows = 0

    def read(self, size: int = -1) -> bytes:
        if not self._left:
            self._left = next(self._pieces, b"")
        size = len(self._left) if size < 0 else size
        given, self._left = self._left[:size], self._left[size:]
        return given

    def close(self) -> None:
        self._pieces.close()

    def _written(self) -> Generator[bytes, None, None]:
        head = io.StringIO()
        writer = csv.writer(head, lineterminator="\n", quoting=csv.QUOTE_ALL)
        for note in self._table.notes:
            head.write(f"# {note}\n")
        writer.writerow([" ".join(name.split()) or str(number) for number, name in enumerate(self._table.names, 1)])
        yield head.getvalue().encode()
        for batch in self._table.batches(self._wanted):
            self.rows += batch.num_rows
            yield _rows(batch, self._wanted, len(self._table.names))


def _rows(batch: pa.RecordBatch, wanted: Sequence[int], count: int) -> bytes:
    """The rows of a batch, with empty cells for the columns that it has not."""
    filled = dict(zip(wanted, batch.columns, strict=True))
    empty = pa.nulls(batch.num_rows)
    columns = [_plain(filled[index]) if index in filled else empty for index in range(count)]
    sink = pa.BufferOutputStream()
    pyarrow.csv.write_csv(pa.RecordBatch.from_arrays(columns, [str(index) for index in range(count)]), sink, _OPTIONS)
    return cast(bytes, sink.getvalue().to_pybytes())


def _plain(column: pa.Array) -> pa.Array:
    """A column of a type that can be written: truth values as 0 and 1, durations as whole numbers of their unit."""
    kind = column.type
    if pa.types.is_dictionary(kind):
        return _plain(column.dictionary_decode())
    if pa.types.is_boolean(kind):
        return pc.cast(column, pa.int8())
    if pa.types.is_duration(kind):
        return pc.cast(column, pa.int64())
    if pa.types.is_float16(kind):
        return pc.cast(column, pa.float32())
    if pa.types.is_binary(kind) or pa.types.is_large_binary(kind) or pa.types.is_fixed_size_binary(kind):
        return pa.array([None if one is None else one.rstrip(b"\0").decode("latin-1") for one in column.to_pylist()])
    return column


class _TableReading(Reading):
    """One pass over a table as a text. Its digest is that of the file."""

    def __init__(self, path: Path, text: _Text) -> None:
        super().__init__(str(path), cast(BinaryIO, text))
        self._path = path
        self.text = text

    @property
    def digest(self) -> str:
        with self._path.open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()

    def drain(self) -> None:
        """Nothing: the digest does not come from what went by."""


class _TableSource(Source):
    """A table as the source of a text. wanted: numbers of the columns to be filled."""

    def __init__(self, path: Path, table: Table) -> None:
        self._path, self._table = path, table
        self.wanted: Sequence[int] = range(len(table.names))
        super().__init__(path)

    def open(self) -> Reading:
        return _TableReading(self._path, _Text(self._table, self.wanted))

    def part(self, reading: Reading) -> float:
        assert isinstance(reading, _TableReading)  # there are no others
        return reading.text.rows / max(1, self._table.rows)


class ColumnarCapture(DelimitedCapture):
    """A table of columns. See `decode.capture.source.Capture` for what the attributes are."""

    def __init__(self, source: Source, table: Table, keys: CaptureKeys, rows_per_span: int) -> None:
        assert source.path is not None  # `maybe_table` asks for one
        self._table = table
        self._columns = _TableSource(source.path, table)
        super().__init__(self._columns, keys, rows_per_span)
        self.layout = f"{table.layout}, {self.layout.partition('header, ')[2]}"

    @property
    def notes(self) -> list[str]:
        lines = f"rows are counted as lines, with the names of the columns in line {len(self._table.notes) + 1}"
        return [lines, *(note for note in super().notes if note not in self._said_of_the_text())]

    def _said_of_the_text(self) -> Collection[str]:
        return (*_AS_TEXT, f"line {len(self._table.notes) + 1} is taken for the header")

    def spans(self, columns: Sequence[str]) -> Iterator[Span]:
        """The capture as consecutive spans with the edges of `columns`; no others are read from the file."""
        self._columns.wanted = self._needed(columns)
        try:
            yield from super().spans(columns)
        finally:
            self._columns.wanted = range(len(self._table.names))

    def _needed(self, columns: Sequence[str]) -> Sequence[int]:
        """Numbers of the columns that these lines and the time stand in, rising."""
        if self._dialect.long is not None:
            return range(len(self._table.names))
        needed = {self._rule(*self._place(name)).column for name in columns}
        return sorted(needed | ({self._dialect.time} if self._dialect.time is not None else set()))
