"""The sheet: what the board is meant to do, as TOML.

The structures below are the table that the loader, the messages and docs/the-sheet.md follow. A sheet that is
wrong is refused as a whole with the key's path, what was found there, what was expected and the nearest known name;
nothing in it is skipped or guessed.
"""

from __future__ import annotations

import math
import re
import tomllib
import types
import typing
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Literal

import msgspec

from decode.errors import InputError, maybe_nearest
from decode.rules.measurements import MEASUREMENTS

Interface = Literal["ssi", "biss-c", "spi"]

ROLES = ("clock", "data", "select", "a", "b", "index")
"""What a line can be. Each but `select` may also have its complement, named with `_n`."""

COMPLEMENTS = {f"{role}_n": role for role in ROLES if role != "select"}

KNOWN_FIELDS = ("turns", "position", "error", "warning", "crc", "parity", "life", "fixed")
REPEATABLE_FIELDS = ("crc", "parity", "fixed")

KEYS_OF_SOME: dict[str, tuple[str, ...]] = {
    "active": ("error", "warning"),
    "kind": ("parity",),
    "value": ("fixed",),
    "polynomial": ("crc",),
    "init": ("crc",),
    "inverted": ("crc",),
    "output_xor": ("crc",),
    "reflected": ("crc",),
    "covers": ("crc", "parity"),
    "mask": ("parity",),
}
"""Which fields a field's key is for: elsewhere it would be skipped in silence."""

Bound = float | Literal["none"]

LONGEST_FRAME = 512
LONGEST_FIELD = 64
MOST_CYCLES = 10**9


class _Part(msgspec.Struct, frozen=True, forbid_unknown_fields=True, kw_only=True):
    pass


class Board(_Part, frozen=True, forbid_unknown_fields=True, kw_only=True):
    """[board]: what the record is about."""

    name: str = ""


class CaptureKeys(_Part, frozen=True, forbid_unknown_fields=True, kw_only=True):
    """[capture]: what the file itself does not say."""

    sample_rate_hz: float | None = None
    """Rate of a file without a time column, or whose time column counts samples; beside times, their sampling step."""
    time_unit: Literal["s", "ms", "us", "ns", "ps"] | None = None
    """Unit of the time column where its header does not say."""
    threshold_v: tuple[float, float] | None = None
    """For a file of voltages: at or below the first a line is low, at or above the second high."""
    port_base: Literal["binary", "decimal", "hexadecimal"] | None = None
    """How the values of a port are written where their digits do not tell."""
    window_s: tuple[Bound, Bound] | None = None
    """Only this part of the capture, from and to, in seconds on its own axis; either may be "none"."""


class Field(_Part, frozen=True, forbid_unknown_fields=True, kw_only=True):
    """One field of a serial word, most significant bit first."""

    name: str
    bits: int
    active: Literal["low", "high"] | None = None
    """error, warning: the level that means it. Default: low for biss-c, else high."""
    kind: Literal["even", "odd"] = "even"
    """parity: even or odd number of ones over the covered fields and the parity bit."""
    value: int | None = None
    """fixed: the value it must have."""
    polynomial: int | None = None
    """crc: the generator, written with its leading term."""
    init: int = 0
    """crc: the register's start value."""
    inverted: bool = False
    """crc: sent inverted."""
    output_xor: int = 0
    """crc: what else is XOR-ed onto the result."""
    reflected: bool = False
    """crc: bytes go in, and the result comes out, least significant bit first."""
    covers: tuple[str, ...] | None = None
    """crc, parity: the fields it is taken over. Default: every field sent before it (all others if it is first)."""
    mask: int | None = None
    """parity: which bits of the covered fields count, as one word. Default: all."""


