"""Channels that say nothing any more.

A or B without an edge to the capture's end is only wrong where something else shows that the shaft turns: the serial
position travels on or, where there is none, the other channel goes on for many edges at an even pace. A shaft parked
on an edge makes one channel chatter too, but never evenly. From then on the count means nothing, and is not compared
with anything.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from decode.lines.activity import LineActivity
from decode.serial.frames import Frames

PARTNER_EDGES = 64
EVEN = 3.0
"""So many edges of the other channel to the capture's end, without one of this channel, make it silent where their
spacing is even: the longest but a tenth is no more than EVEN times the shortest but a tenth (common practice, no
source)."""

SILENT_TURNS = 1 / 16
"""Serial travel without an edge of the channel, to the capture's end, that makes it silent (common practice, no
source)."""


def silent_channels(
    lines: Mapping[str, str],
    activity: Mapping[str, LineActivity],
    start: int,
    frames: Frames | None,
    positions_per_turn: int,
    modulus: int,
) -> dict[str, int]:
    """Tick from which each silent one of "a" and "b" is silent.

    lines: column by role. start: the capture's first tick. frames: None without a serial position.
    """
    silent = {}
    for role, partner in (("a", "b"), ("b", "a")):
        line = activity[lines[role]]
        since = start if line.last is None else line.last
        if frames is not None:
            stopped = _travel(frames, since, modulus) > SILENT_TURNS * positions_per_turn
        else:
            stopped = line.partner_edges[lines[partner]] >= PARTNER_EDGES and _is_even(activity[lines[partner]].recent)
        if stopped:
            silent[role] = since
    return silent


def _is_even(times: Sequence[int]) -> bool:
    spacing = np.diff(times)[-PARTNER_EDGES + 1 :]
    short, long = np.percentile(spacing, [10, 90])
    return bool(long <= EVEN * short)


def _travel(frames: Frames, tick: int, modulus: int) -> float:
    """How far the serial position has gone from where it was at `tick`, at the most, in positions."""
    rows = np.flatnonzero(frames.usable & (frames.latch >= tick))
    steps = (np.diff(frames.position[rows]) + modulus // 2) % modulus - modulus // 2
    return float(np.ptp(np.cumsum(steps))) if steps.size else 0.0
