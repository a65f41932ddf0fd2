"""The index and the turns. Expected values: known from how each capture is made; exact arithmetic."""

from __future__ import annotations

import numpy as np
import pytest
from shafts import board, decoded, evidence, findings, kinds, steady, toggled

from decode.spans import Edges, Span

TURN = 64
CLEAN = steady(8)
"""From place 10.5 over 8 turns of 64 counts, 240 ticks each: the index rises at places 64, 128, ... 512."""


def tick_of(place: float) -> int:
    """When `CLEAN` is there."""
    return round((place - 10.5) * 240)


def without(span: Span, number: int) -> Span:
    """The capture without one whole index pulse."""
    times = span.lines["Z"].times
    return toggled(span, "Z", [int(times[2 * number]), int(times[2 * number + 1])])


def with_pulse(span: Span, place: float, width: float = 1) -> Span:
    return toggled(span, "Z", [tick_of(place), tick_of(place + width)])


@pytest.mark.parametrize("turns", [8, -8])
@pytest.mark.parametrize("cycles", [16, None])
def test_clean_turns(turns, cycles):
    """Either way, with the counts per turn from the sheet or from the index itself."""
    result = decoded(steady(turns), cycles=cycles, index_width_counts=1, index_states="a=0 b=0")
    assert kinds(result) == []
    assert result.counts_per_turn == TURN
    assert result.turns.counts.tolist() == [TURN] * 7
    assert result.turns.direction.tolist() == [1 if turns > 0 else -1] * 7
    assert result.distributions["index_width_counts"].in_unit().tolist() == [1]
    assert result.distributions["index_position_deg"].in_unit().tolist() == [0]
    assert (result.index_state_seen, result.index_state_fits) == ("a=0 b=0", True)
    assert (result.index_pulses, result.index_partial) == (8, 0)


def test_the_index_is_the_same_both_ways():
    """Three turns there and back: rise one way and fall the other are one place, so middle and width agree."""
    result = decoded(board(10.5, [(220.5, 210 * 240), (10.5, 210 * 240)], index=(5, 3)), index_width_counts=3)
    assert kinds(result) == []
    assert result.index is not None
    assert np.allclose(result.index.width_counts, 3, atol=0.01)
    assert np.allclose(result.index.position_counts, 0, atol=0.01)
    assert result.index.rise_counts[:3].round(2).tolist() == result.index.fall_counts[:-4:-1].round(2).tolist()
    assert result.turns.direction.tolist() == [1, 1, -1, -1]
    assert result.turns.counts.tolist() == [TURN] * 4


@pytest.mark.parametrize("delay", [-4, 25, 30])
def test_late_index_edges(delay):
    """Index edges 40 ns before to 300 ns after A/B (in ticks of 10 ns; source: Broadcom HEDS-9040/9140, US Digital
    EM2), at a state of 400 ns, both ways: no finding."""
    result = decoded(board(10.5, [(410.5, 400 * 40), (10.5, 400 * 40)], delay=delay), index_width_counts=1)
    assert kinds(result) == []


def test_one_missing():
    """The pulse at 256 is gone: found when the count passes its middle, 256.5."""
    result = decoded(without(CLEAN, 3))
    assert kinds(result) == ["index_missing"]
    assert findings(result)[0][1] == pytest.approx(tick_of(256.5), abs=240)
    assert result.turns.counts.tolist() == [TURN] * 5


def test_two_missing_in_a_row():
    result = decoded(without(without(CLEAN, 4), 3))
    assert kinds(result) == ["index_missing", "index_missing"]


def test_missing_at_the_ends():
    """The first and the last one: their places are known from the others."""
    assert kinds(decoded(without(CLEAN, 0))) == ["index_missing"]
    times = [int(tick) for tick in CLEAN.lines["Z"].times[-2:]]
    result = decoded(toggled(CLEAN, "Z", times))
    assert kinds(result) == ["index_missing"]