class Serial(_Part, frozen=True, forbid_unknown_fields=True, kw_only=True):
    """[serial]: the clocked line."""

    interface: Interface
    fields: tuple[Field, ...]
    mode: int = 0
    """spi: clock polarity and phase, 0 to 3."""
    coding: Literal["binary", "gray"] = "binary"
    """gray: over turns and position as one word."""
    frame_rate_hz: float | None = None
    copies: int = 1
    """ssi: how often one latched word is sent in a burst (ring transmission)."""
    separator_bits: int = 1
    """ssi: low bits between two copies."""

    @property
    def word_bits(self) -> int:
        """Bits of one copy of the word."""
        return sum(field.bits for field in self.fields)

    @property
    def sent_bits(self) -> int:
        """Bits of a whole burst: every copy with the separators between them."""
        return self.copies * self.word_bits + (self.copies - 1) * self.separator_bits

    @property
    def position_bits(self) -> int:
        return sum(field.bits for field in self.fields if field.name == "position")

    @property
    def turns_bits(self) -> int:
        return sum(field.bits for field in self.fields if field.name == "turns")

    def columns(self) -> tuple[str, ...]:
        """A column's name for each field: its own, with _2, _3, ... where one repeats."""
        seen: dict[str, int] = {}
        names = []
        for field in self.fields:
            seen[field.name] = seen.get(field.name, 0) + 1
            names.append(field.name if seen[field.name] == 1 else f"{field.name}_{seen[field.name]}")
        return tuple(names)

    def covered(self, number: int) -> tuple[int, ...]:
        """Which fields (by number, in the order sent) the check in field `number` is taken over."""
        field = self.fields[number]
        if field.covers is not None:
            return tuple(i for i, other in enumerate(self.fields) if other.name in field.covers)
        before = tuple(range(number))
        return before or tuple(range(1, len(self.fields)))

    def active_level(self, field: Field) -> int:
        """The bit value with which an error or warning bit means what its name says."""
        active = field.active or ("low" if self.interface == "biss-c" else "high")
        return 0 if active == "low" else 1


class Incremental(_Part, frozen=True, forbid_unknown_fields=True, kw_only=True):
    """[incremental]: the A/B/Z outputs."""

    cycles_per_turn: int | None = None
    direction: Literal[1, -1] = 1
    """1: the count (A leads B counts up) rises as the serial position rises; -1: against it."""
    index_width_counts: float | None = None
    index_states: str | None = None
    """The A/B state in which the index is high, such as "a=1 b=1"; an absent letter means either level."""

    @property
    def counts_per_turn(self) -> int | None:
        return None if self.cycles_per_turn is None else 4 * self.cycles_per_turn


class Sheet(_Part, frozen=True, forbid_unknown_fields=True, kw_only=True):
    """A whole sheet. Build one from a file with `load`, from text with `from_toml`, or directly."""

    board: Board = Board()
    capture: CaptureKeys = CaptureKeys()
    lines: dict[str, str | int] = {}
    serial: Serial | None = None
    incremental: Incremental | None = None
    limits: dict[str, tuple[Bound, Bound]] = {}

    def limit(self, name: str) -> tuple[float | None, float | None] | None:
        """The sheet's limits for a measurement, None where it has none; an open end is None."""
        if name not in self.limits:
            return None
        low, high = self.limits[name]
        return (None if isinstance(low, str) else low, None if isinstance(high, str) else high)


def load(path: str | Path) -> Sheet:
    """Read a sheet from a file. Raises InputError for anything that cannot be used."""
    file = str(path)
    try:
        text = Path(path).read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise InputError("there is no such sheet", file=file, hint="give the sheet's path with --sheet") from None
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            "the sheet cannot be read", file=file, found=str(error), expected="a TOML file in UTF-8"
        ) from None
    return from_toml(text, file=file)


def from_toml(text: str, *, file: str = "sheet") -> Sheet:
    """Read a sheet from TOML text. Raises InputError for anything that cannot be used."""
    try:
        tree = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        found = re.search(r"\(at line (\d+), column (\d+)\)", str(error))
        raise InputError(
            "the sheet is not valid TOML",
            file=file,
            row=int(found.group(1)) if found else None,
            found=str(error),
            hint="texts stand in double quotes, lists in square brackets",
        ) from None
    try:
        sheet = msgspec.convert(tree, Sheet)
    except msgspec.ValidationError as error:
        raise _refusal(error, text, tree, file) from None
    for path, problem, expected in _impossible(sheet):
        found = _value_at(tree, _steps(path))
        raise InputError(
            problem,
            file=file,
            row=_row_of(text, path),
            column=path,
            found=None if found is None else _shown(found),
            expected=expected,
        )
    return sheet


