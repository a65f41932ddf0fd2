"""Delimited text in blocks of whole lines, with everything that a line-wise reader would lose on the way.

The bytes go by once, in pieces, and are never held: each block carries its rows as bytes, where they stand in the file
(physical lines count from 1, comments and blank lines included), what was skipped, and which lines are no row: those
with the wrong number of cells, or with a NUL. All of it is counted over the bytes of a block at once.
"""

from __future__ import annotations

import codecs
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from decode.capture.stream import PIECE, Reading
from decode.errors import InputError
from decode.spans import BoolArray, IntArray

COMMENT_MARKS = b"#;%/"
"""A line that begins with one of these is a comment (a slash: two of them); a semicolon not where it separates."""

LONGEST_LINE = 1 << 20

ByteArray = npt.NDArray[np.uint8]


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """Whole lines of a file, reduced to their rows.

    rows: the text of the rows, each ended by a line feed. numbers: (n,) the physical line of each row. blank,
    comments: the physical lines that were skipped. broken: (m,) those that are no row, cells: (m,) how many cells each
    of them has. places: (n,) how many lines that hold anything but comments stand ahead of each row in the whole file;
    broken_places: (m,) the same for those that are no row. cut_short: the physical line within which the file ends,
    and which was dropped.
    """

    rows: bytes
    numbers: IntArray
    blank: IntArray
    comments: IntArray
    broken: IntArray
    cells: IntArray
    places: IntArray
    broken_places: IntArray
    cut_short: int | None

    def between(self, first: int, stop: int) -> Block:
        """The rows with first <= index < stop (at least one), and of the other lines those that stand between them,
        ahead of the first row where that is the block's own, and behind the last row where that is."""
        ends = np.concatenate([[0], np.flatnonzero(np.frombuffer(self.rows, np.uint8) == 10) + 1])
        low = int(self.numbers[first]) if first else 0
        high = int(self.numbers[stop - 1])

        def kept(lines: IntArray) -> BoolArray:
            return np.asarray((lines >= low) & ((lines <= high) | (stop == self.numbers.size)), np.bool_)

        return Block(
            rows=self.rows[int(ends[first]) : int(ends[stop])],
            numbers=self.numbers[first:stop],
            blank=self.blank[kept(self.blank)],
            comments=self.comments[kept(self.comments)],
            broken=self.broken[kept(self.broken)],
            cells=self.cells[kept(self.broken)],
            places=self.places[first:stop],
            broken_places=self.broken_places[kept(self.broken)],
            cut_short=self.cut_short if stop == self.numbers.size else None,
        )

    def row(self, index: int) -> Block:
        """One row and nothing else."""
        one = self.between(index, index + 1)
        none = np.empty(0, np.int64)
        return replace(one, blank=none, comments=none, broken=none, cells=none, broken_places=none, cut_short=None)

    def ended(self) -> Block:
        """The block without what stands behind its last row."""
        last = int(self.numbers[-1])
        kept = self.broken <= last
        return replace(
            self,
            blank=self.blank[self.blank <= last],
            comments=self.comments[self.comments <= last],
            broken=self.broken[kept],
            cells=self.cells[kept],
            broken_places=self.broken_places[kept],
            cut_short=None,
        )

    def behind(self, row: Block) -> Block:
        """The block with a row of an earlier one put ahead."""
        return replace(
            self,
            rows=row.rows + self.rows,
            numbers=np.concatenate([row.numbers, self.numbers]),
            places=np.concatenate([row.places, self.places]),
        )


@dataclass(frozen=True, slots=True)
class Shape:
    """What a row looks like.

    delimiter: one character, a space meaning any run of spaces and tabs. cells: how many a row has, the empty one
    behind a trailing delimiter included. carriage_returns: lines end with a bare carriage return. skip: physical
    lines before the first row. decimal: the decimal mark.
    """

    delimiter: str
    cells: int
    trailing: bool
    carriage_returns: bool
    skip: int
    decimal: str = "."

    @property
    def comment_marks(self) -> bytes:
        return COMMENT_MARKS.replace(self.delimiter.encode("latin-1"), b"")


def read_blocks(reading: Reading, file: str, shape: Shape, lines: int) -> Iterator[Block]:
    """The rows of a file in blocks of `lines` physical lines. Raises InputError for a file that is no text."""
    number, place = 1, 0
    for text, ended in _whole_lines(reading, file, shape, lines):
        if number <= shape.skip:
            text, skipped = _without_first(text, shape.skip - number + 1)
            number += skipped
        if text:
            block, count = _block(text, number, place, ended, shape)
            yield block
            number += count
            place += int(block.numbers.size + block.broken.size)


