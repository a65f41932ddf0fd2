"""Pulses too short to be real on A and B. Every capture is made here, so where the pulse is, is known exactly."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from shafts import board, decoded, evidence, findings, kinds, steady, toggled

from decode.incremental.pulses import PulseFilter
from decode.spans import Edges, Span

CLEAN = steady(5)


@pytest.mark.parametrize("line", ["A", "B"])
@pytest.mark.parametrize("after", [3, 30, 60, 200, 239, 241, 300, 476])
@pytest.mark.parametrize("width", [1, 2, 20, 59])
def test_one_pulse(line, after, width):
    """A pulse of less than a quarter state (60 ticks) anywhere between two edges of its own line, 480 ticks apart,
    also over an edge of the other line at 240: one glitch, counts and widths as if it were not there."""
    start = int(CLEAN.lines[line].times[60]) + after
    if after + width >= 480:
        width = 480 - after - 1
    result = decoded(toggled(CLEAN, line, [start, start + width]))
    assert kinds(result) == ["glitch"]
    (tick,) = [tick for _, tick in findings(result)]
    assert start - min(after, width, 240) <= tick <= start + width
    assert result.x4_without_short_pulses == 320
    assert result.turns.counts.tolist() == [64] * 4
    assert result.distributions["state_width_deg"].in_unit().tolist() == [90]
    assert result.distributions["edge_spacing_s"].values.tolist() == [240]


def test_ringing_is_one_glitch():
    """A true edge followed by two ringing pulses 10 ticks apart: five edges, one glitch at the true edge."""
    edge = int(CLEAN.lines["A"].times[60])
    result = decoded(toggled(CLEAN, "A", [edge + 10, edge + 20, edge + 30, edge + 40]))
    assert findings(result) == [("glitch", edge)]
    assert evidence(result, "glitch")["edges"] == [5]
    assert evidence(result, "glitch")["at_a_true_edge"] == [True]


def test_a_quarter_of_a_state_is_no_glitch():
    """60 of 240 ticks is the limit and no longer short; 59 is."""
    start = int(CLEAN.lines["A"].times[60]) + 60
    assert kinds(decoded(toggled(CLEAN, "A", [start, start + 60]))) == []
    assert kinds(decoded(toggled(CLEAN, "A", [start, start + 59]))) == ["glitch"]


def test_a_pulse_shorter_than_the_grid():
    """Two edges of one line at one tick are a pulse of no width."""
    old = CLEAN.lines["A"]
    at = int(old.times[60]) + 100
    times = np.sort(np.concatenate([old.times, [at, at]]))
    lines = {**CLEAN.lines, "A": Edges.from_toggles(old.initial, times)}
    assert findings(decoded(Span(CLEAN.start, CLEAN.stop, lines))) == [("glitch", at)]


def test_a_turning_point_is_no_glitch():
    """The shaft turns back at place 50.05, so A or B goes out and back within 24 ticks: a tenth of the state time,
    but the same interval beside 240 is what the next edges show; as a glitch it must also undercut a quarter of the
    shortest state, 60."""
    quick = board(10.5, [(50.05, 39.55 * 240), (10.5, 39.55 * 240)])
    gentle = board(10.5, [(49.5, 39 * 240), (50.05, 4000), (49.5, 4000), (10.5, 39 * 240)])
    assert kinds(decoded(gentle)) == []
    assert decoded(quick).net_counts == decoded(gentle).net_counts == 0


def test_chatter_at_standstill_is_no_glitch():
    """A shaft parked on an edge: one line goes back and forth at irregular times no shorter than a state."""
    generator = np.random.default_rng(3)
    legs = [(30.5, 20 * 240.0)]
    for _ in range(200):
        legs += [(31.5, float(generator.integers(400, 40_000))), (30.5, float(generator.integers(400, 40_000)))]
    result = decoded(board(10.5, [*legs, (60.5, 30 * 240.0)]))
    assert kinds(result) == []
    assert result.net_counts == 50


def test_a_pulse_at_standstill():
    """Nothing moves, and A goes out and back within 5 of 100 000 ticks: there is no state to measure by, but this is
    noise."""
    lines = {"A": Edges.from_toggles(0, [50_000, 50_005]), "B": Edges.none(1), "Z": Edges.none(0)}
    assert findings(decoded(Span(0, 100_000, lines))) == [("glitch", 50_000)]


def test_starting_from_standstill_is_no_glitch():
    """Intervals that shrink from 10 000 ticks to 240 as the shaft starts, and grow again as it stops."""
    ramp = [(10.5 + step, 10_000 / (1 + step)) for step in range(1, 41)]
    down = [(50.5 + step, 10_000 / (41 - step)) for step in range(1, 41)]
    assert kinds(decoded(board(10.5, [*ramp, *down]))) == []


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(st.integers(-150, 150), st.floats(1.0, 30.0)), min_size=1, max_size=6))
def test_no_motion_is_blamed(legs):
    """Whatever an ideal encoder's shaft does at 240 to 7200 ticks a count, turning in the middle of states: nothing
    is wrong."""
    place = 10.5
    way = []
    for distance, slowness in legs:
        if distance:
            way.append((place + distance, abs(distance) * 240 * slowness))
            place += distance
    if way:
        assert findings(decoded(board(10.5, way, index=(4, 1)), index_width_counts=1)) == []


def test_a_dead_line_holds_nothing_up():
    """A stops for good while B goes on 100 000 times: what waits stays a handful of edges, or memory would grow with
    the capture."""
    pulses = PulseFilter(0, 0, 0)
    waiting = 0
    for start in range(0, 10_000_000, 100_000):
        times = np.arange(start + 50, start + 100_000, 100)
        a = Edges.from_toggles(0, [1000, 1300, 1600] if start == 0 else [])
        out = pulses.feed(a if start == 0 else Edges.none(1), Edges.from_toggles(0, times), start + 100_000)
        waiting = max(waiting, start + 100_000 - out.horizon)
        assert out.b.times.size > 0
    assert waiting <= 8 * 4 * 100