def expect_possible_capture(keys: CaptureKeys) -> None:
    """Raises InputError for a value in [capture] that has the right type but cannot be."""
    for path, problem, expected in _impossible_capture(keys):
        found = getattr(keys, path.removeprefix("capture."))
        raise InputError(problem, column=path, found=repr(found), expected=expected)


def _refusal(error: msgspec.ValidationError, text: str, tree: dict[str, Any], file: str) -> InputError:
    """msgspec's message turned into ours: path in the file, what was found, what was expected, the nearest name."""
    message, _, where = str(error).partition(" - at `$")
    path = where.rstrip("`").lstrip(".")
    unknown = re.match(r"Object contains unknown field `(.*)`", message)
    if unknown:
        key = unknown.group(1)
        known = _known_keys(path)
        nearest = maybe_nearest(key, known)
        full = f"{path}.{key}" if path else key
        return InputError(
            f"unknown key {key!r}",
            file=file,
            row=_row_of(text, full),
            column=full,
            found=key,
            expected=", ".join(known),
            hint=f"did you mean {nearest!r}?" if nearest else "remove the key",
        )
    missing = re.match(r"Object missing required field `(.*)`", message)
    if missing:
        return InputError(
            f"the key {missing.group(1)!r} is missing",
            file=file,
            row=_row_of(text, path),
            column=path,
            expected=f"{missing.group(1)} = ...",
        )
    steps = _culprit(path, tree)
    found, kind = _value_at(tree, steps), _kind_at(steps)
    path = path.replace("[...]", f".{steps[1]}") if "[...]" in path else path
    nearest = maybe_nearest(found, _choices(kind)) if isinstance(found, str) else None
    return InputError(
        "a value of the wrong kind",
        file=file,
        row=_row_of(text, path),
        column=path,
        found=_shown(found),
        expected=_wanted(kind),
        hint=f"did you mean {nearest!r}?" if nearest else None,
    )


_KIND_NAMES = {int: "a whole number", float: "a number", str: "a text in double quotes", bool: "true or false"}
LONGEST_SHOWN = 100


def _culprit(path: str, tree: dict[str, Any]) -> list[str | int]:
    """The steps of a path with the key found again that msgspec leaves out of "lines[...]"."""
    steps = _steps(path.replace("[...]", ".*"))
    if "*" in steps:
        table, kind = tree[str(steps[0])], _kind_at(steps[:2])
        steps[1] = next(key for key, value in table.items() if not _is(value, kind))
    return steps


def _is(value: Any, kind: Any) -> bool:
    try:
        msgspec.convert(value, kind)
    except msgspec.ValidationError:
        return False
    return True


def _kind_at(steps: list[str | int]) -> Any:
    """The type that belongs at a path into a sheet, without its None."""
    kind: Any = Sheet
    for step in steps:
        arguments = typing.get_args(kind)
        if typing.get_origin(kind) is tuple:
            kind = arguments[0] if arguments[-1] is Ellipsis else arguments[int(step)]
        else:
            kind = arguments[1] if typing.get_origin(kind) is dict else typing.get_type_hints(kind)[str(step)]
        some = [one for one in typing.get_args(kind) if one is not type(None)]
        if isinstance(kind, types.UnionType) or typing.get_origin(kind) is typing.Union:
            kind = some[0] if len(some) == 1 else typing.Union[tuple(some)]  # noqa: UP007
    return kind


def _choices(kind: Any) -> list[str]:
    """The texts that a type is one of, if it is."""
    if typing.get_origin(kind) is Literal:
        return [one for one in typing.get_args(kind) if isinstance(one, str)]
    return [choice for one in typing.get_args(kind) for choice in _choices(one)]


