"""Do the serial position and the count tell the same story?

At the latch of each frame the count C is known, the speed v, and the serial position of p turns. They hang together as

    C = direction * counts_per_turn * p + offset + latency * v + what is left

since a serial position that is `latency` old shows where the shaft was then (and latency^2 / 2 times the acceleration
less, where that is worth telling). The offset has its own value between any
two steps (counts lost or invented, a position that slipped). The serial position is a whole number for an interval,
so half a unit is added to it.

Everything is estimated together by least squares over the frames that fit; frames that do not are left out entirely,
so a wild frame has no say at all. Fit and search for steps take turns until neither changes. The lowest four
harmonics of the turn are fitted along, so that an eccentric disc passes neither for latency nor for a step; where the
shaft did not go round twice they are held to what encoders have, and the uncertainties tell what they leave open.

What the motion cannot tell apart is not told. Scale and offset need travel. Latency and offset need a changing speed:
the latency is given where

- the part of the speed's variation that neither travel nor angle explains is at least five times the scatter of the
  speed between neighbouring frames (a speed that is mostly noise would draw the slope towards zero), and
- its standard uncertainty times the speed is no more than one unit of the coarser of both readings.

Otherwise the offset holds latency times speed as well. A step may look like latency at a change of speed; where one
could hide there, or where something that is no plain step looks like one, the latency's uncertainty holds what that
would do. Source of both bounds: common practice, no source.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from decode.agreement import joint, regression, steps, unwrap
from decode.agreement.angle import AngleError, maybe_split
from decode.agreement.steps import Steps
from decode.spans import BoolArray, FloatArray, IntArray

FEWEST_FRAMES = 32
HARMONICS = 4
TURNS_FOR_HARMONICS = 2.0
TURNS_FOR_SCALE = 0.25
TOLERANCE = 6.0
"""Robust standard deviations within which a frame belongs to the fit."""
OWN_ERROR_TURNS = 1.0 / 360
"""Usual size of an encoder's own error once a turn, less by the square of the order for the harmonics; it matters only
where the travel is too short to show it. Half of it bends the scale there. More than data sheets of mounted encoders
allow. Common practice, no source."""
USUAL_LATENCY_S = 100e-6
"""What latency may bend the scale by where the two cannot be told apart. Common practice, no source."""
SPEED_CONTRAST = 5.0
LOST = 0.1
"""Turns: median miss from frame to frame beyond which nothing follows anything; words at random give a quarter."""
SIGNIFICANT = 4.0
"""Standard uncertainties by which a scale differs from the sheet's for good."""
LEAST_BEND = 0.01
"""Units by which what latency and acceleration do may still change from round to round."""
ABRUPT = 16
"""Changes of speed looked at singly for steps that they could hide."""
MOST_FRAMES_LATE = 4
"""Frames of latency up to which acceleration is taken into account."""
MOST_ROUNDS = 12
LEAST_SHARE = 1e-3

UNRELATED = "serial position and count do not follow each other"
NOT_SEPARABLE = "not separable: the speed varied too little"
EXCHANGEABLE = "not separable: other causes, a step at a change of speed among them, would look the same"


