"""Complementary pairs: when both lines of a pair are equal for too long, and for how long that is one fault.

Expected times are read off the drawn waveforms, one character a tick.
"""

from __future__ import annotations

from collections.abc import Iterable
from fractions import Fraction
from itertools import groupby
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from decode.anomalies import Anomalies
from decode.lines.pairs import PairCombiner, default_skew
from decode.spans import Edges, Span, cut

LEVELS = {"_": 0, "~": 1, "?": 2}


def drawn(waveform: str) -> Edges:
    levels = np.array([LEVELS[character] for character in waveform], np.int8)
    return Edges.from_samples(np.arange(len(waveform), dtype=np.int64), levels)


def pair(line: str, complement: str) -> Span:
    return Span(0, len(line), {"A": drawn(line), "A-": drawn(complement)})


def combined(spans: Iterable[Span], skew: int) -> list[Anomalies]:
    combiner = PairCombiner({"A": "A-"}, skew)
    for span in spans:
        combiner.feed(span)
    return combiner.finish()


def as_rows(found: list[Anomalies]) -> list[tuple[Any, ...]]:
    """(start, duration, level, line edges, complement edges, cause) of each stretch."""
    return [
        (int(time), *(int(anomalies.evidence[name][i]) for name in EVIDENCE), (anomalies.causes or [])[i])
        for anomalies in found
        for i, time in enumerate(anomalies.times)
    ]


EVIDENCE = ("duration_ticks", "level", "line_edges", "complement_edges")
LINE_STILL = "the line stands still while its complement moves"
COMPLEMENT_STILL = "the complement stands still while its line moves"


@pytest.mark.parametrize(
    ("line", "complement", "skew", "expected"),
    [
        # a healthy pair
        ("__~~~__~~~", "~~___~~___", 0, []),
        # a skew of two ticks is allowed by 2, not by 1
        ("__~~~~~~__", "~~~~____~~", 2, []),
        ("__~~~~~~__", "~~~~____~~", 1, [(2, 2, 1, 1, 1, None)]),
        # the complement is dead: equal at ticks 3-5 and 9-11, one stretch of nine ticks
        ("~~~___~~~___~~~", "_______________", 1, [(3, 9, 0, 4, 0, COMPLEMENT_STILL)]),
        # the line is dead and its complement moves
        ("_______________", "~~~___~~~___~~~", 1, [(3, 9, 0, 0, 4, LINE_STILL)]),
        # both at one level to the end of the capture, and from its beginning
        ("~~~______", "_________", 1, [(3, 6, 0, 1, 0, COMPLEMENT_STILL)]),
        ("~~~~~~~~~", "~~~~~____", 1, [(0, 5, 1, 0, 1, LINE_STILL)]),
        ("~~~~~~~~~", "~~~~~~~~~", 1, [(0, 9, 1, 0, 0, None)]),
        # one signal on both: the pair never changes properly, so one stretch
        ("____~~~~____~~~~", "_____~~~~____~~~", 1, [(0, 16, 0, 3, 3, None)]),
        # the complement answers two ticks late, every time: one stretch
        ("__~~~~____~~~~__", "~~~~____~~~~____", 1, [(2, 14, 1, 4, 3, None)]),
        # wrong at 3-5, healthy at 10 and 13 (7-8 is skew), wrong again from 16: two stretches
        (
            "___~~~~___~~~___~~~~",
            "~~~~~~___~___~~~~~~~",
            2,
            [(3, 3, 1, 1, 1, None), (16, 4, 1, 1, 0, COMPLEMENT_STILL)],
        ),
        # an unknown level accuses nobody
        ("??????????", "~~~~~_____", 1, []),
    ],
)
def test_stretches(line: str, complement: str, skew: int, expected: list[tuple[Any, ...]]) -> None:
    """Start, duration, level and edge counts as drawn."""
    assert as_rows(combined([pair(line, complement)], skew)) == expected


