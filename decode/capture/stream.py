"""The bytes of a capture: a file or standard input, compressed or not, in whatever Unicode encoding.

What other modules of this room read is what the export would be as a plain file: decompressed, and text in UTF-16
turned into UTF-8. On the way the bytes as they stand in the file go into a digest.

A file is opened anew for each pass. Standard input passes by once: what was looked at ahead of the pass is kept and
given again, so that layouts are told from the same first bytes, and a second pass is refused.
"""

from __future__ import annotations

import codecs
import hashlib
import os
import stat
import sys
from pathlib import Path
from typing import BinaryIO, Protocol

import pyarrow as pa

from decode.errors import InputError

STANDARD_INPUT = "-"
PIECE = 1 << 20

COMPRESSIONS = {b"\x1f\x8b": "gzip", b"\x28\xb5\x2f\xfd": "zstd"}
"""Read as they are, by their first bytes (source: RFC 1952 section 2.3.1; RFC 8878 section 3.1.1)."""

ARCHIVES = {b"BZh": "bzip2", b"\xfd7zXZ\x00": "xz", b"7z\xbc\xaf": "7z", b"Rar!": "rar"}
"""Told and refused, by their first bytes."""

_ENCODED_SHARE = 0.9
_ENCODED_SAMPLE = 256


class _Readable(Protocol):
    def read(self, size: int = ..., /) -> bytes: ...


class _Counted:
    """A raw file whose bytes are counted and digested as they go by."""

    closed = False

    def __init__(self, raw: BinaryIO) -> None:
        self._raw = raw
        self.digest = hashlib.sha256()
        self.bytes = 0

    def read(self, size: int = -1) -> bytes:
        piece = self._raw.read(size)
        self.digest.update(piece)
        self.bytes += len(piece)
        return piece

    def readable(self) -> bool:
        return True

    def writable(self) -> bool:
        return False

    def seekable(self) -> bool:
        return False

    def flush(self) -> None:
        pass

    def close(self) -> None:
        self._raw.close()


class Reading:
    """One pass over a capture's bytes. Raises InputError where they cannot be read, or a compressed file is broken."""

    def __init__(self, file: str, raw: BinaryIO) -> None:
        self._file = file
        self._counted = _Counted(raw)
        self._ahead = b""
        self._plain: _Readable = self._counted
        self._decoder: codecs.IncrementalDecoder | None = None
        self.compression: str | None = None
        self.encoding: str | None = None
        self._begin()

    def _begin(self) -> None:
        first = self._guarded(self._counted, 8)
        while len(first) < 8 and (more := self._guarded(self._counted, 8 - len(first))):
            first += more
        _refuse_archive(first, self._file)
        self.compression = next((name for magic, name in COMPRESSIONS.items() if first.startswith(magic)), None)
        if self.compression is not None:
            self._plain = pa.CompressedInputStream(pa.PythonFile(_Rejoined(first, self._counted)), self.compression)
            first = b""
        ahead = [first]
        while sum(map(len, ahead)) < _ENCODED_SAMPLE and (piece := self._guarded(self._plain, _ENCODED_SAMPLE)):
            ahead.append(piece)
        sample = b"".join(ahead)
        self.encoding = _maybe_wide_encoding(sample)
        if self.encoding is not None:
            self._decoder = codecs.getincrementaldecoder(self.encoding)("replace")
        self._ahead = self._decoded(sample, final=False)

    def read(self, size: int) -> bytes:
        """About `size` bytes, fewer or more where an encoding makes them so; none only at the end."""
        if self._ahead:
            given, self._ahead = self._ahead, b""
            return given
        while piece := self._guarded(self._plain, size):
            if decoded := self._decoded(piece, final=False):
                return decoded
        return self._decoded(b"", final=True)

    def peek(self, size: int) -> bytes:
        """At least `size` bytes (all where there are fewer), which `read` will give as well."""
        pieces = []
        length = 0
        while length < size and (piece := self.read(size)):
            pieces.append(piece)
            length += len(piece)
        self._ahead = b"".join(pieces)
        return self._ahead

    def _decoded(self, piece: bytes, *, final: bool) -> bytes:
        if self._decoder is None:
            return piece
        return self._decoder.decode(piece, final).encode("utf-8", "replace")

    def _guarded(self, stream: _Readable, size: int) -> bytes:
        try:
            return stream.read(size)
        except OSError as error:
            if self.compression is None:
                reason = error.strerror or str(error)
                raise InputError("the capture cannot be read", file=self._file, found=reason) from None
            raise InputError(
                f"the {self.compression} file is broken off or damaged",
                file=self._file,
                found=str(error),
                expected=f"a whole {self.compression} file",
                hint="copy or export it again",
            ) from None

    @property
    def bytes(self) -> int:
        """How many bytes of the file itself went by."""
        return self._counted.bytes

    @property
    def digest(self) -> str:
        """SHA-256 of the bytes of the file itself that went by, hex."""
        return self._counted.digest.hexdigest()

    def drain(self) -> None:
        """Read on to the end, for the digest alone."""
        while self._guarded(self._counted, PIECE):
            pass

    def close(self) -> None:
        self._counted.close()