@dataclass(frozen=True, slots=True, eq=False)
class Agreement:
    """What serial position and count say of each other. None: the capture cannot tell, and `reasons` says why.

    frames_used: frames that were compared. direction: 1 where the count rises with the serial position, else -1;
    direction_opposed: it is surely not the sheet's. counts_per_turn: counts in one serial turn, as fitted, with its
    standard uncertainty; scale_error: over the sheet's, minus 1; scale_wrong: surely not the sheet's (by more than
    four standard uncertainties and half a count a turn). offset_counts: count at which the serial word is zero, of
    the longest stretch between steps. latency_s: age of the serial position, with its standard uncertainty.

    Per frame, of all frames fed, NaN where one was not compared: residual_deg: serial minus counted angle in the
    serial position's sense, mechanical degrees, after offset, direction and latency (and scale, where it is wrong or
    the sheet has none); jitter_deg: what of it does not repeat with the angle, None below two turns; serial_turns:
    unwrapped; counted_turns: the count brought to the serial position's zero, sense and latency.
    residual_rms_deg, residual_peak_deg: without the outliers. residual_uncertainty_deg: what the resolution of both
    readings and of the capture leaves open in one residual (standard).

    outliers: (k,) frames far off their level, rising; outlier_counts: by how much, in counts; outlier_stale: the word
    was that of the frame before although the count moved on; outlier_run: how many outliers follow each other there.
    """

    frames_used: int
    direction: int | None = None
    direction_opposed: bool = False
    counts_per_turn: float | None = None
    counts_per_turn_uncertainty: float | None = None
    scale_error: float | None = None
    scale_error_uncertainty: float | None = None
    scale_wrong: bool = False
    offset_counts: float | None = None
    offset_uncertainty_counts: float | None = None
    latency_s: float | None = None
    latency_uncertainty_s: float | None = None
    residual_deg: FloatArray | None = None
    residual_rms_deg: float | None = None
    residual_peak_deg: float | None = None
    residual_uncertainty_deg: float | None = None
    serial_turns: FloatArray | None = None
    counted_turns: FloatArray | None = None
    steps: Steps = field(default_factory=lambda: _no_steps())
    outliers: IntArray = field(default_factory=lambda: np.empty(0, np.int64))
    outlier_counts: FloatArray = field(default_factory=lambda: np.empty(0, np.float64))
    outlier_stale: BoolArray = field(default_factory=lambda: np.empty(0, np.bool_))
    outlier_run: IntArray = field(default_factory=lambda: np.empty(0, np.int64))
    angle_error: AngleError | None = None
    jitter_deg: FloatArray | None = None
    reasons: dict[str, str] = field(default_factory=dict)

    @property
    def notes(self) -> list[str]:
        """Each reason once, in plain words."""
        return list(dict.fromkeys(self.reasons.values()))


def _no_steps() -> Steps:
    whole = np.empty(0, np.int64)
    return Steps(whole, whole, whole, np.empty(0, np.float64), np.empty(0, np.float64), np.empty(0, np.bool_))


@dataclass(frozen=True, slots=True, eq=False)
class _Frames:
    """The frames compared. turns: (n,) serial, unwrapped, at the middle of the unit. in_turn: (n,) the same within
    the turn. slope: serial positions per count, signed. held: (n,) one of both readings stood still while the other
    moved. borders: (b,) rows at which an unbroken stretch begins. breaks: (k,) rows at which the count is known not
    to go on. unit, serial_unit: counts. grid: ticks."""

    index: IntArray
    time: IntArray
    counted: FloatArray
    speed: FloatArray
    uncertainty: FloatArray
    turns: FloatArray
    in_turn: FloatArray
    slope: float
    stale: BoolArray
    held: BoolArray
    borders: IntArray
    breaks: IntArray
    unit: float
    serial_unit: float
    positions_per_turn: int
    grid: int

    @property
    def sense(self) -> int:
        return 1 if self.slope > 0 else -1

    @property
    def counts_per_turn(self) -> float:
        """As the slope says: the start of the fit."""
        return self.positions_per_turn / abs(self.slope)


@dataclass(frozen=True, slots=True)
class _Scale:
    counts_per_turn: float | None
    uncertainty: float
    wrong: bool


@dataclass(frozen=True, slots=True)
class _Board:
    """The arguments of `agree` that are not per frame."""

    modulus: int
    positions_per_turn: int
    counts_per_turn: int | None
    direction: int
    tick_s: float


@dataclass(frozen=True, slots=True, eq=False)
class _Settled:
    """A fit together with the steps and the frames it goes with. passing: (n,) frames between two levels, part of a
    step. speed: (n,) without what steps make of it. bend: (n,) counts that the speed's change makes of the latency.
    hidden: ticks by which steps that would not be found may shift the latency."""

    fitted: regression.Fitted
    counts_per_turn: float
    with_scale: bool
    with_speed: bool
    starts: IntArray
    inlier: BoolArray
    passing: BoolArray
    noise: float
    speed: FloatArray
    bend: FloatArray
    hidden: float

    def column(self, name: str) -> int:
        return {"scale": 0, "speed": int(self.with_scale)}[name]


