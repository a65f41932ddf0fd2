"""The serial position made continuous, with the count as its guide.

A serial position tells the shaft's place only up to whole ranges (one turn, or all turns the word can hold), and
between two frames the shaft may go further than half of that. The count, which does not wrap, says how far. So first
the slope (serial positions per count, signed) is found: from frame to frame, then over twice, four times, ... as many
frames, each time the better slope telling the whole ranges of the next longer distance, always by the median, so
that neither wild frames nor a step decide it. Then what the serial position is ahead of slope times count is nearly
constant, and each frame lies in the range that keeps it so; nothing is summed from frame to frame, so a wild frame
cannot shift those after it.
"""

from __future__ import annotations

import numpy as np

from decode.spans import BoolArray, FloatArray, IntArray

PAIRS = 4096
"""Pairs of frames looked at for each distance: enough for a median, few enough for any capture."""

BLOCK = 16
"""Frames whose common place decides the range of each; more than half of them must be sound."""


def wrapped(difference: IntArray, modulus: int) -> IntArray:
    """Whole differences brought into [-modulus / 2, modulus / 2). Needs |difference| < modulus."""
    half = modulus // 2
    above, below = difference >= modulus - half, difference < -half
    return np.asarray(difference - modulus * (above.astype(np.int64) - below.astype(np.int64)), np.int64)


def wrapped_float(difference: FloatArray, modulus: int) -> FloatArray:
    """Any differences brought into [-modulus / 2, modulus / 2]."""
    return np.asarray(difference - modulus * np.rint(difference / modulus), np.float64)


def maybe_slope(
    position: IntArray, counted: FloatArray, modulus: int, expected: float | None, furthest: int
) -> float | None:
    """Serial positions per count, signed; None where the count never moves.

    position: (n,) words below `modulus`. counted: (n,) counts, finite. expected: the slope's size by the sheet, which
    is kept as the start where it fits (the shaft may do more than half a range between frames). furthest: frames
    apart.
    """
    slope: float | None = None
    distance = 1
    while distance <= furthest:
        first = np.linspace(0, position.size - 1 - distance, min(PAIRS, position.size - distance)).astype(np.int64)
        serial = wrapped(position[first + distance] - position[first], modulus)
        moved = counted[first + distance] - counted[first]
        distance *= 2
        moving = _moving(moved)
        if not moving.any():
            continue
        serial, moved = serial[moving], moved[moving]
        if slope is None:
            slope = _first_slope(serial, moved, modulus, expected)
        slope += float(np.median(wrapped_float(serial - slope * moved, modulus) / moved))
    return slope


def _moving(moved: FloatArray) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """The pairs that moved about as far as the fastest tenth."""
    size = np.abs(moved)
    some = size[size > 0.5]
    if some.size == 0:
        return np.zeros(moved.shape, np.bool_)
    return np.asarray(size >= np.percentile(some, 90) / 2, np.bool_)


def _first_slope(serial: IntArray, moved: FloatArray, modulus: int, expected: float | None) -> float:
    def miss(slope: float) -> float:
        return float(np.median(np.abs(wrapped_float(serial - slope * moved, modulus))))

    plain = float(np.median(serial / moved))
    if expected is None:
        return plain
    best = min((expected, -expected), key=miss)
    return best if miss(best) <= 1.5 * miss(plain) + 2 + expected / 2 else plain


def unwrapped(position: IntArray, counted: FloatArray, modulus: int, slope: float, sound: BoolArray) -> IntArray:
    """(n,) the serial position with the whole ranges it went through; the first sound one is its own word.

    sound: (n,) the frames that say where the ranges lie, at least one; the others take the range of the last before.
    """
    first = int(np.argmax(sound))
    relative = wrapped(position - position[first], modulus)
    guide = slope * (counted - counted[first])
    ahead = (relative - guide)[sound]
    levels = np.repeat(_levels(ahead, modulus), BLOCK)[: ahead.size]
    level = levels[np.maximum(np.cumsum(sound) - 1, 0)]
    ranges = np.rint((level + guide - relative) / modulus).astype(np.int64)
    return np.asarray(position[first] + relative + modulus * (ranges - ranges[first]), np.int64)


def _levels(ahead: FloatArray, modulus: int) -> FloatArray:
    """The circular mean of each block of frames, continuous from block to block: one place, whatever range each frame
    is in, and well within half a range of the sound frames as long as they are most of the block."""
    missing = -ahead.size % BLOCK
    blocks = np.concatenate([ahead, np.full(missing, ahead[-1])]).reshape(-1, BLOCK)
    turn = 2 * np.pi / modulus
    middle = np.angle(np.exp(1j * turn * blocks).sum(axis=1)) / turn
    return np.asarray(np.unwrap(middle, period=modulus), np.float64)