def _whole_lines(reading: Reading, file: str, shape: Shape, lines: int) -> Iterator[tuple[bytes, bool]]:
    """(text, whether its last line is ended) for each `lines` lines of a file; every line ends with a line feed."""
    pending, is_first = b"", True
    while piece := reading.read(max(PIECE, len(pending))):
        if is_first:
            piece, is_first = piece.removeprefix(codecs.BOM_UTF8), False
        text = pending + (piece.replace(b"\r", b"\n") if shape.carriage_returns else piece)
        ends = np.flatnonzero(np.frombuffer(text, np.uint8) == 10) + 1
        start = 0
        for stop in ends[lines - 1 :: lines].tolist():
            yield text[start:stop], True
            start = stop
        pending = text[start:]
        _refuse_endless(len(text) - int(ends[-1] if ends.size else 0), file)
    if pending:
        ended = pending.endswith(b"\n")
        yield (pending if ended else pending + b"\n"), ended


def _refuse_endless(length: int, file: str) -> None:
    if length > LONGEST_LINE:
        raise InputError(
            "a line without an end: this is not a CSV capture",
            file=file,
            found=f"more than {LONGEST_LINE} bytes without a line feed",
            expected="lines of text, a row each",
            hint="give the CSV export of a logic analyser",
        )


def _without_first(text: bytes, lines: int) -> tuple[bytes, int]:
    """(the text without its first lines, how many those are): at most `lines`, or as many as there are."""
    ends = np.flatnonzero(np.frombuffer(text, np.uint8) == 10) + 1
    skipped = min(lines, int(ends.size))
    return text[int(ends[skipped - 1]) :], skipped


def _block(text: bytes, number: int, place: int, ended: bool, shape: Shape) -> tuple[Block, int]:
    """(the block of these lines, how many lines they are); `number` is the physical line of the first, `place` how
    many rows stand ahead of it."""
    text = text.replace(b"\r\n", b"\n")
    if b'"' in text:
        text = without_quotes(text, shape)
    characters = np.frombuffer(text, np.uint8)
    stops = np.flatnonzero(characters == 10)
    starts = np.concatenate([[0], stops[:-1] + 1])
    filled, cells = _cells(characters, starts, shape)
    comments = filled & _comments(characters, starts, shape)
    rows = filled & ~comments
    wrong = rows & (cells != shape.cells)
    if b"\0" in text:
        wrong |= rows & np.logical_or.reduceat(characters == 0, starts)
    cut_short = bool(not ended and rows[-1] and (cells[-1] < shape.cells or _open_ended(text, shape)))
    if cut_short:
        wrong[-1] = rows[-1] = False
    rows &= ~wrong
    places = np.flatnonzero(rows[rows | wrong]) + place
    kept = text if rows.all() else characters[np.repeat(rows, stops - starts + 1)].tobytes()
    block = Block(
        rows=kept,
        numbers=np.flatnonzero(rows) + number,
        blank=np.flatnonzero(~filled) + number,
        comments=np.flatnonzero(comments) + number,
        broken=np.flatnonzero(wrong) + number,
        cells=cells[wrong],
        places=places,
        broken_places=np.flatnonzero(wrong[rows | wrong]) + place,
        cut_short=number + int(starts.size) - 1 if cut_short else None,
    )
    return block, int(starts.size)


def without_quotes(text: bytes, shape: Shape) -> bytes:
    """The lines without their double quotes; a comma within quotes becomes the point of a number, any other separator
    within quotes a space. Quotes pair up within a line."""
    characters = np.frombuffer(text, np.uint8)
    quotes = characters == ord('"')
    before = np.cumsum(quotes)
    starts = np.concatenate([[0], np.flatnonzero(characters == 10)[:-1] + 1])
    lengths = np.diff(np.append(starts, characters.size))
    ahead = np.repeat(before[starts] - quotes[starts], lengths)
    inside = ((before - ahead) & 1).astype(np.bool_) & (characters == ord(shape.delimiter))
    plain = np.where(inside, ord(".") if shape.delimiter == "," else ord("_"), characters)
    return bytes(plain[~quotes].astype(np.uint8))


def _open_ended(text: bytes, shape: Shape) -> bool:
    """Whether an unended last line stops right behind a delimiter, its last cell still to come."""
    return not shape.trailing and shape.delimiter != " " and text.endswith(shape.delimiter.encode("latin-1") + b"\n")


def _cells(characters: ByteArray, starts: IntArray, shape: Shape) -> tuple[BoolArray, IntArray]:
    """((n,) whether each line holds anything but white space, (n,) how many cells it has)."""
    visible = (characters != ord(" ")) & (characters != ord("\t")) & (characters != ord("\n"))
    filled = np.add.reduceat(visible, starts, dtype=np.int64) > 0
    if shape.delimiter == " ":
        begins = visible.copy()
        begins[1:] &= ~visible[:-1]
        return filled, np.add.reduceat(begins, starts, dtype=np.int64)
    delimiters = characters == ord(shape.delimiter)
    return filled, np.add.reduceat(delimiters, starts, dtype=np.int64) + 1


def _comments(characters: ByteArray, starts: IntArray, shape: Shape) -> BoolArray:
    """(n,) whether each line is a comment."""
    first = characters[starts]
    found = np.isin(first, np.frombuffer(shape.comment_marks, np.uint8))
    slashes = found & (first == ord("/"))
    if slashes.any():
        second = characters[np.minimum(starts + 1, characters.size - 1)]
        found &= ~slashes | (second == ord("/"))
    return np.asarray(found, np.bool_)
