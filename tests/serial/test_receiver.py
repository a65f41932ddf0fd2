"""The serial machine: every kind of faulty frame one step either side of its threshold, and captures out of the
ordinary: short, broken, upside down, of unknown level, idle at the wrong level."""

from __future__ import annotations

from functools import reduce
from operator import add

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from waves import HALF, Drawing, burst, field, idle, received

from decode.serial.clock import PILOT_EDGES
from decode.serial.frames import FRAME_KINDS, Frames
from decode.serial.receiver import Receiver
from decode.sheet import Field, Serial
from decode.spans import Edges, Span, cut

TURNS = Serial(interface="ssi", fields=(Field(name="turns", bits=4), Field(name="position", bits=8)))
CHECKED = Serial(
    interface="biss-c",
    fields=(
        Field(name="position", bits=8),
        Field(name="error", bits=1),
        Field(name="warning", bits=1),
        Field(name="crc", bits=6, polynomial=0x43, inverted=True),
    ),
)
WORD = "010110010110"
BISS = "1010" + "10110010" + "11" + "000101"
"""Position 178. Source: the unit tests of an open motor-controller firmware (mjbots)."""

GAP = 20
GOOD = burst(WORD)
LENGTH = len(GOOD.clock)
LENGTH_TO_NEXT = 6 + GAP + 1
"""Halves from the last clock edge of a burst to the first of the next."""


def kinds(frames: Frames) -> list[str]:
    return [FRAME_KINDS[code] for code in frames.kind]


def row(*bursts: Drawing, gap: int = GAP) -> Drawing:
    return reduce(add, [idle(gap), *(part for one in bursts for part in (one, idle(gap)))])


def with_data(span: Span, times: list[int]) -> Span:
    """The same span with other data edges."""
    return Span(span.start, span.stop, {**span.lines, "data": Edges.from_toggles(1, sorted(times))})


# ---- setup and hold -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("shift", "kind"), [(-10, ""), (-9, "setup_violation"), (9, "setup_violation"), (10, "")])
def test_data_that_changes_near_its_sample(shift: int, kind: str) -> None:
    """
    clock  ‾‾_____‾‾‾‾‾_____‾‾‾‾‾_____      a period of 100 ticks; the fall reads
    data   _______________|‾‾‾             moved to just before or after the fall

    Nearer than a tenth of the period is too near, on either side: 10 ticks are enough, 9 are not.
    """
    span = row(*[GOOD] * 5).span(half=50)
    falls = span.lines["clock"].times
    data = span.lines["data"].times.tolist()
    second = (GAP + LENGTH + GAP) * 50  # the third frame begins one burst later
    fall = int(falls[np.searchsorted(falls, second + 5 * 100)])
    near = min(data, key=lambda tick: abs(tick - fall + 50))
    data[data.index(near)] = fall + shift
    _, frames = received(TURNS, with_data(span, data))
    assert kinds(frames) == ["", kind, "", "", ""]


@pytest.mark.parametrize(("least", "kind"), [(20, ""), (21, "setup_violation")])
def test_a_stated_setup_time_counts_instead(least: int, kind: str) -> None:
    """Data changes half a period of 40 ticks before each sample: 20 ticks are met, 21 are not."""
    receiver = Receiver(TURNS, "clock", "data", least_setup=least)
    frames = Frames.concatenate([receiver.feed(row(*[GOOD] * 3).span(half=20)), receiver.finish()])
    assert kinds(frames) == [kind] * 3


# ---- too many and too few clocks ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("clocks", "kind"),
    [(1, "frame_short"), (11, "frame_short"), (12, "frame_short"), (13, ""), (14, "frame_long"), (20, "frame_long")],
)
def test_ssi_bursts_of_another_length(clocks: int, kind: str) -> None:
    """12 bits and one clock more are 13; the others are held against what is usual in this capture."""
    _, frames = received(TURNS, row(GOOD, GOOD, burst(WORD, clocks=clocks), GOOD, GOOD).span())
    assert kinds(frames) == ["", "", kind, "", ""]
    assert frames.clocks.tolist() == [13, 13, clocks, 13, 13]


@pytest.mark.parametrize(("usual", "odd", "kind"), [(12, 13, "frame_long"), (12, 12, ""), (12, 11, "frame_short")])
def test_a_master_that_sends_no_clock_for_the_low_bit(usual: int, odd: int, kind: str) -> None:
    some = burst(WORD, clocks=usual)
    _, frames = received(TURNS, row(some, some, burst(WORD, clocks=odd), some, some).span())
    assert kinds(frames) == ["", "", kind, "", ""]


def test_every_burst_of_the_wrong_length() -> None:
    """What is usual is no excuse: a master set to 15 clocks sends 15 each time."""
    _, frames = received(TURNS, row(*[burst(WORD, clocks=15)] * 5).span())
    assert kinds(frames) == ["frame_long"] * 5


