"""Shaft angle to A, B and index.

The count goes up through the states (A, B) = 00, 10, 11, 01: A leads. Counting state 00 as count 0, A is high in
counts 1 and 2 of every four and B in 2 and 3. Each passage of a whole count is one edge on one line.

The index is high over a stated number of counts once a turn, centred on the A/B state the sheet names (or on count
0). Where its borders are whole counts it is gated by A and B, and changes with their edges.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from decode.bench.line import ABSENT, PS_PER_SECOND, Line
from decode.bench.motion import Path
from decode.sheet import Incremental, index_levels
from decode.spans import FloatArray, IntArray

_STATES = ((0, 0), (1, 0), (1, 1), (0, 1))


@dataclass(eq=False)
class Quadrature:
    """The incremental outputs before they are drawn as lines; faults work on it in place.

    times: (n,) ps of each A/B edge, never falling. counts: (n,) count after each. initial: count before the first.
    index: (m, 2) ps from and to which the index is high; ABSENT where the capture's end cuts it.
    """

    counts_per_turn: int
    initial: int
    times: IntArray
    counts: IntArray
    index: IntArray

    def lines(self) -> dict[str, Line]:
        """A, B and index as lines, by role."""
        state = self.counts & 3
        a = np.isin(state, (1, 2)).astype(np.int8)
        b = np.isin(state, (2, 3)).astype(np.int8)
        first_a, first_b = _STATES[self.initial & 3]
        return {
            "a": Line.from_levels(first_a, self.times, a),
            "b": Line.from_levels(first_b, self.times, b),
            "index": Line.from_windows(self.index),
        }


def turned(path: Path, incremental: Incremental, jitter_s: float, random: np.random.Generator) -> Quadrature:
    """What the incremental outputs do along `path`. jitter_s: rms of each A/B edge's displacement in time."""
    per_turn = incremental.counts_per_turn
    if per_turn is None:
        raise ValueError("a sheet without cycles_per_turn cannot be turned")
    sense = incremental.direction
    begin = path.angle(np.array([path.pieces[0].start]))
    initial = int(np.floor(sense * begin[0] * per_turn))
    edges = path.passages(per_turn, sense=sense)
    exact = _to_ps(edges.times)
    # Sorted, so that no jitter makes an edge overtake its neighbour.
    moved = np.sort(exact + _to_ps(random.normal(0.0, 1.0, exact.size) * jitter_s)) if jitter_s > 0 else exact
    first, width = index_window(incremental)
    if first == int(first) and width == int(width):
        index = _gated(initial, moved, edges.counts, per_turn, int(first), int(width))
    else:
        index = _free(path, sense, per_turn, first, width, initial)
    return Quadrature(per_turn, initial, moved, edges.counts, index)


def index_window(incremental: Incremental) -> tuple[float, float]:
    """(first, width) counts: the index is high from count `first` of a turn for `width` counts."""
    width = 1.0 if incremental.index_width_counts is None else incremental.index_width_counts
    wanted = index_levels(incremental.index_states) if incremental.index_states else None
    if wanted is None:
        return 0.5 - width / 2, width
    fits = [all(w is None or w == s for w, s in zip(wanted, state, strict=True)) for state in _STATES]
    start = next(count for count in range(4) if fits[count] and not fits[count - 1])
    return start + sum(fits) / 2 - width / 2, width


def _gated(initial: int, times: IntArray, counts: IntArray, per_turn: int, first: int, width: int) -> IntArray:
    """Windows of an index that is high while the count is one of `width` from `first`, modulo a turn."""
    high = np.concatenate([[initial], counts])
    high = (high - first) % per_turn < width
    changes = np.flatnonzero(high[1:] != high[:-1])
    return _windows(bool(high[0]), times[changes])


def _free(path: Path, sense: int, per_turn: int, first: float, width: float, initial: int) -> IntArray:
    """Windows of an index whose borders lie within counts."""
    rises = path.passages(1, sense=sense, phase=first / per_turn)
    falls = path.passages(1, sense=sense, phase=(first + width) / per_turn)
    times = np.concatenate([rises.times, falls.times])
    within = float(sense * path.angle(np.array([path.pieces[0].start]))[0] * per_turn)
    starts_high = (within - first) % per_turn < width
    return _windows(bool(starts_high), _to_ps(np.sort(times)))


def _windows(starts_high: bool, changes: IntArray) -> IntArray:
    """(m, 2) windows from the instants at which the index changes; one open at the start begins before it."""
    flat = np.concatenate([np.array([-1] if starts_high else [], np.int64), changes])
    if flat.size % 2:
        flat = np.append(flat, ABSENT)
    return flat.reshape(-1, 2)


def _to_ps(seconds: FloatArray) -> IntArray:
    return np.rint(seconds * PS_PER_SECOND).astype(np.int64)
