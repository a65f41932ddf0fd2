"""Clock edges to bursts: what the pilot teaches, where a burst ends, and which edges are none."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from waves import line

from decode.serial.clock import PILOT_EDGES, Bursts, Rhythm, find_bursts
from decode.spans import NO_TICK, Edges

PLAIN = Rhythm(rest=1, period=10.0, high=5.0, low=5.0, split=20.0, pause=100.0)


def clock_of(*bursts: int, half: int = 5, pause: int = 100, rest: int = 1) -> Edges:
    """Bursts of so many edges, `half` ticks apart, `pause` ticks of rest between them."""
    times, now = [], pause
    for edges in bursts:
        times += [now + half * number for number in range(edges)]
        now = times[-1] + pause
    return Edges.from_toggles(rest, times)


def found(clock: Edges, select: Edges | None = None, rhythm: Rhythm = PLAIN) -> Bursts:
    return find_bursts(clock, select, rhythm)[0]


def ticks(bursts: Bursts) -> list[list[int]]:
    """The edges of each burst."""
    return [
        bursts.times[first : first + count].tolist() for first, count in zip(bursts.first, bursts.count, strict=True)
    ]


# ---- the rhythm ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("edges", [0, 1, 2, 3])
def test_too_few_edges_tell_no_rhythm(edges: int) -> None:
    assert Rhythm.of(Edges.from_toggles(1, range(0, 10 * edges, 10))) is None


@pytest.mark.parametrize("rest", [0, 1])
def test_the_rhythm_of_bursts_between_pauses(rest: int) -> None:
    """
    clock  ‾‾‾‾‾‾_‾_‾_‾‾‾‾‾‾_‾_‾_‾‾‾‾‾‾   halves of 5 ticks, pauses of 100; or the same upside down

    Phases of 5 and pauses of 100 are parted at their geometric mean, the root of 500: 22.36.
    """
    rhythm = Rhythm.of(clock_of(*[6] * 20, rest=rest))
    assert rhythm is not None
    assert (rhythm.rest, rhythm.period, rhythm.high, rhythm.low, rhythm.pause) == (rest, 10, 5, 5, 100)
    assert rhythm.split == pytest.approx(22.36, abs=0.01)


def test_the_rhythm_of_an_uneven_clock() -> None:
    """Low for 3 and high for 7 ticks of 10."""
    times = [100 * burst + tick for burst in range(1, 20) for tick in (0, 3, 10, 13, 20, 23, 30, 33)]
    rhythm = Rhythm.of(Edges.from_toggles(1, times))
    assert rhythm is not None
    assert (rhythm.low, rhythm.high, rhythm.phase(0), rhythm.phase(1)) == (3, 7, 3, 7)


def test_few_short_bursts_of_which_most_rests_are_pauses() -> None:
    """
    clock  ‾‾‾‾‾‾‾‾_‾‾‾‾‾‾‾‾_‾‾‾‾‾‾‾‾_‾‾‾‾‾‾‾‾   one clock a burst: low 5, high 100 ticks

    The high phases are all pauses, so the period is told by the low ones.
    """
    rhythm = Rhythm.of(clock_of(*[2] * 5))
    assert rhythm is not None
    assert (rhythm.rest, rhythm.period, rhythm.pause) == (1, 10, 100)


def test_one_burst_alone() -> None:
    """No pause is seen, so four periods without an edge end a burst; the level it ends at is its rest."""
    rhythm = Rhythm.of(clock_of(14))
    assert rhythm is not None
    assert (rhythm.rest, rhythm.split, rhythm.pause) == (1, 40, None)


def test_pauses_inside_bursts_do_not_part_them() -> None:
    """Words of two bytes, 30 ticks of rest between the bytes, 400 between the words: the widest gap, from 30 to 400,
    parts words; 109.5 is its geometric mean."""
    times = [2000 * word + byte * 105 + tick for word in range(9) for byte in (0, 1) for tick in range(0, 80, 5)]
    rhythm = Rhythm.of(Edges.from_toggles(1, times))
    assert rhythm is not None
    assert 30 < rhythm.split < 400


def test_only_the_pilot_teaches() -> None:
    """What comes after the first edges changes nothing, so a cut cannot either."""
    slow = np.arange(5000, dtype=np.int64) * 400
    fast = clock_of(*[8] * (PILOT_EDGES // 8))
    both = fast.then(Edges.from_toggles(fast.final, fast.times[-1] + 400 + slow))
    assert Rhythm.of(both) == Rhythm.of(fast)


def test_a_clock_of_unknown_level_does_not_stop_it() -> None:
    assert Rhythm.of(line("?_?_?_?_?")) is None
    assert Rhythm.of(line("‾‾‾‾_‾_‾_‾‾‾‾?‾‾‾_‾_‾_‾‾‾‾")) is not None


# ---- where a burst ends -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("pause", "bursts"), [(20, 1), (21, 2)])
def test_a_rest_longer_than_the_split_ends_a_burst(pause: int, bursts: int) -> None:
    """
    clock  ‾‾‾‾_‾_‾‾‾‾‾‾_‾_‾‾‾‾    20 ticks of rest do not end it, 21 do
    """
    assert len(found(clock_of(4, 4, pause=pause))) == bursts


def test_a_long_time_away_from_rest_ends_no_burst() -> None:
    """
    clock  ‾‾‾‾_‾_‾___________________‾‾‾‾    held low while the time-out runs (a control bit)
    """
    assert ticks(found(Edges.from_toggles(1, [0, 5, 10, 15, 20, 400]))) == [[0, 5, 10, 15, 20, 400]]


@pytest.mark.parametrize(("edges", "bursts"), [([], 0), ([7], 1)])
def test_hardly_any_clock(edges: list[int], bursts: int) -> None:
    assert len(found(Edges.from_toggles(1, edges))) == bursts


# ---- pulses that are none -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("spike", "glitches", "kept"),
    [(2, 1, [0, 5, 10, 25, 30, 35]), (3, 0, [0, 5, 10, 17, 20, 25, 30, 35])],
)
def test_a_short_pulse_is_taken_out(spike: int, glitches: int, kept: list[int]) -> None:
    """
    clock  ‾_‾_____|_____‾_‾    a spike inside a long low phase: below half a phase of 5 ticks it is none

    2 ticks are short, 3 are not.
    """
    bursts = found(Edges.from_toggles(1, [0, 5, 10, 17, 17 + spike, 25, 30, 35]))
    assert ticks(bursts) == [kept]
    assert (bursts.glitches.tolist(), bursts.glitch_time.tolist()) == ([glitches], [17 if glitches else NO_TICK])


def test_ringing_after_an_edge_leaves_the_edge() -> None:
    """
    clock  ‾‾‾|_|_____‾‾‾‾   down at 10, up at 11, down at 12: the first of the three is the true edge
    """
    bursts = found(Edges.from_toggles(1, [0, 5, 10, 11, 12, 16]))
    assert ticks(bursts) == [[0, 5, 10, 16]]
    assert bursts.glitches.tolist() == [1]
    assert bursts.glitch_time.tolist() == [11]


def test_a_lone_spike_between_bursts_is_no_burst() -> None:
    """It belongs to no frame and is told beside them, at its first edge."""
    bursts, stray = find_bursts(Edges.from_toggles(1, [0, 5, 10, 15, 200, 201, 400, 405, 410, 415]), None, PLAIN)
    assert ticks(bursts) == [[0, 5, 10, 15], [400, 405, 410, 415]]
    assert stray.tolist() == [200]


@given(st.lists(st.tuples(st.integers(0, 38), st.integers(1, 2)), max_size=4, unique_by=lambda one: one[0]))
def test_spikes_never_lose_a_true_edge_nor_its_level(spikes: list[tuple[int, int]]) -> None:
    """However many short pulses are put into the middles of phases, the true edges are what is left."""
    true = [20 * number for number in range(40)]
    wide = Rhythm(1, 40.0, 20.0, 20.0, 80.0, None)
    with_spikes = sorted(true + [20 * at + shift for at, width in spikes for shift in (10, 10 + width)])
    bursts = found(Edges.from_toggles(1, with_spikes), rhythm=wide)
    assert ticks(bursts) == [true]
    assert bursts.glitches.tolist() == [len(spikes)]


# ---- the select line ----------------------------------------------------------------------------------------------

EIGHT = [100, 105, 110, 115, 120, 125, 130, 135]


def test_a_burst_is_what_the_select_line_holds() -> None:
    """
    select ‾‾‾_______‾‾‾‾‾____‾‾
    clock  __________‾_____‾_‾___     an edge outside of any window is no clock
    """
    bursts = found(Edges.from_toggles(0, [*EIGHT, 300, 305, 500, 505]), Edges.from_toggles(1, [90, 200, 450, 600]))
    assert ticks(bursts) == [EIGHT, [500, 505]]
    assert bursts.opens.tolist() == bursts.selected.tolist() == [90, 450]


@pytest.mark.parametrize(("fall", "rise", "kept"), [(100, 136, EIGHT), (101, 135, EIGHT[1:-1])])
def test_a_window_holds_its_first_tick_and_not_its_last(fall: int, rise: int, kept: list[int]) -> None:
    assert ticks(found(Edges.from_toggles(0, EIGHT), Edges.from_toggles(1, [fall, rise]))) == [kept]


def test_a_window_without_clock_is_no_burst() -> None:
    assert len(found(Edges.from_toggles(0, EIGHT), Edges.from_toggles(1, [10, 50]))) == 0


def test_a_window_open_at_either_end() -> None:
    """Selected before the stretch begins: it opens with the first clock edge. Still selected at its end."""
    bursts = found(Edges.from_toggles(0, [*EIGHT, 500, 505]), Edges.from_toggles(0, [200, 450]))
    assert ticks(bursts) == [EIGHT, [500, 505]]
    assert bursts.opens.tolist() == [100, 450]


@pytest.mark.parametrize(("spike", "bursts"), [(2, 1), (3, 2)])
def test_a_select_spike_shorter_than_a_clock_phase_does_not_part_a_word(spike: int, bursts: int) -> None:
    """
    select ‾‾‾_______|_______‾‾‾
    """
    select = Edges.from_toggles(1, [90, 117, 117 + spike, 200])
    assert len(found(Edges.from_toggles(0, EIGHT), select)) == bursts


def test_a_select_line_that_bounces_still_opens_its_window() -> None:
    """
    select ‾‾‾|_|________|‾|‾‾‾    down at 90, up at 91, down at 92; up at 200, down at 201, up at 202
    """
    bursts = found(Edges.from_toggles(0, EIGHT), Edges.from_toggles(1, [90, 91, 92, 200, 201, 202]))
    assert ticks(bursts) == [EIGHT]
    assert bursts.opens.tolist() == [90]


def test_a_select_line_first_seen_going_high() -> None:
    """
    select ???‾‾‾____‾‾‾    the rise out of the unknown ends no window
    """
    select = Edges(2, np.array([50, 90, 200]), np.array([1, 0, 1], np.int8))
    assert ticks(found(Edges.from_toggles(0, [10, 15, *EIGHT, 300, 305]), select)) == [EIGHT]


# ---- pieces of one burst ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("pause", "lengths"), [(49, [10]), (50, [4, 6])])
def test_two_pieces_that_make_up_a_word_are_one_burst(pause: int, lengths: list[int]) -> None:
    """
    clock  ‾‾‾_‾_‾‾‾‾‾‾_‾_‾_‾‾‾    4 and 6 edges where a word has 10: one burst if the pause is below 50 ticks
    """
    bursts = found(clock_of(4, 6, pause=pause)).rejoined(10, 50.0)
    assert bursts.count.tolist() == lengths
    assert bursts.gap.tolist() == ([pause] if len(lengths) == 1 else [0, 0])


@pytest.mark.parametrize("pieces", [(4, 4), (10, 4), (4, 8)])
def test_pieces_of_another_length_stay_apart(pieces: tuple[int, int]) -> None:
    assert found(clock_of(*pieces, pause=40)).rejoined(10, 50.0).count.tolist() == list(pieces)


def test_a_piece_belongs_to_one_burst_only() -> None:
    """5 + 5 + 5 edges where a word has 10: the first two are one, the third stays short."""
    assert found(clock_of(5, 5, 5, pause=40)).rejoined(10, 50.0).count.tolist() == [10, 5]


def test_glitches_of_both_pieces_are_counted_together() -> None:
    """4 edges, 40 ticks of rest and 6 edges, with a spike of one tick in either piece: told is the first."""
    spikes = [17, 18, 82, 83]
    times = sorted([0, 5, 10, 25, 65, 70, 75, 90, 95, 100, *spikes])
    (joined,) = [found(Edges.from_toggles(1, times)).rejoined(10, 60.0)]
    assert ticks(joined) == [[0, 5, 10, 25, 65, 70, 75, 90, 95, 100]]
    assert (joined.glitches.tolist(), joined.glitch_time.tolist()) == ([2], [17])


@pytest.mark.parametrize(("edges", "pause", "grows"), [(10, 50.0, True), (10, 40.0, False), (4, 50.0, False)])
def test_whether_the_last_burst_but_one_may_still_grow(edges: int, pause: float, grows: bool) -> None:
    assert found(clock_of(4, 2, pause=40)).last_may_grow(edges, pause) is grows


# ---- words run together -------------------------------------------------------------------------------------------


def words_at(pause: int) -> Bursts:
    """Three words of four edges with `pause` ticks of rest between them, too short to part them as bursts."""
    return found(clock_of(4, 4, 4, pause=pause), rhythm=Rhythm(1, 10.0, 5.0, 5.0, 1000.0, None))


@pytest.mark.parametrize(("pause", "words"), [(15, 1), (16, 3)])
def test_words_that_rest_between_them_are_taken_apart(pause: int, words: int) -> None:
    """
    clock  ‾‾_‾_‾‾‾_‾_‾‾‾_‾_‾‾    more than 15 ticks of rest after every fourth edge
    """
    bursts = words_at(pause).parted(4, 15.0)
    assert bursts.count.tolist() == ([12] if words == 1 else [4, 4, 4])
    assert bursts.opens.tolist() == bursts.first_edge.tolist()


@pytest.mark.parametrize("edges", [5, 6, 12, 24])
def test_a_burst_that_is_not_whole_words_stays(edges: int) -> None:
    assert words_at(100).parted(edges, 15.0).count.tolist() == [12]


def test_the_longest_phase_of_each_burst() -> None:
    """Pauses between bursts are none of theirs, nor is what follows edges that were found to be no clock."""
    bursts = found(Edges.from_toggles(1, [0, 5, 10, 18, 500, 507, 510, 515, 900]))
    assert bursts.longest().tolist() == [8, 7, 0]
    shorter = replace(bursts, count=bursts.count - np.array([2, 0, 0]))
    assert shorter.longest().tolist() == [5, 7, 0]
