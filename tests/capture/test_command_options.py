"""The command on captures as they come: compressed, from a pipe, in part, and with what the file leaves out."""

from __future__ import annotations

import gzip
import io
import json
import sys
from pathlib import Path
from typing import Any

import pytest
from exports import LINES, SHEET, Export, Signal, seconds, simulated, volts, zstandard

from decode.cli import FAIL, PASS, UNDECIDED, USAGE, main

TOML = f"""
[lines]
clock = "MA"
data = "SLO"
a = "A"
b = "B"
index = "Z"
[serial]
interface = "biss-c"
fields = [
  {{ name = "position", bits = 12 }},
  {{ name = "error", bits = 1 }},
  {{ name = "warning", bits = 1 }},
  {{ name = "crc", bits = 6, polynomial = 0x43, inverted = true }},
]
[incremental]
cycles_per_turn = {SHEET.incremental.cycles_per_turn if SHEET.incremental else 0}
index_width_counts = 1
"""


def export(faulty: bool = True, **changes: Any) -> bytes:
    return Export(**changes).write(Signal.of_changes(simulated(faulty=faulty)))


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    (tmp_path / "board.toml").write_text(TOML)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def report(capsys: pytest.CaptureFixture[str], *arguments: str) -> tuple[int, dict[str, Any]]:
    code = main(["check", *arguments, "--sheet", "board.toml", "--json", "-"])
    return code, json.loads(capsys.readouterr().out)


def test_the_same_from_every_kind_of_file(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Plain, gzip, zstd and standard input: one CRC wrong of 40, one index missing."""
    content = export()
    (folder / "a.csv").write_bytes(content)
    (folder / "b.csv.gz").write_bytes(gzip.compress(content))
    (folder / "c.csv.zst").write_bytes(zstandard(content))
    monkeypatch.setattr(sys, "stdin", type("Stdin", (), {"buffer": io.BytesIO(content)})())
    for name in ("a.csv", "b.csv.gz", "c.csv.zst", "-"):
        code, found = report(capsys, name)
        assert code == FAIL
        assert (found["serial"]["frames"], found["serial"]["good"]) == (40, 39)
        assert sorted(finding["kind"] for finding in found["findings"]) == ["crc_mismatch", "index_missing"]


def test_the_sheet_beside_a_compressed_capture(folder: Path) -> None:
    """board.csv.gz finds board.toml."""
    (folder / "board.csv.gz").write_bytes(gzip.compress(export(faulty=False)))
    assert main(["check", "board.csv.gz"]) == PASS


def test_a_window(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """From 4 ms on, behind the wrong CRC at 3 ms and within the turn whose index is missing: 24 frames."""
    (folder / "a.csv").write_bytes(export())
    code, found = report(capsys, "a.csv", "--from", "4e-3", "--to", "0.0100")
    assert code in (FAIL, UNDECIDED, PASS)
    assert (found["serial"]["frames"], found["serial"]["good"]) == (24, 24)
    assert found["provenance"]["sheet"]["capture"]["window_s"] == [0.004, 0.01]
    assert "only the rows from 0.004 s to 0.01 s were looked at" in found["capture"]["notes"]


def test_what_the_file_leaves_out(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """--unit for times of whole nanoseconds without one, --rate for sample numbers, --threshold for voltages."""
    (folder / "unit.csv").write_bytes(export(time=seconds(0, 9), header=("Time", *LINES)))
    (folder / "rate.csv").write_bytes(export(time=lambda t: str(round(t * 12_500_000)), header=("n", *LINES)))
    (folder / "volts.csv").write_bytes(export(levels=volts))
    for arguments in (
        ("unit.csv", "--unit", "ns"),
        ("rate.csv", "--rate", "12.5e6"),
        ("volts.csv", "--threshold", "0.8,2.0"),
    ):
        code, found = report(capsys, *arguments)
        assert code == FAIL
        assert (found["serial"]["frames"], found["serial"]["good"]) == (40, 39)
        assert found["capture"]["tick_s"] == pytest.approx(80e-9)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["-"], "nothing stands beside standard input"),
        (["a.csv", "--sheet", "board.toml", "--rate", "fast"], "--rate is not a number"),
        (["a.csv", "--sheet", "board.toml", "--rate", "-1"], "an impossible sample rate"),
        (["a.csv", "--sheet", "board.toml", "--rate", "inf"], "--rate is not a number"),
        (["a.csv", "--sheet", "board.toml", "--unit", "h"], "--unit is no unit of time"),
        (["a.csv", "--sheet", "board.toml", "--threshold", "1.2"], "--threshold needs two voltages"),
        (["a.csv", "--sheet", "board.toml", "--threshold", "2,1"], "the thresholds are the wrong way round"),
        (["a.csv", "--sheet", "board.toml", "--threshold", "2,x"], "--threshold is not a number"),
        (["a.csv", "--sheet", "board.toml", "--from", "soon"], "--from is not a number"),
        (["a.csv", "--sheet", "board.toml", "--from", "2", "--to", "1"], "the window is empty"),
        (["a.csv", "--sheet", "board.toml", "--from", "2"], "no row of the capture lies in the window"),
    ],
)
def test_options_that_cannot_be(
    folder: Path, capsys: pytest.CaptureFixture[str], arguments: list[str], message: str
) -> None:
    (folder / "a.csv").write_bytes(export())
    assert main(["check", *arguments]) == USAGE
    assert message in capsys.readouterr().err
