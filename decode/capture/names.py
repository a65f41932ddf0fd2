"""What the name of a column says: the unit, and whether it is the time."""

from __future__ import annotations

import re

_UNITS = {
    "s": "s", "sec": "s", "secs": "s", "second": "s", "seconds": "s",
    "ms": "ms", "msec": "ms", "millisecond": "ms", "milliseconds": "ms",
    "us": "us", "µs": "us", "μs": "us", "usec": "us", "microsecond": "us", "microseconds": "us",
    "ns": "ns", "nsec": "ns", "nanosecond": "ns", "nanoseconds": "ns",
    "ps": "ps", "psec": "ps", "picosecond": "ps", "picoseconds": "ps",
}  # fmt: skip
_OTHER_UNITS = {"v", "mv", "volt", "volts", "millivolt", "millivolts", "logic", "level", "digital", "bool", "bit", "1"}
_UNIT = re.compile(r"\s*(?:\[\s*(\w+)\s*\]|\(\s*(\w+)\s*\)|/\s*(\w+)|_(\w+?))\s*$")
_TIME_NAME = re.compile(
    r"(time|times|timestamp|time[ _-]?stamp|date[ _-]?time|elapsed(?:[ _-]time)?|t|zeit)\b", re.IGNORECASE
)


def maybe_unit(name: str) -> str | None:
    """The unit of time that a column's name ends with: in brackets, in parentheses, behind a slash or an underscore;
    or that it is. Behind a space it counts where the name is the time's ("time ms")."""
    match = _UNIT.search(name)
    last = name.split()[-1:]
    if match is None and last and _TIME_NAME.match(name) is not None and last[0].lower() in _UNITS:
        return _UNITS[last[0].lower()]
    found = next(group for group in match.groups() if group) if match else name.strip()
    return _UNITS.get(found.lower())


def without_unit(name: str) -> str:
    """The name without a unit at its end."""
    match = _UNIT.search(name)
    if match is None:
        return name
    unit = next(group for group in match.groups() if group).lower()
    return name[: match.start()] if unit in _UNITS or unit in _OTHER_UNITS else name


def is_time_name(name: str) -> bool:
    """Whether a column is named as the time is."""
    return _TIME_NAME.match(_UNIT.sub("", name)) is not None


def is_in_millivolts(name: str, below: str) -> bool:
    """Whether a column is in mV, by the unit in its name or in the row of units."""
    match = _UNIT.search(name)
    found = next(group for group in match.groups() if group) if match else ""
    return any(unit.lower() in ("mv", "millivolt", "millivolts") for unit in (found, below.strip(" []()")))


def is_unit_cell(cell: str) -> bool:
    """Whether a cell is fit for a row of units: a unit, with or without brackets, or nothing."""
    bare = cell.strip(" []()").lower()
    return bare in _UNITS or bare in _OTHER_UNITS or bare in ("", "-")


def maybe_time_cell(cell: str) -> str | None:
    """The unit of time that a cell of a row of units is."""
    return _UNITS.get(cell.strip(" []()").lower())
