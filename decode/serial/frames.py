"""Words to fields: the sheet's table of fields walked over a whole table of frames at once."""

from __future__ import annotations

from dataclasses import dataclass, field, fields, replace
from typing import Any, Self

import numpy as np
import numpy.typing as npt

from decode.serial.crc import crc_of_bits, parameters_of
from decode.serial.words import gray_to_binary, pack, parity_of_bits, value_of_bits
from decode.sheet import Serial
from decode.spans import BoolArray, IntArray

Bits = npt.NDArray[np.uint8]
Values = npt.NDArray[np.uint64]

FRAME_KINDS = (
    "",
    "data_stuck",
    "timeout_short",
    "clock_glitch",
    "frame_short",
    "frame_long",
    "no_acknowledge",
    "no_start_bit",
    "setup_violation",
    "crc_mismatch",
    "parity_mismatch",
    "fixed_mismatch",
    "error_flag",
    "life_break",
    "position_stale",
    "position_jump",
)
"""What can be wrong with one frame; `Frames.kind` holds the number. Order is not precedence."""

CODE = {name: number for number, name in enumerate(FRAME_KINDS)}


@dataclass(frozen=True, slots=True, eq=False)
class Frames:
    """Frames as columns, one row each, in time order. Times in ticks.

    first_edge, last_edge: (n,) first and last clock edge. latch: (n,) when the encoder froze the position.
    clocks: (n,) clock pulses. raw: (n, bytes) the word as sent, packed, right-aligned. fields: (n,) each by column
    name. position: (n,) turns and position as one binary word. usable: (n,) whether the position can be believed.
    crc_ok: (n,) 1, 0, or -1 without a CRC. kind: (n,) number in FRAME_KINDS, 0 for none. segment: (n,) rises by one
    where the capture is broken between two frames. least_setup: (n,) shortest setup time or -1.
    pause: (n,) ticks since the last clock edge before, or -1. glitch_time: (n,) tick of a short clock pulse or
    NO_TICK.
    gap: (n,) ticks of a pause inside the burst, 0 for none. wrong: (n,) which field fails (number in the sheet's
    list), or -1. warned: (n,) whether the warning bit is set. quiet: (n,) no edge of data in
    the burst and the pause after it.
    """

    first_edge: IntArray
    last_edge: IntArray
    latch: IntArray
    clocks: IntArray
    raw: Bits
    position: IntArray
    usable: BoolArray
    crc_ok: npt.NDArray[np.int8]
    kind: npt.NDArray[np.int8]
    segment: IntArray
    least_setup: IntArray
    pause: IntArray
    glitch_time: IntArray
    gap: IntArray
    wrong: IntArray
    warned: BoolArray
    quiet: BoolArray
    fields: dict[str, Values] = field(default_factory=dict)

    def __len__(self) -> int:
        return int(self.first_edge.size)

    @classmethod
    def none(cls, serial: Serial) -> Self:
        """A table of no frames with the columns of `serial`."""
        word = words(np.empty((0, serial.sent_bits), np.uint8), serial)
        whole, flag, code = np.empty(0, np.int64), np.empty(0, np.bool_), np.empty(0, np.int8)
        plain: dict[str, Any] = {column.name: whole for column in fields(cls) if column.name != "fields"}
        plain |= {"raw": word.raw, "usable": flag, "warned": flag, "quiet": flag, "crc_ok": code, "kind": code}
        extra = ("cds", "cdm", "acknowledge_clocks") if serial.interface == "biss-c" else ()
        return cls(**plain, fields=word.fields | {name: np.empty(0, np.uint64) for name in extra})

    @classmethod
    def concatenate(cls, parts: list[Self]) -> Self:
        """Several tables of one sheet, one after the other. Raises ValueError for none."""
        plain = [column.name for column in fields(cls) if column.name != "fields"]
        columns = {name: np.concatenate([getattr(part, name) for part in parts]) for name in plain}
        named = {name: np.concatenate([part.fields[name] for part in parts]) for name in parts[0].fields}
        return cls(**columns, fields=named)

    def take(self, which: BoolArray | IntArray) -> Self:
        """Some of the rows."""
        plain = {
            column.name: getattr(self, column.name)[which] for column in fields(type(self)) if column.name != "fields"
        }
        return replace(self, **plain, fields={name: values[which] for name, values in self.fields.items()})

    def with_kind(self, which: BoolArray, name: str) -> Self:
        """The rows of `which` that have no kind yet get this one."""
        fresh = which & (self.kind == 0)
        return replace(self, kind=np.where(fresh, np.int8(CODE[name]), self.kind))

    def without(self, *names: str) -> Self:
        """The table with these kinds forgotten."""
        return replace(self, kind=np.where(self.is_any(*names), np.int8(0), self.kind))

    def is_any(self, *names: str) -> BoolArray:
        """(n,) whether a frame has one of these kinds ("" for none)."""
        return np.isin(self.kind, [CODE[name] for name in names])

    def of_kind(self, name: str) -> IntArray:
        """Indices of the frames with this kind."""
        return np.flatnonzero(self.kind == CODE[name]).astype(np.int64)


