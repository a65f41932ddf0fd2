"""Steps that a fit of the whole capture would take for latency or scale.

Where the speed rises before a step and falls after it, latency times speed looks much like the step; steps in one
sense, again and again, look like another scale. So a step is tried together with all that is fitted: for every place
it could be at, how much of the sum of squares would a step there take away, with everything else fitted anew? With
the columns of the fit X, levels taken out of them, the residual r, and the step's own column s, that is

    (s'r)^2 / D,    D = s's - s'X (X'X)^-1 X's,    the step being s'r / D and its variance the noise's / D.

All of it comes from sums over blocks of frames, so a place costs next to nothing. The largest step of each segment is
taken, then all is worked out anew, until no step is left.

What is fitted never describes an encoder wholly, and what it misses bends smoothly; smooth bends gain much by a step
as well. So a step must also be sharp: around it, over as few frames as the noise allows, two levels must be far
better than a straight line without a break; and it must stand out from what is left once all steps are in.

D also tells what may hide. Where even a step of a whole unit would not be found, because speed could stand for it,
the latency may be wrong by as much as that step would pull it.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np

from decode.agreement.regression import PIECE, Design, invert
from decode.agreement.steps import BLOCK, LEAST_STEP, SIGNIFICANT
from decode.spans import BoolArray, FloatArray, IntArray

MOST_PASSES = 64
LEAST_FREE = 1e-6
"""Part of a step's column that must be left by the other columns for it to be told from them at all."""
QUARTILE = 0.3186
"""Lower quartile of the size of a standard normal value."""
LEAST_AROUND, MOST_AROUND = 3, 30
"""Blocks on either side over which a step must be sharp, at the least and at the most."""
SHARP = 5.0
"""Standard deviations that a break must be, in a place where a step gains that much more already."""
OUTSTANDING = 5.0
"""Times the root mean square of what is left, block by block, that a step must be."""
SAMPLE = 4096
"""Places at which sharpness is worked out at a time."""
MOST_PLACES = 1 << 12


@dataclass(frozen=True, slots=True, eq=False)
class Blocks:
    """Sums over blocks of rows. edges: (b + 1,) rows at which blocks begin, and the end. weights: (b,). sums:
    (b, c + 1) of the design and the target, weighted. products: (c + 1, c + 1) of all rows. middle: (b,) time of
    each block, in its own unit. borders: (s,) blocks at which a level of its own begins, the first among them. noise:
    standard deviation of a row."""

    edges: IntArray
    weights: FloatArray
    sums: FloatArray
    products: FloatArray
    middle: FloatArray
    borders: IntArray
    noise: float


@dataclass(frozen=True, slots=True, eq=False)
class Trial:
    """What a step at the beginning of each block would do. segment: (b,) of each block. mean: (b,) of the residual.
    levels: (s,) of the segments. pull: (b,) s'r. room: (b,) D, 0 where the other columns leave nothing. shift: (b, c)
    by how much a step of one changes the coefficients if it is not fitted."""

    segment: IntArray
    mean: FloatArray
    levels: FloatArray
    pull: FloatArray
    room: FloatArray
    shift: FloatArray


def blocks_of(
    target: FloatArray,
    design: Design,
    weight: FloatArray,
    starts: IntArray,
    tied: FloatArray,
    time: IntArray,
    noise: float,
) -> Blocks:
    """Blocks of at most eight rows that begin at `starts` too; arguments as `regression.fit` takes them. time: (n,).
    noise: standard deviation of a row, as `noise_of` gives it."""
    columns = tied.size
    edges = np.union1d(np.arange(0, target.size, BLOCK), starts).astype(np.int64)
    sums = np.zeros((edges.size, columns + 2))
    products = np.diag(np.append(tied, 0.0))
    at = np.searchsorted(edges, np.arange(0, target.size + PIECE, PIECE))
    for first, last in itertools.pairwise(at.tolist()):
        if first == last:
            continue
        low, high = int(edges[first]), int(edges[last]) if last < edges.size else target.size
        joint = np.column_stack([design(low, high), target[low:high]])
        weighted = joint * weight[low:high, np.newaxis]
        products += weighted.T @ joint
        sums[first:last] = np.add.reduceat(np.column_stack([weighted, weight[low:high]]), edges[first:last] - low)
    elapsed = (time - time[0]) / max(1, int(time[-1] - time[0]))
    middle = np.add.reduceat(elapsed, edges) / np.diff(np.append(edges, target.size))
    borders = np.searchsorted(edges, starts)
    return Blocks(np.append(edges, target.size), sums[:, -1], sums[:, :-1], products, middle, borders, noise)


