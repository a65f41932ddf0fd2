"""The unit in a column's name, in the ways that exports write it (seen in exports; common practice, no source)."""

import pytest

from decode.capture.names import maybe_unit


@pytest.mark.parametrize(
    ("name", "unit"),
    [
        ("Time [us]", "us"),
        ("Time(ns)", "ns"),
        ("time_ms", "ms"),
        ("t/us", "us"),
        ("time ms", "ms"),
        ("Time Stamp", None),
        ("Motor s", None),
        ("", None),
    ],
)
def test_the_unit_in_a_name(name: str, unit: str | None) -> None:
    assert maybe_unit(name) == unit
