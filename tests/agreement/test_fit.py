"""Boards whose angle is known in closed form: what was put in must come out, within the uncertainty stated.

Expected values are the construction's own (exact arithmetic), unless another source stands beside them.
"""

import numpy as np
import pytest
from board_motions import GRID, TICK_S, Constant, Ramp, Rest, Sway, case

RAMP = Ramp(5, 50, 1.0)
MOTIONS = {
    "ramp": RAMP,
    "ramp backwards": Ramp(-5, -50, 1.0),
    "sway": Sway(3, 0.3),
    "sway within the turn": Sway(0.2, 0.3),
    "to a standstill": Rest(50, 1.0),
}


@pytest.mark.parametrize("latency", [0.0, 5e-6, 50e-6])
@pytest.mark.parametrize("bits", [12, 14, 17, 19])
@pytest.mark.parametrize("motion", MOTIONS.values(), ids=MOTIONS.keys())
def test_what_was_put_in_comes_out(motion, bits, latency):
    """Three standard uncertainties: 60 cases, of which normal errors would leave 0.2 outside."""
    found = case(motion, bits=bits, latency_s=latency).agree()
    assert found.direction == 1
    assert not found.direction_opposed
    assert not found.scale_wrong
    assert found.latency_s == pytest.approx(latency, abs=3 * found.latency_uncertainty_s)
    assert found.latency_uncertainty_s < 0.5e-6
    assert found.counts_per_turn == pytest.approx(4096, abs=3 * found.counts_per_turn_uncertainty)
    turn = (found.offset_counts + 2048) % 4096 - 2048  # the serial position does not say which turn is the zeroth
    assert turn == pytest.approx(0, abs=3 * found.offset_uncertainty_counts)
    assert len(found.steps) == 0
    assert found.outliers.size == 0


@pytest.mark.parametrize("bits", [12, 14, 19])
def test_residual_is_the_rounding_of_the_serial_position(bits):
    """A whole number stands for an interval q wide: q / sqrt(12), JCGM 100:2008 F.2.2.1; the grid adds its part."""
    found = case(RAMP, bits=bits, latency_s=5e-6).agree()
    assert found.residual_rms_deg == pytest.approx(found.residual_uncertainty_deg, rel=0.15)
    if bits < 19:
        assert found.residual_rms_deg == pytest.approx(360 / 2**bits / np.sqrt(12), rel=0.02)


def test_frame_read_at_its_end():
    """A 14-bit sensor at 3000 rpm moves 50 * 16384 / 1e6 = 0.82 positions a microsecond: a frame of 40 us compared
    at its end is 33 positions off. 33 positions / 0.8192 per us = 40 us, found as latency at a varying speed."""
    found = case(Ramp(40, 50, 1.0), bits=14, latency_s=40e-6).agree()
    at_3000_rpm = found.latency_s * 50 * 2**14
    assert at_3000_rpm == pytest.approx(0.8192 * 40, abs=0.1)
    assert round(at_3000_rpm) == 33


def test_latency_is_covered_by_its_uncertainty():
    """Within two standard uncertainties in at least 90 % of 200 seeds; 95 % were they normal and exactly known.

    A 12-bit word over a slow ramp makes the scatter several times the sampling interval, so that the floor of the
    uncertainty does not decide.
    """
    inside = scatter = 0
    for seed in range(200):
        generator = np.random.default_rng(seed)
        latency = generator.uniform(0, 50e-6)
        motion = Ramp(1 + generator.uniform(), 4 + generator.uniform(), 0.5, generator.uniform())
        found = case(motion, 0.5, 4000, 13, latency_s=latency, seed=seed, counts_per_turn=1024, sheet=1024).agree()
        inside += abs(found.latency_s - latency) <= 2 * found.latency_uncertainty_s
        scatter += found.latency_uncertainty_s > 3 * GRID * TICK_S
    assert scatter == 200
    assert inside >= 180


@pytest.mark.parametrize("motion", [Constant(50.0), Constant(-3.0)], ids=["forwards", "slowly backwards"])
def test_steady_speed_hides_latency_in_the_offset(motion):
    """At v turns a second the offset is v * 4096 * latency: C - offset is where the shaft was, latency ago."""
    found = case(motion, latency_s=50e-6).agree()
    assert found.latency_s is None
    assert found.reasons["latency_s"] == "not separable: the speed varied too little"
    whole = (found.offset_counts - motion.turns_per_s * 4096 * 50e-6 + 2048) % 4096 - 2048
    assert whole == pytest.approx(0, abs=0.02)


@pytest.mark.parametrize("ripple", [1e-5, 1e-4])
def test_speed_that_varies_by_noise_only_is_not_separable(ripple):
    """A speed reading that scatters but a shaft that does not vary: no slope is made of it."""
    board = case(Constant(50.0), latency_s=50e-6)
    scatter = np.random.default_rng(1).normal(1, ripple, board.time.size)
    board.joined.speed[:] *= scatter
    assert board.agree().latency_s is None


