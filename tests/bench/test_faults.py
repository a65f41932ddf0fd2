"""Every kind of finding can be made; each does what its name says, where it says, and nothing else.

The board: BiSS C at 2 MHz and 16 kHz with every kind of field, and A/B/Z with 4096 counts a turn at 1200 rpm, so a
count takes 12.2 us and a turn 50 ms. One tick is 10 ns. Figures without a source are worked out from these.
"""

from typing import Any

import anycrc
import numpy as np
import pytest
from bitarray import bitarray

from decode.bench import motion
from decode.bench.board import Fault, Scenario, Simulation, simulate
from decode.bench.faults import FAULTS, SETTINGS
from decode.bench.truth import FaultTruth
from decode.rules.kinds import KINDS
from decode.sheet import Field, Incremental, Serial, Sheet
from decode.spans import Edges, IntArray

FIELDS = (
    Field(name="position", bits=19),
    Field(name="error", bits=1),
    Field(name="warning", bits=1),
    Field(name="life", bits=6),
    Field(name="fixed", bits=2, value=1),
    Field(name="parity", bits=1, covers=("position",)),
    Field(name="crc", bits=6, polynomial=0x43, inverted=True),
)
LINES: dict[str, str | int] = {"clock": "MA", "data": "SLO", "a": "A", "b": "B", "index": "Z"}
INCREMENTAL = Incremental(cycles_per_turn=1024, index_width_counts=1, index_states="a=1 b=1")
BISS = Sheet(lines=LINES, serial=Serial(interface="biss-c", fields=FIELDS), incremental=INCREMENTAL)
SSI_FIELDS = (Field(name="turns", bits=4), Field(name="position", bits=13))
SSI = Sheet(lines=LINES, serial=Serial(interface="ssi", fields=SSI_FIELDS), incremental=INCREMENTAL)
CLEAN = Scenario(motion=motion.constant(1200), duration_s=0.2)
WORD = 36
CLOCK, FRAME = 50, 6250
AT = 0.031
FIRST = 496  # the first frame after 31 ms: the n-th begins at (n + 1/4) 62.5 us


def make(kind: str, sheet: Sheet = BISS, at: float | None = AT, **keys: Any) -> tuple[Simulation, FaultTruth]:
    made = simulate(sheet, Scenario(motion=CLEAN.motion, duration_s=0.2, faults=(Fault(kind, at, **keys),)))
    (fault,) = made.truth.faults
    assert fault.kind == kind
    return made, fault


@pytest.fixture(scope="module")
def clean() -> Simulation:
    return simulate(BISS, CLEAN)


def changed(one: Edges, other: Edges) -> IntArray:
    """The edges that only one of the two has."""
    return np.setxor1d(one.times, other.times)


def within(simulation: Simulation, line: str, frame: int) -> Edges:
    """A line's edges from a frame's first clock edge to just before the next frame's."""
    start, stop = (round(simulation.truth.frames[n].time_s / 1e-8) for n in (frame, frame + 1))
    return simulation.lines[line].between(start, stop)


def word(simulation: Simulation, frame: int) -> str:
    """The word as read: the level half a clock after each of the rising edges 4 to 39 (no busy clock)."""
    start = round(simulation.truth.frames[frame].time_s / 1e-8)
    at = start + CLOCK // 2 + (4 + np.arange(WORD)) * CLOCK + CLOCK // 2
    return "".join(map(str, simulation.lines["SLO"].level_at(at).tolist()))


def crc_fits(text: str) -> bool:
    """Source: the library anycrc, polynomial 0x43 inverted."""
    return anycrc.CRC(6, 0x03, 0, False, False, 0x3F).calc_bits(bitarray(text[:-6])) == int(text[-6:], 2)


def counted(simulation: Simulation) -> tuple[int, int]:
    """(net counts, steps of two) of the A/B lines, state by state. Source: the sequence 00 10 11 01."""
    a, b = simulation.lines["A"], simulation.lines["B"]
    at = np.unique(np.concatenate([[0], a.times, b.times]))
    place = np.array([0, 3, 1, 2])[2 * a.level_at(at) + b.level_at(at)]
    steps = np.diff(place) % 4
    return int(np.sum(steps == 1) - np.sum(steps == 3)), int(np.sum(steps == 2))