def agree(
    time: IntArray,
    position: IntArray,
    usable: npt.NDArray[np.bool_],
    counted: FloatArray,
    speed: FloatArray,
    uncertainty: FloatArray,
    *,
    modulus: int,
    positions_per_turn: int,
    counts_per_turn: int | None,
    direction: int,
    tick_s: float,
    grid_ticks: int = 1,
    stretch: IntArray | None = None,
    breaks: IntArray | None = None,
) -> Agreement:
    """Compare frames with the count at their latches.

    time: (n,) ticks of the latches, rising. position: (n,) turns and position as one word, 0 <= word < modulus.
    usable: (n,) frames without a serial fault. counted, speed, uncertainty: (n,) as `LatchJoin` gives them (counts,
    counts per tick, counts). modulus: positions per turn times turns. counts_per_turn, direction: the sheet's.
    grid_ticks: the capture's sampling interval. stretch: (n,) number of the unbroken stretch of the capture that a
    frame is in, rising; the offset may differ from one to the next without being a step. breaks: (k,) ticks at which
    counts were surely lost or invented; the offset may differ from there, which is told as a step.
    """
    row = np.flatnonzero(usable & np.isfinite(counted) & np.isfinite(speed))
    if row.size < FEWEST_FRAMES:
        return _nothing(row.size, f"fewer than {FEWEST_FRAMES} good frames while the count was known")
    words, counts, doubts = position[row], counted[row], uncertainty[row]
    board = _Board(modulus, positions_per_turn, counts_per_turn, direction, tick_s)
    slope, stale, held = _slope(words, counts, doubts, board)
    if slope is None:
        return _nothing(row.size, "the count stands still")
    if abs(slope) * np.ptp(counts) < 4 or held.all():
        return _nothing(row.size, "the serial position stands still while the count moves")
    if not _follows(words[~held], counts[~held], slope, board):
        return _nothing(row.size, UNRELATED)
    serial_unit = 1 / abs(slope)
    whole = unwrap.unwrapped(words, counts, modulus, slope, ~held)
    frames = _Frames(
        row,
        time[row],
        counts,
        speed[row],
        doubts,
        (whole + 0.5) / positions_per_turn,
        (words % positions_per_turn + 0.5) / positions_per_turn,
        slope,
        stale,
        held,
        np.empty(0, np.int64) if stretch is None else np.flatnonzero(np.diff(stretch[row])) + 1,
        _rows_after(time[row], breaks),
        max(1.0, serial_unit),
        serial_unit,
        positions_per_turn,
        grid_ticks,
    )
    return _compared(frames, time.size, board)


def _rows_after(time: IntArray, breaks: IntArray | None) -> IntArray:
    """The first row after each break, where there are rows on both sides."""
    if breaks is None:
        return np.empty(0, np.int64)
    rows = np.unique(np.searchsorted(time, breaks, side="right"))
    return np.asarray(rows[(rows > 0) & (rows < time.size)], np.int64)


def _nothing(frames: int, reason: str) -> Agreement:
    names = ("direction", "counts_per_turn", "scale_error", "offset_counts", "latency_s", "residual_deg", "angle_error")
    return Agreement(frames, reasons=dict.fromkeys(names, reason))