@dataclass(frozen=True, slots=True, eq=False)
class Word:
    """The fields of a table of words. See Frames for the columns."""

    fields: dict[str, Values]
    position: IntArray
    crc_ok: npt.NDArray[np.int8]
    failed: dict[str, BoolArray]
    wrong: IntArray
    raw: Bits


def slices(serial: Serial) -> list[slice]:
    """Where each field of one copy lies among the bits, in the order sent."""
    stops = np.cumsum([part.bits for part in serial.fields])
    return [slice(int(stop) - part.bits, int(stop)) for stop, part in zip(stops, serial.fields, strict=True)]


def words(bits: Bits, serial: Serial) -> Word:
    """Read the fields of each row of `bits` (n, sent_bits), judging every check the sheet states.

    `failed` has a column for each of crc_mismatch, parity_mismatch, fixed_mismatch, error_flag and warning_flag.
    """
    n = bits.shape[0]
    one = bits[:, : serial.word_bits]
    where = slices(serial)
    columns = serial.columns()
    values = {name: value_of_bits(one[:, part]) for name, part in zip(columns, where, strict=True)}
    failed = {
        name: np.zeros(n, np.bool_)
        for name in ("crc_mismatch", "parity_mismatch", "fixed_mismatch", "error_flag", "warning_flag")
    }
    wrong = np.full(n, -1, np.int64)
    crc_ok = np.full(n, -1, np.int8)

    def fail(kind: str, rows: BoolArray, number: int) -> None:
        failed[kind] |= rows
        wrong[rows & (wrong < 0)] = number

    for number, (part, name) in enumerate(zip(serial.fields, columns, strict=True)):
        covered = [one[:, where[i]] for i in serial.covered(number)]
        if part.name == "crc":
            computed = crc_of_bits(np.concatenate(covered, axis=1), parameters_of(part))
            fits = computed == values[name]
            crc_ok = np.where(crc_ok == 0, crc_ok, fits.astype(np.int8))
            fail("crc_mismatch", ~fits, number)
        elif part.name == "parity":
            ones = parity_of_bits(np.concatenate(covered, axis=1), part.mask) ^ values[name].astype(np.uint8)
            fail("parity_mismatch", ones != (0 if part.kind == "even" else 1), number)
        elif part.name == "fixed":
            fail("fixed_mismatch", values[name] != np.uint64(part.value or 0), number)
        elif part.name in ("error", "warning"):
            active = one[:, where[number]] == serial.active_level(part)
            fail(f"{part.name}_flag", active.any(axis=1), number)
    failed["fixed_mismatch"] |= copies_differ(bits, serial)
    position = _position(values, serial)
    return Word(values, position, crc_ok, failed, wrong, pack(bits))


def copies_differ(bits: Bits, serial: Serial) -> BoolArray:
    """(n,) whether a repeated copy differs from the first, or a separator between copies is not low."""
    differ = np.zeros(bits.shape[0], np.bool_)
    step = serial.word_bits + serial.separator_bits
    for copy in range(1, serial.copies):
        begin = copy * step
        differ |= bits[:, begin - serial.separator_bits : begin].any(axis=1)
        differ |= (bits[:, begin : begin + serial.word_bits] != bits[:, : serial.word_bits]).any(axis=1)
    return differ


def _position(values: dict[str, Values], serial: Serial) -> IntArray:
    """Turns and position as one binary word; the fields in `values` become binary too."""
    some = next(iter(values.values()))
    turns = values.get("turns", np.zeros(some.size, np.uint64))
    position = values.get("position", np.zeros(some.size, np.uint64))
    width = np.uint64(serial.position_bits)
    both = (turns << width) | position
    if serial.coding == "gray":
        both = gray_to_binary(both, serial.turns_bits + serial.position_bits)
        if "turns" in values:
            values["turns"] = both >> width
        if "position" in values:
            values["position"] = both & ((np.uint64(1) << width) - np.uint64(1))
    return both.astype(np.int64)
