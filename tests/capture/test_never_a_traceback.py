"""Whatever the bytes: spans or an InputError, never another exception; and no span breaks the contract of spans."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from decode.capture.source import open_capture
from decode.errors import InputError
from decode.sheet import CaptureKeys

KEYS = (
    CaptureKeys(),
    CaptureKeys(sample_rate_hz=1e6),
    CaptureKeys(time_unit="ns"),
    CaptureKeys(threshold_v=(0.8, 2.0), sample_rate_hz=33.3e6),
)

quick = settings(deadline=None, max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture])


def read_all(path: Path, content: bytes, keys: CaptureKeys, rows_per_span: int) -> None:
    """Reads everything there is, and checks every span; an InputError is a fine end and must be able to speak."""
    path.write_bytes(content)
    try:
        capture = open_capture(path, keys, rows_per_span=rows_per_span)
        stop = None
        for span in capture.spans(capture.columns):
            assert span.start < span.stop
            assert stop in (None, span.start) or not span.joined
            stop = span.stop
            for edges in span.lines.values():
                assert edges.times.size == edges.levels.size
                assert np.all((edges.times >= span.start) & (edges.times < span.stop))
                assert np.all(np.diff(edges.times) >= 0)
                assert np.all(np.diff(edges.levels, prepend=np.int8(edges.initial)) != 0)
        assert capture.rows > 0
        assert capture.grid > 0
        assert len(capture.digest) == 64
        assert all(len(found) for found in capture.anomalies)
        assert all(isinstance(note, str) for note in capture.notes)
    except InputError as error:
        assert str(path) in str(error)
        assert error.problem


@quick
@given(st.binary(max_size=300), st.sampled_from(KEYS), st.integers(1, 5))
def test_arbitrary_bytes(tmp_path: Path, content: bytes, keys: CaptureKeys, rows_per_span: int) -> None:
    """Any bytes at all."""
    read_all(tmp_path / "x.csv", content, keys, rows_per_span)


@quick
@given(
    st.text(alphabet='01,;\t \n\r."#%/xXzu-+eE_[]()nsµtimeABAÿ\x1a\x0b\x0c\x85\u2028', max_size=200),
    st.sampled_from(["utf-8", "utf-8-sig", "utf-16", "latin-1"]),
    st.sampled_from(KEYS),
    st.integers(1, 5),
)
def test_text_of_the_right_letters(tmp_path: Path, text: str, encoding: str, keys: CaptureKeys, rows: int) -> None:
    """Text that is nearly a capture."""
    read_all(tmp_path / "x.csv", text.encode(encoding, "replace"), keys, rows)


@pytest.mark.parametrize(
    "content",
    [
        "Time [ns],A\n" + "".join(f"{i},{i & 1}\n" for i in range(400)) + "lost\n" * 9 + "500,1\n",
        "Time [ns],A,B\n1\n2,0,1\n3,4\n",
        "0;1;1\n2;1\n3\n",
    ],
)
@pytest.mark.parametrize("rows_per_span", [1, 3, 200_000])
def test_what_the_fuzzer_found(tmp_path: Path, content: str, rows_per_span: int) -> None:
    """A block in which no line is a row; rows of which the only one of their width is the first. Inputs kept from
    tests/fuzz, made small."""
    for keys in KEYS:
        read_all(tmp_path / "x.csv", content.encode(), keys, rows_per_span)


CLEAN = [
    b"# made by hand\r\nTime [ns],A,B\r\n" + b"".join(b"%d,%d,%d\r\n" % (10 * i, i & 1, i >> 1 & 1) for i in range(30)),
    b"".join(b"%d.5e-3\t%d\tx\t\n" % (i, i & 1) for i in range(30)),
    b"A B Z\n" + b"0 1 0\n1 1 0\n\n1 0 1\n" * 8,
    "Zeit (µs);U1;U2\n".encode("latin-1") + b"".join(b"%d,25;%d,1;0,0\n" % (i, i % 4) for i in range(30)),
]


@quick
@given(
    st.sampled_from(CLEAN),
    st.lists(st.tuples(st.integers(0, 400), st.integers(0, 3), st.binary(max_size=4)), min_size=1, max_size=4),
    st.sampled_from(KEYS),
    st.integers(1, 40),
)
def test_mutated_captures(
    tmp_path: Path, content: bytes, changes: list[tuple[int, int, bytes]], keys: CaptureKeys, rows: int
) -> None:
    """A clean capture with bytes inserted, overwritten or removed anywhere."""
    for place, removed, inserted in changes:
        content = content[:place] + inserted + content[place + removed :]
    read_all(tmp_path / "x.csv", content, keys, rows)


@pytest.mark.parametrize("content", CLEAN, ids=["ns", "scientific", "spaces", "voltages"])
def test_the_clean_ones_are_clean(tmp_path: Path, content: bytes) -> None:
    """The captures that get mutated can be read as they are: else the test above would try nothing."""
    path = tmp_path / "x.csv"
    path.write_bytes(content)
    threshold = (0.8, 2.0) if b"U1" in content else None
    rate = 1e6 if b"A B Z" in content else None
    capture = open_capture(path, CaptureKeys(sample_rate_hz=rate, threshold_v=threshold))
    assert sum(edges.times.size for span in capture.spans(capture.columns) for edges in span.lines.values()) > 10
