"""Faulty frames as anomalies, with the cause where the bits allow one and never a guess.

A cyclic code tells more than right or wrong: each single flipped bit leaves its own remainder, so a remainder names
its bit. That is believed only where the position with the bit put right also fits the frames around it.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from decode.anomalies import Anomalies
from decode.serial.continuity import Cadence
from decode.serial.crc import crc_of_bits, parameters_of
from decode.serial.frames import FRAME_KINDS, Bits, Frames, slices, words
from decode.serial.interfaces import Habit
from decode.serial.words import describe_bits, hexadecimal, value_of_bits
from decode.sheet import Serial
from decode.spans import BoolArray, IntArray

FITS_WITHIN = 16
"""Steps by which a position may leave the stretch between its neighbours and still fit (common practice, no source)."""

MOSTLY_GOOD = 0.2
"""Up to this share of frames a failing CRC is the line's doing (common practice, no source)."""

ONE_PER_RUN = ("data_stuck", "position_stale")
"""Kinds of which neighbouring frames are one fault."""


def frame_anomalies(
    frames: Frames, serial: Serial, habit: Habit | None, lines: dict[str, str], modulus: int
) -> list[Anomalies]:
    """Every fault and warning of the frames, in order of kind then time. lines: column name by role."""
    found = [
        _of_kind(frames, rows, kind, serial, habit, lines, modulus)
        for kind in FRAME_KINDS[1:]
        if (rows := frames.of_kind(kind)).size
    ]
    warned = np.flatnonzero(frames.warned)
    if warned.size:
        found.append(Anomalies("warning_flag", frames.first_edge[warned], warned, lines.get("data")))
    return found


def missing_anomalies(rhythm: Cadence, lines: dict[str, str]) -> list[Anomalies]:
    """One anomaly for each frame that was due and did not come."""
    if rhythm.due.size == 0:
        return []
    return [Anomalies("frame_missing", rhythm.due, None, lines.get("clock"), evidence={"frame_before": rhythm.after})]


def _of_kind(
    frames: Frames,
    rows: IntArray,
    kind: str,
    serial: Serial,
    habit: Habit | None,
    lines: dict[str, str],
    modulus: int,
) -> Anomalies:
    evidence: dict[str, Any] = {}
    if kind in ONE_PER_RUN:
        starts = np.flatnonzero(np.diff(rows, prepend=-2) > 1)
        evidence["frames"] = np.diff(starts, append=rows.size)
        rows = rows[starts]
    of_clock = kind in ("clock_glitch", "frame_short", "frame_long", "timeout_short")
    line = lines.get("clock" if of_clock else "data")
    some = frames.take(rows)
    evidence["raw"] = list(hexadecimal(some.raw, serial.sent_bits))
    if kind.endswith("_mismatch"):
        first = describe_bits(unpacked(some.raw[:1], serial.sent_bits)[0])
        evidence["bits"] = [first, *[None] * (rows.size - 1)]  # to read along with; one says how all look
    causes: Sequence[str | None] | None = None
    if kind in ("frame_short", "frame_long") and habit is not None:
        evidence |= {"clocks": some.clocks, "usual_clocks": np.full(rows.size, habit.clocks)}
        causes = [_clocks(int(n), habit.clocks, int(gap)) for n, gap in zip(some.clocks, some.gap, strict=True)]
    elif kind == "clock_glitch":
        evidence["clocks"] = some.clocks
        causes = [LEFT_OUT if ok == 1 else None for ok in some.crc_ok]
    elif kind == "crc_mismatch":
        evidence["syndrome"], causes = _crc_causes(frames, rows, serial, modulus)
    elif kind in ("parity_mismatch", "fixed_mismatch"):
        columns = serial.columns()
        evidence["field"] = [columns[number] if number >= 0 else None for number in some.wrong]
    elif kind == "position_stale":
        causes = ["a copy of the word before"] * rows.size
    elif kind == "timeout_short":
        causes = ["the burst began before the encoder's time-out after the one before had run out"] * rows.size
        evidence["pause_ticks"] = some.pause
    elif kind == "setup_violation":
        evidence["least_ticks"] = some.least_setup
    return Anomalies(kind, some.first_edge, rows, line, causes, evidence)


