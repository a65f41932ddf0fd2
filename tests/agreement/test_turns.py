"""Counts per turn from the serial position alone. Expected values: exact arithmetic."""

import numpy as np
import pytest
from board_motions import Ramp, Sway, case

from decode.agreement.turns import count_turns


def test_every_complete_turn():
    """From 0.3 to 4.7 turns in tenths, 100 counts a turn: whole turns are passed at 1, 2, 3, 4: three turns."""
    turns = np.arange(3, 48) / 10
    found = count_turns(turns, turns * 100 + 7)
    assert found.counts.tolist() == pytest.approx([100, 100, 100])
    assert found.sense.tolist() == [1, 1, 1]
    assert turns[found.first].tolist() == pytest.approx([1, 2, 3], abs=0.1)


def test_backwards():
    turns = np.arange(47, 2, -1) / 10
    found = count_turns(turns, turns * -100)
    assert found.counts.tolist() == pytest.approx([100, 100, 100])
    assert found.sense.tolist() == [-1, -1, -1]


def test_a_turn_that_lost_counts():
    """Four counts go missing at 2.5 turns: the second of three complete turns has 96."""
    turns = np.arange(3, 48) / 10
    found = count_turns(turns, turns * 100 - 4 * (turns > 2.5))
    assert found.counts.tolist() == pytest.approx([100, 96, 100])


def test_turning_back_is_not_a_turn():
    """Up to 1.5, back to 0.6, up to 2.4: 1 is passed upwards, downwards and upwards again, then 2."""
    turns = np.concatenate([np.arange(3, 16), np.arange(14, 5, -1), np.arange(7, 25)]) / 10 + 0.05
    found = count_turns(turns, turns * 100)
    assert found.counts.tolist() == pytest.approx([100])


def test_unusable_frames_are_bridged():
    turns = np.arange(3, 48) / 10
    counted = turns * 100
    turns[20] = np.nan
    assert count_turns(turns, counted).counts.tolist() == pytest.approx([100, 100, 100])


@pytest.mark.parametrize("motion", [Ramp(5, 50, 1.0), Sway(3, 0.5)], ids=["ramp", "sway"])
def test_of_a_capture(motion):
    """4096 counts a turn; a 14-bit position places each end to within half of a quarter count."""
    board = case(motion, bits=14)
    found = board.agree()
    turns = count_turns(found.serial_turns, board.joined.counted)
    assert turns.counts.size >= 15
    assert turns.counts == pytest.approx(4096, abs=0.3)
    assert np.rint(turns.counts).tolist() == [4096] * turns.counts.size
