"""Sheets and short ways for the tests over all rooms. The boards are of our own scenario."""

from __future__ import annotations

from pathlib import Path

from decode.bench.board import Simulation, simulate
from decode.bench.scenario import Scenario
from decode.bench.writer import write_csv
from decode.pipeline import Checked, check
from decode.sheet import Sheet, from_toml

INCREMENTAL = """
[incremental]
cycles_per_turn = 1024
index_width_counts = 1
index_states = "a=1 b=1"
"""

LINES = """
[lines]
clock = "MA"
data = "SLO"
{select}
a = "A"
b = "B"
index = "Z"
"""

BISS = from_toml(
    LINES.format(select="")
    + """
[serial]
interface = "biss-c"
fields = [
  { name = "position", bits = 19 },
  { name = "error", bits = 1, active = "low" },
  { name = "warning", bits = 1, active = "low" },
  { name = "crc", bits = 6, polynomial = 0x43, inverted = true },
]
"""
    + INCREMENTAL
)

BISS_LIFE = from_toml(
    LINES.format(select="")
    + """
[serial]
interface = "biss-c"
fields = [
  { name = "position", bits = 19 },
  { name = "error", bits = 1, active = "low" },
  { name = "warning", bits = 1, active = "low" },
  { name = "life", bits = 6 },
  { name = "crc", bits = 16, polynomial = 0x190D9, inverted = true },
]
"""
    + INCREMENTAL
)

SSI = from_toml(
    LINES.format(select="")
    + """
[serial]
interface = "ssi"
coding = "gray"
fields = [
  { name = "turns", bits = 12 },
  { name = "position", bits = 13 },
]
"""
    + INCREMENTAL
)

SSI_CHECKED = from_toml(
    LINES.format(select="")
    + """
[serial]
interface = "ssi"
fields = [
  { name = "turns", bits = 12 },
  { name = "position", bits = 13 },
  { name = "fixed", bits = 1, value = 0 },
  { name = "parity", bits = 1, kind = "even" },
]
"""
    + INCREMENTAL
)

SPI = from_toml(
    LINES.format(select='select = "CS"')
    + """
[serial]
interface = "spi"
mode = 1
fields = [
  { name = "position", bits = 14 },
  { name = "error", bits = 1 },
  { name = "parity", bits = 1, kind = "even" },
]
"""
    + INCREMENTAL
)


def checked(sheet: Sheet, scenario: Scenario, folder: Path) -> tuple[Simulation, Checked]:
    """Simulate, write, and check as a user would."""
    simulation = simulate(sheet, scenario)
    path = folder / "capture.csv"
    write_csv(simulation, path)
    return simulation, check(path, sheet)
