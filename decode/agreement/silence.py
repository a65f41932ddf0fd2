"""Channels that say nothing any more.

A or B without an edge to the capture's end is only wrong where something else shows that the shaft turns: the other
channel goes on for many edges (chatter at a standstill makes a few), or the serial position travels on. From then on
the count means nothing, and is not compared with anything.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from decode.lines.activity import LineActivity
from decode.serial.frames import Frames

PARTNER_EDGES = 64
"""Edges of the other channel without one of this channel, to the capture's end, that make it silent; four are enough
where it never had any (common practice, no source)."""

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
        alone = line.partner_edges[lines[partner]]
        few = 4 if line.edges == 0 else PARTNER_EDGES
        travelled = 0.0 if frames is None else _travel(frames, since, modulus) / positions_per_turn
        if alone >= few or travelled > SILENT_TURNS:
            silent[role] = since
    return silent


def _travel(frames: Frames, tick: int, modulus: int) -> float:
    """How far the serial position has gone from where it was at `tick`, at the most, in positions."""
    rows = np.flatnonzero(frames.usable & (frames.latch >= tick))
    steps = (np.diff(frames.position[rows]) + modulus // 2) % modulus - modulus // 2
    return float(np.ptp(np.cumsum(steps))) if steps.size else 0.0