@pytest.mark.parametrize("place", [100, 220.25, 290, 318])
def test_one_extra(place):
    result = decoded(with_pulse(CLEAN, place))
    assert findings(result) == [("index_extra", tick_of(place))]
    assert result.turns.counts.tolist() == [TURN] * 7


def test_an_extra_one_every_turn():
    """A second mark 20 counts after the index in each of the inner turns: each is one too many."""
    span = CLEAN
    for turn in range(1, 7):
        span = with_pulse(span, 64 * turn + 20)
    assert kinds(decoded(span)) == ["index_extra"] * 6


def test_two_extra_ones_side_by_side():
    """Noise that comes twice at nearly one angle within a turn is two extra pulses, not a moved index."""
    span = with_pulse(with_pulse(CLEAN, 210, 0.4), 211, 0.4)
    assert kinds(decoded(span)) == ["index_extra", "index_extra"]


@pytest.mark.parametrize("by", [2, -3, 10, 12, -20, 31])
def test_one_misplaced(by):
    """The pulse of 256 comes elsewhere, and the next at its place again."""
    result = decoded(with_pulse(without(CLEAN, 3), 256 + by))
    assert findings(result) == [("index_misplaced", tick_of(256 + by))]
    assert evidence(result, "index_misplaced")["off_counts"] == [pytest.approx(by, abs=0.02)]


def lost(span: Span, first: int, cycles: int = 1) -> Span:
    """The capture without some A pulses: four counts less each."""
    times = span.lines["A"].times
    return toggled(span, "A", [int(tick) for tick in times[first : first + 2 * cycles]])


def cycle_at(place: int) -> int:
    """Number of the A edge in `CLEAN` at or next after a place, a rising one (places 1 modulo 4)."""
    times, levels = CLEAN.lines["A"].times, CLEAN.lines["A"].levels
    return int(np.flatnonzero((times >= tick_of(place)) & (levels == 1))[0])


@pytest.mark.parametrize("place", [30, 100, 300, 480])
def test_lost_counts(place):
    """Four counts lost in one turn: from there on every pulse comes four counts early, and one turn is wrong. Before
    the first index there is no turn to be wrong."""
    result = decoded(lost(CLEAN, cycle_at(place)))
    assert kinds(result) == ([] if place < 64 else ["turn_count_wrong"])
    if place >= 64:
        found = evidence(result, "turn_count_wrong")
        assert (found["counts"], found["expected_counts"], found["difference"]) == ([60], [64], [-4])
        (start,), (stop,) = found["start_ticks"], found["stop_ticks"]
        assert start < tick_of(place) < stop
        assert result.distributions["index_position_deg"].in_unit().tolist() == [0]


def test_counts_lost_twice():
    result = decoded(lost(lost(CLEAN, cycle_at(400)), cycle_at(200)))
    assert kinds(result) == ["turn_count_wrong", "turn_count_wrong"]


@pytest.mark.parametrize("cycles", [8, 15, 20, 32])
def test_wrong_resolution(cycles):
    """Every turn has 64 counts, the sheet says 32, 60, 80 or 128: one finding at the first turn."""
    result = decoded(CLEAN, cycles=cycles)
    assert findings(result) == [("turn_count_wrong", tick_of(64))]
    found = evidence(result, "turn_count_wrong")
    assert (found["counts"], found["expected_counts"]) == ([64], [4 * cycles])
    assert result.counts_per_turn == 64


def test_one_count_off():
    """Resolution 16 cycles, but the index a count later each turn: 65 counts to a turn, always."""
    result = decoded(steady(8, turn=65), cycles=16)
    assert kinds(result) == ["turn_count_wrong"]


