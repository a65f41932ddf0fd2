"""Steps: the residual moves to another level and stays there.

Frames are taken in blocks of eight, each by its median, so that up to three wild frames in a block say nothing. The
mean over some blocks is compared with that of as many blocks before; a step is where both differ by far more than
such means usually do in this capture, and by more than the coarser of both readings can feign. Narrow windows come
first and what they find is taken out; wider ones then find what is as small as the noise of a single frame. Within
the window the step is put where the frames' distances from both levels are smallest. A level held for no more than
eight frames is an excursion, not a step: there the frames come back. Where a capture begins or ends nobody saw them
come back, so two frames or more on one level there are a step; a single one is taken for an excursion, since one
wrong word is the likelier cause. Frames on their way from one level to the next belong to the step.
"""

from __future__ import annotations

import bisect
import itertools
import math
from dataclasses import dataclass

import numpy as np

from decode.spans import BoolArray, FloatArray, IntArray

BLOCK = 8
LONGEST_EXCURSION = 8
"""Frames. One to eight frames off that come back are a jump, more are a step."""

WINDOWS = (1, 3, 10, 30)
"""Blocks on either side."""

SIGNIFICANT = 7.0
"""Robust standard deviations of the comparison; about 1 in 10^11 by chance for normal noise."""

LEAST_STEP = 0.5
"""Units of the coarser reading: what rounding alone can feign while the shaft stands."""

MEAN_FRAMES = 256
"""Frames on either side from which a step's size is judged."""

LEVEL_FRAMES = 32
"""Frames on either side from which a step's place is judged."""

LONGEST_END = 16
"""Frames at an end of the capture that may be on a level of their own without being found block by block."""


Known = dict[tuple[int, int], tuple[float, float]]
"""Levels worked out already, with their uncertainties, by first row and row past the last."""


@dataclass(frozen=True, slots=True, eq=False)
class Steps:
    """before, after: (n,) index of the last frame on the old level and of the first on the new one. time: (n,) ticks,
    midway between both latches. counts: (n,) by how much the count moved against the serial position. uncertainty:
    (n,) standard, in counts. at_break: (n,) the caller knew that the count is not continuous there."""

    before: IntArray
    after: IntArray
    time: IntArray
    counts: FloatArray
    uncertainty: FloatArray
    at_break: BoolArray

    def __len__(self) -> int:
        return int(self.after.size)


def find(
    residual: FloatArray,
    counted: FloatArray,
    unit: float,
    serial_unit: float,
    borders: IntArray,
    tried: IntArray | None = None,
) -> IntArray:
    """(k,) rows at which a new level begins, rising, `borders` not among them.

    residual: (n,) counts, finite. counted: (n,) counts, to see how far the shaft went. unit, serial_unit: counts that
    the coarser of both readings, and the serial position, resolve. borders: (b,) rows at which a level of its own
    begins anyhow. tried: (t,) rows, to within a block, at which a step was found by other means.
    """
    found = np.empty(0, np.int64)
    if tried is not None:
        found = _relocated(residual, np.setdiff1d(tried, borders), borders)
    for window in WINDOWS:
        fixed = np.union1d(borders, found)
        leveled = residual - level_of_each(residual, fixed)
        fresh = _found_with(leveled, counted, unit, serial_unit, window)
        found = np.union1d(found, np.setdiff1d(fresh, borders))
        found = _pruned(residual, found, borders, LEAST_STEP * unit)
    return _relocated(residual, found, borders)


def end_runs(off: FloatArray, out: BoolArray, stretches: IntArray, tolerance: float) -> IntArray:
    """(k,) rows at which a level begins that is held only by a few frames at an end of a stretch.

    off: (n,) counts from the level of the rest. out: (n,) rows too far off. stretches: (s,) first row of each stretch.
    tolerance: counts within which rows are on one level.
    """
    rows = []
    for low, high in itertools.pairwise([*stretches.tolist(), off.size]):
        first = _held_at_end(off[low:high], out[low:high], tolerance)
        last = _held_at_end(off[low:high][::-1], out[low:high][::-1], tolerance)
        rows += [low + first] * bool(first) + [high - last] * bool(last)
    return np.unique(np.asarray(rows, np.int64))


