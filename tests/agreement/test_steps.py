"""Steps put in at known times and sizes (the construction's own, exact)."""

import numpy as np
import pytest
from board_motions import TICK_S, Ramp, Sway, case

from decode.agreement.steps import find

RAMP = Ramp(5, 50, 1.0)
NONE = np.empty(0, np.int64)


@pytest.mark.parametrize("bits", [13, 14, 19])
@pytest.mark.parametrize("motion", [RAMP, Sway(3, 0.3)], ids=["ramp", "sway"])
def test_four_counts_lost(motion, bits):
    board = case(motion, bits=bits, latency_s=20e-6, lost=[(0.4567, -4)])
    found = board.agree()
    assert len(found.steps) == 1
    assert found.steps.counts[0] == pytest.approx(-4, abs=0.2)
    after = int(np.searchsorted(board.time, 0.4567 / TICK_S))
    assert (found.steps.before[0], found.steps.after[0]) == (after - 1, after)
    assert found.steps.time[0] * TICK_S == pytest.approx(0.4567, abs=1 / 16000)
    assert found.latency_s == pytest.approx(20e-6, abs=3 * found.latency_uncertainty_s)
    assert not found.scale_wrong
    assert found.outliers.size == 0


def test_one_count_on_a_12_bit_word():
    """One count is one position here: as large as the rounding of a single frame."""
    found = case(RAMP, bits=12, latency_s=5e-6, lost=[(0.4567, -1)]).agree()
    assert found.steps.counts.tolist() == pytest.approx([-1], abs=0.2)
    assert found.steps.time[0] * TICK_S == pytest.approx(0.4567, abs=2 / 16000)
    assert found.latency_s == pytest.approx(5e-6, abs=3 * found.latency_uncertainty_s)


def test_several_steps():
    lost = [(0.2, -4), (0.45, 1), (0.7, 300)]
    found = case(RAMP, bits=14, latency_s=5e-6, lost=lost).agree()
    assert found.steps.counts.tolist() == pytest.approx([size for _, size in lost], abs=0.2)
    assert (found.steps.time * TICK_S).tolist() == pytest.approx([at for at, _ in lost], abs=1 / 16000)
    # the longest stretch between steps is the last: from 0.7 s to the end, after -4 + 1 + 300 counts
    assert found.offset_counts % 4096 == pytest.approx(297, abs=0.1)
    assert found.latency_s == pytest.approx(5e-6, abs=3 * found.latency_uncertainty_s)


def test_step_beside_an_eccentric_disc():
    """The disc's error swings over 2.3 counts every turn; one count is lost."""
    error = lambda turns: 0.1 / 360 * np.sin(2 * np.pi * turns)  # noqa: E731
    found = case(RAMP, latency_s=20e-6, error=error, lost=[(0.5, -1)]).agree()
    assert found.steps.counts.tolist() == pytest.approx([-1], abs=0.2)
    assert found.steps.time[0] * TICK_S == pytest.approx(0.5, abs=1 / 16000)


def test_break_in_the_capture_is_no_step():
    board = case(RAMP, latency_s=20e-6, lost=[(0.5, 1000)])
    stretch = (board.time >= 0.5 / TICK_S).astype(np.int64)
    assert len(board.agree().steps) == 1
    found = board.agree(stretch=stretch)
    assert len(found.steps) == 0
    assert found.latency_s == pytest.approx(20e-6, abs=3 * found.latency_uncertainty_s)


@pytest.mark.parametrize("frames", [1, 2, 5, 8])
def test_what_comes_back_is_a_jump(frames):
    board = case(RAMP)
    board.position[7003 : 7003 + frames] += 2**12
    board.position %= 2**19
    found = board.agree()
    assert len(found.steps) == 0
    assert found.outliers.tolist() == list(range(7003, 7003 + frames))
    assert np.abs(found.outlier_counts) == pytest.approx(32, abs=0.1)  # 2^12 of 2^19 positions, of 4096 counts
    assert not found.outlier_stale.any()


@pytest.mark.parametrize("frames", [40, 400])
def test_what_stays_longer_is_two_steps(frames):
    board = case(RAMP)
    board.position[7003 : 7003 + frames] += 2**12
    board.position %= 2**19
    found = board.agree()
    assert found.steps.after.tolist() == [7003, 7003 + frames]
    assert found.steps.counts.tolist() == pytest.approx([-32, 32], abs=0.2)
    assert found.outliers.size == 0


@pytest.mark.parametrize("seed", range(20))
def test_noise_alone_makes_no_step(seed):
    """Normal noise of a quarter count over a moving shaft."""
    residual = np.random.default_rng(seed).normal(0, 0.25, 50_000)
    assert find(residual, np.arange(50_000) * 10.0, 1.0, 0.1, NONE).size == 0


def test_standing_within_the_rounding_is_no_step():
    """Moving, standing in one position of the word, moving, standing in another: up to one position apart."""
    residual = np.random.default_rng(0).uniform(-0.5, 0.5, 4000)
    residual[1000:2000], residual[3000:] = 0.45, -0.45
    moved = np.ones(4000)
    moved[1000:2000] = moved[3000:] = 0
    assert find(residual, np.cumsum(moved * 7), 1.0, 1.0, NONE).size == 0


def test_shorter_than_a_window_is_quiet():
    assert find(np.zeros(10), np.arange(10.0), 1.0, 0.1, NONE).size == 0