def _wanted(kind: Any) -> str:
    """A type in words."""
    origin, arguments = typing.get_origin(kind), typing.get_args(kind)
    if origin is Literal:
        return " or ".join(f'"{one}"' if isinstance(one, str) else str(one) for one in arguments)
    if origin is tuple:
        return "a list" if arguments[-1] is Ellipsis else f"a list of {len(arguments)}"
    if origin is dict or (kind not in _KIND_NAMES and not arguments):
        return "a part with keys of its own"
    return " or ".join(_wanted(one) for one in arguments) if arguments else _KIND_NAMES[kind]


def _shown(value: Any) -> str:
    """A value of a sheet as the sheet writes it, as far as it matters."""
    if isinstance(value, bool):
        return str(value).lower()
    text = repr(value) if isinstance(value, str | int | float | list | dict) else str(value)
    return text if len(text) <= LONGEST_SHOWN else f"{text[:LONGEST_SHOWN]}..."


_PARTS: dict[str, type[msgspec.Struct]] = {
    "": Sheet,
    "board": Board,
    "capture": CaptureKeys,
    "serial": Serial,
    "incremental": Incremental,
}


def _known_keys(path: str) -> tuple[str, ...]:
    part = Field if path.startswith("serial.fields") else _PARTS.get(path, Sheet)
    return tuple(part.__struct_fields__)


def _steps(path: str) -> list[str | int]:
    return [int(step) if step.isdigit() else step for step in re.findall(r"[^.\[\]]+", path)]


def _value_at(tree: Any, steps: list[str | int]) -> Any:
    """What stands at a path into a sheet; None where nothing does."""
    for step in steps:
        try:
            tree = tree[step]
        except (KeyError, IndexError, TypeError):
            return None
    return tree


def _row_of(text: str, path: str) -> int | None:
    """The physical line on which the key of `path` (or the nearest part of it) stands, as well as text can tell."""
    steps = _steps(path)
    if not steps:
        return None
    section, keys = str(steps[0]), steps[1:]
    rows = text.splitlines()
    start = next((i for i, row in enumerate(rows) if re.match(rf"\s*\[+{re.escape(section)}\]", row)), None)
    if start is None:
        pattern = re.compile(rf"\s*{re.escape(section)}\s*[.=]")
        return next((i + 1 for i, row in enumerate(rows) if pattern.match(row)), None)
    row = start
    for step in keys:
        if isinstance(step, int):
            openings = [i for i in range(row, len(rows)) if "{" in rows[i]]
            row = openings[step] if step < len(openings) else row
            continue
        pattern = re.compile(rf"(^|[\s{{,]){re.escape(str(step))}\s*=")
        row = next((i for i in range(row, len(rows)) if pattern.search(rows[i])), row)
    return row + 1


def _impossible(sheet: Sheet) -> Iterator[tuple[str, str, str]]:
    """(path, problem, expected) for every value that has the right type but cannot be."""
    known_roles = (*ROLES, *COMPLEMENTS)
    for role, line in sheet.lines.items():
        if role not in known_roles:
            nearest = maybe_nearest(role, known_roles)
            hint = f"; did you mean {nearest!r}?" if nearest else ""
            yield f"lines.{role}", f"unknown role {role!r}{hint}", ", ".join(known_roles)
        elif isinstance(line, int) and line < 1:
            yield f"lines.{role}", "columns are numbered from 1", "a column's name or its number"
    for complement, role in COMPLEMENTS.items():
        if complement in sheet.lines and role not in sheet.lines:
            yield f"lines.{complement}", f"a complement without its line {role!r}", f"{role} = ... as well"
    yield from _impossible_capture(sheet.capture)
    if sheet.serial is not None:
        yield from _impossible_serial(sheet.serial)
        needed = ("clock", "data")
        for role in needed:
            if sheet.lines and role not in sheet.lines:
                yield "lines", f"[serial] needs the line {role!r}", f"{role} = ... in [lines]"
    if sheet.incremental is not None:
        yield from _impossible_incremental(sheet.incremental)
        for role in ("a", "b"):
            if sheet.lines and role not in sheet.lines:
                yield "lines", f"[incremental] needs the line {role!r}", f"{role} = ... in [lines]"
    yield from _impossible_limits(sheet)


