"""The command as a user calls it: exit codes from real causes, files written, the shipped schema.

Each runs in a process of its own, in a folder of its own, so what is tested is what is installed.
"""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import jsonschema
import pandas as pd
import pytest
from boards import BISS

from decode.bench import motion
from decode.bench.board import simulate
from decode.bench.scenario import Fault, Scenario
from decode.bench.writer import write_csv
from decode.report.document import SCHEMA_FILE

SHEET = """
[board]
name = "Larkspur azimuth encoder"
[lines]
clock = "MA"
data = "SLO"
a = "A"
b = "B"
index = "Z"
[serial]
interface = "biss-c"
fields = [
  { name = "position", bits = 19 },
  { name = "error", bits = 1, active = "low" },
  { name = "warning", bits = 1, active = "low" },
  { name = "crc", bits = 6, polynomial = 0x43, inverted = true },
]
[incremental]
cycles_per_turn = 1024
index_width_counts = 1
index_states = "a=1 b=1"
"""
SOUND = Scenario(motion=motion.sway(2.0, 4.0), duration_s=0.25, frame_rate_hz=4e3)


def run(*arguments: str, folder: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "decode", *arguments], cwd=folder, capture_output=True, text=True, check=False
    )


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "board.toml").write_text(SHEET)
    return tmp_path


def simulated(folder: Path, scenario: Scenario) -> None:
    write_csv(simulate(BISS, scenario), folder / "capture.csv")


def test_exit_0_for_a_sound_board(folder: Path) -> None:
    simulated(folder, SOUND)
    done = run("check", "capture.csv", "--sheet", "board.toml", folder=folder)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "PASS" in done.stdout
    assert done.stderr == ""


def test_exit_1_for_a_fault(folder: Path) -> None:
    simulated(folder, Scenario(motion=SOUND.motion, duration_s=0.25, faults=(Fault("crc_mismatch", 0.1),)))
    done = run("check", "capture.csv", "--sheet", "board.toml", folder=folder)
    assert done.returncode == 1
    assert "FAIL" in done.stdout


def test_exit_1_for_a_broken_limit_alone(folder: Path) -> None:
    simulated(folder, SOUND)
    (folder / "board.toml").write_text(SHEET + "[limits]\nclock_frequency_hz = [4e6, 10e6]\n")
    assert run("check", "capture.csv", "--sheet", "board.toml", folder=folder).returncode == 1


def test_exit_3_where_the_capture_cannot_tell(folder: Path) -> None:
    """A hundredth of a turn does not say how many counts a turn has."""
    simulated(folder, Scenario(motion=motion.constant(60.0), duration_s=0.01))
    done = run("check", "capture.csv", "--sheet", "board.toml", folder=folder)
    assert done.returncode == 3
    assert "UNDECIDED" in done.stdout


@pytest.mark.parametrize(
    ("capture", "sheet", "parts"),
    [
        ("", SHEET, ["capture.csv"]),
        ("time [s],MA,SLO,A,B,Z\n", SHEET, ["capture.csv"]),
        ("time [s],MA,SLO,A,B,Z\n0.0,1,1,0,0,0\n0.1,7,1,0,0,0\n", SHEET, ["line 3", "column MA", "7"]),
        ("time [s],MA,SLO,A,B,Z\n0.0,1,1,0,0,0\n", SHEET.replace('"SLO"', '"SL0"'), ["'SL0'", "SLO"]),
        ("time [s],MA,SLO,A,B,Z\n0.0,1,1,0,0,0\n", SHEET.replace("bits = 19", "bits = 19, colour = 1"), ["colour"]),
        ("part,value\nR1,10k\nC1,100n\n", SHEET, ["capture.csv"]),
    ],
    ids=["empty", "header only", "not a level", "no such line", "unknown key", "parts list"],
)
def test_exit_2_with_words_that_help(folder: Path, capture: str, sheet: str, parts: list[str]) -> None:
    (folder / "capture.csv").write_text(capture)
    (folder / "board.toml").write_text(sheet)
    done = run("check", "capture.csv", "--sheet", "board.toml", "--json", "report.json", folder=folder)
    assert done.returncode == 2, done.stdout + done.stderr
    assert "Traceback" not in done.stderr
    for part in parts:
        assert part in done.stderr
    assert done.stdout == ""
    assert sorted(path.name for path in folder.iterdir()) == ["board.toml", "capture.csv"]


def test_the_report_and_the_tables_as_files(folder: Path) -> None:
    simulated(folder, Scenario(motion=SOUND.motion, duration_s=0.25, faults=(Fault("crc_mismatch", 0.1),)))
    done = run(
        "check", "capture.csv", "--sheet", "board.toml", "--json", "r.json", "--frames", "f.parquet",
        "--angles", "a.csv", folder=folder,
    )  # fmt: skip
    assert done.returncode == 1
    report = json.loads((folder / "r.json").read_text())
    jsonschema.Draft202012Validator(json.loads(Path(SCHEMA_FILE).read_text())).validate(report)
    frames, angles = pd.read_parquet(folder / "f.parquet"), pd.read_csv(folder / "a.csv")
    assert len(frames) == len(angles) == report["serial"]["frames"]
    assert frames["faulty"].sum() == report["serial"]["faulty"] == 1
    assert frames.loc[frames["faulty"], "kind"].tolist() == ["crc_mismatch"]
    assert list(angles.columns) == ["time_s", "serial_turns", "counted_turns", "residual_deg", "speed_rpm"]


def test_the_demo_travels_with_the_package(tmp_path: Path) -> None:
    done = run("demo", folder=tmp_path)
    assert done.returncode == 0, done.stderr
    assert "Larkspur" in done.stdout
