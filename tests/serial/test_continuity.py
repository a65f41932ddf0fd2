"""From one frame to the next: cadence, sign of life, standing still, jumping, and a data line that died."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from tables import table

from decode.serial.continuity import absorbed, cadence, jumps_alone, life_breaks, stale_frames, wrapped_steps
from decode.serial.frames import CODE, FRAME_KINDS, Frames
from decode.sheet import Field, Serial
from decode.spans import BoolArray, FloatArray, IntArray

NONE = np.empty(0, np.int64)


def positions(
    at: list[int] | IntArray, *, bits: int = 12, times: list[int] | IntArray | None = None, **more: object
) -> Frames:
    """Frames of a position alone, 1000 ticks apart if not told."""
    told = np.asarray(at, np.int64) % (1 << bits)
    serial = Serial(interface="ssi", fields=(Field(name="position", bits=bits),))
    return table(serial, np.arange(told.size) * 1000 if times is None else times, told, **more)


def true_rows(rows: BoolArray) -> list[int]:
    found: list[int] = np.flatnonzero(rows).tolist()
    return found


# ---- cadence ------------------------------------------------------------------------------------------------------


def due(times: list[int], stated: float | None = None, **more: object) -> list[int]:
    found: list[int] = cadence(positions([0] * len(times), times=times, **more), stated).due.tolist()
    return found


STEADY = [1000 * number for number in range(20)]


@pytest.mark.parametrize("stated", [None, 1000.0])
def test_frames_that_did_not_come(stated: float | None) -> None:
    """Numbers 5 and 9, 10 of a steady row are gone: told when each was due."""
    times = [time for time in STEADY if time not in (5000, 9000, 10000)]
    found = cadence(positions([0] * len(times), times=times), stated)
    assert found.due.tolist() == [5000, 9000, 10000]
    assert found.after.tolist() == [4, 7, 7]
    assert (found.period, set(found.steps.tolist())) == (1000, {1000})


@pytest.mark.parametrize(("late", "missing"), [(500, []), (501, [9750])])
def test_half_a_period_late_is_late_and_more_is_a_frame_missing(late: int, missing: list[int]) -> None:
    """From 9000 to 10500 is one and a half periods; one tick more and a frame was due halfway."""
    times = [*STEADY[:10], *[time + late for time in STEADY[10:]]]
    assert due(times, 1000.0) == missing


def test_irregular_polling_misses_nothing() -> None:
    """Pauses of 1 to 7 ms as a program takes them have no rhythm that could be broken."""
    pauses = np.random.default_rng(3).integers(1000, 7000, 200)
    assert due(np.cumsum(pauses).tolist()) == []


def test_reading_in_groups_misses_nothing() -> None:
    """Five frames 1000 ticks apart, then a rest of ten: the master does so by itself."""
    assert due([14_000 * group + 1000 * frame for group in range(10) for frame in range(5)]) == []


@pytest.mark.parametrize("times", [[], [0], [0, 1000], [0, 1000, 5000]])
def test_too_few_frames_have_no_rhythm_of_their_own(times: list[int]) -> None:
    assert due(times) == []
    assert cadence(positions([0] * len(times), times=times), None).period is None


def test_a_stated_rate_holds_from_the_second_frame_on() -> None:
    assert due([0, 5000], 1000.0) == [1000, 2000, 3000, 4000]


def test_nothing_is_due_while_the_capture_is_broken() -> None:
    times = [*STEADY[:10], *[time + 50_000 for time in STEADY[10:]]]
    assert due(times, 1000.0, segment=[0] * 10 + [1] * 10) == []


# ---- sign of life -------------------------------------------------------------------------------------------------


def breaks(life: list[int], bits: int = 4, missing_after: list[int] | None = None, **more: object) -> list[int]:
    serial = Serial(interface="ssi", fields=(Field(name="life", bits=bits),))
    frames = table(serial, np.arange(len(life)) * 1000, life, **more)
    return true_rows(life_breaks(frames, serial, np.array(missing_after or [], np.int64)))


@pytest.mark.parametrize(
    ("bits", "life"),
    [
        (4, [*range(16), *range(16)]),
        (4, [*range(1, 16), *range(1, 16)]),
        (6, [*range(60, 64), *range(5)]),
        (6, [*range(60, 64), *range(1, 5)]),
        (2, [0, 1, 2, 3, 0, 1]),
        (2, [1, 2, 3, 1, 2, 3]),
        (1, [0, 1, 0, 1]),
    ],
)
def test_both_ways_to_wrap(bits: int, life: list[int]) -> None:
    """With the value 0 and without it: sources disagree, so either is right."""
    assert breaks(life, bits) == []


@pytest.mark.parametrize(
    ("life", "broken"),
    [
        ([1, 2, 3, 3, 4, 5], [3]),
        ([1, 2, 3, 5, 6, 7], [3]),
        ([1, 2, 3, 2, 3, 4], [3]),
        ([1, 2, 3, 9, 5, 6], [3]),
        ([1, 2, 3, 4, 5, 9], [5]),
        ([9, 2, 3, 4, 5, 6], [1]),
        ([1, 2, 9, 4, 9, 6, 7], [2, 4]),
    ],
)
def test_a_counter_that_does_not_go_on_by_one(life: list[int], broken: list[int]) -> None:
    """Repeated, skipped, gone back; a single wrong value is one break, not two."""
    assert breaks(life) == broken


@pytest.mark.parametrize(("bits", "broken"), [(1, [1]), (2, [1, 2]), (6, [1, 2])])
def test_a_counter_that_stands_still(bits: int, broken: list[int]) -> None:
    """Of one bit, the third is what it must be after the first."""
    assert breaks([1, 1, 1], bits) == broken


def test_frames_that_could_not_be_read_are_counted() -> None:
    """The third was not readable: from the second to the fourth it goes on by two."""
    assert breaks([1, 2, 0, 4, 5], usable=[True, True, False, True, True]) == []


@pytest.mark.parametrize(("life", "broken"), [([1, 2, 3, 4], []), ([1, 2, 4, 5], []), ([1, 2, 5, 6], [2])])
def test_a_skipped_cycle_may_or_may_not_have_been_counted(life: list[int], broken: list[int]) -> None:
    """One frame is missing after the second."""
    assert breaks(life, missing_after=[1]) == broken


def test_a_broken_capture_breaks_no_counter() -> None:
    assert breaks([1, 2, 9, 10], segment=[0, 0, 1, 1]) == []


def test_without_a_counter_nothing_breaks() -> None:
    serial = Serial(interface="ssi", fields=(Field(name="position", bits=4),))
    assert true_rows(life_breaks(table(serial, [0, 1], [3, 3]), serial, NONE)) == []


# ---- standing still -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("modulus", "position", "steps"),
    [(16, [14, 1], [3]), (16, [1, 14], [-3]), (16, [0, 8], [-8]), (16, [0, 7], [7]), (16, [9, 0], [7])],
)
def test_steps_go_the_short_way_round(modulus: int, position: list[int], steps: list[int]) -> None:
    """Half way round counts as backwards."""
    assert wrapped_steps(np.array(position), modulus).tolist() == steps


@pytest.mark.parametrize(("moved", "stale"), [(3.5, []), (3.51, [2])])
def test_a_position_that_stays_while_the_count_moves_on(moved: float, stale: list[int]) -> None:
    """A count is two steps: one and a half steps and a count are 3.5."""
    frames = positions([10, 20, 20, 30])
    told = np.array([10.0, 20.0, 20.0 + moved, 30.0])
    assert true_rows(stale_frames(frames, 4096, told, count_step=2.0)) == stale


def test_a_shaft_that_stands_repeats_its_position_rightly() -> None:
    still = positions([10, 20, 20, 20, 30, 40])
    assert true_rows(stale_frames(still, 4096, np.array([10.0, 20, 20, 20, 30, 40]))) == []


def test_a_count_that_is_not_known_says_nothing() -> None:
    assert true_rows(stale_frames(positions([10, 20, 20, 30]), 4096, np.full(4, np.nan))) == []


COURSE = list(range(0, 300, 10))


@pytest.mark.parametrize("length", [1, 2, 4])
@pytest.mark.parametrize("sense", [1, -1])
def test_without_a_count_the_position_must_catch_up(length: int, sense: int) -> None:
    """Ten steps a frame; some frames repeat the tenth, and the next is where the shaft would be by then."""
    course = [*COURSE[:11], *[COURSE[10]] * length, *COURSE[11 + length :]]
    frames = positions([sense * position for position in course])
    assert true_rows(stale_frames(frames, 4096, None)) == list(range(11, 11 + length))


def test_a_shaft_that_stops_and_goes_on_is_not_stale() -> None:
    """It goes on from where it stood."""
    frames = positions([*COURSE[:11], COURSE[10], COURSE[10], *COURSE[11:]])
    assert true_rows(stale_frames(frames, 4096, None)) == []


@pytest.mark.parametrize(("step", "stale"), [(2, []), (3, [11])])
def test_a_slow_shaft_may_well_repeat_its_position(step: int, stale: list[int]) -> None:
    """Three steps a frame are told, fewer are not."""
    course = [step * number for number in range(30)]
    course[11] = course[10]
    assert true_rows(stale_frames(positions(course), 4096, None)) == stale


def test_two_frames_taken_at_almost_the_same_time_are_not_stale() -> None:
    """Polled again after a twentieth of the usual time: a step of ten has not moved by one."""
    times = [1000 * number for number in range(30)]
    times[11] = times[10] + 50
    course = [round(time / 100) for time in times]
    course[11] = course[10]
    assert true_rows(stale_frames(positions(course, times=times), 4096, None)) == []


def test_no_run_is_stale_over_a_break() -> None:
    course = [*COURSE[:11], COURSE[10], *COURSE[12:]]
    for cut in (11, 12):
        frames = positions(course, segment=[0] * cut + [1] * (30 - cut))
        assert true_rows(stale_frames(frames, 4096, None)) == []


# ---- jumping ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("off", "jumped"), [(4, []), (5, [15]), (-5, [15]), (2000, [15])])
def test_a_frame_off_its_course(off: int, jumped: list[int]) -> None:
    """A deviation of more than four steps from between its neighbours, on a course without any."""
    course = COURSE.copy()
    course[15] += off
    assert true_rows(jumps_alone(positions(course), 4096)) == jumped


def test_a_position_that_slips_and_stays() -> None:
    """The first frame after the slip."""
    course = [*COURSE[:15], *[position + 500 for position in COURSE[15:]]]
    assert true_rows(jumps_alone(positions(course), 4096)) == [15]


@pytest.mark.parametrize("moduli", [1, 3])
def test_wrapping_is_no_jump(moduli: int) -> None:
    course = [100 * number for number in range(moduli * 41)]
    assert true_rows(jumps_alone(positions(course), 4096)) == []


@pytest.mark.parametrize("frames", [0, 1, 8])
def test_too_few_frames_to_tell(frames: int) -> None:
    course = COURSE[:frames]
    if frames:
        course[frames // 2] += 1000
    assert true_rows(jumps_alone(positions(course), 4096)) == []


def test_a_sudden_change_of_speed_is_no_jump() -> None:
    """From 0 to 100 steps a frame within one frame: the course bends one way only."""
    course = [0] * 15 + [100 * number for number in range(15)]
    assert true_rows(jumps_alone(positions(course), 4096)) == []


def test_a_sudden_reversal_is_no_jump() -> None:
    course = [100 * number for number in range(15)] + [1400 - 100 * number for number in range(15)]
    assert true_rows(jumps_alone(positions(course), 4096)) == []


def test_a_break_is_no_jump() -> None:
    """The shaft turned on meanwhile, how far is not known."""
    course = [*[100 * n for n in range(15)], *[100 * n + 1900 for n in range(15)]]
    times = [*range(0, 15_000, 1000), *range(90_000, 105_000, 1000)]
    frames = positions(course, times=times, segment=[0] * 15 + [1] * 15)
    assert true_rows(jumps_alone(frames, 4096)) == []


def test_a_long_pause_is_no_jump() -> None:
    """Within it the shaft went round more than once: 20 missing frames of 300 steps are 6000 of 4096."""
    times = [*range(0, 15_000, 1000), *range(35_000, 50_000, 1000)]
    course = [3 * time // 10 for time in times]
    assert true_rows(jumps_alone(positions(course, times=times), 4096)) == []


def motion(seconds: FloatArray, top: float, acceleration: float, kind: str) -> FloatArray:
    """Radians over time: a speed that swings as a sine, or goes between -top and top in ramps, with this steepest
    acceleration (rad/s2)."""
    if kind == "sine":
        rate = acceleration / top
        return np.asarray(-top / rate * np.cos(rate * seconds))
    ramp = 2 * top / acceleration
    phase = seconds % (4 * ramp)
    speed = np.interp(phase, [0, ramp, 2 * ramp, 3 * ramp, 4 * ramp], [-top, top, top, -top, -top])
    fine = np.concatenate([[0.0], np.cumsum((speed[1:] + speed[:-1]) / 2 * np.diff(seconds))])
    return np.asarray(fine)


@settings(max_examples=150, deadline=None)
@given(
    bits=st.integers(12, 20),
    rate=st.floats(1e3, 2e4),
    top=st.floats(0.5, 1000.0),
    acceleration=st.floats(1.0, 1e5),
    kind=st.sampled_from(["sine", "ramps"]),
    start=st.floats(0.0, 6.28),
    uneven=st.booleans(),
    seed=st.integers(0, 99),
)
def test_no_motion_of_a_real_shaft_jumps_or_stands(
    bits: int, rate: float, top: float, acceleration: float, kind: str, start: float, uneven: bool, seed: int
) -> None:
    """Whatever its speed, acceleration and resolution: up to 1e5 rad/s2, if a swing takes 20 frames or more."""
    assume(acceleration / top < 2 * np.pi * rate / 20)
    assume(top / rate < 2 * np.pi / 4)
    random = np.random.default_rng(seed)
    slots = np.arange(400.0) + (random.uniform(-0.3, 0.3, 400) if uneven else 0.0)
    seconds = np.sort(slots - slots.min()) / rate
    fine = np.sort(np.unique(np.concatenate([seconds, np.linspace(0, seconds[-1], 20_000)])))
    turned = np.interp(seconds, fine, start + motion(fine, top, acceleration, kind))
    times = np.rint(seconds * 1e9).astype(np.int64)
    at = np.floor(turned / (2 * np.pi) * (1 << bits)).astype(np.int64)
    frames = positions(at, bits=bits, times=times)
    assert true_rows(jumps_alone(frames, 1 << bits)) == []
    assert true_rows(stale_frames(frames, 1 << bits, None)) == []
    counted = np.floor(turned / (2 * np.pi) * 4096) * (1 << bits) / 4096
    assert true_rows(stale_frames(frames, 1 << bits, counted, (1 << bits) / 4096)) == []


# ---- a data line that died ----------------------------------------------------------------------------------------


def with_kinds(*names: str, quiet: list[bool] | None = None) -> Frames:
    n = len(names)
    return positions([0] * n, kind=[CODE[name] for name in names], quiet=[False] * n if quiet is None else quiet)


def names(frames: Frames) -> list[str]:
    return [FRAME_KINDS[code] for code in frames.kind]


def test_the_spoilt_frame_beside_stuck_data_counts_to_it() -> None:
    """On either side one, and no more; what came from elsewhere stays."""
    frames = absorbed(with_kinds("crc_mismatch", "crc_mismatch", "data_stuck", "position_jump", "", "crc_mismatch"))
    assert names(frames) == ["crc_mismatch", "data_stuck", "data_stuck", "data_stuck", "", "crc_mismatch"]
    assert frames.usable.tolist() == [True, False, True, False, True, True]


@pytest.mark.parametrize("kind", ["", "frame_long", "clock_glitch", "setup_violation", "life_break"])
def test_what_stuck_data_does_not_explain_stays(kind: str) -> None:
    assert names(absorbed(with_kinds(kind, "data_stuck"))) == [kind, "data_stuck"]


@pytest.mark.parametrize(("quiet", "kind"), [(True, "data_stuck"), (False, "position_stale")])
def test_a_word_that_was_never_sent(quiet: bool, kind: str) -> None:
    """It does not fit its neighbours, and the data line did not move in it."""
    assert names(absorbed(with_kinds("", "position_stale", "", quiet=[False, quiet, False])))[1] == kind
