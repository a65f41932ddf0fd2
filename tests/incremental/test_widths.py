"""Angles, spacing and speed. Expected values: exact arithmetic in the docstrings, or the source beside them."""

from __future__ import annotations

import numpy as np
import pytest
from shafts import TICK_S, board, decoded, evidence, findings, kinds, moved, steady

from decode.incremental.decoder import QuadratureDecoder
from decode.incremental.result import IncrementalResult
from decode.sheet import Incremental
from decode.spans import Edges, Span


def uneven(
    a_rise: float, a_fall: float, b_rise: float, b_fall: float, cycles: int, angle_to_time, way: int = 1
) -> Span:
    """A/B whose edges lie at these electrical degrees of each cycle, passed at angle_to_time(cycles since the
    start)."""
    sign = np.arange(cycles)
    place = {
        "A": np.stack([sign + a_rise / 360, sign + a_fall / 360], axis=1).ravel(),
        "B": np.stack([sign + b_rise / 360, sign + b_fall / 360], axis=1).ravel(),
    }
    lines = {}
    for name, places in place.items():
        passed = np.sort(places if way > 0 else cycles - places)
        lines[name] = Edges.from_toggles(0, np.rint(angle_to_time(passed)).astype(np.int64))
    stop = int(angle_to_time(np.array([cycles + 1.0]))[0])
    return Span(0, stop, lines)


def without_index(span: Span, cycles: int = 16) -> IncrementalResult:
    decoder = QuadratureDecoder("A", "B", None, Incremental(cycles_per_turn=cycles), TICK_S)
    decoder.feed(span)
    return decoder.finish()


def only(result: IncrementalResult, name: str) -> list[float]:
    return [round(float(value), 4) for value in result.distributions[name].in_unit()]


@pytest.mark.parametrize("way", [1, -1])
def test_uneven_states(way):
    """A high 0 to 190, B high 85 to 275: A 190, B 190, phase from 95 to 180 is 85, states 85 (10), 105 (11), 85 (01),
    85 (00), whichever way they are passed."""
    result = without_index(uneven(0, 190, 85, 275, 40, lambda place: 36_000 * place + 10, way))
    assert only(result, "pulse_width_a_deg") == [190]
    assert only(result, "pulse_width_b_deg") == [190]
    assert only(result, "phase_deg") == [85]
    states = {state: found.in_unit().round(4).tolist() for (state, one), found in result.by_state.items() if one == way}
    assert states == {1: [85], 2: [105], 3: [85], 0: [85]}
    assert result.by_direction[-way]["state_width_deg"].n == 0


def test_speed_drops_out():
    """The same encoder from standstill at constant acceleration: what is left of it is below 0.3 degrees."""
    result = without_index(uneven(0, 190, 85, 275, 400, lambda place: 1e7 * np.sqrt(place) + 10))
    for name, wanted in (("pulse_width_a_deg", 190), ("pulse_width_b_deg", 190), ("phase_deg", 85)):
        assert np.abs(result.distributions[name].in_unit() - wanted).max() < 0.3
        assert result.distributions[name].n > 380
    states = [85, 85, 105, 85]
    for state, wanted in enumerate(states):
        assert np.abs(result.by_state[state, 1].in_unit() - wanted).max() < 0.3


@pytest.mark.parametrize("way", [1, -1])
def test_edge_error(way):
    """Edges at 0, 85, 190, 275. A's rise lies at 0, midway between its falls at -170 and 190 is 10: it comes 10
    early, its fall 10 late (190 against 180); B likewise: rise 85 against (-85 + 275) / 2 = 95, fall 275 against (85
    + 445) / 2 = 265. As mechanical angle 10 / 16 degrees, with the sign of the count; all of it repeats, so the
    jitter is none."""
    result = without_index(uneven(0, 190, 85, 275, 40, lambda place: 36_000 * place + 10, way))
    assert only(result, "edge_error_deg") == [-0.625, 0.625]
    assert only(result, "edge_jitter_deg") == [0]


def test_edge_error_at_constant_acceleration():
    """The midpoint in time is not the midpoint in angle; the bend is taken out: what is left is below 0.2 electrical
    degrees."""
    result = without_index(uneven(0, 180, 90, 270, 400, lambda place: 1e7 * np.sqrt(place) + 10))
    errors = result.distributions["edge_error_deg"]
    assert errors.n > 1400
    assert np.abs(errors.in_unit()).max() * 16 < 0.2


def test_drive_encoder_at_full_speed():
    """3000 rpm with 2048 lines: 102.4 kHz, cycle 9.765625 us, state 2.44140625 us (source: STOEBER PS6 manual
    442728.05). In ticks of 1/128 us the cycle is 1250 and states 312 or 313."""
    times = np.arange(1, 4001) * 1250 // 4
    span = Span(0, 1_300_000, {"A": Edges.from_toggles(0, times[::2]), "B": Edges.from_toggles(0, times[1::2])})
    decoder = QuadratureDecoder("A", "B", None, Incremental(cycles_per_turn=2048), 1e-6 / 128)
    decoder.feed(span)
    result = decoder.finish()
    assert only(result, "speed_rpm") == [3000]
    assert only(result, "edge_spacing_s") == [312, 313]
    assert (result.fastest_cycle_ticks, result.mean_cycle_ticks) == (1250, 1250)


def test_speed_at_100_kilohertz():
    """100 kHz with 1024 lines is 5859.375 rpm (exact arithmetic), counted down: negative. 1000 ticks of 10 ns a
    cycle."""
    result = decoded(steady(-1, turn=4096, state=250), cycles=1024)
    assert only(result, "speed_rpm") == [-5859.38]
    assert result.by_direction[1]["speed_rpm"].n == 0


def test_a_stop_and_a_reversal_leave_no_width():
    """A shaft that parks in the middle of a state and one that turns back: the states around are not measured, all
    others are 90 within the grid of one tick in 240."""
    span = board(10.5, [(90.5, 80 * 240), (90.501, 50_000), (170.5, 80 * 240), (90.5, 80 * 240)])
    result = decoded(span)
    widths = result.distributions["state_width_deg"]
    assert widths.n > 120
    assert np.abs(widths.in_unit() - 90).max() <= 90 / 240 * 2
    assert kinds(result) == []


def test_one_displaced_edge():
    """One A edge 200 of 240 ticks early leaves a state of 15 degrees: one finding, at that edge."""
    span = steady(5)
    result = decoded(moved(span, "A", 50, -200))
    tick = int(span.lines["A"].times[50]) - 200
    assert findings(result) == [("edge_too_close", tick)]
    assert evidence(result, "edge_too_close") == {
        "spacing_ticks": [40],
        "state_width_deg": [15.0],
        "state": ["a=1 b=1"],
    }


def test_a_state_that_is_always_narrow():
    """B a sixteenth of a cycle after A's edges, always: two states of 22 degrees are the encoder's make, not events."""
    result = without_index(uneven(0, 180, 22, 202, 60, lambda place: 36_000 * place + 10))
    assert only(result, "state_width_deg") == [22, 158]
    assert result.anomalies == []


@pytest.mark.parametrize(("early", "found"), [(100, False), (101, False), (102, True)])
def test_stated_edge_spacing(early, found):
    """Stated 140 ticks at least: 140 is inside, 139 within a tick of the sampling, 138 is too close."""
    result = decoded(moved(steady(5), "A", 50, -early), limit=140)
    assert kinds(result) == (["edge_too_close"] if found else [])


def test_all_edges_below_the_stated_spacing():
    """A limit that no state keeps is a matter of the measurement, not of each edge."""
    assert kinds(decoded(steady(5), limit=300)) == []