def test_widths():
    """One pulse of 3 counts among those of 1; one finding. All of 2 where the sheet says 1: one finding."""
    wide = toggled(without(CLEAN, 3), "Z", [tick_of(255), tick_of(258)])
    result = decoded(wide)
    assert findings(result) == [("index_width", tick_of(255))]
    assert evidence(result, "index_width")["width_counts"] == [3]
    one_side = toggled(without(CLEAN, 3), "Z", [tick_of(256), tick_of(259)])
    assert kinds(decoded(one_side)) == ["index_width"]
    assert decoded(one_side).turns.counts.tolist() == [TURN] * 7
    every = decoded(steady(8, index=(0, 2)), index_width_counts=1)
    assert kinds(every) == ["index_width"]
    assert evidence(every, "index_width")["pulses"] == [8]


def test_a_needle_at_the_index_is_a_narrow_index():
    """10 ticks where the pulse of 256 should be: the index came, but much too narrow."""
    result = decoded(toggled(without(CLEAN, 3), "Z", [tick_of(256.5), tick_of(256.5) + 10]), index_width_counts=1)
    assert findings(result) == [("index_width", tick_of(256.5))]


def test_noise_on_the_index():
    """10 ticks of 240 somewhere: a glitch; within the index pulse also; a third of a state: one too many."""
    assert findings(decoded(toggled(CLEAN, "Z", [40_000, 40_010]))) == [("glitch", 40_000)]
    inside = tick_of(256.4)
    assert findings(decoded(toggled(CLEAN, "Z", [inside, inside + 10]))) == [("glitch", inside)]
    assert kinds(decoded(toggled(CLEAN, "Z", [40_000, 40_080]))) == ["index_extra"]


def test_index_state():
    """Gated with A high alone the index is two states wide; the sheet may say so, or something else."""
    result = decoded(steady(8, index=(1, 2)), index_states="a=1")
    assert (result.index_state_seen, result.index_state_expected, result.index_state_fits) == ("a=1", "a=1", True)
    other = decoded(CLEAN, index_states="a=1 b=1")
    assert (other.index_state_seen, other.index_state_expected, other.index_state_fits) == ("a=0 b=0", "a=1 b=1", False)
    assert kinds(other) == []


def test_pulses_at_the_ends_are_counted_and_not_blamed():
    """Starts and ends within the index: two partial pulses beside the whole ones."""
    result = decoded(steady(4, place=64.5), index_width_counts=1)
    assert kinds(result) == []
    assert (result.index_pulses, result.index_partial) == (5, 2)


def test_turning_back_inside_the_index():
    """In and out on the same side: no passage, no turn, nothing wrong."""
    result = decoded(board(10.5, [(65.5, 55 * 240), (10.5, 55 * 240), (200.5, 190 * 240)], index=(64, 3)))
    assert kinds(result) == []
    assert result.index is not None
    assert result.index.turned.tolist() == [True, False, False, False][: result.index.turned.size]


def test_an_illegal_step_loses_no_turn():
    """One A edge comes at the tick of the next B edge: a plain counter loses two counts there, the turn is known to
    be whole."""
    edge, other = int(CLEAN.lines["A"].times[150]), None
    times = CLEAN.lines["A"].times.copy()
    other = int(CLEAN.lines["B"].times[CLEAN.lines["B"].times > edge][0])
    times[150] = other
    lines = {**CLEAN.lines, "A": Edges(CLEAN.lines["A"].initial, times, CLEAN.lines["A"].levels)}
    result = decoded(Span(CLEAN.start, CLEAN.stop, lines))
    assert findings(result) == [("illegal_transition", other)]
    assert evidence(result, "illegal_transition")["counts_lost"] == [2]
    assert result.net_counts == 512 - 2
    assert result.turns.counts.tolist() == [TURN] * 7


def test_a_break_in_the_capture_blames_nothing():
    """Half a turn is not in the capture: the places before and after are not held against each other."""
    middle = CLEAN.lines
    at, again = tick_of(300.5), tick_of(330.5)
    first = Span(0, at, {name: edges.between(0, at) for name, edges in middle.items()})
    second = Span(again, CLEAN.stop, {name: edges.between(again, CLEAN.stop) for name, edges in middle.items()}, False)
    result = decoded([first, second])
    assert kinds(result) == []
    assert result.turns.counts.tolist() == [TURN] * 5
