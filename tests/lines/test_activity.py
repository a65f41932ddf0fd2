"""Activity: edges, levels over time and the partners' edges, counted by hand and wherever the capture is cut."""

from __future__ import annotations

from dataclasses import asdict

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from decode.lines.activity import Activity
from decode.spans import Edges, Span, cut


def test_counted_by_hand() -> None:
    """A  _~~__~~~~~   edges at 1, 3, 5: high 2 + 5, low 1 + 2 ticks; three edges of B after the last of A
    B  ~~~_~~_~~_   edges at 3, 4, 6, 7, 9: high 3 + 2 + 2, low 1 + 1 + 1; none of A after its last
    C  unknown, then never anything: no time at either level, and all five edges of its partner B count"""
    span = Span(
        0,
        10,
        {"A": Edges.from_toggles(0, [1, 3, 5]), "B": Edges.from_toggles(1, [3, 4, 6, 7, 9]), "C": Edges.none(2)},
    )
    activity = Activity("ABC", [("A", "B"), ("C", "B")])
    activity.feed(span)
    a, b, c = (activity.result()[name] for name in "ABC")
    assert (a.level_at_start, a.edges, a.first, a.last, a.high_ticks, a.low_ticks) == (0, 3, 1, 5, 7, 3)
    assert (b.level_at_start, b.edges, b.first, b.last, b.high_ticks, b.low_ticks) == (1, 5, 3, 9, 7, 3)
    assert (c.level_at_start, c.edges, c.first, c.last, c.high_ticks, c.low_ticks) == (2, 0, None, None, 0, 0)
    assert (a.partner_edges, b.partner_edges, c.partner_edges) == ({"B": 3}, {"A": 0, "C": 0}, {"B": 5})


def test_nothing_fed() -> None:
    """Before the first span nothing is known of any line."""
    assert Activity("A").result() == {}


@settings(deadline=None, max_examples=100)
@given(st.lists(st.integers(0, 2), min_size=1, max_size=40), st.lists(st.integers(0, 2), min_size=40, max_size=40))
def test_wherever_cut(one: list[int], other: list[int]) -> None:
    """The same whole and in spans of one tick; the times at each level count the samples of that level."""
    times = np.arange(len(one), dtype=np.int64)
    lines = {
        "A": Edges.from_samples(times, np.array(one, np.int8)),
        "B": Edges.from_samples(times, np.array(other[: len(one)], np.int8)),
    }
    span = Span(0, len(one), lines)
    whole, pieces = Activity("AB", [("A", "B")]), Activity("AB", [("A", "B")])
    whole.feed(span)
    for piece in cut(span, range(len(one))):
        pieces.feed(piece)
    results = [{name: asdict(line) for name, line in activity.result().items()} for activity in (whole, pieces)]
    assert results[0] == results[1]
    assert (results[0]["A"]["high_ticks"], results[0]["A"]["low_ticks"]) == (one.count(1), one.count(0))
