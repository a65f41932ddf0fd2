"""The demo captures are what captures/README.md says: made by these commands, and judged as their truth has it."""

from __future__ import annotations

import json
import shlex
import shutil
from pathlib import Path
from typing import Any

import pytest

from decode.cli import main
from decode.rules.measurements import MEASUREMENTS

ROOT = Path(__file__).parents[1]
CAPTURES = ROOT / "captures"
NAMES = ("larkspur-healthy", "larkspur-sick", "larkspur-elevation-ssi")
MOST_BYTES = 3_000_000


def _commands() -> dict[str, list[str]]:
    """The arguments of each simulate command of captures/README.md, by the name of the capture it makes."""
    found = {}
    for line in (CAPTURES / "README.md").read_text(encoding="utf-8").splitlines():
        if line.startswith("shaftproof simulate "):
            arguments = shlex.split(line)[1:]
            found[Path(arguments[1]).stem] = arguments
    return found


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A working folder that holds captures/ with the sheets alone."""
    (tmp_path / "captures").mkdir()
    for sheet in CAPTURES.glob("*.toml"):
        shutil.copy(sheet, tmp_path / "captures")
    monkeypatch.chdir(tmp_path)
    return tmp_path / "captures"


def test_every_capture_has_its_sheet_its_truth_and_its_command() -> None:
    assert sorted(path.stem for path in CAPTURES.glob("*.csv")) == sorted(NAMES)
    assert sorted(_commands()) == sorted(NAMES)
    for name in NAMES:
        assert (CAPTURES / f"{name}.toml").is_file()
        assert (CAPTURES / f"{name}.truth.json").is_file()


def test_they_are_small_enough_to_travel_with_the_package() -> None:
    """3 MB: what the demo may cost a wheel and a clone (our own bound)."""
    assert sum(path.stat().st_size for path in CAPTURES.iterdir()) <= MOST_BYTES


@pytest.mark.parametrize("name", NAMES)
def test_its_command_gives_the_same_bytes(name: str, folder: Path) -> None:
    assert main(_commands()[name]) == 0
    for file in (f"{name}.csv", f"{name}.truth.json"):
        assert (folder / file).read_bytes() == (CAPTURES / file).read_bytes(), file


def test_both_azimuth_captures_are_of_one_board() -> None:
    healthy, sick = ((CAPTURES / f"larkspur-{name}.toml").read_bytes() for name in ("healthy", "sick"))
    assert healthy == sick


def _report(name: str, folder: Path) -> tuple[int, dict[str, Any]]:
    target = folder / f"{name}.json"
    code = main(["check", str(CAPTURES / f"{name}.csv"), "--json", str(target)])
    return code, json.loads(target.read_text(encoding="utf-8"))


def _truth(name: str) -> dict[str, Any]:
    truth: dict[str, Any] = json.loads((CAPTURES / f"{name}.truth.json").read_text(encoding="utf-8"))
    return truth


@pytest.mark.parametrize(
    ("name", "code", "verdict"),
    [("larkspur-healthy", 0, "pass"), ("larkspur-sick", 1, "fail"), ("larkspur-elevation-ssi", 0, "pass")],
)
def test_the_verdict_is_the_one_it_was_made_for(name: str, code: int, verdict: str, tmp_path: Path) -> None:
    got, report = _report(name, tmp_path)
    assert (got, report["verdict"]) == (code, verdict)


@pytest.mark.parametrize("name", NAMES)
def test_the_findings_are_the_faults_that_were_made(name: str, tmp_path: Path) -> None:
    """Each fault once, by its kind and line, at its time to a sample, and nothing else; source: the truth beside it."""
    _, report = _report(name, tmp_path)
    truth = _truth(name)
    found = [(one["kind"], one["line"], one["frame"]) for one in report["findings"]]
    assert found == [(one["kind"], one["line"], one["frame"]) for one in truth["faults"]]
    times = [one["time_s"] for one in report["findings"]]
    assert times == pytest.approx([one["time_s"] for one in truth["faults"]], rel=0, abs=truth["tick_s"])


@pytest.mark.parametrize(("name", "faulty", "missing"), [(NAMES[0], 0, 0), (NAMES[1], 2, 1), (NAMES[2], 0, 0)])
def test_frames_counts_and_latency_are_those_of_the_truth(name: str, faulty: int, missing: int, tmp_path: Path) -> None:
    """Source: the truth beside it; faulty and missing by hand from the command's faults."""
    _, report = _report(name, tmp_path)
    truth = _truth(name)
    serial, incremental, agreement = report["serial"], report["incremental"], report["agreement"]
    assert (serial["frames"], serial["faulty"], serial["missing"]) == (len(truth["frames"]), faulty, missing)
    assert incremental["counts_per_turn"] == truth["counts_per_turn"]
    assert incremental["net_counts"] == truth["net_counts"]
    assert incremental["index_pulses"] == truth["index_pulses"]
    assert agreement["direction"] == truth["direction"]
    assert abs(agreement["latency_s"] - truth["latency_s"]) <= agreement["latency_uncertainty_s"]


def test_the_sound_captures_hold_every_measurement(tmp_path: Path) -> None:
    """So each row of the table is taken somewhere, and the demo shows it."""
    reports = [_report(name, tmp_path)[1] for name in ("larkspur-healthy", "larkspur-elevation-ssi")]
    assert {one["name"] for report in reports for one in report["measurements"] if one["n"]} == set(MEASUREMENTS)


def test_the_flipped_bit_is_named(tmp_path: Path) -> None:
    """Bit 7 as sent, of a 19-bit position sent first and most significant bit first, is bit 18 - 7 = 11. Two flipped
    bits have no single reading, so no cause is told."""
    _, report = _report("larkspur-sick", tmp_path)
    first, second = (one["cause"] for one in report["findings"] if one["kind"] == "crc_mismatch")
    assert first.startswith("bit 11 of position alone is wrong")
    assert second is None


def test_the_demo_shows_all_three_and_ends_well(capsys: pytest.CaptureFixture[str]) -> None:
    """0, although one of them is sick on purpose. Wide, so that no path, however long, breaks a name."""
    assert main(["demo", "--width", "400"]) == 0
    out = capsys.readouterr().out
    for words in ("Larkspur azimuth encoder", "Larkspur elevation encoder", "PASS: ", "FAIL: ", "What to try next"):
        assert words in out
