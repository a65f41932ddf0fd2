"""Whole captures: what is promised about them, and that the truth is that of the lines."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from decode.bench import motion
from decode.bench.board import Fault, Scenario, Simulation, simulate
from decode.bench.faults import FAULTS, SETTINGS
from decode.errors import InputError
from decode.sheet import Field, Incremental, Serial, Sheet
from decode.spans import Edges

FIELDS = (
    Field(name="position", bits=19),
    Field(name="error", bits=1),
    Field(name="warning", bits=1),
    Field(name="crc", bits=6, polynomial=0x43, inverted=True),
)
BOARD = Sheet(
    lines={"clock": "MA", "data": "SLO", "a": "A", "b": "B", "index": "Z"},
    serial=Serial(interface="biss-c", fields=FIELDS),
    incremental=Incremental(cycles_per_turn=1024, index_width_counts=1, index_states="a=1 b=1"),
)


def same(one: Simulation, other: Simulation) -> bool:
    return one.truth == other.truth and all(
        np.array_equal(one.lines[name].times, other.lines[name].times) for name in one.lines
    )


def test_a_seed_makes_it_repeatable() -> None:
    scenario = Scenario(duration_s=0.02, edge_jitter_s=50e-9, seed=7)
    assert same(simulate(BOARD, scenario), simulate(BOARD, scenario))
    other = simulate(BOARD, Scenario(duration_s=0.02, edge_jitter_s=50e-9, seed=8))
    assert not np.array_equal(other.lines["A"].times, simulate(BOARD, scenario).lines["A"].times)


def test_a_fault_leaves_the_rest_as_it_was() -> None:
    """The jitter of the edges is the same whether or not a frame is spoilt."""
    scenario = Scenario(duration_s=0.02, edge_jitter_s=50e-9, faults=(Fault("frame_short", 0.01),))
    plain = Scenario(duration_s=0.02, edge_jitter_s=50e-9)
    assert np.array_equal(simulate(BOARD, scenario).lines["A"].times, simulate(BOARD, plain).lines["A"].times)


def test_position_is_the_angle_at_the_latch() -> None:
    """3000 rpm is 50 turns/s: at the latch at t the position is floor(frac(0.1 + 50 t) * 2^19). Source: definition."""
    truth = simulate(BOARD, Scenario(motion=motion.constant(3000), duration_s=0.05)).truth
    latch = np.array([frame.latch_s for frame in truth.frames])
    # The latch stands on the grid, at most 10 ns before the true instant: 0.27 of a step at this speed.
    expected = np.floor((0.1 + 50 * latch) % 1 * 2**19)
    found = np.array([frame.position for frame in truth.frames])
    assert set((found - expected) % 2**19) <= {0, 1}


def test_latency_makes_the_position_older() -> None:
    """40 us at 50 turns/s is 0.002 turns. Source: exact arithmetic."""
    now = simulate(BOARD, Scenario(motion=motion.constant(3000), duration_s=0.01))
    late = simulate(BOARD, Scenario(motion=motion.constant(3000), duration_s=0.01, latency_s=40e-6))
    lag = [a.angle_turns - b.angle_turns for a, b in zip(now.truth.frames, late.truth.frames, strict=True)]
    assert lag == pytest.approx([0.002] * len(lag), abs=1e-12)
    assert np.array_equal(now.lines["A"].times, late.lines["A"].times)


def test_count_and_position_tell_the_same_angle() -> None:
    """Without offset and latency both lie within one count (and one serial step) of each other. Source: definition."""
    truth = simulate(BOARD, Scenario(motion=motion.sway(1.3, 20), duration_s=0.1)).truth
    gap = np.array([frame.angle_turns - (frame.counted_turns or 0.0) for frame in truth.frames])
    assert gap.min() >= -1e-9
    assert gap.max() <= 1 / 4096 + 1e-9


def test_many_frames_are_whole_and_numbered() -> None:
    """20 000 frames at 16 kHz within 1.25 s and a little. Source: exact arithmetic."""
    made = simulate(BOARD, Scenario(motion=motion.constant(600), duration_s=1.26))
    assert len(made.truth.frames) == 1.26 * 16000
    assert made.truth.cut_frames == 0
    assert made.lines["MA"].times.size == 2 * (5 + 27) * len(made.truth.frames)


@pytest.mark.parametrize(("cut_start", "cut_end", "cut"), [(True, False, 1), (False, True, 1), (True, True, 2)])
def test_frames_cut_by_the_ends_are_not_among_the_frames(cut_start: bool, cut_end: bool, cut: int) -> None:
    made = simulate(BOARD, Scenario(duration_s=0.01, cut_start=cut_start, cut_end=cut_end))
    assert made.truth.cut_frames == cut
    first = made.lines["MA"].times[0] / 1e8
    assert (first < made.truth.frames[0].time_s) == cut_start
    last = made.lines["MA"].times[-1] / 1e8
    assert (last > made.truth.frames[-1].time_s + 32 * 0.5e-6) == cut_end


def test_a_time_axis_that_begins_below_zero() -> None:
    """The same capture, 2.5 ms earlier. Source: shift of the axis."""
    plain, early = (simulate(BOARD, Scenario(duration_s=0.01, start_time_s=start)) for start in (0.0, -2.5e-3))
    assert early.span().start == -250_000
    assert np.array_equal(early.lines["Z"].times, plain.lines["Z"].times - 250_000)
    assert early.truth.frames[3].latch_s == pytest.approx(plain.truth.frames[3].latch_s - 2.5e-3, abs=1e-12)


def test_edges_are_floored_onto_the_grid() -> None:
    """At 24 MHz (41.67 ns) the clock's first edge, at a quarter of 62.5 us, falls into sample 375; the edges after it
    into floor(24 (15.625 + 0.25 k)). Source: exact arithmetic."""
    made = simulate(BOARD, Scenario(duration_s=0.01, sample_rate_hz=24e6))
    assert made.lines["MA"].times[:8].tolist() == [24 * (15625 + 250 * k) // 1000 for k in range(8)]


def test_complement_is_the_line_turned_over() -> None:
    sheet = Sheet(lines={**BOARD.lines, "data_n": "SLO-"}, serial=BOARD.serial, incremental=BOARD.incremental)
    made = simulate(sheet, Scenario(duration_s=0.01, complements=("a",)))
    for line, complement in (("SLO", "SLO-"), ("A", "A_n")):
        assert np.array_equal(made.lines[line].times, made.lines[complement].times)
        assert made.lines[line].initial != made.lines[complement].initial


def test_lines_that_the_sheet_leaves_out_are_not_captured() -> None:
    sheet = Sheet(lines={"a": "A", "b": "B"}, serial=None, incremental=BOARD.incremental)
    assert list(simulate(sheet, Scenario(duration_s=0.01)).lines) == ["A", "B"]


def test_sign_of_life_counts_frames_and_wraps() -> None:
    """A counter of 3 bits: 0 to 7 and again. Source: definition."""
    serial = Serial(interface="biss-c", fields=(Field(name="life", bits=3), *FIELDS))
    made = simulate(Sheet(serial=serial), Scenario(duration_s=0.002))
    assert made.fields["life"][:10].tolist() == [0, 1, 2, 3, 4, 5, 6, 7, 0, 1]


@settings(max_examples=25, deadline=None)
@given(
    kind=st.sampled_from(sorted(set(FAULTS) - {"time_reversal", "undersampled"})),
    rate=st.sampled_from([100e6, 24e6, 12.5e6]),
)
def test_every_line_is_one_that_an_analyser_can_show(kind: str, rate: float) -> None:
    """Edges rise strictly (one level a sample), lie inside the capture, and change the level each time."""
    fields = (*FIELDS[:3], Field(name="life", bits=4), Field(name="fixed", bits=2, value=1), FIELDS[3])
    fields = (*fields[:-1], Field(name="parity", bits=1), fields[-1])
    sheet = Sheet(
        lines={**BOARD.lines, "a_n": "A-"},
        serial=Serial(interface="biss-c", fields=fields),
        incremental=BOARD.incremental,
    )
    fault = Fault(kind, None if kind in SETTINGS else 0.02)
    made = simulate(sheet, Scenario(duration_s=0.15, sample_rate_hz=rate, motion=motion.constant(900), faults=(fault,)))
    span = made.span()
    for edges in span.lines.values():
        assert np.all(np.diff(edges.times) > 0)
        assert np.all((edges.times > span.start) & (edges.times < span.stop))
        assert np.array_equal(edges.levels, Edges.from_toggles(edges.initial, edges.times).levels)


@pytest.mark.parametrize(
    ("scenario", "column"),
    [
        (Scenario(duration_s=0.0), "duration_s"),
        (Scenario(clock_hz=-1.0), "clock_hz"),
        (Scenario(cdm="012"), "cdm"),
        (Scenario(eccentricity_deg=11), "eccentricity_deg"),
        (Scenario(sample_rate_hz=33333333.123), "sample_rate_hz"),
        (Scenario(faults=(Fault("frame_shorter"),)), "faults[0].kind"),
        (Scenario(faults=(Fault("frame_short", 0.01, level=1),)), "faults[0].level"),
        (Scenario(faults=(Fault("frame_short", 5.0),)), "time_s"),
        (Scenario(faults=(Fault("latency_high", 0.01),)), "faults[0].time_s"),
        (Scenario(faults=(Fault("time_gap", 5.0),)), "time_s"),
        (Scenario(faults=(Fault("pair_mismatch", 0.01),)), "complements"),
        (Scenario(faults=(Fault("life_break", 0.01),)), "serial.fields"),
    ],
)
def test_what_cannot_be_is_refused(scenario: Scenario, column: str) -> None:
    with pytest.raises(InputError) as refused:
        simulate(BOARD, scenario)
    assert refused.value.column == column
