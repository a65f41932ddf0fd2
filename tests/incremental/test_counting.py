"""Four counts to a cycle. Expected values: the decoding table worked out by hand in each docstring, or the plain
loop."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from shafts import TICK_S, decoded, evidence, kinds, steady, toggled

from decode.incremental.decoder import QuadratureDecoder
from decode.incremental.quadrature import Counts
from decode.incremental.reference import count_edges, count_states
from decode.sheet import Incremental
from decode.spans import Edges, Span, cut

KNOB = Path("../shared/captures/quadrature_knob.vcd")


def of_states(states: list[int], every: int = 100) -> Span:
    """A capture that shows one state 2 A + B every so many ticks."""
    times = np.arange(len(states), dtype=np.int64) * every
    columns = [np.array([state >> bit & 1 for state in states], np.int8) for bit in (1, 0)]
    lines = {name: Edges.from_samples(times, column) for name, column in zip("AB", columns, strict=True)}
    return Span(0, len(states) * every, lines)


def counted(span: Span) -> Counts:
    return QuadratureDecoder("A", "B", None, None, TICK_S).feed(span)


@pytest.mark.parametrize(
    ("states", "net", "illegal"),
    [
        ([0, 2, 3, 1, 0], 4, 0),
        ([0, 1, 3, 2, 0], -4, 0),
        ([0, 3], 0, 1),
        ([2, 1], 0, 1),
        ([0, 2, 0, 2, 0], 0, 0),
        ([0, 2, 3, 1] * 5 + [0], 20, 0),
        (([0, 2, 3, 1] * 20)[::2], 0, 39),
        (([0, 2, 3, 1] * 30)[::3], -39, 0),
    ],
)
def test_states(states, net, illegal):
    """Exact arithmetic on the decoding table: up is 00 10 11 01; both lines at once have no direction. Seen only
    every second state all steps are illegal; every third state looks like one step back: 120 states, 40 looks, 39
    steps down."""
    assert count_states(states) == (net, illegal)
    counts = counted(of_states(states))
    assert int(counts.counts[-1]) == net
    assert int(counts.illegal.sum()) == illegal


edge_streams = st.lists(st.tuples(st.integers(0, 300), st.sampled_from("ab")), max_size=60, unique=True)


@given(edge_streams, st.integers(0, 3), st.lists(st.integers(1, 300), max_size=8))
def test_against_the_plain_loop(edges, state, cuts):
    """The engine and the loop count every random edge stream alike, wherever it is cut."""
    lines = {
        line: Edges.from_toggles(state >> bit & 1, sorted(tick for tick, name in edges if name == line.lower()))
        for line, bit in (("A", 1), ("B", 0))
    }
    decoder = QuadratureDecoder("A", "B", None, None, TICK_S)
    rows: list[tuple[int, int, bool]] = []
    for span in cut(Span(0, 301, lines), cuts):
        part = decoder.feed(span)
        rows += zip(part.times.tolist(), part.counts.tolist(), part.illegal.tolist(), strict=True)
    expected, net = count_edges(state, edges)
    result = decoder.finish()
    assert rows == expected
    assert (result.net_counts, result.edges, result.illegal) == (net, len(edges), sum(row[2] for row in rows))


def swapped(span: Span, a: str, b: str, flip_a: int, flip_b: int) -> Span:
    def line(name: str, flip: int) -> Edges:
        old = span.lines[name]
        return Edges(old.initial ^ flip, old.times, old.levels ^ np.int8(flip))

    return Span(span.start, span.stop, {"A": line(a, flip_a), "B": line(b, flip_b), "Z": span.lines["Z"]})


def test_wiring():
    """Exact arithmetic: swapping A and B or inverting one of them runs the states backwards, inverting both
    turns the cycle by half. With the index gated with A = B = 1, the state at the index tells which (state 11 is
    place 2)."""
    span = steady(3.2, index=(2, 1))
    assert [decoded(swapped(span, *wires)).net_counts for wires in (("A", "B", 0, 0), ("B", "A", 0, 0))] == [205, -205]
    inverted = decoded(swapped(span, "A", "B", 1, 0))
    both = decoded(swapped(span, "A", "B", 1, 1))
    assert (inverted.net_counts, both.net_counts) == (-205, 205)
    states = [
        decoded(swapped(span, *wires)).index_state_seen
        for wires in (("A", "B", 0, 0), ("B", "A", 0, 0), ("A", "B", 1, 0), ("A", "B", 1, 1))
    ]
    assert states == ["a=1 b=1", "a=1 b=1", "a=0 b=1", "a=0 b=0"]


def test_three_totals_with_a_pulse_on_a():
    """A pulse up on A while B is low: up and down again for four counts, one more rising edge for a counter of A alone.
    Shaft from place 10.5 over 192 counts: 192 edges; A rises at places 4 n + 1 from 13 to 201: 48 times."""
    span = steady(3)
    inside = int(span.lines["B"].times[0]) + 20  # place 12, state 00: both low
    result = decoded(toggled(span, "A", [inside, inside + 10]))
    assert (result.net_counts, result.x1_naive, result.x4_without_short_pulses) == (192, 49, 192)
    assert result.short_pulse_ticks == 60
    assert kinds(result) == ["glitch"]


def test_lost_pulse_of_a():
    """Without one pulse of A, B rises and falls with A low: -1 +1 instead of four counts up, and nothing illegal."""
    span = steady(5)
    high = span.lines["A"]
    rise = int(high.times[41])
    assert high.levels[41] == 1
    result = decoded(toggled(span, "A", [rise, int(high.times[42])]))
    assert (result.net_counts, result.illegal) == (320 - 4, 0)
    assert kinds(result) == ["turn_count_wrong"]
    assert evidence(result, "turn_count_wrong")["counts"] == [60]


def test_both_lines_together():
    """Both lines out and back at the same ticks: two steps without direction."""
    span = steady(3)
    time = int(span.lines["A"].times[30]) + 100
    result = decoded(toggled(toggled(span, "A", [time, time + 30]), "B", [time, time + 30]))
    assert (result.net_counts, result.illegal) == (192, 2)


def test_unknown_levels_neither_count_nor_are_illegal():
    """A unknown from tick 0 to 100: neither step to or from it says anything; then 11 to 01 and 01 to 00 are two up."""
    a = Edges(2, np.array([100, 200]), np.array([1, 0], np.int8))
    b = Edges(1, np.array([300]), np.array([0], np.int8))
    counts = counted(Span(0, 400, {"A": a, "B": b}))
    assert counts.counts.tolist() == [0, 1, 2]
    assert not counts.illegal.any()


def test_places_are_the_same_both_ways():
    """Up over one edge and down over it again: the edge lies at place 1 above count 0 both times."""
    counts = counted(of_states([0, 2, 0]))
    assert counts.places.tolist() == [1, 1]


def test_a_break_starts_afresh():
    """After a break the levels are what they are: 00 to 11 across it is no step, and the count goes on from where it
    was."""
    decoder = QuadratureDecoder("A", "B", None, None, TICK_S)
    first = decoder.feed(of_states([0, 2]))
    after = Span(1000, 1200, {"A": Edges.none(0), "B": Edges.from_toggles(1, [1100])}, joined=False)
    second = decoder.feed(after)
    assert (first.counts.tolist(), second.start, second.counts.tolist()) == ([1], 1, [2])
    assert not second.illegal.any()


def read_vcd(path: Path, names: set[str]) -> tuple[int, dict[str, Edges]]:
    """(end, edges by name) of scalar lines in a value change dump."""
    codes: dict[str, str] = {}
    changes: dict[str, list[tuple[int, int]]] = {name: [] for name in names}
    now = 0
    for row in path.read_text().splitlines():
        words = row.split()
        if words[:1] == ["$var"] and words[2] == "1" and words[4] in names:
            codes[words[3]] = words[4]
        elif row.startswith("#"):
            now = int(row[1:])
        elif len(words) == 1 and row[1:] in codes and row[0] in "01x":
            changes[codes[row[1:]]].append((now, "01x".index(row[0])))
    lines = {}
    for name, rows in changes.items():
        times, levels = np.array(rows, np.int64).T
        lines[name] = Edges.from_samples(times, levels.astype(np.int8))
    return now + 1, lines


def test_knob():
    """A simulated knob, not of ours (source: public repository rgb_mixer, commit 8dddee13): 510 steps up, then 509
    down, turning at 25.59 ms, nothing illegal."""
    if not KNOB.exists():
        pytest.skip("the shared capture quadrature_knob.vcd is not beside the checkout")
    stop, lines = read_vcd(KNOB, {"a", "b"})
    decoder = QuadratureDecoder("a", "b", None, None, 1e-9)
    counts = decoder.feed(Span(0, stop, lines))
    top = int(np.argmax(counts.counts))
    assert (int(counts.counts[top]), int(counts.counts[-1]), int(counts.illegal.sum())) == (510, 1, 0)
    assert counts.times[top] <= 25_590_000 <= counts.times[top + 1]
    assert decoder.finish().anomalies == []


def test_incremental_without_anything():
    """No edges at all: empty tables, and nothing to blame."""
    nothing = Span(0, 1000, {"A": Edges.none(0), "B": Edges.none(1), "Z": Edges.none(0)})
    result = decoded(nothing)
    assert (result.edges, result.net_counts, result.index_pulses, result.anomalies) == (0, 0, 0, [])
    assert result.short_pulse_ticks is None
    assert Incremental().counts_per_turn is None