LEFT_OUT = "a short pulse beside a true clock edge that the encoder did not count: without it the word is right"


def _clocks(clocks: int, usual: int, gap: int) -> str:
    if gap:
        return "the clock paused inside the word for longer than a pause between frames needs"
    number = abs(clocks - usual)
    pulses = "one clock pulse" if number == 1 else f"{number} clock pulses"
    return f"{pulses} too {'few' if clocks < usual else 'many'}"


def _crc_causes(frames: Frames, rows: IntArray, serial: Serial, modulus: int) -> tuple[list[str], list[str | None]]:
    """The remainder of each frame as hex, and the one flipped bit where it explains everything."""
    number = next(i for i, part in enumerate(serial.fields) if part.name == "crc")
    part = serial.fields[number]
    bits = unpacked(frames.raw[rows], serial.sent_bits)
    where = slices(serial)
    covered = [where[i] for i in serial.covered(number)]
    parameters = parameters_of(part)

    def remainder(table: Bits) -> npt.NDArray[np.uint64]:
        over = np.concatenate([table[:, one] for one in covered], axis=1)
        sent = value_of_bits(table[:, where[number]])
        return np.asarray(crc_of_bits(over, parameters) ^ sent, np.uint64)

    of_frame = remainder(bits)
    width = serial.word_bits
    clean = np.zeros((1, serial.sent_bits), np.uint8)
    single = np.concatenate([clean, np.eye(serial.sent_bits, dtype=np.uint8)[:width]])
    of_bit = remainder(single)[1:] ^ remainder(clean)
    order = np.argsort(of_bit, kind="stable")
    at = np.searchsorted(of_bit, of_frame, sorter=order)
    bit = order[np.minimum(at, width - 1)]
    alone = np.array([np.count_nonzero(of_bit == one) == 1 for one in of_bit])
    known = (of_bit[bit] == of_frame) & alone[bit]
    mended = bits.copy()
    mended[np.flatnonzero(known), bit[known]] ^= 1
    line_is_bad = rows.size <= MOSTLY_GOOD * len(frames)  # else the settings are, and any remainder names some bit
    fits = known & line_is_bad & _fits(frames, rows, words(mended, serial).position, modulus)
    columns = serial.columns()
    starts = np.array([one.start for one in where])
    names: list[str | None] = []
    for ok, index in zip(fits, bit, strict=True):
        which = int(np.searchsorted(starts, index, side="right")) - 1
        names.append(
            f"bit {where[which].stop - 1 - int(index)} of {columns[which]} alone is wrong: with it flipped the CRC "
            "holds and the position fits its neighbours"
            if ok
            else None
        )
    digits = -(-part.bits // 4)
    return [f"0x{int(value):0{digits}X}" for value in of_frame], names


def _fits(frames: Frames, rows: IntArray, position: IntArray, modulus: int) -> BoolArray:
    """(k,) whether each position lies between those of the nearest good frames before and after."""
    good = np.flatnonzero(frames.usable)
    if good.size < 2:
        return np.zeros(rows.size, np.bool_)
    after = np.searchsorted(good, rows)
    inside = (after > 0) & (after < good.size)
    before = frames.position[good[np.maximum(after - 1, 0)]]
    behind = frames.position[good[np.minimum(after, good.size - 1)]]
    half = modulus // 2

    def apart(one: IntArray, other: IntArray) -> IntArray:
        return np.asarray(np.abs((one - other + half) % modulus - half), np.int64)

    reach = apart(behind, before) + FITS_WITHIN
    return np.asarray(inside & (apart(position, before) <= reach) & (apart(position, behind) <= reach), np.bool_)


def unpacked(raw: Bits, width: int) -> Bits:
    """(n, width) the bits of right-aligned packed words."""
    return np.unpackbits(raw, axis=1)[:, raw.shape[1] * 8 - width :]
