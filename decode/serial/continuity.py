"""What only shows from one frame to the next: cadence, sign of life, standing still, jumping.

Works on the whole table of frames, which is small against the capture, so it may look both ways. Where a counted
position is at hand it decides whether the shaft moved; without one the frames themselves must say, and a doubt is no
fault: a shaft that stops repeats its position rightly.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from decode.serial.frames import CODE, Frames
from decode.sheet import Serial
from decode.spans import BoolArray, FloatArray, IntArray

STEADY_SPREAD = 0.2
STEADY_SHARE = 0.75
WHOLE_SHARE = 0.95
LONGEST_SKIP = 3
FEW_SKIPS = 0.1
"""An unstated cadence is believed where STEADY_SHARE of the frame periods lie within STEADY_SPREAD of the median, and
WHOLE_SHARE of them as near to a whole multiple of it. Where more than FEW_SKIPS are longer, half of these must skip no
more than LONGEST_SKIP: a master that reads in groups skips nothing (common practice, no source)."""

SPOILT_BY_STUCK_DATA = (
    "no_acknowledge",
    "no_start_bit",
    "frame_short",
    "crc_mismatch",
    "parity_mismatch",
    "fixed_mismatch",
    "error_flag",
    "position_jump",
    "position_stale",
)

NEIGHBOURS = 9
"""Frames around one from which its usual scatter is taken."""


@dataclass(frozen=True, slots=True, eq=False)
class Cadence:
    """When frames came and when they did not.

    period: ticks from one frame to the next as stated or found, None where there is no steady one. steps: (k,) frame
    periods in ticks, those over a missing frame left out. due: (m,) ticks at which a missing frame was due.
    after: (m,) index of the frame before each.
    """

    period: float | None
    steps: IntArray
    due: IntArray
    after: IntArray


def cadence(frames: Frames, stated: float | None) -> Cadence:
    """The rhythm of frames; `stated` is the period in ticks where the sheet gives one."""
    steps = np.diff(frames.first_edge)
    joined = np.diff(frames.segment) == 0
    usual = steps[joined]
    none = np.empty(0, np.int64)
    if usual.size == 0:
        return Cadence(stated, usual, none, none)
    period = stated
    if period is None and usual.size >= 3 and _is_steady(usual):
        period = float(np.median(usual))
    if period is None:
        return Cadence(None, usual, none, none)
    skipped = np.where(joined, np.rint(steps / period).astype(np.int64) - 1, 0)
    skipped = np.where(steps > 1.5 * period, skipped - _displaced(steps, period), 0)
    where = np.flatnonzero(skipped > 0)
    after = np.repeat(where, skipped[where])
    number = np.arange(after.size) - np.repeat(np.cumsum(skipped[where]) - skipped[where], skipped[where]) + 1
    due = frames.first_edge[after] + np.rint(number * (steps[after] / (skipped[after] + 1))).astype(np.int64)
    return Cadence(period, usual[skipped[joined] == 0], due, after.astype(np.int64))


def _is_steady(steps: IntArray) -> bool:
    ratio = steps / np.median(steps)
    whole = np.maximum(np.rint(ratio), 1.0)
    near = np.abs(ratio - whole) <= STEADY_SPREAD
    longer = whole[near & (whole > 1)]
    return bool(
        np.mean(near & (whole == 1)) >= STEADY_SHARE
        and np.mean(near) >= WHOLE_SHARE
        and (longer.size <= FEW_SKIPS * steps.size or np.median(longer) <= LONGEST_SKIP)
    )


def _displaced(steps: IntArray, period: float) -> IntArray:
    """(n - 1,) 1 where the frame at either end of a step came at the wrong time, but came."""
    early = np.concatenate([[False], steps[:-1] < 0.5 * period])
    late = np.concatenate([steps[1:] < 0.5 * period, [False]])
    before = np.concatenate([[0], steps[:-1]])
    after = np.concatenate([steps[1:], [0]])
    both = np.where(early, steps + before, steps + after)
    whole = np.abs(both / period - np.rint(both / period)) <= STEADY_SPREAD
    came = (early | late) & whole & (np.rint(both / period) < np.rint(steps / period) + 1)
    return np.asarray(came, np.int64)


def life_breaks(frames: Frames, serial: Serial, missing_after: IntArray) -> BoolArray:
    """(n,) frames whose sign-of-life counter did not go on by one from the last readable frame.

    Both ways to wrap are accepted, with and without the value 0, and a master that skipped a cycle may or may not
    have been counted. A single wrong value is one break, not two.
    """
    broken = np.zeros(len(frames), np.bool_)
    bits = next((part.bits for part in serial.fields if part.name == "life"), None)
    if bits is None:
        return broken
    rows = np.flatnonzero(frames.usable)
    skipped = np.bincount(missing_after, minlength=len(frames))
    before = np.concatenate([[0], np.cumsum(skipped)])
    life = frames.fields["life"].astype(np.int64)

    def follows(later: IntArray, earlier: IntArray) -> BoolArray:
        least = later - earlier
        most = least + before[later] - before[earlier]
        fits = np.zeros(later.size, np.bool_)
        for modulus in (1 << bits, max(2, (1 << bits) - 1)):
            moved = (life[later] - life[earlier]) % modulus
            fits |= (moved == least % modulus) | (moved == most % modulus)
        return np.asarray(fits | (frames.segment[later] != frames.segment[earlier]), np.bool_)

    bad = np.concatenate([[False], ~follows(rows[1:], rows[:-1])])[: rows.size]
    again = np.flatnonzero(bad[1:] & bad[:-1]) + 1
    again = again[again >= 2]
    bad[again[follows(rows[again], rows[again - 2])]] = False
    broken[rows[bad]] = True
    return broken


def wrapped_steps(position: IntArray, modulus: int) -> IntArray:
    """(n - 1,) steps between positions, each taken the short way round."""
    return (np.diff(position) + modulus // 2) % modulus - modulus // 2


def stale_frames(frames: Frames, modulus: int, moved: FloatArray | None, count_step: float = 0.0) -> BoolArray:
    """(n,) frames that repeat the position of the one before although the shaft went on.

    moved: (n,) position by the count, in steps of the serial position, NaN where it is not known; None without one.
    count_step: one count in such steps. With a count, the shaft must have moved by more than one and a half steps and
    one count during the run; without one, the frames around the run must have moved steadily and the position must
    catch up after it.
    """
    stale = np.zeros(len(frames), np.bool_)
    rows = np.flatnonzero(frames.usable)
    if rows.size < 3:
        return stale
    steps = wrapped_steps(frames.position[rows], modulus)
    joined = np.diff(frames.segment[rows]) == 0
    still = (steps == 0) & joined
    first = np.flatnonzero(still & ~np.concatenate([[False], still[:-1]]))
    last = np.flatnonzero(still & ~np.concatenate([still[1:], [False]])) + 1
    spacing = np.where(joined, np.diff(frames.latch[rows]), 0)
    for begin, end in zip(first.tolist(), last.tolist(), strict=True):
        travel = np.zeros(1) if moved is None else np.abs(moved[rows[begin : end + 1]] - moved[rows[begin]])
        if bool((travel > 1.5 + count_step).any()) or _caught_up(steps, spacing, begin, end):
            stale[rows[begin + 1 : end + 1]] = True
    return stale


def _caught_up(steps: IntArray, spacing: IntArray, begin: int, end: int) -> bool:
    """Whether the steps around the run of still ones [begin, end) are those of a shaft that never stopped.

    steps: (n,) movements from frame to frame. spacing: (n,) ticks that each took, 0 over a break.
    """
    around = np.r_[max(begin - 8, 0) : begin, end + 1 : min(end + 9, steps.size)]
    around = around[spacing[around] > 0]
    if around.size < 4 or end >= steps.size or spacing[end] == 0:
        return False
    speed = float(np.median(steps[around] / spacing[around]))
    fitting = np.abs(steps[around] - speed * spacing[around]) <= np.maximum(2.0, 0.5 * abs(speed) * spacing[around])
    hidden = speed * int(spacing[begin:end].sum())
    expected = hidden + speed * int(spacing[end])
    return bool(
        abs(hidden) >= 3 * (end - begin) and fitting.all() and abs(int(steps[end]) - expected) <= 0.5 * abs(expected)
    )


def jumps_alone(frames: Frames, modulus: int) -> BoolArray:
    """(n,) frames whose position does not lie between its neighbours', by the serial line alone.

    A frame's deviation is its distance from the straight line through the frames around it; it is a jump where that
    is far above the deviations of the frames nearby, which acceleration moves alike. A frame off the course also bends
    the course the other way beside it, which a jerk of the shaft does not. Over a break, or where the shaft may have
    gone half way round between two frames, nothing is told.
    """
    jumped = np.zeros(len(frames), np.bool_)
    rows = np.flatnonzero(frames.usable)
    if rows.size < NEIGHBOURS:
        return jumped
    steps = wrapped_steps(frames.position[rows], modulus).astype(np.float64)
    spacing = np.diff(frames.latch[rows]).astype(np.float64)
    speed = steps / spacing
    known = (np.diff(frames.segment[rows]) == 0) & (_around(np.abs(speed)) * spacing < modulus / 3)
    turned = np.where(known[1:] & known[:-1], np.diff(speed) * np.minimum(spacing[:-1], spacing[1:]) / 2, 0.0)
    bend = np.abs(turned)
    far = bend > 4.0 + 8.0 * _around(bend)
    before, after = (np.pad(turned, side)[cut] for side, cut in (((1, 0), slice(-1)), ((0, 1), slice(1, None))))
    back = np.maximum(-before * np.sign(turned), -after * np.sign(turned)) > bend / 4
    # a single wild frame bends the course three times, most at itself
    peak = far & back & (bend >= np.abs(before)) & (bend > np.abs(after))
    jumped[rows[1:-1][peak]] = True
    return jumped


def _around(values: FloatArray) -> FloatArray:
    """(n,) the median of each value and those beside it, NEIGHBOURS in all."""
    padded = np.pad(values, NEIGHBOURS // 2, mode="reflect")
    return np.asarray(np.median(np.lib.stride_tricks.sliding_window_view(padded, NEIGHBOURS), axis=1), np.float64)


def stood_still(
    frames: Frames, serial: Serial, modulus: int, moved: FloatArray | None, count_step: float = 0.0
) -> Frames:
    """The table with position_stale told; see stale_frames. Such frames are not usable any more."""
    if serial.position_bits == 0:
        return frames
    stale = stale_frames(frames, modulus, moved, count_step)
    return replace(frames.with_kind(stale, "position_stale"), usable=frames.usable & ~stale)


def jumped_alone(frames: Frames, modulus: int) -> Frames:
    """The table with position_jump told by the serial line alone; see jumps_alone."""
    return frames.with_kind(jumps_alone(frames, modulus), "position_jump")


def with_breaks(frames: Frames, serial: Serial, rhythm: Cadence) -> Frames:
    """The table with life_break told; see life_breaks."""
    return frames.with_kind(life_breaks(frames, serial, rhythm.after), "life_break")


def absorbed(frames: Frames) -> Frames:
    """The table with all of a stretch of stuck data told as such.

    A word whose data line did not move and that does not fit its neighbours was never sent. A line seldom stops or
    comes back between two frames, so the spoilt frame on either side of the stretch counts to it.
    """
    unsent = frames.quiet & frames.is_any("position_jump", "position_stale")
    frames = replace(frames, kind=np.where(unsent, np.int8(CODE["data_stuck"]), frames.kind))
    stuck = frames.is_any("data_stuck")
    spoilt = frames.is_any(*SPOILT_BY_STUCK_DATA)
    beside = spoilt & (np.concatenate([[False], stuck[:-1]]) | np.concatenate([stuck[1:], [False]]))
    kind = np.where(beside, np.int8(CODE["data_stuck"]), frames.kind)
    return replace(frames, kind=kind, usable=frames.usable & ~beside)
