"""A, B and index against the sequence they are defined by."""

import numpy as np
import pytest

from decode.bench.board import Scenario, Simulation, simulate
from decode.bench.motion import constant, reverse, sway
from decode.bench.quadrature import index_window
from decode.sheet import Incremental, Sheet

LINES: dict[str, str | int] = {"a": "A", "b": "B", "index": "Z"}


def turning(speed: float, **keys: object) -> Simulation:
    """A board with 4 cycles a turn, from angle 0.01 turns, for 0.1 s; 600 rpm is one turn in it."""
    scenario = {name: keys.pop(name) for name in list(keys) if name in Scenario.__struct_fields__}
    incremental = Incremental(cycles_per_turn=4, **keys)  # type: ignore[arg-type]
    motion = {"motion": constant(speed), "start_angle_turns": 0.01, "duration_s": 0.1, **scenario}
    return simulate(Sheet(lines=LINES, incremental=incremental), Scenario(**motion))  # type: ignore[arg-type]


def states(simulation: Simulation) -> list[str]:
    """The A/B states in the order seen."""
    a, b = simulation.lines["A"], simulation.lines["B"]
    ticks = np.unique(np.concatenate([[0], a.times, b.times]))
    return [f"{x}{y}" for x, y in zip(a.level_at(ticks), b.level_at(ticks), strict=True)]


def test_counting_up_a_leads() -> None:
    """00 10 11 01 00: A rises before B. Source: the convention of motor-control counters (A leads B counts up)."""
    assert states(turning(600))[:6] == ["00", "10", "11", "01", "00", "10"]
    assert turning(600).truth.net_counts == 16


def test_counting_down_b_leads() -> None:
    assert states(turning(-600))[:5] == ["00", "01", "11", "10", "00"]
    assert turning(-600).truth.net_counts == -16


def test_opposite_direction_counts_against_the_position() -> None:
    """With direction -1 a shaft that turns up counts down. Source: definition of the sheet's key."""
    made = turning(600, direction=-1)
    assert made.truth.net_counts == -16
    assert made.truth.direction == -1
    # At 0.01 turns the count is floor(-0.16) = -1: state 01.
    assert states(made)[:4] == ["01", "11", "10", "00"]


def test_edges_stand_where_the_shaft_passes_counts() -> None:
    """16 counts a turn at 10 turns/s: 6.25 ms a count; the first is (1/16 - 0.01) / 10 = 5.25 ms away.

    Source: exact arithmetic; one tick is 10 ns."""
    made = turning(600)
    edges = np.sort(np.concatenate([made.lines["A"].times, made.lines["B"].times]))
    assert edges[:3].tolist() == [525_000, 1_150_000, 1_775_000]


@pytest.mark.parametrize(
    ("states_text", "width", "window"),
    # Source: the state sequence; count 0 is 00, 1 is 10, 2 is 11, 3 is 01. Two states: centred on the border.
    [
        ("a=1 b=1", 1, (2.0, 1.0)),
        ("a=0 b=0", 1, (0.0, 1.0)),
        ("a=0 b=1", 1, (3.0, 1.0)),
        ("a=1", 2, (1.0, 2.0)),
        ("b=0", 2, (0.0, 2.0)),
        ("a=0", 2, (3.0, 2.0)),
        ("a=1 b=1", 0.5, (2.25, 0.5)),
        (None, 1, (0.0, 1.0)),
        (None, None, (0.0, 1.0)),
    ],
)
def test_index_window(states_text: str | None, width: float | None, window: tuple[float, float]) -> None:
    assert index_window(Incremental(index_states=states_text, index_width_counts=width)) == window


@pytest.mark.parametrize("speed", [600, -600])
def test_gated_index_is_high_in_its_state_alone(speed: float) -> None:
    """Gated with A = B = 1, one count wide: every index edge is an A/B edge, and A = B = 1 while it is high."""
    made = turning(speed, index_states="a=1 b=1", index_width_counts=1, duration_s=0.5)
    index = made.lines["Z"]
    rises, falls = index.times[index.levels == 1], index.times[index.levels == 0]
    assert rises.size == falls.size == 5
    middle = (rises + falls) // 2
    assert set(made.lines["A"].level_at(middle)) == set(made.lines["B"].level_at(middle)) == {1}
    assert np.isin(index.times, np.concatenate([made.lines["A"].times, made.lines["B"].times])).all()
    assert made.truth.index_pulses == 5


def test_ungated_index_lies_within_its_state() -> None:
    """Half a count wide around count 2.5 of 16: from 2.25/16 to 2.75/16 turns. Source: exact arithmetic."""
    made = turning(600, index_states="a=1 b=1", index_width_counts=0.5)
    expected = (np.array([2.25, 2.75]) / 16 - 0.01) / 10 * 1e8
    assert np.abs(made.lines["Z"].times - expected).max() <= 1


def test_index_comes_back_at_the_same_angle() -> None:
    """Turning back, the pulse ends where it began. Source: one angle window, passed both ways."""
    made = turning(600, motion=reverse(600), duration_s=0.4, index_states="a=1 b=1", index_width_counts=1)
    index = made.lines["Z"].times
    assert np.abs(index + index[::-1] - 40_000_000).max() <= 1


def test_swaying_shaft_nets_to_nothing() -> None:
    """Two whole swings end where they began. Source: symmetry."""
    made = turning(600, motion=sway(2.0, 20.0))
    assert made.truth.net_counts == 0
    assert made.truth.edges == sum(made.lines[name].times.size for name in "AB")


def test_jitter_moves_edges_but_keeps_their_order() -> None:
    """1 us rms on edges 6.25 ms apart: the same states in the same order, moved by 1 us rms within 40 %.

    Source: standard error of a standard deviation from 160 draws is 5.6 %; four of them and rounding."""
    plain, moved = turning(6000), turning(6000, edge_jitter_s=1e-6)
    assert states(plain) == states(moved)
    shift = (plain.lines["A"].times - moved.lines["A"].times) * 1e-8
    assert 0.6e-6 < np.std(shift) < 1.4e-6


def test_eccentric_disc_shifts_edges_over_the_turn() -> None:
    """e = 2 degrees: the reading is ahead by e sin(theta). Passing 0.25 turns of reading, the shaft is at 0.25 - about
    2/360 turns. Source: reading = theta + e sin(2 pi theta), solved by bisection here."""
    low, high = 0.2, 0.25
    for _ in range(60):
        middle = (low + high) / 2
        reading = middle + 2 / 360 * np.sin(2 * np.pi * middle)
        low, high = (middle, high) if reading < 0.25 else (low, middle)
    made = turning(600, start_angle_turns=0.0, eccentricity_deg=2.0)
    edges = np.sort(np.concatenate([made.lines["A"].times, made.lines["B"].times]))
    assert abs(edges[3] - low / 10 * 1e8) <= 1
