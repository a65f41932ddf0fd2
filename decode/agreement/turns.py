"""Counts per turn from the serial position, for boards without an index.

Each time the unwrapped serial position passes a whole turn, the count at that place is interpolated between the
frames on either side. From one such place to the next in the same sense is a complete turn, and the difference of the
counts is what it has. A turn in which the shaft went back over its own start is not complete and is left out.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from decode.spans import FloatArray, IntArray


@dataclass(frozen=True, slots=True, eq=False)
class Turns:
    """Complete turns. first, last: (n,) index of the first frame past the turn's beginning, and past its end. sense:
    (n,) 1 where the serial position rose, -1 where it fell. counts: (n,) counted over the turn, without sign."""

    first: IntArray
    last: IntArray
    sense: IntArray
    counts: FloatArray


def count_turns(serial_turns: FloatArray, counted: FloatArray) -> Turns:
    """Counts of every complete turn.

    serial_turns: (n,) unwrapped serial position in turns, NaN where a frame is not to be used. counted: (n,) counts.
    A step between neighbouring frames of a turn or more tells nothing of where the whole turns were passed, nor do
    the turns it touches.
    """
    usable = np.flatnonzero(np.isfinite(serial_turns) & np.isfinite(counted))
    turns, counts = serial_turns[usable], counted[usable]
    whole = np.floor(turns)
    moved = np.diff(whole)
    at = np.flatnonzero(moved)
    sense = np.sign(moved[at])
    border = np.where(sense > 0, whole[at + 1], whole[at])
    share = (border - turns[at]) / (turns[at + 1] - turns[at])
    places = counts[at] + share * (counts[at + 1] - counts[at])
    single = np.abs(moved[at]) == 1
    complete = (sense[:-1] == sense[1:]) & (np.diff(border) == sense[1:]) & single[:-1] & single[1:]
    return Turns(
        usable[at[:-1][complete] + 1],
        usable[at[1:][complete] + 1],
        sense[1:][complete].astype(np.int64),
        np.abs(np.diff(places)[complete]),
    )
