"""Steps where speed or scale could stand for them, at the ends, several at once; and motions without any.

The construction is exact: a 13-bit serial word on 4096 counts slips by k words, which is k / 2 counts; or counts are
lost. 2000 frames a second for 0.2 s.
"""

import numpy as np
import pytest
from board_motions import TICK_S, Constant, Ramp, Rest, Sum, Sway, Swing, case

DURATION = 0.2
RATE = 2000
LATENCY = 20e-6
PLACES = [0.05, 0.25, 0.5, 0.75, 0.95]


def odd(at):
    """The speed rises through its mean where the step is: as much above it after, as below it before."""
    return Sum(Constant(50.0, 0.3), Swing(0.42, DURATION, at, quarter=2))


def even(at):
    """The speed is highest where the step is, and falls alike to either side."""
    return Sum(Constant(50.0, 0.3), Swing(0.42, DURATION, at, quarter=1))


SHAPES = {
    "odd": odd,
    "even": even,
    "ramp up": lambda at: Ramp(20, 60, DURATION),
    "ramp down": lambda at: Ramp(60, 20, DURATION),
    "steady": lambda at: Constant(50.0),
    "to and fro": lambda at: Swing(1.0, DURATION, at, quarter=1, start=5.0),
}


def slipped(motion, at, words, **more):
    """The serial word is `words` further from `at` (seconds) on: so the count is words / 2 short against it."""
    board = case(motion, DURATION, RATE, 13, latency_s=LATENCY, **more)
    later = board.time >= at / TICK_S
    board.position[later] = (board.position[later] + words) % 2**13
    return board


@pytest.mark.parametrize("part", PLACES)
@pytest.mark.parametrize("shape", SHAPES.values(), ids=SHAPES.keys())
def test_one_step_wherever_it_is(shape, part):
    """2 to 6 words (1 to 3 counts), and four lost counts: one step, in its place, and the latency is right."""
    at = part * DURATION
    boards = [(slipped(shape(at), at, words), -words / 2) for words in range(2, 7)]
    boards.append((case(shape(at), DURATION, RATE, 13, latency_s=LATENCY, lost=[(at, -4)]), -4))
    for board, size in boards:
        found = board.agree()
        assert found.steps.counts.tolist() == pytest.approx([size], abs=0.25)
        assert found.steps.after[0] == pytest.approx(np.searchsorted(board.time, at / TICK_S), abs=1)
        assert found.outliers.size == 0
        assert not found.scale_wrong
        if found.latency_s is None:
            assert shape is SHAPES["steady"]
        else:
            assert found.latency_s == pytest.approx(LATENCY, abs=3 * found.latency_uncertainty_s)


@pytest.mark.parametrize("part", PLACES)
@pytest.mark.parametrize("shape", SHAPES.values(), ids=SHAPES.keys())
def test_half_a_count_is_found_or_left_open(shape, part):
    """One word is half a count, at the edge of what is looked for: where it is not told, the latency's uncertainty
    holds what it would do."""
    found = slipped(shape(part * DURATION), part * DURATION, 1).agree()
    assert found.steps.counts.tolist() in ([], [pytest.approx(-0.5, abs=0.15)])
    assert not found.scale_wrong
    if found.latency_s is not None:
        assert found.latency_s == pytest.approx(LATENCY, abs=3 * found.latency_uncertainty_s)


@pytest.mark.parametrize("lost", [0, 2, 4])
@pytest.mark.parametrize("at", [0.1, 0.10012, 0.1003])
@pytest.mark.parametrize(("before", "change"), [(20.0, 40.0), (30.0, -30.0)], ids=["jerk", "stop"])
def test_a_step_that_the_speed_can_stand_for_is_left_open(before, change, at, lost):
    """The speed changes within one frame, and counts go missing just there or not: latency and step are the same to
    everything seen. No step is made up, and no latency is told that is not right."""
    motion = Sum(Constant(before), Kink(change, at))
    found = case(motion, DURATION, RATE, 13, latency_s=LATENCY, lost=[(at, -lost)]).agree()
    assert len(found.steps) == 0
    assert found.outliers.size == 0
    assert found.latency_s is None
    assert "step" in found.reasons["latency_s"]


class Kink:
    """Stands, and from `at` on turns at a steady speed."""

    def __init__(self, turns_per_s, at):
        self.turns_per_s, self.at = turns_per_s, at

    def turns(self, t):
        return self.turns_per_s * np.maximum(t - self.at, 0)

    def speed(self, t):
        return np.where(t > self.at, self.turns_per_s, 0.0)


