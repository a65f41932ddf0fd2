"""Bytes: compressed, in UTF-16, from a pipe; with the digest of what is in the file."""

from __future__ import annotations

import gzip
import hashlib
import io
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from exports import members, zstandard
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from decode.capture.source import open_capture
from decode.capture.stream import Source
from decode.errors import InputError
from decode.sheet import CaptureKeys

Opener = Callable[[bytes], Source]
TEXT = "Time [ns],Ä\n" + "".join(f"{i},{i & 1}\n" for i in range(5000))
PACKED = {
    "plain": (TEXT.encode(), None, None),
    "gzip": (gzip.compress(TEXT.encode()), "gzip", None),
    "members": (members(TEXT.encode()), "gzip", None),
    "zstd": (zstandard(TEXT.encode()), "zstd", None),
    "zstd frames": (zstandard(TEXT[:9000].encode()) + zstandard(TEXT[9000:].encode()), "zstd", None),
    "UTF-16": (TEXT.encode("utf-16"), None, "utf-16"),
    "UTF-16 big-endian": (b"\xfe\xff" + TEXT.encode("utf-16-be"), None, "utf-16"),
    "UTF-16 without a mark": (TEXT.encode("utf-16-le"), None, "utf-16-le"),
    "gzip of UTF-16": (gzip.compress(TEXT.encode("utf-16")), "gzip", "utf-16"),
}


@pytest.fixture(params=["file", "pipe"])
def source_of(request: pytest.FixtureRequest, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Opener:
    """A source from a file, or from standard input that gives seven bytes at a time as a slow pipe may."""

    class Pipe(io.RawIOBase):
        def __init__(self, content: bytes) -> None:
            self._rest = io.BytesIO(content)

        def read(self, size: int = -1) -> bytes:
            return self._rest.read(min(size, 7) if size > 0 else size)

    def source(content: bytes) -> Source:
        if request.param == "pipe":
            monkeypatch.setattr(sys, "stdin", type("Stdin", (), {"buffer": Pipe(content)})())
            return Source("-")
        (tmp_path / "x").write_bytes(content)
        return Source(tmp_path / "x")

    return source


@pytest.mark.parametrize("name", PACKED)
def test_the_text_comes_out(name: str, source_of: Opener) -> None:
    """All of it, whatever was looked at before; the digest is that of the file's bytes."""
    content, compression, encoding = PACKED[name]
    source = source_of(content)
    assert (source.compression, source.encoding) == (compression, encoding)
    assert source.head(100)[:100].decode("utf-8-sig").startswith("Time [ns],Ä")
    reading = source.open()
    text = b"".join(iter(lambda: reading.read(1000), b""))
    assert text.decode("utf-8-sig") == TEXT
    assert reading.digest == hashlib.sha256(content).hexdigest()
    reading.close()


@pytest.mark.parametrize(
    ("content", "problem"),
    [
        (gzip.compress(TEXT.encode())[:-20], "the gzip file is broken off or damaged"),
        (gzip.compress(TEXT.encode()) + b"rubbish", "the gzip file is broken off or damaged"),
        (zstandard(TEXT.encode())[:-20], "the zstd file is broken off or damaged"),
        (b"BZh91AY&SY", "this is a bzip2 archive"),
        (b"\xfd7zXZ\x00\x00\x04", "this is a xz archive"),
    ],
)
def test_broken(content: bytes, problem: str, source_of: Opener) -> None:
    reading = None
    with pytest.raises(InputError) as error:
        reading = source_of(content).open()
        while reading.read(1000):
            pass
    if reading is not None:
        reading.close()
    assert error.value.problem == problem


def test_standard_input_once(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "stdin", type("Stdin", (), {"buffer": io.BytesIO(TEXT.encode())})())
    capture = open_capture("-", CaptureKeys())
    assert capture.file == "standard input"
    assert sum(span.lines["Ä"].times.size for span in capture.spans(["Ä"])) == 4999
    assert (capture.rows, capture.digest) == (5000, hashlib.sha256(TEXT.encode()).hexdigest())
    with pytest.raises(InputError, match="standard input can be read once only"):
        list(capture.spans(["Ä"]))


@settings(deadline=None, max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.binary(max_size=200), st.sampled_from([b"", b"\x1f\x8b", b"\x28\xb5\x2f\xfd", b"\xff\xfe", b"\xfe\xff"]))
def test_any_bytes(tmp_path: Path, content: bytes, magic: bytes) -> None:
    """Bytes behind the marks of what is read: they come out, or there is a message."""
    path = tmp_path / "x"
    path.write_bytes(magic + content)
    try:
        reading = Source(path).open()
    except InputError:
        return
    try:
        while reading.read(16):
            pass
    except InputError as error:
        assert error.problem
    finally:
        reading.close()