# ---- pauses -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("pause", "kind"), [(254, "timeout_short"), (256, "")])
def test_a_burst_before_the_time_out_is_over(pause: int, kind: str) -> None:
    """
    clock  _‾_‾‾‾‾‾‾‾‾‾‾‾‾‾‾‾‾‾‾‾_‾_      the next burst comes after `pause` ticks
    data   ____________________‾‾‾‾      low for 255 ticks after the last clock edge: the monoflop

    One tick either side. Source: the pause must be longer than the monoflop time, TR-Electronic TR-ECE-BA-DGB-0131.
    """
    slow = burst(WORD, low=50)
    head, tail = row(slow, slow, slow, gap=80).span(), row(slow, slow, gap=80).span()
    last = int(head.lines["clock"].times[-1])
    shift = last + pause - int(tail.lines["clock"].times[0])
    lines = {}
    for name in ("clock", "data"):
        first, second = (part.lines[name].times for part in (head, tail))
        first = first[first < last + pause]
        second = second + shift
        if name == "data" and first.size % 2:  # still low: the edge that would raise it never comes
            second = second[1:]
        lines[name] = Edges.from_toggles(1, np.concatenate([first, second]))
    _, frames = received(TURNS, Span(0, shift + tail.stop, lines))
    assert kinds(frames) == ["", "", "", kind, ""]


@pytest.mark.parametrize("sheet_and_word", [(TURNS, WORD), (CHECKED, BISS)], ids=["ssi", "biss-c"])
def test_irregular_pauses_of_a_board_whose_data_line_rests_low(sheet_and_word: tuple[Serial, str]) -> None:
    """The line never returns to high, so no time-out is seen and none can be too short."""
    sheet, word = sheet_and_word
    some = burst(word)
    low = Drawing(some.clock, "_" + some.data[1:])

    def rest(halves: int) -> Drawing:
        return Drawing("‾" * halves, "_" * halves)

    drawn = reduce(add, [rest(20), *(part for gap in (90, 90, 60, 90, 40, 90) for part in (low, rest(gap)))])
    _, frames = received(sheet, drawn.span())
    assert kinds(frames) == [""] * 6
    position = {TURNS.interface: 0b10010110, CHECKED.interface: 178}[sheet.interface]
    assert field(frames, "position") == [position] * 6


# ---- data that does not move --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("sheet", "word", "level", "kind"),
    [
        (TURNS, WORD, "‾", "data_stuck"),
        (TURNS, WORD, "_", "data_stuck"),
        (CHECKED, BISS, "‾", "no_acknowledge"),
        (CHECKED, BISS, "_", "data_stuck"),
    ],
)
def test_a_data_line_that_stands_still(sheet: Serial, word: str, level: str, kind: str) -> None:
    """High, an ssi word of ones without the low after it; a biss-c encoder that was not heard. Low, nothing at all."""
    good = row(burst(word), burst(word))
    still = Drawing(good.clock, level * len(good.data))
    _, frames = received(sheet, (good + still + Drawing(good.clock, level * GAP + good.data[GAP:]) + good).span())
    assert kinds(frames) == ["", "", kind, kind, "", "", "", ""]


def test_a_word_of_ones_is_not_stuck() -> None:
    """The low after it tells."""
    _, frames = received(TURNS, row(GOOD, burst("1" * 12), GOOD).span())
    assert kinds(frames) == ["", "", ""]


def test_no_low_after_the_word() -> None:
    """
    data   ...1 0 1 1 0 ‾‾‾     high where the line must be low. Source: the only framing check that ssi has
    """
    spoilt = Drawing(GOOD.clock, GOOD.data[: 2 * 12 + 1] + "‾" * (LENGTH - 25))
    _, frames = received(TURNS, row(GOOD, GOOD, spoilt, GOOD, GOOD).span())
    assert kinds(frames) == ["", "", "fixed_mismatch", "", ""]


# ---- glitches -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("width", "kind"), [(2, "clock_glitch"), (3, "frame_long")])
def test_a_short_clock_pulse(width: int, kind: str) -> None:
    """
    clock  ‾‾‾‾_‾_‾_‾‾‾|‾‾‾    at rest after the word's last edge but within the burst: 2 ticks are no clock, 3 are

    Half of a phase of 5 ticks is the border.
    """
    span = row(*[GOOD] * 3).span()
    clock = span.lines["clock"].times.tolist()
    last = clock[51]
    clock[52:52] = [last + 6, last + 6 + width]
    _, frames = received(TURNS, Span(0, span.stop, {**span.lines, "clock": Edges.from_toggles(1, clock)}))
    assert kinds(frames) == ["", kind, ""]
    assert field(frames, "position")[1] == 0b10010110


def test_a_spike_between_two_frames_belongs_to_none() -> None:
    span = row(*[GOOD] * 3, gap=60).span()
    clock = span.lines["clock"].times.tolist()
    last = clock[25]
    clock[26:26] = [last + 150, last + 151]
    receiver, frames = received(TURNS, Span(0, span.stop, {**span.lines, "clock": Edges.from_toggles(1, clock)}))
    assert kinds(frames) == [""] * 3
    told = {one.kind: one.times.tolist() for one in receiver.anomalies()}
    assert told["clock_glitch"] == [last + 150]