@pytest.mark.parametrize("size", [-4, -2, 4])
@pytest.mark.parametrize("known", [False, True], ids=["found", "known"])
@pytest.mark.parametrize("shape", ["odd", "ramp up", "steady"])
def test_five_steps_in_one_sense(shape, known, size):
    """Again and again in one sense looks like another scale; each step is told and the scale is the sheet's."""
    places = [0.0312, 0.0805, 0.1201, 0.1507, 0.1703]
    board = case(SHAPES[shape](0.1), DURATION, RATE, 13, latency_s=LATENCY, lost=[(at, size) for at in places])
    breaks = np.rint(np.array(places) / TICK_S).astype(np.int64)
    found = board.agree(breaks=breaks) if known else board.agree()
    assert found.steps.counts.tolist() == pytest.approx([size] * 5, abs=0.3)
    assert found.steps.time * TICK_S == pytest.approx(places, abs=1 / RATE)
    assert found.steps.at_break.tolist() == [known] * 5
    assert not found.scale_wrong
    assert found.outliers.size == 0
    if found.latency_s is not None:
        assert found.latency_s == pytest.approx(LATENCY, abs=3 * found.latency_uncertainty_s)


def test_a_break_where_nothing_was_lost_is_no_step():
    board = case(odd(0.1), DURATION, RATE, 13, latency_s=LATENCY)
    found = board.agree(breaks=np.array([0, 10**7, 10**8, 10**10]))
    assert len(found.steps) == 0
    assert found.latency_s == pytest.approx(LATENCY, abs=3 * found.latency_uncertainty_s)


@pytest.mark.parametrize("words", [4, 10, 200])
@pytest.mark.parametrize("frames", range(2, 13))
def test_a_level_at_an_end_is_a_step(frames, words):
    """Two frames or more on a level of their own where nobody saw them come back."""
    for first in (frames, 398 - frames):
        board = case(odd(0.1), DURATION, RATE, 13, latency_s=LATENCY)
        assert board.time.size == 398
        board.position[first:] = (board.position[first:] + words) % 2**13
        found = board.agree()
        assert (found.steps.before.tolist(), found.steps.after.tolist()) == ([first - 1], [first])
        assert found.steps.counts.tolist() == pytest.approx([-words / 2], abs=0.4)
        assert found.outliers.size == 0


@pytest.mark.parametrize("row", [0, 397])
def test_a_single_frame_at_an_end_is_a_jump(row):
    board = case(odd(0.1), DURATION, RATE, 13, latency_s=LATENCY)
    board.position[row] = (board.position[row] + 200) % 2**13
    found = board.agree()
    assert len(found.steps) == 0
    assert found.outliers.tolist() == [row]


@pytest.mark.parametrize("row", [0, 396])
def test_two_wild_frames_at_an_end_are_no_level(row):
    board = case(odd(0.1), DURATION, RATE, 13, latency_s=LATENCY)
    board.position[row : row + 2] = (board.position[row : row + 2] + np.array([200, 900])) % 2**13
    found = board.agree()
    assert len(found.steps) == 0
    assert found.outliers.tolist() == [row, row + 1]


@pytest.mark.parametrize("first", [6, 100, 380])
def test_frames_on_the_way_are_part_of_the_step(first):
    """12 counts go in three frames, 4 at a time: one step of 12, from the last frame before to the first after."""
    board = case(odd(0.1), DURATION, RATE, 13, latency_s=LATENCY)
    for row in (first, first + 1, first + 2):
        board.joined.counted[row:] -= 4
    found = board.agree()
    assert (found.steps.before.tolist(), found.steps.after.tolist()) == ([first - 1], [first + 2])
    assert found.steps.counts.tolist() == pytest.approx([-12], abs=0.3)
    assert found.outliers.size == 0
    assert np.isnan(found.residual_deg).nonzero()[0].tolist() == [first, first + 1]
    assert found.residual_peak_deg < 0.1


