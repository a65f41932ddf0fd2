"""The residual over the turn: what repeats at the same angle every turn, and what does not.

An encoder's own error (a disc off its axis, an interpolation that is not even) comes again at the same angle, turn
after turn; noise does not. The residual is averaged in equal parts of the turn: the averages are the angle error, and
what a frame differs from the average of its part is the jitter.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from decode.spans import FloatArray

MOST_PARTS = 64
FRAMES_PER_PART = 16
FEWEST_PARTS = 8
TURNS_NEEDED = 2


@dataclass(frozen=True, slots=True, eq=False)
class AngleError:
    """angle_deg: (k,) middle of each part of the turn that has frames. error_deg: (k,) mean residual there.
    uncertainty_deg: (k,) its standard uncertainty. frames: (k,) how many were averaged."""

    angle_deg: FloatArray
    error_deg: FloatArray
    uncertainty_deg: FloatArray
    frames: FloatArray

    @property
    def largest(self) -> int:
        """Where the mean residual is furthest from zero."""
        return int(np.argmax(np.abs(self.error_deg)))


def maybe_split(residual_deg: FloatArray, turns: FloatArray) -> tuple[AngleError, FloatArray] | None:
    """The angle error and every frame's jitter (n,), in degrees; None below two turns or with too few frames.

    residual_deg: (n,), finite. turns: (n,) serial position in turns, unwrapped.
    """
    parts = min(MOST_PARTS, residual_deg.size // FRAMES_PER_PART)
    if parts < FEWEST_PARTS or np.ptp(turns) < TURNS_NEEDED:
        return None
    part = np.minimum(((turns - np.floor(turns)) * parts).astype(np.int64), parts - 1)
    frames = np.bincount(part, minlength=parts).astype(np.float64)
    mean = np.bincount(part, residual_deg, parts) / np.maximum(frames, 1)
    jitter = residual_deg - mean[part]
    square = np.bincount(part, jitter * jitter, parts) / np.maximum(frames - 1, 1)
    held = frames > 0
    middle = (np.arange(parts) + 0.5) * 360 / parts
    uncertainty = np.sqrt(square[held] / frames[held])
    return AngleError(middle[held], mean[held], uncertainty, frames[held]), jitter
