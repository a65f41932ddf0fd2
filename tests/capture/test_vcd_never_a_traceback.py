"""Whatever the bytes behind a dump's first keyword: spans or an InputError, never another exception."""

from __future__ import annotations

import gzip
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
    CaptureKeys(sample_rate_hz=33.3e6),
    CaptureKeys(time_unit="ns"),
    CaptureKeys(window_s=(5e-9, 40e-9)),
    CaptureKeys(window_s=("none", 12e-9)),
)

quick = settings(deadline=None, max_examples=200, suppress_health_check=[HealthCheck.function_scoped_fixture])


def read_all(path: Path, content: bytes, keys: CaptureKeys, rows_per_span: int) -> None:
    """Reads everything there is, and checks every span; an InputError is a fine end and must be able to speak."""
    path.write_bytes(content)
    try:
        capture = open_capture(path, keys, rows_per_span=rows_per_span)
        stop = None
        for span in capture.spans([capture.column(column) for column in capture.columns]):
            assert span.start < span.stop
            assert stop in (None, span.start) or not span.joined
            stop = span.stop
            for edges in span.lines.values():
                assert edges.times.size == edges.levels.size
                assert np.all((edges.times >= span.start) & (edges.times < span.stop))
                assert np.all(np.diff(edges.times) >= 0)
                assert np.all(np.diff(edges.levels, prepend=np.int8(edges.initial)) != 0)
        assert stop is not None
        assert capture.grid > 0
        assert capture.first <= capture.last
        assert len(capture.digest) == 64
        assert all(len(found) for found in capture.anomalies)
        assert all(isinstance(note, str) for note in capture.notes)
    except InputError as error:
        assert str(path) in str(error)
        assert error.problem


CLEAN = [
    b'$date today $end $timescale 1 ns $end\n$scope module tb $end\n$var wire 1 ! a $end\n$var wire 1 " b $end\n'
    b'$upscope $end\n$enddefinitions $end\n#0\n$dumpvars\n0!\n1"\n$end\n'
    + b"".join(b"#%d\n%d!\n" % (5 * i, i & 1) for i in range(1, 20)),
    b"$timescale 10ps $end $var reg 4 # v [3:0] $end $var real 64 r1 r $end $enddefinitions $end "
    + b"".join(b"#%d b%s # r%d.5 r1 $comment b1 $end " % (7 * i, bin(i & 15)[2:].encode(), i) for i in range(20)),
    b"$timescale 1fs $end\n$var wire 1 bbbbbbbbb a[3] $end\n$enddefinitions $end\n"
    + b"".join(b"#%d\nb%d bbbbbbbbb\n$dumpoff xbbbbbbbbb $end\n" % (10**7 * i, i & 1) for i in range(20)),
]


@quick
@given(
    st.sampled_from(CLEAN),
    st.lists(st.tuples(st.integers(0, 500), st.integers(0, 3), st.binary(max_size=4)), min_size=1, max_size=4),
    st.sampled_from(KEYS),
    st.integers(1, 40),
)
def test_mutated_dumps(
    tmp_path: Path, content: bytes, changes: list[tuple[int, int, bytes]], keys: CaptureKeys, rows: int
) -> None:
    """A clean dump with bytes inserted, overwritten or removed anywhere."""
    for place, removed, inserted in changes:
        content = content[:place] + inserted + content[place + removed :]
    read_all(tmp_path / "x.vcd", content, keys, rows)


WORDS = [
    "$comment", "$var", "$scope", "$upscope", "$timescale", "$enddefinitions", "$end", "$dumpvars", "$dumpoff",
    "$date", "wire", "reg", "real", "port", "module", "1", "0", "4", "99999999", "-1", "[3:0]", "[0]", "[9:-9]", "1ns",
    "10", "fs", "a", "b", "!", "#", "#5", "#3", "#99999999999999999999", "0!", "1a", "x!", "b1", "b", "bxz", "r1.5",
    "s", "!!", "\x00", "é", "1\x80", "$", "$$",
]  # fmt: skip


@quick
@given(
    st.lists(st.tuples(st.sampled_from(WORDS), st.sampled_from([" ", "\n", "", "\r\n"])), max_size=60),
    st.booleans(),
    st.sampled_from(KEYS),
    st.integers(1, 5),
)
def test_words_in_any_order(
    tmp_path: Path, words: list[tuple[str, str]], is_defined: bool, keys: CaptureKeys, rows: int
) -> None:
    """Text that is nearly a dump, or nearly its definitions."""
    head = "$timescale 1 ns $end $var wire 1 ! a $end $var reg 4 a v [3:0] $end $enddefinitions $end "
    text = (head if is_defined else "$date $end ") + "".join(word + space for word, space in words)
    read_all(tmp_path / "x.vcd", text.encode("latin-1"), keys, rows)


@pytest.mark.parametrize("content", CLEAN, ids=["scalars", "vectors", "long codes"])
def test_the_clean_ones_are_clean(tmp_path: Path, content: bytes) -> None:
    """The dumps that get mutated can be read as they are, compressed or not: else the tests above would try nothing."""
    for name, written in (("x.vcd", content), ("x.vcd.gz", gzip.compress(content))):
        path = tmp_path / name
        path.write_bytes(written)
        capture = open_capture(path, CaptureKeys())
        assert sum(edges.times.size for span in capture.spans(capture.columns) for edges in span.lines.values()) > 10