def test_a_few_bad_speeds_are_no_variation():
    """A steady shaft, and eight frames whose speed reading is a fifth off: no slope is made of them either."""
    board = case(Constant(1.0), latency_s=50e-6)
    board.joined.speed[:8] *= 1.2
    assert board.agree().latency_s is None


def test_opposed_direction():
    found = case(RAMP, sense=-1, latency_s=50e-6).agree()
    assert found.direction == -1
    assert found.direction_opposed
    assert found.latency_s == pytest.approx(50e-6, abs=3 * found.latency_uncertainty_s)
    assert found.counts_per_turn == pytest.approx(4096, abs=0.05)
    assert not case(RAMP, sense=-1).agree(direction=-1).direction_opposed


@pytest.mark.parametrize("counts", [3840, 1024, 16384, 4092, 4100])
def test_wrong_scale(counts):
    """15/16 of the sheet's 4096 is 3840; a quarter and four times are pulses and counts mixed up; one cycle less."""
    found = case(RAMP, 0.5, counts_per_turn=counts, latency_s=20e-6).agree()
    assert found.scale_wrong
    assert found.counts_per_turn == pytest.approx(counts, abs=3 * found.counts_per_turn_uncertainty)
    assert found.scale_error == pytest.approx(counts / 4096 - 1, abs=1e-4)
    assert found.residual_peak_deg < 0.02
    assert found.latency_s == pytest.approx(20e-6, abs=3 * found.latency_uncertainty_s)


@pytest.mark.parametrize(("counts", "wrong"), [(4096, False), (3840, True), (4080, False)])
def test_scale_over_less_than_a_turn(counts, wrong):
    """0.6 turns over an eccentric disc (0.1 degree) bend the scale by some counts: that is no wrong scale. 15/16 is;
    4080 for 4096 (0.4 %) is left open: half a degree over 0.6 turns is 0.23 %, and four times that is the bound."""
    error = lambda turns: 0.1 / 360 * np.sin(2 * np.pi * turns)  # noqa: E731
    found = case(Sway(0.3, 0.2), 0.5, counts_per_turn=counts, bits=17, error=error).agree()
    assert found.scale_wrong == wrong


def test_no_resolution_in_the_sheet():
    found = case(RAMP, sheet=None).agree()
    assert found.counts_per_turn == pytest.approx(4096, abs=0.05)
    assert found.scale_error is None
    assert "no counts per turn" in found.reasons["scale_error"]


def test_one_wild_frame_has_no_say():
    """Half a turn off in one frame, against the same capture with that frame marked unusable: 1e-9 of each value."""
    board = case(RAMP, latency_s=50e-6)
    usable = np.ones(board.time.size, np.bool_)
    usable[7000] = False
    without = board.agree(usable)
    board.position[7000] = (board.position[7000] + 2**18) % 2**19
    found = board.agree()
    for name in ("offset_counts", "latency_s", "counts_per_turn", "residual_rms_deg"):
        assert getattr(found, name) == pytest.approx(getattr(without, name), rel=1e-9, abs=1e-9), name
    assert found.outliers.tolist() == [7000]
    assert abs(found.outlier_counts[0]) == pytest.approx(2048, abs=0.1)
    assert found.outlier_run.tolist() == [1]
    assert len(found.steps) == 0


