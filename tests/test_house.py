"""The house is as DEVELOPERS.md draws it: imports go one way, and tables in different rooms know the same names."""

from __future__ import annotations

import re
from collections.abc import Collection
from pathlib import Path
from typing import get_args

import pytest

from decode.bench import board, bursts, faults
from decode.judgement import limits
from decode.rules.kinds import KINDS
from decode.rules.measurements import MEASUREMENTS
from decode.serial import interfaces
from decode.serial.frames import FRAME_KINDS
from decode.sheet import Interface

DECODE = Path(__file__).parents[1] / "decode"

ABOVE: dict[str, set[str]] = {
    "rules": set(),
    "capture": set(),
    "lines": set(),
    "serial": set(),
    "incremental": set(),
    "agreement": {"lines", "serial", "incremental"},
    "judgement": {"rules", "lines", "serial", "incremental", "agreement"},
    "report": {"rules", "serial", "judgement"},
    "bench": {"rules"},
}
"""The rooms that each room may import from. serial's table of frames is what report writes out."""

BY_INTERFACE = {
    "READERS": interfaces.READERS,
    "_INTERFACES": bursts._INTERFACES,
    "FRAME_RATE_HZ": board.FRAME_RATE_HZ,
    "CLOCK_HZ": board.CLOCK_HZ,
    "ANY": faults.ANY,
}


def _imports(room: str) -> set[str]:
    """Modules of ours that a room imports, by their dotted names behind `decode.`."""
    texts = [path.read_text(encoding="utf-8") for path in (DECODE / room).glob("*.py")]
    return {name for text in texts for name in re.findall(r"^\s*(?:from|import) decode\.([\w.]+)", text, re.M)}


@pytest.mark.parametrize("room", ABOVE)
def test_a_room_imports_only_from_rooms_above_it(room: str) -> None:
    """What is no room (spans, the sheet, errors, ...) may be imported anywhere, but for what joins the rooms."""
    imported = {name.split(".")[0] for name in _imports(room)}
    assert imported & {*ABOVE} <= {room, *ABOVE[room]}
    assert not imported & {"pipeline", "cli"}


def test_every_room_is_in_the_picture() -> None:
    assert {path.parent.name for path in DECODE.glob("*/__init__.py")} == set(ABOVE)


def test_the_simulator_shares_no_decoder_with_what_it_tests() -> None:
    """Of all rooms, only the names of the kinds."""
    assert {name for name in _imports("bench") if name.split(".")[0] in {*ABOVE} - {"bench"}} == {"rules.kinds"}


@pytest.mark.parametrize("table", BY_INTERFACE)
def test_every_table_by_interface_has_each_of_them(table: str) -> None:
    """Source: the names that a sheet may have."""
    assert sorted(BY_INTERFACE[table]) == sorted(get_args(Interface))


def test_every_interface_has_its_published_limits() -> None:
    """An empty table where none are published, and no other names beside the two parts that are no interface."""
    assert set(limits.PUBLISHED) == {*get_args(Interface), "incremental", "agreement"}


@pytest.mark.parametrize("names", [names for names in limits.PUBLISHED.values() if names])
def test_limits_are_of_measurements(names: Collection[str]) -> None:
    assert set(names) <= set(MEASUREMENTS)


def test_what_can_be_wrong_with_a_frame_is_a_kind_of_finding() -> None:
    """Of the serial room; the first is the empty name of a frame without a fault."""
    assert FRAME_KINDS[0] == ""
    assert {KINDS[name].room for name in FRAME_KINDS[1:]} == {"serial"}