def _slope(
    words: IntArray, counts: FloatArray, doubts: FloatArray, board: _Board
) -> tuple[float | None, BoolArray, BoolArray]:
    """The slope, which frames have a stale serial position, and which have either reading held."""
    modulus, expected = board.modulus, None
    if board.counts_per_turn is not None:
        expected = board.direction * board.positions_per_turn / board.counts_per_turn
    none = np.zeros(words.size, np.bool_)
    near = unwrap.maybe_slope(words, counts, modulus, expected, 8)
    stale = held = none
    if near is not None:
        ahead = unwrap.wrapped_float(unwrap.wrapped(np.diff(words), modulus) - near * np.diff(counts), modulus)
        margin = 3 + 6 * 1.4826 * float(np.median(np.abs(ahead))) + 2 * abs(near) * doubts
        stale = _held(np.diff(words) == 0, near * counts, margin, None)
        held = stale | _held(np.diff(counts) == 0, words.astype(np.float64), margin, modulus)
    sound = ~held
    if np.count_nonzero(sound) < FEWEST_FRAMES:
        return near, stale, np.ones(words.size, np.bool_)
    furthest = max(8, int(np.count_nonzero(sound)) // 4)
    return unwrap.maybe_slope(words[sound], counts[sound], modulus, near or expected, furthest), stale, held


def _follows(words: IntArray, counts: FloatArray, slope: float, board: _Board) -> bool:
    missed = unwrap.wrapped(np.diff(words), board.modulus) - slope * np.diff(counts)
    typical = float(np.median(np.abs(unwrap.wrapped_float(missed, board.modulus))))
    return typical <= LOST * board.positions_per_turn


def _held(same: BoolArray, other: FloatArray, margin: FloatArray, modulus: int | None) -> BoolArray:
    """Frames in a run of equal readings during which the other reading went further than `margin`, and goes on: where
    it went there at once and stands as well, both are on another level."""
    first = np.maximum.accumulate(np.where(np.concatenate([[True], ~same]), np.arange(other.size), 0))
    moved = other - other[first]
    if modulus is not None:
        moved = unwrap.wrapped_float(moved, modulus)
    held = np.asarray(np.abs(moved) > margin, np.bool_)
    rows = np.flatnonzero(held)
    if rows.size == 0:
        return held
    begins = np.concatenate([[0], np.flatnonzero((np.diff(rows) > 1) | (np.diff(first[rows]) > 0)) + 1])
    lengths = np.diff(np.append(begins, rows.size))
    reach = np.maximum.reduceat(moved[rows], begins) - np.minimum.reduceat(moved[rows], begins)
    standing = (lengths > 1) & (reach <= np.minimum.reduceat(margin[rows], begins))
    held[rows[np.repeat(standing, lengths)]] = False
    return held


def _compared(frames: _Frames, total: int, board: _Board) -> Agreement:
    reasons: dict[str, str] = {}
    sheet = board.counts_per_turn
    found = frames.counts_per_turn
    travel = float(np.ptp(frames.turns))
    free = _settle(frames, found, travel >= TURNS_FOR_SCALE, True, None)
    if np.count_nonzero(free.inlier) * 2 < frames.index.size:
        return _nothing(frames.index.size, UNRELATED)
    plain = free if _is_separable(free, frames) else _settle(frames, found, free.with_scale, False, free)
    scale, doubt = _scale(plain, frames, travel, board.tick_s)
    if scale is None:
        reasons["counts_per_turn"] = reasons["scale_error"] = "the shaft went less than a quarter of a turn"
    elif sheet is None:
        reasons["scale_error"] = "the sheet has no counts per turn"
    wrong = scale is not None and sheet is not None and abs(scale - sheet) > max(SIGNIFICANT * doubt, 0.5)
    by_sheet = sheet is not None and not wrong
    per_turn = float(sheet) if sheet is not None and by_sheet else scale or found
    with_scale = not by_sheet and scale is not None
    last = _settle(frames, per_turn, with_scale, True, free)
    separable = _is_separable(last, frames)
    if not separable and _speed_is_nothing(frames, board.tick_s):
        last = _settle(frames, per_turn, with_scale, False, free)
    if not separable:
        reasons["latency_s"] = EXCHANGEABLE if last.with_speed else NOT_SEPARABLE
    return _told(frames, total, board, last, _Scale(scale, doubt, wrong), reasons)


def _settle(
    frames: _Frames,
    per_turn: float,
    with_scale: bool,
    with_speed: bool,
    begin: _Settled | None,
) -> _Settled:
    """Fit, look for steps, leave out what is off, until nothing changes."""
    fastest = _fastest(frames)
    with_speed = with_speed and fastest > 0
    plain = frames.counted - frames.counted[0] - frames.sense * per_turn * (frames.turns - frames.turns[0])
    floor = frames.serial_unit / np.sqrt(12)
    starts = _borders(frames) if begin is None else begin.starts
    inlier = _near_neighbours(frames, plain) if begin is None else begin.inlier
    noise = floor if begin is None else begin.noise
    passing, bend = np.zeros(plain.size, np.bool_), np.zeros(plain.size)
    rest = plain if begin is None else begin.fitted.residual
    share, cell = _own_share(frames), _cells(frames)
    usual = OWN_ERROR_TURNS * per_turn / np.repeat(np.arange(1, HARMONICS + 1), 2) ** 2
    for left in reversed(range(MOST_ROUNDS)):
        weight = np.where(inlier, share * noise**2 / (noise**2 + frames.uncertainty**2 / 3), 0.0)
        tied = np.concatenate([np.zeros(int(with_scale) + int(with_speed)), (noise / usual) ** 2])
        design = _design(frames, with_scale, _undisturbed(frames, starts) / fastest if with_speed else None)
        scatter = max(floor, joint.noise_of(rest, weight))
        blocks = joint.blocks_of(plain + bend, design, weight, starts, tied, frames.time, scatter)
        tried = np.union1d(starts, joint.steps_in(blocks, frames.unit)) if left else starts
        speed = _undisturbed(frames, tried)
        design = _design(frames, with_scale, speed / fastest if with_speed else None)
        fitted = regression.fit(plain + bend, design, tied.size, weight, tried, cell, floor, tied)
        if left == 0:
            break
        rest = along = fitted.residual + fitted.levels[fitted.segment]
        fresh, kept, passing = _segments(frames, along, tried, floor)
        bent = _bend(frames, speed, *_delay(fitted, int(with_scale), fastest)) if with_speed else None
        settled = bent is None or bool(np.abs(bent - bend).max() < LEAST_BEND * frames.unit)
        if settled and all(map(np.array_equal, (fresh, fresh, kept), (starts, tried, inlier))):
            break
        starts, inlier, noise = fresh, kept, _noise(frames, along - _levels(along, frames.held, fresh), floor)
        bend = bend if bent is None or settled else bent
    hidden = 0.0
    if with_speed:
        apart = np.union1d(starts, _abrupt(frames)).astype(np.int64)
        blocks = joint.blocks_of(plain + bend, design, weight, apart, tied, frames.time, scatter)
        hidden = joint.hidden_pull(blocks, starts, frames.unit, int(with_scale)) / fastest
    return _Settled(fitted, per_turn, with_scale, with_speed, starts, inlier, passing, noise, speed, bend, hidden)


def _design(frames: _Frames, with_scale: bool, speed: FloatArray | None) -> regression.Design:
    """Columns of the fit: turns, speed, and the harmonics of the turn."""
    middle, means = _middle(frames), _means_of_harmonics(frames)

    def design(low: int, high: int) -> FloatArray:
        columns = []
        if with_scale:
            columns.append(frames.turns[low:high] - middle)
        if speed is not None:
            columns.append(speed[low:high])
        wave = np.exp(2j * np.pi * frames.in_turn[low:high])
        power = wave
        for mean in means:
            columns += [power.real - mean.real, power.imag - mean.imag]
            power = power * wave
        return np.column_stack(columns)

    return design


def _means_of_harmonics(frames: _Frames) -> npt.NDArray[np.complex128]:
    """(HARMONICS,) what to take off each, so that the level stays that of the frames: their mean where they cover only
    part of the turn, nothing where they cover it twice."""
    if np.ptp(frames.turns) >= TURNS_FOR_HARMONICS:
        return np.zeros(HARMONICS, np.complex128)
    wave = np.exp(2j * np.pi * frames.in_turn)
    return np.asarray([np.mean(wave**order) for order in range(1, HARMONICS + 1)], np.complex128)


def _abrupt(frames: _Frames) -> IntArray:
    """Rows at which the speed changes most: there a step is the easiest to take for latency."""
    change = np.abs(np.diff(frames.speed))
    most = np.argpartition(-change, min(ABRUPT, change.size) - 1)[:ABRUPT]
    rows = np.unique(most[:, np.newaxis] + np.arange(3))
    return np.asarray(rows[rows < frames.speed.size], np.int64)


def _undisturbed(frames: _Frames, starts: IntArray) -> FloatArray:
    """(n,) the speed; beside a step it is taken over counts that are missing, so there that of the frames around."""
    stepped = np.setdiff1d(starts[1:], frames.borders)
    stepped = stepped[(stepped >= 2) & (stepped < frames.index.size - 1)]
    speed = frames.speed.copy()
    before, after = frames.speed[stepped - 2], frames.speed[stepped + 1]
    speed[stepped - 1], speed[stepped] = (2 * before + after) / 3, (before + 2 * after) / 3
    return speed


def _delay(fitted: regression.Fitted, column: int, fastest: float) -> tuple[float, float]:
    """The latency of a fit and its scatter, in ticks."""
    return float(fitted.coefficients[column]) / fastest, float(np.sqrt(fitted.covariance[column, column])) / fastest


def _bend(frames: _Frames, speed: FloatArray, latency: float, scatter: float) -> FloatArray | None:
    """(n,) counts that the shaft would have gone further in `latency` ticks at the speed it has now, than it has at
    the speed it had: half the acceleration times the square of the latency. None where that is not known, or nothing.
    """
    time = frames.time
    spacing = float(time[-1] - time[0]) / (time.size - 1)
    if abs(latency) < SIGNIFICANT * scatter or abs(latency) > MOST_FRAMES_LATE * spacing:
        return None
    sparse = speed[:: max(1, speed.size // 4096)]
    changes = float(np.abs(np.diff(sparse)).max()) / (spacing * max(1, speed.size // 4096))
    if latency * latency / 2 * changes < LEAST_BEND * frames.unit:
        return None
    between = np.maximum(np.gradient(time.astype(np.float64)), spacing / 16)
    return np.asarray(latency * latency / 2 * np.gradient(speed) / between, np.float64)


def _own_share(frames: _Frames) -> FloatArray:
    """How much of each frame is news. While the shaft stands within one unit, frame after frame rounds the same way."""
    moved = np.abs(np.gradient(frames.counted)) / frames.unit
    return np.asarray(np.clip(moved, LEAST_SHARE, 1.0), np.float64)


def _cells(frames: _Frames) -> IntArray:
    """The part of the turn each frame is in, no finer than the coarser of both readings."""
    per_turn = min(regression.CELLS, max(1, round(frames.counts_per_turn / frames.unit)))
    return np.asarray(np.minimum(frames.in_turn * per_turn, per_turn - 1).astype(np.int64))


def _borders(frames: _Frames) -> IntArray:
    """First row of every stretch of the capture, and of what follows each break."""
    return np.union1d(np.union1d([0], frames.borders), frames.breaks).astype(np.int64)


def _segments(
    frames: _Frames, along: FloatArray, tried: IntArray, floor: float
) -> tuple[IntArray, BoolArray, BoolArray]:
    """First row of every segment, the frames that are on their level, and those on their way to another."""
    sound = np.flatnonzero(~frames.held)
    fixed = _borders(frames)

    def among(rows: IntArray) -> IntArray:
        return np.searchsorted(sound, rows[rows > 0])

    begun = steps.find(along[sound], frames.counted[sound], frames.unit, frames.serial_unit, among(fixed), among(tried))
    starts = np.union1d(fixed, sound[begun]).astype(np.int64)
    off = along - _levels(along, frames.held, starts)
    kept = _fitting(frames, off, floor)
    ends = steps.end_runs(off, ~kept & ~frames.held, np.union1d([0], frames.borders), _tolerance(frames, off, floor))
    if ends.size:
        starts = np.union1d(starts, ends).astype(np.int64)
        off = along - _levels(along, frames.held, starts)
        kept = _fitting(frames, off, floor)
    inner = np.setdiff1d(starts[1:], frames.borders)
    repeated = np.setdiff1d(inner, frames.breaks)
    repeated = repeated[frames.held[repeated - 1]]
    repeated = repeated[np.abs((along - off)[repeated] - along[repeated - 1]) <= _tolerance(frames, off, floor)] - 1
    if repeated.size:  # the word stayed the same when the count moved by the step
        starts = np.union1d(np.setdiff1d(starts, repeated + 1), repeated).astype(np.int64)
        off = along - _levels(along, frames.held, starts)
        kept[repeated] = True
        inner = np.setdiff1d(starts[1:], frames.borders)
    return starts, kept, steps.passing(along, along - off, ~kept & ~frames.held, starts, inner)


def _noise(frames: _Frames, off: FloatArray, floor: float) -> float:
    return max(1.4826 * float(np.median(np.abs(off[~frames.held]))), floor)


def _fitting(frames: _Frames, off: FloatArray, floor: float) -> BoolArray:
    """The frames that are on their level."""
    tolerance = _tolerance(frames, off, floor) + 2 * frames.uncertainty
    return np.asarray((np.abs(off) <= tolerance) & ~frames.held, np.bool_)


def _tolerance(frames: _Frames, off: FloatArray, floor: float) -> float:
    return max(TOLERANCE * _noise(frames, off, floor), 1.5 * frames.unit)


def _middle(frames: _Frames) -> float:
    return float((frames.turns.min() + frames.turns.max()) / 2)


def _fastest(frames: _Frames) -> float:
    return float(np.abs(frames.speed).max())


def _levels(along: FloatArray, held: BoolArray, starts: IntArray) -> FloatArray:
    """(n,) median of the sound frames of each frame's segment."""
    levels = np.empty(along.size)
    for low, high in zip(starts, np.append(starts[1:], along.size), strict=True):
        part = along[low:high][~held[low:high]]
        levels[low:high] = np.median(part) if part.size else 0.0
    return levels


def _near_neighbours(frames: _Frames, target: FloatArray) -> BoolArray:
    """A first guess of the frames to fit: those near the median of the frames around them."""
    missing = -target.size % unwrap.BLOCK
    blocks = np.concatenate([target, np.full(missing, target[-1])]).reshape(-1, unwrap.BLOCK)
    off = np.abs(blocks - np.median(blocks, axis=1)[:, np.newaxis]).reshape(-1)[: target.size]
    tolerance = max(2 * TOLERANCE * float(np.median(off)), 2 * frames.unit)
    return np.asarray((off <= tolerance) & ~frames.held, np.bool_)


def _scale(free: _Settled, frames: _Frames, travel: float, tick_s: float) -> tuple[float | None, float]:
    """Counts per serial turn with its standard uncertainty."""
    if not free.with_scale:
        return None, np.inf
    at = free.column("scale")
    scale = free.counts_per_turn + frames.sense * float(free.fitted.coefficients[at])
    scatter = np.sqrt(free.fitted.covariance[at, at])
    bent = OWN_ERROR_TURNS / 2 * scale if travel < TURNS_FOR_HARMONICS else 0.0
    drawn = 0.0 if free.with_speed else float(np.ptp(frames.speed)) * USUAL_LATENCY_S / tick_s
    return scale, float(np.hypot(scatter, (frames.unit / np.sqrt(12) + bent + drawn) / travel))


def _latency(settled: _Settled, frames: _Frames) -> tuple[float, float]:
    """Latency and its standard uncertainty in ticks; the latter never below the sampling interval."""
    at, fastest = settled.column("speed"), _fastest(frames)
    latency = float(settled.fitted.coefficients[at]) / fastest
    scatter = np.sqrt(settled.fitted.covariance[at, at]) / fastest
    spread = float(settled.fitted.spread[at]) * fastest
    drawn = abs(latency) * (_speed_scatter(frames, settled) / spread) ** 2 if spread > 0 else np.inf
    return latency, float(np.sqrt(scatter**2 + frames.grid**2 + drawn**2 + settled.hidden**2 / 3))


def _speed_scatter(frames: _Frames, settled: _Settled) -> float:
    """Standard deviation of a speed reading: against the mean of its neighbours, and what the grid alone makes of a
    cycle of four counts between two edges, each rounded by grid / sqrt(12)."""
    speed = settled.speed[~frames.held & ~settled.passing]
    off = speed[1:-1] - (speed[:-2] + speed[2:]) / 2
    rounding = frames.grid / np.sqrt(6) / 4 * np.mean(speed**2)
    return float(max(np.sqrt(np.mean(off**2) / 1.5), rounding))


def _is_separable(settled: _Settled, frames: _Frames) -> bool:
    if not settled.with_speed:
        return False
    fastest = _fastest(frames)
    spread = float(settled.fitted.spread[settled.column("speed")]) * fastest
    if spread <= max(SPEED_CONTRAST * _speed_scatter(frames, settled), 1e-9 * fastest):
        return False
    doubt = _latency(settled, frames)[1]
    return bool(doubt * np.sqrt(np.mean(frames.speed[settled.inlier] ** 2)) <= frames.unit)


def _speed_is_nothing(frames: _Frames, tick_s: float) -> bool:
    """The usual latency would not show in the speeds there were."""
    low, high = np.percentile(frames.speed, [0.5, 99.5])
    return bool((high - low) * USUAL_LATENCY_S / tick_s < frames.unit / 2)


def _told(
    frames: _Frames, total: int, board: _Board, last: _Settled, scale: _Scale, reasons: dict[str, str]
) -> Agreement:
    sheet, fitted_scale = board.counts_per_turn, scale.counts_per_turn
    scale_doubt = None if fitted_scale is None else scale.uncertainty
    per_turn = last.counts_per_turn
    if last.with_scale:
        per_turn += frames.sense * float(last.fitted.coefficients[0])
    latency, latency_doubt = _latency(last, frames) if last.with_speed else (0.0, np.inf)
    known = last.with_speed and "latency_s" not in reasons
    levels = _offsets(frames, last)
    longest = int(np.argmax(last.fitted.weights))
    fitting = frames.counted + last.bend - levels[last.fitted.segment] - latency * last.speed
    aligned = frames.sense * fitting / per_turn
    residual = (frames.turns - aligned) * 360
    outliers = np.flatnonzero(~last.inlier & ~last.passing)
    inside = residual[last.inlier]
    doubt = np.hypot(frames.serial_unit / np.sqrt(12), frames.grid / np.sqrt(6) * np.sqrt(np.mean(frames.speed**2)))
    split = maybe_split(inside, frames.turns[last.inlier])
    if split is None:
        reasons["angle_error"] = "fewer than two turns, or too few frames"
    whole = float(np.ptp(frames.counted)) >= 8 * frames.unit
    if not whole:
        reasons["direction"] = "the shaft hardly moved"
    runs = np.cumsum(np.diff(outliers, prepend=-2) > 1)
    return Agreement(
        frames_used=int(frames.index.size),
        direction=frames.sense if whole else None,
        direction_opposed=whole and frames.sense != board.direction,
        counts_per_turn=fitted_scale,
        counts_per_turn_uncertainty=scale_doubt,
        scale_error=None if fitted_scale is None or sheet is None else fitted_scale / sheet - 1,
        scale_error_uncertainty=None if scale_doubt is None or sheet is None else scale_doubt / sheet,
        scale_wrong=scale.wrong,
        offset_counts=float(levels[longest]) + (0.0 if known else latency * _mean_speed(frames, last, longest)),
        offset_uncertainty_counts=_offset_doubt(frames, last, longest, known),
        latency_s=latency * board.tick_s if known else None,
        latency_uncertainty_s=latency_doubt * board.tick_s if known else None,
        residual_deg=_spread_out(np.where(last.passing, np.nan, residual), frames.index, total),
        residual_rms_deg=float(np.sqrt(np.mean(inside**2))),
        residual_peak_deg=float(np.abs(inside).max()),
        residual_uncertainty_deg=float(doubt / per_turn * 360),
        serial_turns=_spread_out(frames.turns, frames.index, total),
        counted_turns=_spread_out(aligned, frames.index, total),
        steps=_steps(frames, last, levels, board.modulus),
        outliers=frames.index[outliers],
        outlier_counts=frames.sense * residual[outliers] / 360 * per_turn,
        outlier_stale=frames.stale[outliers],
        outlier_run=np.bincount(runs)[runs] if outliers.size else outliers,
        angle_error=None if split is None else split[0],
        jitter_deg=None if split is None else _spread_out(split[1], frames.index[last.inlier], total),
        reasons=reasons,
    )


def _spread_out(values: FloatArray, rows: IntArray, total: int) -> FloatArray:
    every = np.full(total, np.nan)
    every[rows] = values
    return every


def _offsets(frames: _Frames, last: _Settled) -> FloatArray:
    """(s,) count at which the unwrapped serial position is zero, of each segment."""
    levels = last.fitted.levels + frames.counted[0] - frames.sense * last.counts_per_turn * frames.turns[0]
    if last.with_scale:
        levels = levels - last.fitted.coefficients[0] * _middle(frames)
    return np.asarray(levels, np.float64)


def _mean_speed(frames: _Frames, last: _Settled, segment: int) -> float:
    """What latency is multiplied with in the offset where it cannot be told."""
    return float(last.fitted.means[segment, last.column("speed")]) * _fastest(frames) if last.with_speed else 0.0


def _offset_doubt(frames: _Frames, last: _Settled, segment: int, latency_known: bool) -> float:
    lever = last.fitted.means[segment].copy()
    if last.with_speed and not latency_known:
        lever[last.column("speed")] = 0.0
    if last.with_scale:
        lever[0] += _middle(frames)
    carried = float(lever @ last.fitted.covariance @ lever)
    own = last.noise**2 * last.fitted.together / max(1.0, float(last.fitted.weights[segment]))
    seen = frames.grid**2 * float(np.mean(frames.speed[last.inlier])) ** 2
    return float(np.sqrt(own + carried + seen))


def _steps(frames: _Frames, last: _Settled, offsets: FloatArray, modulus: int) -> Steps:
    """The borders between segments as steps; a whole range of the serial position cannot be told from none."""
    after = last.starts[1:]
    sizes = unwrap.wrapped_float(np.diff(offsets) * abs(frames.slope), modulus) * frames.serial_unit
    weights = np.maximum(last.fitted.weights, 1.0)
    levers = np.diff(last.fitted.means, axis=0)
    carried = np.einsum("si,ij,sj->s", levers, last.fitted.covariance, levers)
    doubts = np.sqrt(last.noise**2 * last.fitted.together * (1 / weights[:-1] + 1 / weights[1:]) + carried)
    kept = ~np.isin(after, frames.borders) & (np.abs(sizes) >= steps.LEAST_STEP * frames.unit)
    level = np.flatnonzero((~frames.held | last.inlier) & ~last.passing)
    at = np.searchsorted(level, after[kept])
    at = np.clip(at, 1, level.size - 1)
    before, first = level[at - 1], level[at]
    last_time, first_time = frames.time[before], frames.time[first]
    return Steps(
        frames.index[before],
        frames.index[first],
        last_time + (first_time - last_time) // 2,
        sizes[kept],
        doubts[kept],
        np.isin(after[kept], frames.breaks),
    )
