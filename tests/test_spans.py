"""Spans: levels between edges, half-open windows, and cutting that loses nothing."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from decode.spans import HIGH, LOW, UNKNOWN, Edges, Span, cut

TICKS = st.lists(st.integers(0, 60), max_size=20).map(sorted)


def same(one: Edges, other: Edges) -> bool:
    return (one.initial, one.times.tolist(), one.levels.tolist()) == (
        other.initial,
        other.times.tolist(),
        other.levels.tolist(),
    )


@st.composite
def spans(draw: st.DrawFn) -> Span:
    """Two lines within 0 to 61 ticks; several edges may share a tick."""
    lines = {name: Edges.from_toggles(draw(st.integers(0, 1)), draw(TICKS)) for name in ("one", "other")}
    return Span(0, 61, lines, draw(st.booleans()))


def test_toggles_alternate_from_the_level_at_the_start() -> None:
    """
    tick   0 1 2 3 4 5 6 7 8
    line   _____‾‾‾‾‾___‾‾‾‾
    """
    line = Edges.from_toggles(LOW, [2, 5, 7])
    assert (line.initial, line.levels.tolist(), line.final) == (LOW, [1, 0, 1], HIGH)
    assert Edges.from_toggles(HIGH, [2]).levels.tolist() == [0]


def test_a_quiet_line_keeps_its_level() -> None:
    assert Edges.none(HIGH).final == HIGH
    assert Edges.none(UNKNOWN).level_at(np.array([0, 9])).tolist() == [UNKNOWN, UNKNOWN]
    assert Edges.from_samples(np.empty(0, np.int64), np.empty(0, np.int8)).initial == UNKNOWN


@pytest.mark.parametrize(
    ("before", "initial", "times"),
    [(None, 0, [20, 40]), (0, 0, [20, 40]), (1, 1, [10, 20, 40])],
)
def test_samples_become_edges_where_the_level_changes(before: int | None, initial: int, times: list[int]) -> None:
    """Samples 0 1 1 0 at 10, 20, 30, 40; the level ahead of them is the first one's own unless it is told."""
    line = Edges.from_samples(np.array([10, 20, 30, 40]), np.array([0, 1, 1, 0], np.int8), before)
    assert (line.initial, line.times.tolist()) == (initial, times)


@pytest.mark.parametrize(("tick", "level"), [(1, 0), (2, 1), (4, 1), (5, 0), (6, 0), (7, 1), (99, 1)])
def test_an_edge_at_the_very_tick_has_happened(tick: int, level: int) -> None:
    """Edges at 2, 5 and 7: one tick either side of each."""
    assert Edges.from_toggles(LOW, [2, 5, 7]).level_at(np.array([tick])).tolist() == [level]


def test_level_before_each_edge() -> None:
    line = Edges.from_toggles(HIGH, [2, 5])
    assert line.levels_before(np.array([0, 1, 2])).tolist() == [1, 0, 1]


def test_of_two_edges_at_one_tick_the_last_counts() -> None:
    """A pulse shorter than the grid: up and down at tick 4."""
    assert Edges.from_toggles(LOW, [4, 4]).level_at(np.array([3, 4, 5])).tolist() == [0, 0, 0]


def test_a_window_takes_its_first_tick_and_leaves_its_last() -> None:
    part = Edges.from_toggles(LOW, [2, 5, 7]).between(5, 7)
    assert (part.initial, part.times.tolist(), part.levels.tolist()) == (1, [5], [0])


def test_cuts_outside_a_span_or_on_its_ends_do_nothing() -> None:
    whole = Span(10, 20, {"one": Edges.from_toggles(LOW, [12])}, joined=False)
    (only,) = cut(whole, [0, 10, 20, 30])
    assert (only.start, only.stop, only.joined) == (10, 20, False)


@given(spans(), st.lists(st.integers(-5, 70)))
def test_a_span_cut_and_put_together_is_the_same(whole: Span, at: list[int]) -> None:
    """The parts are neighbours, each level carries over, and only the first keeps the break before it."""
    parts = list(cut(whole, at))
    assert [part.start for part in parts[1:]] == [part.stop for part in parts[:-1]]
    assert (parts[0].start, parts[-1].stop) == (whole.start, whole.stop)
    assert [part.joined for part in parts] == [whole.joined] + [True] * (len(parts) - 1)
    for name, line in whole.lines.items():
        together = parts[0].lines[name]
        for part in parts[1:]:
            assert part.lines[name].initial == together.final
            together = together.then(part.lines[name])
        assert same(together, line)


@given(TICKS, st.integers(0, 1), st.integers(-1, 62))
def test_level_at_a_tick_is_the_plain_count_of_edges(times: list[int], initial: int, tick: int) -> None:
    """Oracle: every edge up to the tick, that one included, turns the level over."""
    expected = (initial + sum(time <= tick for time in times)) % 2
    assert Edges.from_toggles(initial, times).level_at(np.array([tick])).tolist() == [expected]