def pulses(edges: Edges) -> IntArray:
    """(m, 2) from when to when a line is high; it begins and ends low here."""
    return edges.times.reshape(-1, 2)


def test_there_is_one_of_every_kind() -> None:
    assert set(FAULTS) == set(KINDS)


# kind, parameters: the lines it changes, and how long (s) the change lasts; None: to the end.
LOCAL = [
    ("illegal_transition", {}, "AB", 20e-6),
    ("turn_count_wrong", {}, "AB", 60e-6),
    ("turn_count_wrong", {"counts": 4}, "AB", 550e-6),
    ("index_missing", {}, "Z", 15e-6),
    ("index_extra", {}, "Z", 15e-6),
    ("index_misplaced", {}, "Z", 120e-6),
    ("index_width", {}, "Z", 40e-6),
    ("edge_too_close", {}, "AB", 15e-6),
    ("frame_missing", {}, ["MA", "SLO"], None),  # the sign-of-life counter lags from then on
    ("frame_short", {}, ["MA", "SLO"], 62.5e-6),
    ("frame_long", {}, ["MA", "SLO"], 62.5e-6),
    ("clock_glitch", {}, ["MA"], 0.1e-6),
    ("clock_glitch", {"seen": True}, ["MA", "SLO"], 20e-6),
    ("timeout_short", {}, ["MA", "SLO"], None),
    ("offset_step", {}, ["SLO"], None),
    ("position_jump", {}, ["SLO"], 20e-6),
    ("position_stale", {}, ["SLO"], 500e-6),
    ("error_flag", {}, ["SLO"], 20e-6),
    ("warning_flag", {}, ["SLO"], 20e-6),
    ("life_break", {}, ["SLO"], None),
    ("crc_mismatch", {}, ["SLO"], 1e-6),
    ("parity_mismatch", {}, ["SLO"], 1e-6),
    ("fixed_mismatch", {}, ["SLO"], 20e-6),
    ("no_acknowledge", {}, ["SLO"], 62.5e-6),
    ("no_start_bit", {}, ["SLO"], 62.5e-6),
    ("setup_violation", {}, ["SLO"], 62.5e-6),
    ("line_stuck", {}, "B", None),
    ("data_stuck", {}, ["SLO"], 190e-6),
    ("glitch", {}, "A", 0.1e-6),
]


@pytest.mark.parametrize(("kind", "keys", "lines", "lasts"), LOCAL)
def test_a_fault_changes_its_lines_at_its_time_alone(
    kind: str, keys: dict[str, Any], lines: str | list[str], lasts: float | None, clean: Simulation
) -> None:
    """Held against the same capture without it. The stated time lies within one frame or turn of the wanted one."""
    made, fault = make(kind, **keys)
    turn, frame = 0.05, 62.5e-6
    assert AT - frame <= fault.time_s <= AT + (turn if kind.startswith(("index", "turn")) else 3 * frame)
    differences = {name: changed(edges, clean.lines[name]) for name, edges in made.lines.items()}
    assert {name for name, difference in differences.items() if difference.size} <= set(lines)
    difference = np.concatenate(list(differences.values()))
    spread = (difference.max() - difference.min()) * 1e-8
    assert (spread <= lasts) if lasts is not None else (spread > 0.1)
    # A missed edge or a moved index shows up to nine counts before the instant it is moved to.
    assert difference.min() * 1e-8 >= fault.time_s - 120e-6


def test_local_faults_are_all_in_the_table() -> None:
    elsewhere = {"pair_mismatch", "time_gap", "time_reversal"}
    assert {kind for kind, *_ in LOCAL} == set(FAULTS) - set(SETTINGS) - elsewhere


# -- A, B and index -------------------------------------------------------------------------------------------------


def test_illegal_transition_is_one_step_of_two(clean: Simulation) -> None:
    assert counted(clean) == (clean.truth.net_counts, 0)
    made, fault = make("illegal_transition")
    assert counted(made)[1] == 1
    together = np.intersect1d(made.lines["A"].times, made.lines["B"].times)
    assert together.tolist() == [round(fault.time_s / 1e-8)]


