"""The door of the room: what a capture is to the rest of the house, and how to open one.

Whatever layout a file has, it becomes a `Capture`: names of signal columns, seconds per tick, and spans of edges.
A new layout is a new class with these members and a line in `open_capture`; no other room knows of it. What a reader
reads are the bytes of a `decode.capture.stream.Source`: decompressed, from a file or from standard input.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from fractions import Fraction
from pathlib import Path
from typing import Protocol

from decode.anomalies import Anomalies
from decode.capture.columnar import ColumnarCapture, maybe_table
from decode.capture.delimited import DelimitedCapture
from decode.capture.stream import Source
from decode.capture.vcd import VcdCapture
from decode.capture.vcd_definitions import is_dump
from decode.sheet import CaptureKeys
from decode.spans import Span

ROWS_PER_SPAN = 200_000


class Capture(Protocol):
    """A file of edges.

    file: its name as the user gave it. layout: one line that a user understands. columns: names of the signal
    columns; without a header "1", "2", ... by their place among all columns of the file. tick: seconds per tick.

    part_read: how much of the file the spans so far came from, 0 to 1.

    Complete once the spans are exhausted: rows; first and last (the earliest and the latest time, ticks); grid (ticks
    by which a time may be off, the sampling step: the greatest common divisor of the time differences, or what
    `decode.capture.sampling` finds where times are rounded to a digit that the step does not fit, or carry float
    noise; 1 for numbered samples; before the first span, that of the first rows); notes (everything inferred, skipped
    or not used); anomalies (breaks of the time axis); digest (SHA-256 of the file's bytes, hex).
    """

    file: str
    layout: str
    tick: Fraction
    digest: str

    @property
    def columns(self) -> tuple[str, ...]: ...
    @property
    def rows(self) -> int: ...
    @property
    def part_read(self) -> float: ...
    @property
    def first(self) -> int: ...
    @property
    def last(self) -> int: ...
    @property
    def grid(self) -> int: ...
    @property
    def notes(self) -> list[str]: ...
    @property
    def anomalies(self) -> list[Anomalies]: ...

    def column(self, line: str | int) -> str:
        """The column that an entry of [lines] means: its name, the name in other letters where only one matches, its
        number from 1 among all columns, or any of these with the number of a bit, `name[3]`, for a column of port
        values. Raises InputError, with the columns and the nearest name."""

    def spans(self, columns: Sequence[str]) -> Iterator[Span]:
        """Consecutive spans with the edges of `columns`, within [capture] window_s. Raises InputError for a file that
        cannot be used, at the latest at its end."""


def open_capture(path: str | Path, keys: CaptureKeys, *, rows_per_span: int = ROWS_PER_SPAN) -> Capture:
    """Open a capture and tell its layout from its first rows.

    path: "-" is standard input, which can be read once. rows_per_span: lines of the file read at a time, and so the
    most rows in a span. Raises InputError for a file that is no capture, or about which neither it nor `keys` says
    enough.
    """
    source = Source(path)
    table = maybe_table(source)
    if table is not None:
        return ColumnarCapture(source, table, keys, rows_per_span)
    if is_dump(source):
        return VcdCapture(source, keys, rows_per_span)
    return DelimitedCapture(source, keys, rows_per_span)