def random_board(seed):
    """A motion at random, slow to fast, and an eccentric disc: none, in one of both readings, or common to both."""
    generator = np.random.default_rng(seed)
    duration = float(generator.choice([0.2, 0.5, 1.0]))
    speed = np.exp(generator.uniform(np.log(0.5), np.log(60))) * generator.choice([-1, 1])
    period = duration / np.exp(generator.uniform(np.log(0.7), np.log(8)))
    sway = Sway(speed * period / 2 / np.pi, period, generator.uniform())
    less = Sway(sway.amplitude * generator.uniform(0.05, 0.8), period)
    ramp = Ramp(speed, speed * generator.uniform(0.1, 1.5), duration, generator.uniform())
    steady = Constant(speed, generator.uniform())
    back = Ramp(speed, -speed, duration)
    motion = [sway, ramp, back, Sum(steady, less), Sum(ramp, less)][generator.integers(5)]
    latency = generator.uniform(0, 50e-6)
    size = generator.uniform(0, 1) / 360 * generator.integers(2)
    phase = generator.uniform(0, 2 * np.pi)
    error = lambda turns: size * np.sin(2 * np.pi * turns + phase)  # noqa: E731
    common = bool(generator.integers(2))
    board = case(
        Bent(motion, error) if common else motion,
        duration,
        float(generator.choice([2000, 4000, 16000])),
        int(generator.integers(12, 20)),
        latency_s=latency,
        seed=seed,
        error=None if common else error,
    )
    return board, latency


class Bent:
    """A motion as an encoder with an error of its own reads it."""

    def __init__(self, motion, error):
        self.motion, self.error = motion, error

    def turns(self, t):
        turns = self.motion.turns(t)
        return turns + self.error(turns)

    def speed(self, t):
        return self.motion.speed(t)


def test_sound_boards_have_no_step():
    """300 motions: no step, no outlier, no wrong scale; the latency within three standard uncertainties in at least
    99 % of those that tell it, which are most."""
    told = within = 0
    for seed in range(300):
        board, latency = random_board(seed)
        found = board.agree()
        assert (len(found.steps), found.outliers.size, found.scale_wrong) == (0, 0, False), seed
        if found.latency_s is not None:
            told += 1
            within += abs(found.latency_s - latency) <= 3 * found.latency_uncertainty_s
    assert told > 240
    assert within >= 0.99 * told


def test_steps_on_all_these_boards():
    """One to three steps of 2 or 4 counts anywhere but within 25 frames of each other: all told, each to the frame or
    the two beside it, nothing else found, no latency wrong."""
    checked = 0
    for seed in range(120):
        board, latency = random_board(seed)
        generator = np.random.default_rng(seed + 9999)
        rows = np.sort(generator.choice(np.arange(20, board.time.size - 20), generator.integers(1, 4), replace=False))
        size = int(generator.choice([-4, -2, 2, 4]))
        if np.diff(rows).min(initial=25) < 25:
            continue
        checked += 1
        for row in rows:
            board.joined.counted[row:] += size
        found = board.agree()
        assert found.steps.counts.tolist() == pytest.approx([size] * rows.size, abs=0.5), seed
        assert found.steps.after.tolist() == pytest.approx(rows.tolist(), abs=2), seed
        assert (found.outliers.size, found.scale_wrong) == (0, False), seed
        if found.latency_s is not None:
            assert found.latency_s == pytest.approx(latency, abs=3 * found.latency_uncertainty_s), seed
    assert checked > 100


@pytest.mark.parametrize("row", [400, 1500, 2990])
def test_counts_lost_while_the_shaft_stands(row):
    """Turning for 0.1 s, then at rest: the word stays as it is when four counts go, and is not stale for it."""
    board = case(Rest(30, 0.2), 0.2, 15_000, 14, latency_s=LATENCY)
    assert board.time.size == 2998
    board.joined.counted[row:] -= 4
    found = board.agree()
    assert found.outliers.size == 0
    assert found.steps.after.tolist() == pytest.approx([row], abs=1)
    assert found.steps.counts.tolist() == pytest.approx([-4], abs=0.6)


def test_a_latency_of_a_whole_frame():
    """0.5 ms late at up to 1000 turns/s^2: acceleration alone makes 0.0005^2 / 2 * 1000 * 4096 = 0.5 counts, which is
    neither a step nor a wrong scale. A 14-bit word rounds by a quarter count."""
    found = case(Sum(Constant(33.0), Sway(1.0, 0.2)), DURATION, RATE, 14, latency_s=500e-6).agree()
    assert len(found.steps) == 0
    assert not found.scale_wrong
    assert found.latency_s == pytest.approx(500e-6, abs=3 * found.latency_uncertainty_s)
    assert found.residual_rms_deg < 0.01