def _impossible_capture(keys: CaptureKeys) -> Iterator[tuple[str, str, str]]:
    if keys.sample_rate_hz is not None and not 0 < keys.sample_rate_hz < 1e13:
        yield "capture.sample_rate_hz", "an impossible sample rate", "hertz, above 0 and below 1e13"
    if keys.threshold_v is not None and not keys.threshold_v[0] <= keys.threshold_v[1]:
        yield "capture.threshold_v", "the thresholds are the wrong way round", "[low-going, high-going], rising"
    start, stop = keys.window_s or ("none", "none")
    if not isinstance(start, str) and not isinstance(stop, str) and not start < stop:
        yield "capture.window_s", "the window is empty", "[from, to], rising"
    if any(not isinstance(end, str) and not abs(end) < 1e15 for end in (start, stop)):
        yield "capture.window_s", "an impossible time", "seconds"


def _impossible_serial(serial: Serial) -> Iterator[tuple[str, str, str]]:
    if not serial.fields:
        yield "serial.fields", "a word without fields", "at least one field"
    if not 0 <= serial.mode <= 3:
        yield "serial.mode", "no such mode", "0, 1, 2 or 3"
    if serial.frame_rate_hz is not None and not 0 < serial.frame_rate_hz < math.inf:
        yield "serial.frame_rate_hz", "an impossible rate", "hertz, above 0"
    if serial.copies < 1 or (serial.copies > 1 and serial.interface != "ssi"):
        yield "serial.copies", "only ssi can send one word more than once", "1, or 2 and more with ssi"
    if serial.separator_bits < 1:
        yield "serial.separator_bits", "copies need a separator", "1 or more"
    if serial.sent_bits > LONGEST_FRAME:
        yield "serial.fields", f"a burst of {serial.sent_bits} bits", f"at most {LONGEST_FRAME} bits"
    names = [field.name for field in serial.fields]
    for number, field in enumerate(serial.fields):
        path = f"serial.fields[{number}]"
        if not re.fullmatch(r"[A-Za-z_][A-Za-z0-9_]*", field.name):
            yield f"{path}.name", "not a name", "letters, digits and _"
        if names.count(field.name) > 1 and field.name not in REPEATABLE_FIELDS:
            yield f"{path}.name", f"two fields named {field.name!r}", "different names"
        if not 1 <= field.bits <= LONGEST_FIELD:
            yield f"{path}.bits", "an impossible width", f"1 to {LONGEST_FIELD}"
        yield from _impossible_key(field, path)
        for covered in field.covers or ():
            if covered not in names:
                nearest = maybe_nearest(covered, names)
                hint = f"; did you mean {nearest!r}?" if nearest else ""
                yield f"{path}.covers", f"no field named {covered!r}{hint}", ", ".join(names)
        yield from _impossible_check(serial, number, path)
    if serial.coding == "gray" and "position" not in names:
        yield "serial.coding", "gray without a position", "a field named position"
    if serial.position_bits + serial.turns_bits > LONGEST_FIELD - 1:
        yield "serial.fields", "turns and position are too wide together", f"at most {LONGEST_FIELD - 1} bits"


def _impossible_key(field: Field, path: str) -> Iterator[tuple[str, str, str]]:
    """Names and keys that would be taken for something else, or for nothing."""
    if field.name not in KNOWN_FIELDS and field.name.lower() in KNOWN_FIELDS:
        yield f"{path}.name", f"unknown name {field.name!r}; did you mean {field.name.lower()!r}?", "small letters"
    for key in msgspec.structs.fields(Field):
        names = KEYS_OF_SOME.get(key.name, (field.name,))
        if field.name not in names and getattr(field, key.name) != key.default:
            yield (
                f"{path}.{key.name}",
                f"a field named {field.name!r} has no {key.name}",
                f"a field named {' or '.join(names)}",
            )