def steps_in(blocks: Blocks, unit: float) -> IntArray:
    """(k,) rows at which a step begins, rising, to within a block. unit: what the coarser reading resolves."""
    cuts = blocks.borders
    for _ in range(MOST_PASSES):
        trial = tried(blocks, cuts)
        fresh = _largest(trial, _gain(trial, blocks, cuts, unit))
        if fresh.size == 0:
            break
        cuts = np.union1d(cuts, fresh)
    cuts = _outstanding(blocks, cuts)
    return np.asarray(blocks.edges[np.setdiff1d(cuts, blocks.borders)], np.int64)


def _outstanding(blocks: Blocks, cuts: IntArray) -> IntArray:
    """`cuts` without the steps that do not stand out from what is left between all of them: there something else is
    not described, and a step only follows it."""
    while True:
        trial = tried(blocks, cuts)
        known = np.isfinite(trial.mean)
        left = math.sqrt(float(np.average(trial.mean[known] ** 2, weights=blocks.weights[known])))
        weak = np.setdiff1d(cuts[1:][np.abs(np.diff(trial.levels)) < OUTSTANDING * left], blocks.borders)
        if weak.size == 0:
            return cuts
        cuts = np.setdiff1d(cuts, weak)


def tried(blocks: Blocks, cuts: IntArray) -> Trial:
    """A step tried at every block, with levels of their own beginning at the blocks `cuts`."""
    weights, sums = blocks.weights, blocks.sums
    segment = np.repeat(np.arange(cuts.size), np.diff(np.append(cuts, weights.size)))
    whole = np.add.reduceat(weights, cuts)
    means = np.add.reduceat(sums, cuts) / np.where(whole > 0, whole, 1.0)[:, np.newaxis]
    products = blocks.products - (means * whole[:, np.newaxis]).T @ means
    inverse = invert(products[:-1, :-1])
    coefficients = inverse @ products[:-1, -1]
    leveled = sums - weights[:, np.newaxis] * means[segment]
    rest = leveled[:, -1] - leveled[:, :-1] @ coefficients
    # sums over the blocks before each, from its segment's beginning; the leveled ones are zero over a whole segment
    before = np.cumsum(weights) - weights
    before -= before[cuts][segment]
    share = before * (1 - before / np.where(whole > 0, whole, 1.0)[segment])
    columns = leveled[:, :-1] - np.cumsum(leveled[:, :-1], axis=0)
    shift = columns @ inverse
    room = share - np.einsum("bc,bc->b", shift, columns)
    room = np.where(room > LEAST_FREE * np.maximum(share, 1e-9), room, 0.0)
    mean = np.where(weights > 0, rest / np.where(weights > 0, weights, 1.0), np.nan)
    levels = means[:, -1] - means[:, :-1] @ coefficients
    return Trial(segment, mean, levels, rest - np.cumsum(rest), room, shift)


def hidden_pull(blocks: Blocks, starts: IntArray, unit: float, column: int) -> float:
    """By how much a step that is not told may shift a coefficient: one of a unit or more too small to be found, or one
    that would gain enough but is no plain step. 0 where there is neither."""
    trial = tried(blocks, np.searchsorted(blocks.edges, starts))
    room = np.maximum(trial.room, LEAST_FREE)
    least = SIGNIFICANT * blocks.noise / np.sqrt(room)
    seen = np.abs(trial.pull) / room
    size = np.where((seen > least) & (trial.room > 0), seen, np.where(least > unit, least, 0.0))
    return float(np.max(np.abs(trial.shift[:, column]) * size, initial=0.0))


def noise_of(residual: FloatArray, weight: FloatArray) -> float:
    """Standard deviation of a row, as far as neighbouring rows, or blocks of rows where errors last, do not share it.

    Rows: what each is off the line through its neighbours. Blocks: fourth differences, to which a bend is nothing.
    Neither steps nor bends that last for some rows enter there, and being the lower quartile it bears many rows that
    are off. residual: (n,) to within its steps. weight: (n,).
    """
    sound = weight > 0.5 * float(np.median(weight))
    inside = sound[:-2] & sound[1:-1] & sound[2:]
    single = lasting = 0.0
    if np.count_nonzero(inside) >= BLOCK:
        single = _scatter(residual[1:-1][inside] - (residual[:-2] + residual[2:])[inside] / 2, 1.5)
    whole = residual.size // BLOCK * BLOCK
    weights = weight[:whole].reshape(-1, BLOCK).sum(axis=1)
    sums = (weight * residual)[:whole].reshape(-1, BLOCK).sum(axis=1)
    filled = weights > 0.5 * BLOCK
    if np.count_nonzero(filled) >= BLOCK:
        lasting = _scatter(np.diff(sums[filled] / weights[filled], 4), 70.0 / BLOCK)
    return max(single, lasting)