# ---- captures out of the ordinary ---------------------------------------------------------------------------------


@pytest.mark.parametrize("frames_sent", [1, 2, 3, 4096 // 26 - 1, 4096 // 26 + 2])
def test_fewer_edges_than_the_pilot_wants(frames_sent: int) -> None:
    """One frame, and one either side of the 157 that hold the pilot's 4096 edges."""
    assert PILOT_EDGES == 4096
    receiver, frames = received(TURNS, row(*[GOOD] * frames_sent).span())
    assert (kinds(frames), receiver.partial) == ([""] * frames_sent, 0)
    assert set(field(frames, "position")) == {0b10010110}


@pytest.mark.parametrize("edges", [0, 1, 2, 3])
def test_less_than_a_frame(edges: int) -> None:
    clock = Edges.from_toggles(1, range(100, 100 + 10 * edges, 10))
    receiver, frames = received(TURNS, Span(0, 500, {"clock": clock, "data": Edges.none(1)}))
    assert len(frames) == 0
    assert receiver.partial == (edges > 0)


def test_a_capture_in_two_segments() -> None:
    """The second begins in the middle of a frame: neither that one nor the one the break cut is blamed, and no pause is
    told over the break."""
    whole = row(*[GOOD] * 4).span()
    middle = (GAP + LENGTH + GAP) * HALF + LENGTH // 2 * HALF  # within the second frame
    first, second = cut(whole, [middle])
    later = 100_000
    moved = {name: Edges(one.initial, one.times + later, one.levels) for name, one in second.lines.items()}
    receiver, frames = received(TURNS, first, Span(middle + later, whole.stop + later, moved, joined=False))
    assert kinds(frames) == [""] * 3
    assert (frames.segment.tolist(), receiver.partial) == ([0, 1, 1], 2)
    assert frames.first_edge.tolist()[1] == later + (GAP + 2 * (LENGTH + GAP)) * HALF
    assert frames.pause.tolist() == [-1, LENGTH_TO_NEXT * HALF, LENGTH_TO_NEXT * HALF]


def test_a_clock_that_rests_at_the_wrong_level() -> None:
    """Read as if inverted, and said so."""
    drawn = row(*[GOOD] * 3)
    upside_down = drawn.clock.translate(str.maketrans("‾_", "_‾"))
    receiver, frames = received(TURNS, Drawing(upside_down, drawn.data).span())
    assert (field(frames, "position"), kinds(frames)) == ([0b10010110] * 3, [""] * 3)
    assert receiver.notes() == ["the clock rests low, which is not what the interface asks for: read as if inverted"]


@pytest.mark.parametrize("inside", [True, False])
def test_a_data_line_of_unknown_level(inside: bool) -> None:
    """
    data   ‾‾‾_‾_??_‾_‾‾    while a bit is read the frame is left out and not blamed; between two frames it is nothing
    """
    at = GAP + LENGTH + (GAP + 9 if inside else 5)
    drawn = row(*[GOOD] * 3)
    spoilt = Drawing(drawn.clock, f"{drawn.data[:at]}????{drawn.data[at + 4 :]}")
    receiver, frames = received(TURNS, spoilt.span())
    assert kinds(frames) == [""] * (2 if inside else 3)
    assert receiver.partial == (1 if inside else 0)


def test_the_notes_tell_what_was_cut_off() -> None:
    span = row(*[GOOD] * 3).span()
    start = (GAP + 7) * HALF
    lines = {name: edges.between(start, span.stop) for name, edges in span.lines.items()}
    receiver, frames = received(TURNS, Span(start, span.stop, lines))
    assert len(frames) == 2
    assert receiver.notes() == ["1 frame(s) cut off by an end of the capture: left out and not blamed"]


@settings(max_examples=40)
@given(st.lists(st.integers(1, 5 * 5 * 52 - 1), max_size=30))
def test_cut_anywhere_the_frames_are_the_same(at: list[int]) -> None:
    """Good, short, long, spiked and late ones, in one piece and in any pieces."""
    drawn = row(GOOD, burst(WORD, clocks=9), burst(WORD, clocks=15), burst(WORD, low=12), GOOD)
    span = drawn.span()
    whole, pieces = received(TURNS, span), received(TURNS, *cut(span, at))
    for name in ("kind", "first_edge", "last_edge", "raw", "pause", "position", "usable"):
        assert getattr(pieces[1], name).tolist() == getattr(whole[1], name).tolist()
    assert pieces[0].partial == whole[0].partial
    for name, timing in whole[0].timings.items():
        assert pieces[0].timings[name].counts.tolist() == timing.counts.tolist()


def test_short_spans_over_more_edges_than_the_pilot() -> None:
    drawn = row(*[GOOD] * 170)
    span = drawn.span()
    _, frames = received(TURNS, *cut(span, range(0, span.stop, 7 * HALF)))
    assert kinds(frames) == [""] * 170