class _Rejoined(_Counted):
    """The first bytes, which were looked at, and then the file."""

    def __init__(self, first: bytes, counted: _Counted) -> None:
        self._first, self._counted = first, counted

    def read(self, size: int = -1) -> bytes:
        if self._first:
            given, self._first = self._first, b""
            return given
        return self._counted.read(size)

    def close(self) -> None:
        pass


def _refuse_archive(first: bytes, file: str) -> None:
    name = next((name for magic, name in ARCHIVES.items() if first.startswith(magic)), None)
    if name is not None:
        raise InputError(
            f"this is a {name} archive",
            file=file,
            expected=f"a plain export, or one compressed by {' or '.join(COMPRESSIONS.values())}",
            hint="unpack it first",
        )


def _maybe_wide_encoding(sample: bytes) -> str | None:
    """UTF-16 by its byte-order mark, or by a NUL in nearly every other byte; None for anything else."""
    if sample.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        return "utf-16"
    pairs = len(sample) // 2
    for place, encoding in ((1, "utf-16-le"), (0, "utf-16-be")):
        nulls = sample[place : 2 * pairs : 2].count(0)
        letters = sum(byte in b"\t\r\n" or 32 <= byte < 127 for byte in sample[1 - place : 2 * pairs : 2])
        if pairs > 2 and min(nulls, letters) >= _ENCODED_SHARE * pairs:
            return encoding
    return None


class Source:
    """Where a capture's bytes come from: the path of a file, or "-" for standard input.

    file: its name as the user gave it. path: the file, None for standard input. compression: "gzip", "zstd" or None.
    encoding: None for what is read as UTF-8. Raises InputError where the file cannot be opened.
    """

    def __init__(self, path: str | Path) -> None:
        self.file = str(path)
        self.path = None if self.file == STANDARD_INPUT else Path(path)
        self._size = 0
        self._reading: Reading | None = Reading("standard input", sys.stdin.buffer) if self.path is None else None
        reading = self._reading if self._reading is not None else self.open()
        self.compression, self.encoding = reading.compression, reading.encoding
        if self.path is None:
            self.file = "standard input"
        else:
            reading.close()

    def head(self, size: int) -> bytes:
        """The first bytes: at least `size` of them, or all where there are fewer."""
        if self._reading is not None:
            return self._reading.peek(size)
        reading = self.open()
        try:
            return reading.peek(size)
        finally:
            reading.close()

    def open(self) -> Reading:
        """A pass from the beginning. Raises InputError for a second one over standard input."""
        if self.path is not None:
            file = open_file(self.path)
            self._size = os.fstat(file.fileno()).st_size
            try:
                return Reading(self.file, file)
            except InputError:
                file.close()
                raise
        if self._reading is None:
            raise InputError("standard input can be read once only", file=self.file, hint="save it to a file first")
        reading, self._reading = self._reading, None
        return reading

    def part(self, reading: Reading) -> float:
        """How much of the whole went by, 0 to 1; 0 where that cannot be known."""
        return min(1.0, reading.bytes / self._size) if self._size else 0.0


def open_file(path: Path) -> BinaryIO:
    """Open a capture for reading. Raises InputError where that cannot be done."""
    file = str(path)
    try:
        mode = path.stat().st_mode
        if stat.S_ISDIR(mode):
            raise InputError("this is a folder, not a capture", file=file, hint="give the path of one exported file")
        if not stat.S_ISREG(mode):
            raise InputError("this is not a regular file", file=file, hint="give - as its name and pipe it in")
        return path.open("rb")
    except FileNotFoundError:
        raise InputError("there is no such capture", file=file, hint="check the path and the file's ending") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(
            "the capture cannot be read", file=file, found=reason, hint="check the path and who may read the file"
        ) from None