@pytest.mark.parametrize("counts", [-8, -4, 4, 8])
def test_turn_count_wrong_shifts_the_count_for_good(counts: int, clean: Simulation) -> None:
    """Whole cycles, without an impossible step; the index stays at its angle."""
    made, _ = make("turn_count_wrong", counts=counts)
    assert counted(made) == (counted(clean)[0] + counts, 0)
    assert made.truth.net_counts == (clean.truth.net_counts or 0) + counts
    assert np.array_equal(made.lines["Z"].times, clean.lines["Z"].times)


def test_index_missing(clean: Simulation) -> None:
    made, fault = make("index_missing")
    before, after = pulses(clean.lines["Z"]), pulses(made.lines["Z"])
    assert len(after) == len(before) - 1 == made.truth.index_pulses
    assert round(fault.time_s / 1e-8) in before[:, 0]


def test_index_extra(clean: Simulation) -> None:
    """One more, of the same width and in the state A = B = 1, far from the others."""
    made, _ = make("index_extra")
    (extra,) = [pulse for pulse in pulses(made.lines["Z"]) if pulse[0] not in clean.lines["Z"].times]
    width = np.diff(pulses(clean.lines["Z"]), axis=1).mean()
    assert np.diff(extra)[0] == pytest.approx(width, abs=2)
    middle = np.array([extra.sum() // 2])
    assert made.lines["A"].level_at(middle) == made.lines["B"].level_at(middle) == 1
    assert np.abs(clean.lines["Z"].times - extra[0]).min() > 200_000


@pytest.mark.parametrize("counts", [-12, 8])
def test_index_misplaced(counts: int, clean: Simulation) -> None:
    """So many counts of 12.207 us later, of the same width."""
    made, _ = make("index_misplaced", counts=counts)
    shift = pulses(made.lines["Z"]) - pulses(clean.lines["Z"])
    assert np.unique(np.flatnonzero(shift.any(axis=1))).size == 1
    assert shift[shift.any(axis=1)][0] == pytest.approx([counts * 1220.7] * 2, abs=2)


def test_index_width(clean: Simulation) -> None:
    made, _ = make("index_width", counts=2)
    width = np.diff(pulses(made.lines["Z"]), axis=1).ravel()
    assert sorted(width)[-2:] == pytest.approx([1220.7, 3 * 1220.7], abs=2)


@pytest.mark.parametrize("share", [0.05, 0.07, 0.10])
def test_edge_too_close(share: float) -> None:
    made, _ = make("edge_too_close", share=share)
    edges = np.sort(np.concatenate([made.lines["A"].times, made.lines["B"].times]))
    assert np.diff(edges).min() == pytest.approx(share * 1220.7, abs=2)
    assert counted(made)[1] == 0


def test_glitch_is_a_short_pulse_in_mid_state(clean: Simulation) -> None:
    made, fault = make("glitch", role="b", width_s=80e-9)
    added = changed(made.lines["B"], clean.lines["B"])
    assert np.diff(added).tolist() == [8]
    assert added[0] == round(fault.time_s / 1e-8)
    edges = np.concatenate([clean.lines["A"].times, clean.lines["B"].times])
    assert np.abs(edges - added.mean()).min() == pytest.approx(610, abs=10)
    assert counted(made) == counted(clean)


def test_line_stuck_throughout() -> None:
    made, fault = make("line_stuck", at=None, role="a", level=1)
    assert (made.lines["A"].initial, made.lines["A"].times.size) == (1, 0)
    assert (fault.time_s, fault.line) == (0.0, "A")


# -- frames ---------------------------------------------------------------------------------------------------------


def test_frame_missing(clean: Simulation) -> None:
    made, fault = make("frame_missing", frames=2)
    assert len(made.truth.frames) == len(clean.truth.frames) - 2
    assert (made.truth.missing, fault.frame) == (2, None)
    assert fault.time_s == clean.truth.frames[FIRST].time_s
    assert made.truth.frames[FIRST].time_s == clean.truth.frames[FIRST + 2].time_s
    # The encoder was not asked, so its sign-of-life counter did not go on.
    assert made.fields["life"][FIRST] == clean.fields["life"][FIRST]


@pytest.mark.parametrize(("kind", "clocks"), [("frame_short", -3), ("frame_long", 2)])
def test_number_of_clocks(kind: str, clocks: int) -> None:
    made, fault = make(kind, clocks=abs(clocks))
    assert fault.frame == FIRST
    assert within(made, "MA", FIRST).times.size == 2 * (5 + WORD + clocks)
    assert within(made, "MA", FIRST + 1).times.size == 2 * (5 + WORD)
    assert (made.truth.frames[FIRST].raw is None) == (clocks < 0)


def test_no_acknowledge() -> None:
    made, _ = make("no_acknowledge")
    assert (within(made, "SLO", FIRST).initial, within(made, "SLO", FIRST).times.size) == (1, 0)


def test_no_start_bit() -> None:
    """Low from the acknowledge (second rising edge, 75 ticks, and 110 ns) to the time-out (40 clocks and a half later,
    20 us): 25 + 40 * 50 + 2000."""
    made, _ = make("no_start_bit")
    start = round(made.truth.frames[FIRST].time_s / 1e-8)
    low = within(made, "SLO", FIRST).times - start
    assert low == pytest.approx([75 + 11, 25 + 40 * 50 + 2000], abs=1)


def test_crc_mismatch(clean: Simulation) -> None:
    """Bits 3 and 5 arrive wrong: the truth's word is the one on the line, its position the one sent."""
    made, _ = make("crc_mismatch", bits=(3, 5))
    good, bad = word(clean, FIRST), word(made, FIRST)
    assert [bit for bit in range(WORD) if good[bit] != bad[bit]] == [3, 5]
    assert crc_fits(good)
    assert not crc_fits(bad)
    frame = made.truth.frames[FIRST]
    assert (frame.raw, frame.kind) == (f"{int(bad, 2):09x}", "crc_mismatch")
    assert frame.position == clean.truth.frames[FIRST].position == int(good[:19], 2)


def test_parity_mismatch() -> None:
    made, _ = make("parity_mismatch")
    assert word(made, FIRST)[:19].count("1") % 2 != int(word(made, FIRST)[29])
    assert word(made, FIRST + 1)[:19].count("1") % 2 == int(word(made, FIRST + 1)[29])


def test_fixed_mismatch_keeps_the_crc() -> None:
    made, _ = make("fixed_mismatch")
    assert word(made, FIRST)[27:29] == "00"
    assert word(made, FIRST + 1)[27:29] == "01"
    assert crc_fits(word(made, FIRST))


def test_fixed_mismatch_without_a_fixed_field_is_a_wrong_copy() -> None:
    serial = Serial(interface="ssi", fields=SSI_FIELDS, copies=2)
    sheet = Sheet(lines=LINES, serial=serial, incremental=INCREMENTAL)
    made, fault = make("fixed_mismatch", sheet)
    assert fault.frame is not None
    start = round(made.truth.frames[fault.frame].time_s / 1e-8)
    sampled = made.lines["SLO"].level_at(start + 100 + 100 * np.arange(35))
    assert np.sum(sampled[:17] != sampled[18:]) == 1


@pytest.mark.parametrize(("kind", "place"), [("error_flag", 19), ("warning_flag", 20)])
def test_flags_are_low_active_and_under_the_crc(kind: str, place: int) -> None:
    made, fault = make(kind, frames=3)
    assert fault.frames == [FIRST, FIRST + 1, FIRST + 2]
    assert [word(made, frame)[place] for frame in range(FIRST - 1, FIRST + 4)] == ["1", "0", "0", "0", "1"]
    assert crc_fits(word(made, FIRST))


def test_position_jump_is_a_sound_word_elsewhere(clean: Simulation) -> None:
    """0.37 of 524288 steps is 193987."""
    made, _ = make("position_jump")
    assert crc_fits(word(made, FIRST))
    jump = int(word(made, FIRST)[:19], 2) - int(word(clean, FIRST)[:19], 2)
    assert jump % 2**19 == 193987
    assert word(made, FIRST + 1) == word(clean, FIRST + 1)


def test_position_stale_repeats_the_whole_word(clean: Simulation) -> None:
    made, fault = make("position_stale", frames=4)
    assert fault.frames == list(range(FIRST, FIRST + 4))
    assert {word(made, frame) for frame in range(FIRST - 1, FIRST + 4)} == {word(clean, FIRST - 1)}
    assert word(made, FIRST + 4) == word(clean, FIRST + 4)


@pytest.mark.parametrize("counts", [1, -1])
def test_life_break_goes_on_from_there(counts: int) -> None:
    made, _ = make("life_break", counts=counts)
    life = np.diff(made.fields["life"].astype(np.int64)) % 64
    assert life[FIRST - 1] == 1 + counts
    assert set(np.delete(life, FIRST - 1)) == {1}


def test_data_stuck_from_pause_to_pause() -> None:
    made, fault = make("data_stuck", frames=2)
    assert fault.frames == [FIRST, FIRST + 1]
    data, frames = made.lines["SLO"], made.truth.frames
    start, stop = (round(frames[frame].time_s / 1e-8) for frame in (FIRST, FIRST + 2))
    inside = data.between(start - 1500, stop)
    assert inside.levels.tolist() == [0, 1]
    assert inside.times[0] < start
    assert inside.times[1] > start + FRAME + 41 * CLOCK
    assert frames[FIRST].raw is None


def test_clock_glitch_in_the_capture_alone(clean: Simulation) -> None:
    """40 ns beside a true edge; the word is whole."""
    made, _ = make("clock_glitch")
    added = changed(made.lines["MA"], clean.lines["MA"])
    assert np.diff(added).tolist() == [4]
    assert word(made, FIRST) == word(clean, FIRST)


def test_clock_glitch_that_the_encoder_takes(clean: Simulation) -> None:
    """From then on the word comes one bit early, with the stop bit after it; before, it is as it was."""
    made, _ = make("clock_glitch", seen=True)
    good, bad = word(clean, FIRST), word(made, FIRST)
    # Half of 41 clocks: behind the falling edge of clock 20. Rising edge 20 brings word bit 16, by now bit 17.
    assert bad == good[:16] + good[17:] + "0"


def test_setup_violation_still_reads_right(clean: Simulation) -> None:
    """Edges of the word 30 ns before the falling edge that reads them: 250 - 30 = 220 ns after the rising one."""
    made, _ = make("setup_violation", margin_s=30e-9)
    assert word(made, FIRST) == word(clean, FIRST)
    start = round(made.truth.frames[FIRST].time_s / 1e-8)
    after = (within(made, "SLO", FIRST).times - start - CLOCK // 2) % CLOCK
    # Acknowledge, start and CDS are on time; the last edge is the end of the time-out.
    assert set(after[:3]) <= {11, 12}
    assert set(after[3:-1]) <= {22, 23}


def test_timeout_short_on_biss_finds_the_line_still_low() -> None:
    """Half of the time-out, 10 us, before its end; the encoder sends only lows. Later frames keep their rhythm."""
    made, fault = make("timeout_short")
    assert fault.frame == FIRST
    frames = made.truth.frames
    start = round(frames[FIRST].time_s / 1e-8)
    assert made.lines["SLO"].level_at(np.array([start, start + 1000])).tolist() == [0, 0]
    last_rising = round(frames[FIRST - 1].time_s / 1e-8) + 25 + 40 * CLOCK
    assert start - last_rising == pytest.approx(1000, abs=2)
    assert frames[FIRST].raw is None
    assert frames[FIRST + 1].time_s - frames[FIRST].time_s == pytest.approx(62.5e-6, abs=2e-8)


def test_timeout_short_on_ssi_brings_the_same_word() -> None:
    """Before the monoflop has run out the register is not loaded again. Source: ring transmission of SSI."""
    made, fault = make("timeout_short", SSI)
    frame = fault.frame
    assert frame is not None
    frames = made.truth.frames
    assert frames[frame].raw == frames[frame - 1].raw
    assert frames[frame + 1].raw != frames[frame].raw
    starts = [round(frames[n].time_s / 1e-8) for n in (frame - 1, frame)]
    first, second = (made.lines["SLO"].level_at(start + 100 + 100 * np.arange(18)).tolist() for start in starts)
    assert first == second
    assert made.lines["SLO"].level_at(np.array([starts[1]])) == 0


def test_pair_mismatch_for_its_duration() -> None:
    sheet = Sheet(lines={**LINES, "a_n": "A-"}, serial=BISS.serial, incremental=INCREMENTAL)
    made, fault = make("pair_mismatch", sheet, duration_s=20e-6)
    every = np.arange(3_090_000, 3_110_000)
    alike = every[made.lines["A"].level_at(every) == made.lines["A-"].level_at(every)]
    assert (alike[0], alike[-1]) == (3_100_000, 3_101_999)
    assert fault.line == "A"


# -- whole captures -------------------------------------------------------------------------------------------------


def test_undersampled_below_four_a_clock() -> None:
    made, _ = make("undersampled", at=None)
    assert 2 <= 0.5e-6 / float(made.tick) < 4


def test_undersampled_states_where_there_is_no_clock() -> None:
    """A state takes 12.2 us."""
    made, _ = make("undersampled", Sheet(lines={"a": "A", "b": "B"}, incremental=INCREMENTAL), at=None)
    assert 2 <= 12.2e-6 / float(made.tick) < 4


def test_direction_opposed_swaps_a_and_b(clean: Simulation) -> None:
    made, _ = make("direction_opposed", at=None)
    assert np.array_equal(made.lines["A"].times, clean.lines["B"].times)
    assert counted(made) == (-counted(clean)[0], 0)
    assert (made.truth.net_counts, made.truth.direction) == (counted(made)[0], -1)


def slope(simulation: Simulation) -> float:
    """Serial turns a counted turn, over the whole capture."""
    serial = np.unwrap([frame.position or 0 for frame in simulation.truth.frames], period=2**19) / 2**19
    shaft = [frame.counted_turns for frame in simulation.truth.frames]
    return float(np.polyfit(np.array(shaft, np.float64), serial, 1)[0])


def test_scale_wrong(clean: Simulation) -> None:
    made, _ = make("scale_wrong", at=None)
    assert slope(clean) == pytest.approx(1, abs=1e-4)
    assert slope(made) == pytest.approx(15 / 16, abs=1e-4)


def test_latency_high(clean: Simulation) -> None:
    """100 us at 20 turns/s is 0.002 turns, 1048.6 steps behind."""
    made, _ = make("latency_high", at=None)
    pairs = zip(made.truth.frames, clean.truth.frames, strict=True)
    behind = {((b.position or 0) - (a.position or 0)) % 2**19 for a, b in pairs}
    assert behind <= {1048, 1049}
    assert made.truth.latency_s == 100e-6


def test_residual_high(clean: Simulation) -> None:
    """A sine of 1 degree over the turn between serial position and count."""
    made, _ = make("residual_high", at=None, amplitude_deg=1.0)
    error = [a.angle_turns - b.angle_turns for a, b in zip(made.truth.frames, clean.truth.frames, strict=True)]
    assert np.max(np.abs(error)) * 360 == pytest.approx(1.0, abs=0.01)
    assert np.array_equal(made.lines["A"].times, clean.lines["A"].times)


def test_offset_step_stays(clean: Simulation) -> None:
    """8 counts of 4096 are 1024 of 524288 steps."""
    made, fault = make("offset_step")
    step = [
        ((a.position or 0) - (b.position or 0)) % 2**19
        for a, b in zip(made.truth.frames, clean.truth.frames, strict=True)
    ]
    assert set(step[:FIRST]) == {0}
    assert set(step[FIRST:]) == {1024}
    assert (fault.frame, fault.frames) == (FIRST, [])


def test_time_gap_takes_its_frames_with_it(clean: Simulation) -> None:
    """1 ms is 16 frames; those that its borders cut are gone too, but their bursts are counted as cut."""
    made, _ = make("time_gap", duration_s=1e-3)
    gone = {frame.time_s for frame in clean.truth.frames} - {frame.time_s for frame in made.truth.frames}
    assert {time for time in gone if 0.0311 < time < 0.0319} < gone
    assert len(gone) in (16, 17)


def test_several_faults_in_one_capture() -> None:
    faults = (Fault("frame_long", 0.05), Fault("index_missing", 0.06), Fault("frame_short", 0.02))
    made = simulate(BISS, Scenario(motion=CLEAN.motion, duration_s=0.2, faults=faults))
    assert [fault.kind for fault in made.truth.faults] == ["frame_short", "frame_long", "index_missing"]
    kinds = [frame.kind for frame in made.truth.frames if frame.kind is not None]
    assert kinds == ["frame_short", "frame_long"]
