"""The count at a latch. Expected values are worked out by hand from: count c is the cell [c, c + 1)."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from decode.agreement.latch import Joined, LatchJoin


def joined(times, counts, latches, start=0, stop=10_000, start_count=0) -> Joined:
    machine = LatchJoin(start, start_count)
    first = machine.feed(np.asarray(times, np.int64), np.asarray(counts, np.int64), stop, np.asarray(latches, np.int64))
    return together([first, machine.finish()])


def together(parts) -> Joined:
    names = ("latches", "counted", "speed", "uncertainty")
    return Joined(*(np.concatenate([getattr(part, name) for part in parts]) for name in names))


def test_steady_rising():
    """One count every 100 ticks; count 1 begins at 100, where the position is 1. At 250 it is 2.5; speed 1/100."""
    told = joined([100, 200, 300, 400, 500], [1, 2, 3, 4, 5], [100, 250, 399])
    assert told.counted.tolist() == [1.0, 2.5, 3.99]
    assert told.speed.tolist() == pytest.approx([0.01] * 3)
    assert told.uncertainty.tolist() == [0.0] * 3


def test_steady_falling_is_the_same_motion_backwards():
    """Count falls 5 to 4 where the position leaves 5 downwards: the position is 5 there, and 4.5 half way on."""
    told = joined([100, 200, 300, 400, 500], [4, 3, 2, 1, 0], [100, 150, 399], start_count=5)
    assert told.counted.tolist() == pytest.approx([5.0, 4.5, 2.01])
    assert told.speed.tolist() == pytest.approx([-0.01] * 3)


def test_both_senses_agree_on_the_same_angle():
    """position(t) = 10 t / 1000 up to t = 1050, then back: equal at equal times from the turning point (10.5)."""
    up = [100 * k for k in range(1, 11)]
    down = [2100 - 100 * k for k in range(10, 0, -1)]
    told = joined(up + down, [*range(1, 11), *range(9, -1, -1)], [430, 2100 - 430, 775, 2100 - 775])
    assert told.counted.tolist() == pytest.approx([4.3, 4.3, 7.75, 7.75])


def test_turning_round_inside_a_cell():
    """position = 4 - ((t - 500) / 200)^2 ... crosses 3 at 300 and 700, 2 at 500 -/+ 283, 4 never (it touches 4).

    Here the peak is 3.5: position = 3.5 - ((t - 500) / 200)^2, at 3 for t = 500 -/+ 141.4, at 2 for 500 -/+ 244.9.
    A parabola through three crossings is the motion itself, so only the rounding of the ticks is left.
    """
    place = lambda t: 3.5 - ((t - 500) / 200) ** 2  # noqa: E731
    near, far, further = (200 * np.sqrt(3.5 - level) for level in (3, 2, 1))
    times = np.rint([500 - further, 500 - far, 500 - near, 500 + near, 500 + far, 500 + further])
    told = joined(times, [1, 2, 3, 2, 1, 0], [450, 500, 600])
    assert told.counted == pytest.approx(place(np.array([450, 500, 600])), abs=0.01)
    assert (np.abs(told.counted - place(np.array([450, 500, 600]))) <= told.uncertainty).all()


def test_long_stop_between_edges_tells_only_the_cell():
    """Edges every 100 ticks, then none for 4000: the shaft stood somewhere in [3, 4). Middle, give or take a half."""
    told = joined([100, 200, 300, 4300, 4400, 4500], [1, 2, 3, 4, 5, 6], [310, 2000, 4290])
    assert told.counted.tolist() == [3.5] * 3
    assert told.uncertainty.tolist() == [0.5] * 3
    assert told.speed.tolist() == pytest.approx([1 / 4000] * 3)


def test_stop_and_return_over_the_same_edge():
    """Rises into cell 3, stands there long, and leaves it the way it came."""
    told = joined([100, 200, 300, 4300, 4400, 4500], [1, 2, 3, 2, 1, 0], [2000])
    assert (told.counted[0], told.uncertainty[0]) == (3.5, 0.5)


@pytest.mark.parametrize(
    ("latch", "start", "stop", "expected"),
    [
        (50, 0, 1000, np.nan),  # 100 ticks before the first edge, edges 100 apart: it may have been turning
        (50, -300, 1000, 0.5),  # nothing for 400 ticks, four times the first interval: it stood in cell 0
        (550, 0, 600, np.nan),
        (550, 0, 900, 5.5),
        (550, 0, 899, np.nan),
    ],
)
def test_ends(latch, start, stop, expected):
    """Before the first and after the last edge nothing is known of a moving shaft; a standing one is in its cell."""
    told = joined([100, 200, 300, 400, 500], [1, 2, 3, 4, 5], [latch], start, stop)
    np.testing.assert_equal(told.counted[0], expected)
    np.testing.assert_equal(told.uncertainty[0], np.nan if np.isnan(expected) else 0.5)
    np.testing.assert_equal(told.speed[0], np.nan if np.isnan(expected) else 0.0)


def test_no_edge_at_all_is_a_standstill():
    told = joined([], [], [10, 20], start_count=7)
    assert (told.counted.tolist(), told.speed.tolist(), told.uncertainty.tolist()) == ([7.5] * 2, [0.0] * 2, [0.5] * 2)


def test_missed_state_is_the_middle_of_what_was_skipped():
    """2 to 4 in one edge: the position went from 3 to 4 unseen at one tick, say 3.5; next edge 5 at 5."""
    told = joined([100, 200, 400, 500, 600], [1, 2, 4, 5, 6], [400])
    assert told.counted[0] == 3.5


def test_unequal_states_do_not_disturb_the_speed():
    """States 130, 70, 110, 90 ticks long, over and over: one cycle is 400 ticks for 4 counts, whichever state."""
    times = np.cumsum([130, 70, 110, 90] * 5)
    told = joined(times, np.arange(1, 21), times[4:14] + 5)
    assert told.speed.tolist() == pytest.approx([0.01] * 10)


@st.composite
def stretches(draw):
    gaps = draw(st.lists(st.integers(0, 40), min_size=0, max_size=40))
    moves = draw(st.lists(st.sampled_from([1, 1, 1, -1, 2]), min_size=len(gaps), max_size=len(gaps)))
    times = np.cumsum(np.asarray(gaps, np.int64)) + 20
    stop = int(times[-1] if times.size else 20) + draw(st.integers(1, 200))
    latches = np.asarray(sorted(draw(st.lists(st.integers(0, stop - 1), max_size=20))), np.int64)
    cuts = sorted(draw(st.lists(st.integers(0, stop), max_size=8)))
    delay = draw(st.integers(0, 60))
    return times, np.cumsum(np.asarray(moves, np.int64)), latches, cuts, stop, delay


@settings(deadline=None, max_examples=300)
@given(stretches(), st.booleans())
def test_cut_anywhere(stretch, tell_settled):
    """Wherever the capture is cut, and however late a latch is known, every latch gets the same values."""
    times, counts, latches, cuts, stop, delay = stretch
    whole = joined(times, counts, latches, 0, stop)
    machine, parts, begin = LatchJoin(0), [], 0
    for end in [*cuts, stop]:
        inside = (times >= begin) & (times < end)
        known = (latches + delay >= begin) & (latches + delay < end)
        settled = max(0, end - delay) if tell_settled else None
        parts.append(machine.feed(times[inside], counts[inside], end, latches[known], settled))
        begin = end
    late = latches[latches + delay >= stop]
    parts += [machine.feed(times[:0], counts[:0], stop, late), machine.finish()]
    pieces = together(parts)
    for name in ("latches", "counted", "speed", "uncertainty"):
        np.testing.assert_array_equal(getattr(pieces, name), getattr(whole, name))


def test_memory_is_what_is_pending():
    """A million edges in a thousand spans with a latch in each: no more than the last spans' edges are held."""
    machine = LatchJoin(0)
    for span in range(1000):
        times = np.arange(1000, dtype=np.int64) * 10 + span * 10_000
        machine.feed(times, np.arange(1000) + span * 1000, (span + 1) * 10_000, times[500:501])
        assert machine._times.size < 2000


@given(st.lists(st.integers(1, 50), min_size=6, max_size=60))
def test_position_stays_in_its_cell(gaps):
    """Whatever the speed, a rising count of c puts the position into [c, c + 1]."""
    times = np.cumsum(np.asarray(gaps, np.int64))
    latches = np.arange(times[0], times[-1], dtype=np.int64)
    told = joined(times, np.arange(1, times.size + 1), latches, 0, int(times[-1]) + 1)
    count = np.searchsorted(times, latches, side="right")
    assert ((told.counted >= count) & (told.counted <= count + 1)).all()
