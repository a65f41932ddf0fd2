"""A text file in blocks of whole lines, with everything that a line-wise reader would lose on the way.

The file is read once, in pieces, and never held: each block carries its rows as bytes, where they stand in the file
(physical lines count from 1, comments and blank lines included), what was skipped, and the first row that has the
wrong number of cells. All of it is counted over the bytes of a block at once.
"""

from __future__ import annotations

import codecs
import hashlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

import numpy as np
import numpy.typing as npt

from decode.errors import InputError
from decode.spans import BoolArray, IntArray

COMMENT_MARKS = b"#;%/"
"""A line that begins with one of these is a comment (a slash: two of them); a semicolon not where it separates."""

LONGEST_LINE = 1 << 20
_PIECE = 1 << 20

ByteArray = npt.NDArray[np.uint8]


@dataclass(frozen=True, slots=True)
class Block:
    """Whole lines of a file, reduced to their rows.

    rows: the text of the rows, each ended by a line feed. numbers: (n,) the physical line of each row. blank,
    comments: how many lines were skipped. ragged: (line, cells) of the first row with the wrong number of cells;
    `rows` ends before it. cut_short: the physical line within which the file ends, and which was dropped.
    """

    rows: bytes
    numbers: IntArray
    blank: int
    comments: int
    ragged: tuple[int, int] | None
    cut_short: int | None


@dataclass(frozen=True, slots=True)
class Shape:
    """What a row looks like.

    delimiter: one character, a space meaning any run of spaces and tabs. cells: how many a row has, the empty one
    behind a trailing delimiter included. carriage_returns: lines end with a bare carriage return. skip: physical
    lines before the first row.
    """

    delimiter: str
    cells: int
    trailing: bool
    carriage_returns: bool
    skip: int

    @property
    def comment_marks(self) -> bytes:
        return COMMENT_MARKS.replace(self.delimiter.encode("latin-1"), b"")


def open_file(path: Path) -> BinaryIO:
    """Open a capture for reading. Raises InputError where that cannot be done."""
    file = str(path)
    try:
        if path.is_dir():
            raise InputError("this is a folder, not a capture", file=file, hint="give the path of one exported file")
        if not path.exists():
            raise InputError("there is no such capture", file=file, hint="check the path and the file's ending")
        if not path.is_file():
            raise InputError("this is not a regular file", file=file, hint="save the capture to a file first")
        return path.open("rb")
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(
            "the capture cannot be read", file=file, found=reason, hint="check the path and who may read the file"
        ) from None


def read_blocks(path: Path, shape: Shape, lines: int, digest: hashlib._Hash) -> Iterator[Block]:
    """The rows of a file in blocks of `lines` physical lines; its bytes go into `digest` on the way.

    Raises InputError for a file that is no text, or that can no longer be read.
    """
    number = 1
    for text, ended in _whole_lines(path, shape, lines, digest):
        if number <= shape.skip:
            text, skipped = _without_first(text, shape.skip - number + 1)
            number += skipped
        if text:
            block, count = _block(text, number, ended, shape, str(path))
            yield block
            number += count


def _whole_lines(path: Path, shape: Shape, lines: int, digest: hashlib._Hash) -> Iterator[tuple[bytes, bool]]:
    """(text, whether its last line is ended) for each `lines` lines of a file; every line ends with a line feed."""
    pending = b""
    with open_file(path) as file:
        while piece := _read(file, path, max(_PIECE, len(pending))):
            digest.update(piece)
            if file.tell() == len(piece):
                piece = piece.removeprefix(codecs.BOM_UTF8)
            text = pending + (piece.replace(b"\r", b"\n") if shape.carriage_returns else piece)
            ends = np.flatnonzero(np.frombuffer(text, np.uint8) == 10) + 1
            start = 0
            for stop in ends[lines - 1 :: lines].tolist():
                yield text[start:stop], True
                start = stop
            pending = text[start:]
            _refuse_endless(len(text) - int(ends[-1] if ends.size else 0), path)
    if pending:
        ended = pending.endswith(b"\n")
        yield (pending if ended else pending + b"\n"), ended


def _refuse_endless(length: int, path: Path) -> None:
    if length > LONGEST_LINE:
        raise InputError(
            "a line without an end: this is not a CSV capture",
            file=str(path),
            found=f"more than {LONGEST_LINE} bytes without a line feed",
            expected="lines of text, a row each",
            hint="give the CSV export of a logic analyser",
        )


def _read(file: BinaryIO, path: Path, size: int) -> bytes:
    try:
        return file.read(size)
    except OSError as error:
        raise InputError("the capture cannot be read", file=str(path), found=error.strerror or str(error)) from None


def _without_first(text: bytes, lines: int) -> tuple[bytes, int]:
    """(the text without its first lines, how many those are): at most `lines`, or as many as there are."""
    ends = np.flatnonzero(np.frombuffer(text, np.uint8) == 10) + 1
    skipped = min(lines, int(ends.size))
    return text[int(ends[skipped - 1]) :], skipped


def _block(text: bytes, number: int, ended: bool, shape: Shape, file: str) -> tuple[Block, int]:
    """(the block of these lines, how many lines they are); `number` is the physical line of the first."""
    text = text.replace(b"\r\n", b"\n").replace(b'"', b"")
    characters = np.frombuffer(text, np.uint8)
    stops = np.flatnonzero(characters == 10)
    starts = np.concatenate([[0], stops[:-1] + 1])
    refuse_binary(text, number, file)
    filled, cells = _cells(characters, starts, shape)
    comments = _comments(characters, starts, shape)
    rows = filled & ~comments
    wrong = rows & (cells != shape.cells)
    cut_short = bool(not ended and rows[-1] and (cells[-1] < shape.cells or _open_ended(text, shape)))
    ragged = None
    if cut_short:
        wrong[-1] = rows[-1] = False
    if wrong.any():
        first = int(np.argmax(wrong))
        ragged = (number + first, int(cells[first]))
        rows[first:] = False
    kept = text if rows.all() else characters[np.repeat(rows, stops - starts + 1)].tobytes()
    blank = int(np.count_nonzero(~filled))
    numbers = np.flatnonzero(rows) + number
    ending = number + int(starts.size) - 1 if cut_short else None
    return Block(kept, numbers, blank, int(np.count_nonzero(comments)), ragged, ending), int(starts.size)


def refuse_binary(text: bytes, number: int, file: str) -> None:
    """Raises InputError at the first NUL byte: no text holds one. `number` is the physical line of the first."""
    place = text.find(b"\0")
    if place >= 0:
        raise InputError(
            "a byte that no text holds: this is not a CSV capture",
            file=file,
            row=number + text.count(b"\n", 0, place),
            found="a NUL byte",
            expected="plain text in UTF-8",
            hint="export the capture as CSV; text in UTF-16 must be saved as UTF-8",
        )


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
