"""Motions: where the shaft is, and exactly when it passes each count."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from decode.bench.motion import Motion, constant, ramp, reverse, standstill, sway


def test_constant_speed_passes_counts_evenly() -> None:
    """600 rpm is 10 turns/s; with 4 counts a turn one count takes 25 ms. From 0.1 turns the first is 15 ms away.

    Source: exact arithmetic, (0.25 - 0.1) / 10 = 0.015.
    """
    passed = constant(600).path(0.1, 0.1).passages(4)
    assert passed.times == pytest.approx([0.015, 0.040, 0.065, 0.090], abs=1e-15)
    assert passed.counts.tolist() == [1, 2, 3, 4]
    assert passed.steps.tolist() == [1, 1, 1, 1]


def test_ramp_from_standstill() -> None:
    """0 to 600 rpm in 1 s: theta = 5 t^2 turns, so count k of 4 comes at sqrt(k / 20) s. Source: exact arithmetic."""
    passed = ramp(0, 600).path(0.0, 1.0).passages(4)
    assert passed.counts.tolist() == list(range(1, 21))
    assert passed.times == pytest.approx(np.sqrt(np.arange(1, 21) / 20), abs=1e-12)


def test_ramp_through_standstill_turns_around() -> None:
    """60 to -60 rpm in 1 s: theta = t - t^2, its top 0.25 at 0.5 s. Count 2 of 10 comes at t - t^2 = 0.2.

    Source: exact arithmetic, t = (1 -+ sqrt(0.2)) / 2.
    """
    passed = ramp(60, -60).path(0.0, 1.0).passages(10)
    assert passed.steps[:4].tolist() == [1, 1, -1, -1]
    assert passed.times[[1, 2]] == pytest.approx([(1 - 0.2**0.5) / 2, (1 + 0.2**0.5) / 2], abs=1e-12)
    assert passed.counts[:4].tolist() == [1, 2, 1, 0]


def test_sway_passes_half_its_amplitude_at_30_degrees() -> None:
    """theta = sin(2 pi t): 0.5 at 1/12 and 5/12 s, -0.5 at 7/12 and 11/12 s. Source: sin 30 degrees = 1/2."""
    passed = sway(1.0, 1.0).path(0.0, 0.99).passages(1, phase=0.5)
    assert passed.times == pytest.approx(np.array([1, 5, 7, 11]) / 12, abs=1e-12)
    assert passed.steps.tolist() == [1, -1, -1, 1]


def test_reverse_comes_back() -> None:
    """Turned around in the middle, the shaft ends where it began. Source: symmetry."""
    path = reverse(600).path(0.3, 0.4)
    assert path.angle(np.array([0.0, 0.4])) == pytest.approx([0.3, 0.3], abs=1e-12)
    assert path.speed(np.array([0.1, 0.2, 0.3])) == pytest.approx([10, 0, -10], abs=1e-9)
    assert path.passages(4096).steps.sum() == 0


def test_standstill_passes_nothing() -> None:
    assert standstill().path(0.3, 1.0).passages(4096).times.size == 0


def test_opposite_sense_mirrors() -> None:
    """Counted against the shaft, each passage falls. From -0.4 of 4 counts: -1, -2. Source: exact arithmetic."""
    passed = constant(600).path(0.1, 0.05).passages(4, sense=-1)
    assert passed.times == pytest.approx([0.015, 0.040], abs=1e-15)
    assert passed.counts.tolist() == [-2, -3]
    assert passed.steps.tolist() == [-1, -1]


MOTIONS = st.one_of(
    st.floats(-3000, 3000).map(constant),
    st.builds(ramp, st.floats(-3000, 3000), st.floats(-3000, 3000)),
    st.floats(-3000, 3000).map(reverse),
    st.builds(sway, st.floats(0.01, 5), st.floats(0.5, 30)),
)


@settings(max_examples=60, deadline=None)
@given(motion=MOTIONS, start=st.floats(-3, 3), ripple=st.floats(0, 0.02), sense=st.sampled_from([1, -1]))
def test_passages_are_where_the_angle_says(motion: Motion, start: float, ripple: float, sense: int) -> None:
    """At each passage the angle is the number passed; times never fall; the steps add up to the counts' difference."""
    path, duration = motion.path(start, 0.25, ripple), 0.25
    passed = path.passages(360, sense=sense)
    x = sense * path.angle(passed.times) * 360
    crossed = np.where(passed.steps > 0, passed.counts, passed.counts + 1)
    assert np.max(np.abs(x - crossed), initial=0) < 1e-6
    assert np.all(np.diff(passed.times) >= 0)
    ends = np.floor(sense * path.angle(np.array([0.0, duration])) * 360)
    assert passed.steps.sum() == ends[1] - ends[0]
    assert np.all(np.diff(passed.counts) == passed.steps[1:])