def _held_at_end(off: FloatArray, out: BoolArray, tolerance: float) -> int:
    """How many rows from the first are on a level of their own; 0 where fewer than two are."""
    run = int(np.argmin(out)) if not out.all() else out.size
    if not 2 <= run <= LONGEST_END or run * 2 >= off.size:
        return 0
    level = float(np.median(off[: run // 2 + 1]))
    near = np.abs(off[:run] - level) <= tolerance
    held = int(np.argmin(near)) if not near.all() else run
    coming = (off[held:run] * np.sign(level) > 0) & (np.abs(off[held:run]) < abs(level))
    return held if held >= 2 and bool(coming.all()) else 0


def passing(along: FloatArray, level: FloatArray, out: BoolArray, starts: IntArray, inner: IntArray) -> BoolArray:
    """(n,) rows off their level that lead from one to the next.

    along: (n,) counts. level: (n,) of each row's segment. out: (n,) rows too far off. starts: (s,) first row of each
    segment. inner: (k,) those of them at which a step is.
    """
    rows = np.zeros(along.size, np.bool_)
    edges = np.append(starts, along.size)
    for row in inner.tolist():
        at = int(np.searchsorted(starts, row))
        lowest, highest = sorted((float(level[row - 1]), float(level[row])))
        before = np.arange(row - 1, max(int(edges[at - 1]), row - 1 - LONGEST_EXCURSION), -1)
        after = np.arange(row, min(int(edges[at + 1]), row + LONGEST_EXCURSION))
        for part in (before, after):
            between = out[part] & (along[part] > lowest) & (along[part] < highest)
            rows[part[np.logical_and.accumulate(between)]] = True
    return rows


def level_of_each(residual: FloatArray, starts: IntArray) -> FloatArray:
    """(n,) the median of the segment each row is in."""
    edges = np.union1d([0, residual.size], starts)
    levels = [np.median(residual[low:high]) for low, high in itertools.pairwise(edges)]
    return np.repeat(np.asarray(levels, np.float64), np.diff(edges))


def _found_with(residual: FloatArray, counted: FloatArray, unit: float, serial_unit: float, window: int) -> IntArray:
    blocks = residual.size // BLOCK
    places = blocks - 2 * window
    if places < 1:
        return np.empty(0, np.int64)
    levels = np.median(residual[: blocks * BLOCK].reshape(blocks, BLOCK), axis=1)
    sums = np.concatenate([[0.0], np.cumsum(levels)])
    means = (sums[window:] - sums[:-window]) / window
    # place j compares the blocks before block j + window with those after it: the step is in that block or at its rim
    change = means[window + 1 :] - means[: -window - 1]
    rims = np.minimum(np.arange(blocks + 1) * BLOCK, counted.size - 1)
    travel = np.concatenate([[0.0], np.cumsum(np.abs(np.diff(counted[rims])))])
    reach = travel[window:] - travel[:-window]
    poor = np.minimum(reach[window + 1 :], reach[: -window - 1]) < 4 * unit
    usual = 1.4826 * float(np.median(np.abs(change - np.median(change))))
    threshold = np.maximum(np.where(poor, 1.25 * serial_unit + unit / 2, unit / 2), SIGNIFICANT * usual)
    return _peaks(residual, change, threshold, window)


def _peaks(residual: FloatArray, change: FloatArray, threshold: FloatArray, window: int) -> IntArray:
    """The row of the step behind every run of places whose change is too large."""
    high = np.flatnonzero(np.abs(change) > threshold)
    if high.size == 0:
        return np.empty(0, np.int64)
    runs = np.split(high, np.flatnonzero(np.diff(high) > window) + 1)
    rows = [_located(residual, int(run[np.argmax(np.abs(change[run]))]) + window, window) for run in runs]
    return np.unique(np.asarray(rows, np.int64))


def _located(residual: FloatArray, block: int, window: int) -> int:
    """The row near the block at which the level changes: there the distances from both levels are smallest."""
    low, high = (block - window) * BLOCK, min((block + 1 + window) * BLOCK, residual.size)
    part = residual[low:high]
    before, after = np.median(part[: window * BLOCK]), np.median(part[-window * BLOCK :])
    worse = np.abs(part - before) - np.abs(part - after)
    return low + int(np.argmin(np.concatenate([[0.0], np.cumsum(worse)])))


def _relocated(residual: FloatArray, found: IntArray, borders: IntArray) -> IntArray:
    """`found`, each where the rows around it are nearest to the levels shortly before and after it."""
    edges = np.union1d([0, residual.size], np.union1d(borders, found)).astype(np.int64).tolist()
    rows = []
    for row in found.tolist():
        at = bisect.bisect_left(edges, row)
        first, last = max(edges[at - 1], row - LEVEL_FRAMES), min(edges[at + 1], row + LEVEL_FRAMES)
        low, high = max(first + 1, row - BLOCK), min(last - 1, row + BLOCK)
        before, after = np.median(residual[first:row]), np.median(residual[row:last])
        part = residual[low:high]
        worse = np.abs(part - before) - np.abs(part - after)
        rows.append(low + int(np.argmin(np.concatenate([[0.0], np.cumsum(worse)]))))
    return np.setdiff1d(np.asarray(rows, np.int64), borders)


def _pruned(residual: FloatArray, found: IntArray, borders: IntArray, least: float) -> IntArray:
    """`found` without those beside a level held too shortly and without those that change too little."""
    kept, known = found, Known()
    while kept.size:
        edges = np.union1d([0, residual.size], np.union1d(borders, kept)).astype(np.int64)
        lengths = np.diff(edges)
        own = np.isin(edges[1:-1], kept)
        sizes, doubts = _changes(residual, edges.tolist(), known)
        short = own & (np.minimum(lengths[:-1], lengths[1:]) <= LONGEST_EXCURSION)
        weak = own & (np.abs(sizes) < np.maximum(least, 5 * doubts))
        rank = np.where(short, np.abs(sizes) - 1e12, np.where(weak, np.abs(sizes), np.inf))
        around = np.concatenate([[np.inf], rank, [np.inf]])
        worst = np.isfinite(rank) & (rank <= around[:-2]) & (rank < around[2:])
        if not worst.any():
            break
        kept = np.setdiff1d(kept, edges[1:-1][worst])
    return kept


def _changes(residual: FloatArray, edges: list[int], known: Known) -> tuple[FloatArray, FloatArray]:
    """Change of level at every inner edge and its standard uncertainty, from the sound frames beside it."""
    sizes, doubts = [], []
    for low, middle, high in zip(edges[:-2], edges[1:-1], edges[2:], strict=True):
        before, doubt_before = _level(residual, max(low, middle - MEAN_FRAMES), middle, known)
        after, doubt_after = _level(residual, middle, min(high, middle + MEAN_FRAMES), known)
        sizes.append(after - before)
        doubts.append(math.hypot(doubt_before, doubt_after))
    return np.asarray(sizes), np.asarray(doubts)


def _level(residual: FloatArray, low: int, high: int, known: Known) -> tuple[float, float]:
    """Mean of the rows that are not far off their median, and its standard uncertainty."""
    if (low, high) not in known:
        part = residual[low:high]
        off = np.abs(part - np.median(part))
        part = part[off <= 6 * 1.4826 * np.median(off) + 1e-9]
        known[low, high] = float(part.mean()), float(part.std() / math.sqrt(part.size))
    return known[low, high]