def _scatter(differences: FloatArray, variance: float) -> float:
    return float(np.quantile(np.abs(differences), 0.25)) / QUARTILE / math.sqrt(variance)


def _gain(trial: Trial, blocks: Blocks, cuts: IntArray, unit: float) -> FloatArray:
    """What a step takes from the sum of squares, in variances; 0 where there is no step."""
    room = np.where(trial.room > 0, trial.room, 1.0)
    gain = np.where(trial.room > 0, trial.pull**2 / room / blocks.noise**2, 0.0)
    able = (gain > SIGNIFICANT**2) & (np.abs(trial.pull) >= LEAST_STEP * unit * room)
    places = np.flatnonzero(able)
    places = np.sort(places[np.argsort(-gain[places], kind="stable")][:MOST_PLACES])
    kept = np.zeros(gain.size)
    sharp = places[_sharp(trial, blocks, cuts, unit, places)]
    kept[sharp] = gain[sharp]
    return kept


def _largest(trial: Trial, gain: FloatArray) -> IntArray:
    """The block of the largest gain in each segment that has any."""
    held = np.flatnonzero(gain)
    order = held[np.lexsort((-gain[held], trial.segment[held]))]
    return np.asarray(np.sort(order[np.unique(trial.segment[order], return_index=True)[1]]), np.int64)


def _sharp(trial: Trial, blocks: Blocks, cuts: IntArray, unit: float, places: IntArray) -> BoolArray:
    """Where the residual has a break: a line with a step is fitted to the blocks around each place."""
    near = min(max(LEAST_AROUND, math.ceil((SIGNIFICANT * blocks.noise / unit) ** 2)), MOST_AROUND)
    sharp = np.zeros(places.size, np.bool_)
    for low in range(0, places.size, SAMPLE):
        part = places[low : low + SAMPLE]
        size, variance = _broken_line(trial, blocks, cuts, part, near)
        thin = variance > 2 / (BLOCK * near) * 8
        if thin.any():
            size[thin], variance[thin] = _broken_line(trial, blocks, cuts, part[thin], MOST_AROUND)
        bound = np.maximum(LEAST_STEP * unit, SHARP * blocks.noise * np.sqrt(variance))
        sharp[low : low + SAMPLE] = (variance > 0) & (np.abs(size) >= bound)
    return sharp


def _broken_line(
    trial: Trial, blocks: Blocks, cuts: IntArray, places: IntArray, around: int
) -> tuple[FloatArray, FloatArray]:
    """The step within each block and its variance in terms of a row's; 0 where it cannot be told.

    With all else fitted along with the step, a line of one slope with a break goes through `around` blocks on either
    side, in the same segment.
    """
    at = places[:, np.newaxis] + np.delete(np.arange(-around, around + 1), around)
    ends = np.append(cuts, blocks.weights.size)
    first, last = ends[trial.segment[places]], ends[trial.segment[places] + 1]
    inside = (at >= first[:, np.newaxis]) & (at < last[:, np.newaxis])
    at = np.clip(at, 0, blocks.weights.size - 1)
    weight = np.where(inside & np.isfinite(trial.mean[at]), blocks.weights[at], 0.0)
    room = np.where(trial.room[places] > 0, trial.room[places], 1.0)
    moved = (trial.pull[places] / room)[:, np.newaxis] * trial.shift[places]
    fitted = (blocks.sums[at, :-1] @ moved[:, :, np.newaxis])[:, :, 0] / np.maximum(blocks.weights[at], 1e-9)
    value = np.where(weight > 0, trial.mean[at] + fitted, 0.0)
    time = blocks.middle[at] - blocks.middle[places][:, np.newaxis]
    masses, times, values, square, cross = [], [], [], np.zeros(places.size), np.zeros(places.size)
    for side in (slice(None, around), slice(around, None)):
        w, t, v = weight[:, side], time[:, side], value[:, side]
        mass = np.maximum(w.sum(axis=1), 1e-9)
        t_mean, v_mean = (w * t).sum(axis=1) / mass, (w * v).sum(axis=1) / mass
        square += (w * (t - t_mean[:, np.newaxis]) ** 2).sum(axis=1)
        cross += (w * (t - t_mean[:, np.newaxis]) * v).sum(axis=1)
        masses.append(mass)
        times.append(t_mean)
        values.append(v_mean)
    apart = times[1] - times[0]
    told = (masses[0] > 0.5) & (masses[1] > 0.5) & (square > 0)
    square = np.where(told, square, 1.0)
    size = values[1] - values[0] - cross / square * apart
    variance = 1 / masses[0] + 1 / masses[1] + apart**2 / square
    return np.where(told, size, 0.0), np.where(told, variance, 0.0)