def _impossible_check(serial: Serial, number: int, path: str) -> Iterator[tuple[str, str, str]]:
    field = serial.fields[number]
    if field.name == "crc":
        if field.polynomial is None:
            yield path, "a crc without its polynomial", "polynomial = 0x43 (with its leading term)"
        elif field.polynomial < 0:
            yield f"{path}.polynomial", "a negative polynomial", "a polynomial with its leading term, such as 0x43"
        elif field.polynomial.bit_length() - 1 != field.bits:
            degree = field.polynomial.bit_length() - 1
            yield (
                f"{path}.polynomial",
                f"a polynomial of degree {degree} in a field of {field.bits} bits",
                f"a polynomial with its leading term, 0x{1 << field.bits:X} to 0x{(2 << field.bits) - 1:X}",
            )
        elif not 3 <= field.bits <= 32:
            yield f"{path}.bits", "a CRC of this width is not supported", "3 to 32 bits"
        for key in ("init", "output_xor"):
            if not 0 <= getattr(field, key) < 1 << field.bits:
                yield f"{path}.{key}", "does not fit into the field", f"0 to 0x{(1 << field.bits) - 1:X}"
    if field.name == "parity" and field.bits != 1:
        yield f"{path}.bits", "a parity of more than one bit", "1"
    if field.name == "fixed":
        if field.value is None:
            yield path, "a fixed field without its value", "value = 0"
        elif not 0 <= field.value < 1 << field.bits:
            yield f"{path}.value", "does not fit into the field", f"0 to {(1 << field.bits) - 1}"
    if field.name in ("crc", "parity"):
        yield from _impossible_cover(serial, number, path)


def _impossible_cover(serial: Serial, number: int, path: str) -> Iterator[tuple[str, str, str]]:
    field = serial.fields[number]
    covered = serial.covered(number)
    bits = sum(serial.fields[i].bits for i in covered)
    if bits == 0:
        yield path, "a check that covers nothing", "covers = [...], or another field in the word"
    if number in covered:
        yield f"{path}.covers", "a check that covers itself", "other fields"
    if field.reflected and bits % 8:
        yield f"{path}.reflected", f"a reflected CRC over {bits} bits", "whole bytes: a multiple of 8 bits"
    if field.mask is not None and not 0 < field.mask < 1 << bits:
        yield f"{path}.mask", "a mask that does not fit the covered fields", f"0x1 to 0x{(1 << bits) - 1:X}"


def _impossible_incremental(incremental: Incremental) -> Iterator[tuple[str, str, str]]:
    if incremental.cycles_per_turn is not None and not 1 <= incremental.cycles_per_turn <= MOST_CYCLES:
        yield "incremental.cycles_per_turn", "an impossible resolution", f"cycles per turn, 1 to {MOST_CYCLES}"
    if incremental.index_width_counts is not None and not 0 < incremental.index_width_counts < math.inf:
        yield "incremental.index_width_counts", "an impossible width", "counts, above 0"
    if incremental.index_states is not None and index_levels(incremental.index_states) is None:
        yield "incremental.index_states", "not an A/B state", '"a=1 b=1"'


def index_levels(states: str) -> tuple[int | None, int | None] | None:
    """("a=1 b=0") to (1, 0); a letter left out is None, either level. None where the text is not an A/B state."""
    levels: dict[str, int] = {}
    for part in states.replace(",", " ").split():
        match = re.fullmatch(r"([ab])=([01])", part.lower())
        if match is None or match.group(1) in levels:
            return None
        levels[match.group(1)] = int(match.group(2))
    return (levels.get("a"), levels.get("b")) if levels else None


def _impossible_limits(sheet: Sheet) -> Iterator[tuple[str, str, str]]:
    for name, (low, high) in sheet.limits.items():
        if name not in MEASUREMENTS:
            nearest = maybe_nearest(name, MEASUREMENTS)
            hint = f"; did you mean {nearest!r}?" if nearest else ""
            yield f"limits.{name}", f"no measurement named {name!r}{hint}", "a name from docs/measurements.md"
        elif any(isinstance(end, float) and math.isnan(end) for end in (low, high)):
            yield f"limits.{name}", "a limit that is no number", '[min, max], either may be "none"'
        elif not isinstance(low, str) and not isinstance(high, str) and low > high:
            yield f"limits.{name}", "the limits are the wrong way round", "[min, max]"