def test_a_break_ends_a_stretch() -> None:
    """Equal at ticks 0-3, then a capture that begins anew at 100, equal at 100-103: two stretches, none between."""
    first = Span(0, 4, {"A": Edges.none(1), "A-": Edges.none(1)})
    second = Span(100, 104, {"A": Edges.none(1), "A-": Edges.none(1)}, joined=False)
    assert [row[:3] for row in as_rows(combined([first, second], 1))] == [(0, 4, 1), (100, 4, 1)]


def test_the_complement_ends_here_and_other_lines_pass() -> None:
    """The line keeps its own edges, also where the pair is wrong."""
    span = pair("__~~__", "~~~~~~")
    combiner = PairCombiner({"A": "A-"}, 1)
    out = combiner.feed(Span(0, 6, {**span.lines, "Z": Edges.none(0)}, joined=False))
    assert (out.start, out.stop, out.joined, sorted(out.lines)) == (0, 6, False, ["A", "Z"])
    assert out.lines["A"].times.tolist() == [2, 4]


def test_default_skew() -> None:
    """50 ns at 1 ns a tick is 50 ticks; at 8 ns sampling two steps (16 ns) are less, at 40 ns (80 ns) more.

    At 8 ns a tick 50 ns is 6.25 ticks, rounded up.
    """
    nanosecond = Fraction(1, 10**9)
    assert [default_skew(nanosecond, grid) for grid in (1, 8, 40)] == [50, 50, 80]
    assert default_skew(8 * nanosecond, 1) == 7


waveforms = st.lists(st.tuples(st.integers(0, 1), st.integers(1, 6)), min_size=1, max_size=25).map(
    lambda runs: "".join("_~"[level] * length for level, length in runs)
)


def plain(line: str, complement: str, skew: int) -> list[tuple[Any, ...]]:
    """The oracle: tick by tick, as the docstring of the module says it."""
    equal = [a == b for a, b in zip(line, complement, strict=True)]
    moved = [[i for i in range(1, len(w)) if w[i] != w[i - 1]] for w in (line, complement)]
    runs, start = [], 0
    for alike, group in groupby(equal):
        stop = start + len(list(group))
        if alike and stop - start > skew:
            runs.append((start, stop))
        start = stop
    proper, was, since = [], None, 0
    for tick, (a, b) in enumerate(zip(line, complement, strict=True)):
        if a == b:
            continue
        if was not in (None, a) and tick - since - 1 <= skew:
            proper.append(tick)
        was, since = a, tick
    stretches: list[list[tuple[int, int]]] = []
    for run in runs:
        if stretches and not any(stretches[-1][-1][1] <= tick <= run[0] for tick in proper):
            stretches[-1].append(run)
        else:
            stretches.append([run])
    rows: list[tuple[Any, ...]] = []
    for stretch in stretches:
        begun, ended = stretch[0][0], stretch[-1][1]
        edges = [sum(begun <= tick <= ended for tick in ticks) for ticks in moved]
        cause = None
        if edges[0] == 0 and edges[1]:
            cause = LINE_STILL
        if edges[1] == 0 and edges[0]:
            cause = COMPLEMENT_STILL
        rows.append((begun, ended - begun, LEVELS[line[begun]], *edges, cause))
    return rows


@settings(deadline=None, max_examples=300)
@given(waveforms, waveforms, st.integers(0, 4), st.booleans())
def test_like_the_plain_version_wherever_cut(line: str, other: str, skew: int, mirrored: bool) -> None:
    """Whole, in spans of one tick, and by the plain loop: the same stretches."""
    size = min(len(line), len(other))
    line, other = line[:size], other[:size]
    if mirrored:  # mostly healthy: the complement of the line, differing where `other` is high for its first ticks
        other = "".join(
            "_~"[(a == "_") ^ (b == "~" and i % 7 < 3)] for i, (a, b) in enumerate(zip(line, other, strict=True))
        )
    span = pair(line, other)
    expected = plain(line, other, skew)
    assert as_rows(combined([span], skew)) == expected
    assert as_rows(combined(cut(span, range(size)), skew)) == expected