def test_a_hundredth_of_wild_frames_has_no_say():
    board = case(RAMP, latency_s=50e-6)
    clean = board.agree()
    generator = np.random.default_rng(1)
    wild = np.sort(generator.choice(board.time.size, board.time.size // 100, replace=False))
    board.position[wild] = (board.position[wild] + generator.integers(2**12, 2**19 - 2**12, wild.size)) % 2**19
    found = board.agree()
    assert found.outliers.tolist() == wild.tolist()
    assert found.latency_s == pytest.approx(clean.latency_s, abs=clean.latency_uncertainty_s / 2)
    assert found.offset_counts == pytest.approx(clean.offset_counts, abs=1e-3)


def test_eccentric_disc_is_not_latency():
    """0.1 degree once a turn repeats with the angle: it is the angle error, and neither latency nor jitter."""
    found = case(RAMP, latency_s=20e-6, error=lambda turns: 0.1 / 360 * np.sin(2 * np.pi * turns)).agree()
    assert found.latency_s == pytest.approx(20e-6, abs=3 * found.latency_uncertainty_s)
    error = found.angle_error
    # the mean over a 64th of a turn, and the mean of the sine over it: 0.1 * sin(x) / x at x = pi / 64
    mean = 0.1 * np.sin(2 * np.pi * error.angle_deg / 360) * np.sinc(1 / 64)
    assert error.error_deg == pytest.approx(mean, abs=1e-3)
    assert np.abs(error.error_deg).max() == pytest.approx(0.1, abs=1e-3)
    assert np.nanstd(found.jitter_deg) < 0.004  # within a part the sine moves 0.1 * 2 pi / 64 / sqrt(12) / sqrt(2)


def test_many_turns_in_one_word():
    """12 bits of turns over 17 of position, 60 turns to and fro."""
    found = case(Sway(30, 1.0), bits=17, turns_bits=12, latency_s=10e-6).agree()
    assert found.latency_s == pytest.approx(10e-6, abs=3 * found.latency_uncertainty_s)
    assert np.nanmax(found.serial_turns) == pytest.approx(60, abs=1e-3)
    assert found.offset_counts == pytest.approx(0, abs=3 * found.offset_uncertainty_counts)


def test_more_than_a_hundred_turns_on_a_single_turn_word():
    """150 turns; unwrapped serial position and aligned count are the same turns, frame by frame."""
    motion = Ramp(100, 200, 1.0)
    board = case(motion, bits=14, counts_per_turn=256, sheet=256)
    found = board.agree()
    assert np.ptp(found.serial_turns) == pytest.approx(np.ptp(motion.turns(board.time * TICK_S)), abs=1e-3)
    assert found.serial_turns == pytest.approx(found.counted_turns, abs=1e-3)


def test_more_than_half_a_turn_between_frames():
    """500 to 800 turns a second at 1000 frames a second: only the count tells how often the word went round."""
    motion = Ramp(500, 800, 0.3)
    board = case(motion, 0.3, 1000, 14, counts_per_turn=256, sheet=256, latency_s=50e-6)
    found = board.agree()
    assert np.ptp(found.serial_turns) == pytest.approx(np.ptp(motion.turns(board.time * TICK_S)), abs=0.05)
    assert found.latency_s == pytest.approx(50e-6, abs=3 * found.latency_uncertainty_s)


def test_stale_words():
    """The same word for a quarter of the capture while the shaft turns: listed, and without a say."""
    board = case(RAMP, latency_s=50e-6)
    board.position[5000:9000] = board.position[5000]
    found = board.agree()
    assert found.latency_s == pytest.approx(50e-6, abs=3 * found.latency_uncertainty_s)
    assert len(found.steps) == 0
    assert found.outliers.tolist() == list(range(5001, 9000))
    assert found.outlier_stale.all()
    assert (found.outlier_run == 3999).all()


def test_ab_dead_for_a_while():
    """No edges for 4000 frames: the count stands, then goes on from there. What was lost is one step."""
    board = case(RAMP, latency_s=50e-6)
    lost = np.floor(board.joined.counted[10_000] - board.joined.counted[6000])
    board.joined.counted[10_000:] -= lost
    board.joined.counted[6000:10_000] = board.joined.counted[6000]
    board.joined.speed[6000:10_000] = 0
    found = board.agree()
    assert found.latency_s == pytest.approx(50e-6, abs=3 * found.latency_uncertainty_s)
    assert len(found.steps) == 1
    assert (found.steps.before[0], found.steps.after[0]) == (6000, 10_000)
    # a single-turn word tells the loss only up to whole turns
    assert (found.steps.counts[0] + lost + 2048) % 4096 - 2048 == pytest.approx(0, abs=0.2)


def nothing_moves(board):
    board.joined.counted[:] = 3.5
    board.joined.speed[:] = 0


def words_stand(board):
    board.position[:] = 77


def words_are_noise(board):
    board.position[:] = np.random.default_rng(1).integers(0, 2**19, board.time.size)


def counts_unknown(board):
    board.joined.counted[:] = np.nan


@pytest.mark.parametrize(
    ("spoil", "reason"),
    [
        (nothing_moves, "the count stands still"),
        (words_stand, "the serial position stands still while the count moves"),
        (words_are_noise, "serial position and count do not follow each other"),
        (counts_unknown, "fewer than 32 good frames while the count was known"),
    ],
)
def test_what_cannot_be_told_is_not_told(spoil, reason):
    board = case(RAMP, 0.2)
    spoil(board)
    found = board.agree()
    assert found.notes == [reason]
    for name in ("direction", "counts_per_turn", "offset_counts", "latency_s", "residual_deg", "angle_error"):
        assert getattr(found, name) is None


def test_small_travel():
    """An eighth of a turn to and fro gives offset and latency, but no scale of its own."""
    found = case(Sway(0.05, 0.1), 0.5, latency_s=20e-6).agree()
    assert found.counts_per_turn is None
    assert "quarter of a turn" in found.reasons["counts_per_turn"]
    assert found.latency_s == pytest.approx(20e-6, abs=3 * found.latency_uncertainty_s)
