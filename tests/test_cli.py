"""The command from outside. Exit codes and the order of streams are the contract's; the pipeline behind it is a
stand-in here, so that each situation can be had at will."""

from __future__ import annotations

import importlib
import json
import math
import os
import shlex
import subprocess
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType
from typing import Any

import pandas as pd
import pytest

from decode import cli
from decode.cli import TEMPLATE, main
from decode.errors import InputError
from decode.sheet import from_toml

sys.path.insert(0, str(Path(__file__).parent / "report"))
samples = importlib.import_module("samples")


@dataclass
class Standin:
    """What the pipeline's stand-in gives or raises, and what it was called with."""

    outcome: Any = None
    called: tuple[Any, ...] = ()
    command: str = ""

    def check(self, path: Any, sheet: Any, *, progress: Callable[[float, str], None], command: str) -> Any:
        self.called, self.command = (path, sheet), command
        progress(0.5, "half way")
        if isinstance(self.outcome, BaseException):
            raise self.outcome
        frames = pd.DataFrame({"frame": [0, 1], "time_s": [0.0, 1e-4]})
        angles = pd.DataFrame({"time_s": [0.0], "residual_deg": [0.1]})
        return type("Checked", (), {"report": self.outcome, "frames": frames, "angles": angles})


@pytest.fixture
def pipeline(monkeypatch: pytest.MonkeyPatch) -> Standin:
    standin = Standin(samples.GOOD)
    module = ModuleType("decode.pipeline")
    module.check = standin.check  # type: ignore[attr-defined]
    monkeypatch.setitem(sys.modules, "decode.pipeline", module)
    return standin


@pytest.fixture
def capture(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> str:
    """A capture with a sheet beside it, in the working folder."""
    monkeypatch.chdir(tmp_path)
    Path("board.csv").write_text("time,MA\n0,0\n")
    Path("board.toml").write_text(TEMPLATE)
    return "board.csv"


@pytest.mark.parametrize(
    ("name", "code"),
    [("good", 0), ("sick", 1), ("unplugged", 1), ("undecided", 3), ("serial_only", 0)],
)
def test_the_verdict_sets_the_exit_code(name: str, code: int, pipeline: Standin, capture: str) -> None:
    """0 pass, 1 a fault or a broken limit, 3 nothing fails but something was undecided."""
    pipeline.outcome = samples.ALL[name]
    assert main(["check", capture]) == code


def test_the_report_goes_to_standard_output(
    pipeline: Standin, capture: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["check", capture, "--width", "80"]) == 0
    out, err = capsys.readouterr()
    assert "Verdict    PASS" in out
    assert max(map(len, out.splitlines())) <= 80
    assert err == ""


def test_the_pipeline_gets_the_command_as_it_was_typed(pipeline: Standin, capture: str) -> None:
    Path("other sheet.toml").write_text(TEMPLATE)
    main(["check", capture, "--sheet", "other sheet.toml"])
    assert pipeline.command == "shaftproof check board.csv --sheet 'other sheet.toml'"
    assert pipeline.called == ("board.csv", Path("other sheet.toml"))


def test_a_sheet_beside_the_capture_is_taken_and_the_report_says_so(pipeline: Standin, capture: str) -> None:
    main(["check", capture, "--json", "r.json"])
    assert pipeline.called[1] == Path("board.toml")
    note = "no sheet was named, so board.toml was taken, which stands beside the capture"
    assert json.loads(Path("r.json").read_text())["capture"]["notes"][0] == note


def test_a_named_sheet_is_no_note(pipeline: Standin, capture: str) -> None:
    main(["check", capture, "--sheet", "board.toml", "--json", "r.json"])
    assert json.loads(Path("r.json").read_text())["capture"]["notes"] == samples.GOOD.capture.notes


def test_a_compressed_capture_has_its_sheet_under_the_bare_name(pipeline: Standin, capture: str) -> None:
    Path("board.csv.gz").write_bytes(b"")
    main(["check", "board.csv.gz"])
    assert pipeline.called[1] == Path("board.toml")


def test_without_a_sheet_the_message_says_how_to_write_one(
    pipeline: Standin, capture: str, capsys: pytest.CaptureFixture[str]
) -> None:
    Path("board.toml").unlink()
    assert main(["check", capture]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith("board.csv: there is no sheet that says what the board is meant to do\n")
    assert "expected: board.toml beside it, or --sheet S.toml" in err
    shown = "\n".join(line[4:] for line in err.splitlines() if line.startswith("    "))
    assert shown == TEMPLATE.rstrip()
    assert pipeline.called == ()


def test_the_sheet_to_begin_with_is_a_sheet() -> None:
    sheet = from_toml(TEMPLATE)
    assert sheet.serial is not None
    assert sheet.serial.word_bits == 27  # 19 + 1 + 1 + 6
    assert sheet.incremental is not None


def test_files_are_written_beside_the_report(
    pipeline: Standin, capture: str, capsys: pytest.CaptureFixture[str]
) -> None:
    options = ["--json", "r.json", "--frames", "f.csv", "--angles", "a.parquet"]
    assert main(["check", capture, *options]) == 0
    assert json.loads(Path("r.json").read_text())["schema"] == "shaftproof.report/1"
    assert Path("f.csv").read_text() == "frame,time_s\n0,0.0\n1,0.0001\n"
    assert pd.read_parquet("a.parquet")["residual_deg"].tolist() == [0.1]
    assert "Verdict" in capsys.readouterr().out


@pytest.mark.parametrize(("option", "first"), [("--json", "{"), ("--frames", "frame,time_s"), ("--angles", "time_s,")])
def test_a_file_on_standard_output_stands_there_alone(
    option: str, first: str, pipeline: Standin, capture: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["check", capture, option, "-"]) == 0
    out = capsys.readouterr().out
    assert out.startswith(first)
    assert "Verdict" not in out


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["check", "none.csv"], "none.csv: there is no such capture"),
        (["check", "board.csv", "--frames", "f.xls"], "f.xls: the name does not say in which layout"),
        (["check", "board.csv", "--json", "no/r.json"], "no/r.json: the folder does not exist"),
        (["check", "board.csv", "--json", "board.csv"], "board.csv: this name is taken"),
        (["check", "board.csv", "--frames", "./board.toml"], "./board.toml: the name does not say in which layout"),
        (["check", "board.csv", "--json", "./board.toml"], "./board.toml: this name is taken"),
        (["check", "board.csv", "--frames", "t.csv", "--angles", "t.csv"], "t.csv: this name is taken"),
        (["check", "board.csv", "--json", "-", "--angles", "-"], "-: this name is taken"),
    ],
)
def test_what_cannot_be_used_is_refused_before_the_work(
    arguments: list[str], message: str, pipeline: Standin, capture: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(arguments) == 2
    assert capsys.readouterr().err.startswith(message)
    assert pipeline.called == ()
    assert sorted(path.name for path in Path().iterdir()) == ["board.csv", "board.toml"]


@pytest.mark.parametrize("arguments", [[], ["check"], ["bogus"], ["check", "a", "b"], ["check", "a", "--width", "3"]])
def test_a_wrong_call_is_exit_2(arguments: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(arguments) == 2
    assert "Usage: shaftproof" in "".join(capsys.readouterr())


def test_an_input_error_is_its_text_alone(pipeline: Standin, capture: str, capsys: pytest.CaptureFixture[str]) -> None:
    """What comes from a file is made visible, so that it cannot drive the terminal."""
    pipeline.outcome = InputError("not a level", file="board.csv", row=7, column="MA", found="\x1b[2J")
    assert main(["check", capture]) == 2
    assert capsys.readouterr().err == "board.csv, line 7, column MA: not a level\n  found:    ?[2J\n"


def test_our_own_bug_is_one_line_and_how_to_see_more(
    pipeline: Standin, capture: str, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    pipeline.outcome = ZeroDivisionError("division by zero")
    monkeypatch.delenv(cli.DEBUG, raising=False)
    assert main(["check", capture]) == 70
    err = capsys.readouterr().err
    assert err.splitlines()[0] == "this is a bug in shaftproof: ZeroDivisionError: division by zero"
    assert "SHAFTPROOF_DEBUG=1" in err
    assert "Traceback" not in err
    monkeypatch.setenv(cli.DEBUG, "1")
    assert main(["check", capture]) == 70
    assert "Traceback (most recent call last)" in capsys.readouterr().err


@pytest.mark.parametrize(("outcome", "code"), [(KeyboardInterrupt(), 130), (BrokenPipeError(32, "gone"), 141)])
def test_what_the_user_ended_ends_quietly(
    outcome: BaseException,
    code: int,
    pipeline: Standin,
    capture: str,
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """128 plus the signal's number, as shells have it: 2 for SIGINT, 13 for SIGPIPE."""
    monkeypatch.setattr(cli, "_drop_output", lambda: None)
    pipeline.outcome = outcome
    assert main(["check", capture]) == code
    assert capsys.readouterr() == ("", "")


def _run(*arguments: str, **options: Any) -> subprocess.CompletedProcess[str]:
    environment = {**os.environ, "PYTHONPATH": str(Path(cli.__file__).parents[1])}
    command = [sys.executable, "-m", "decode", *arguments]
    return subprocess.run(command, env=environment, text=True, timeout=60, check=False, **options)


def test_help_lists_the_commands_and_nothing_of_shell_completion() -> None:
    done = _run("--help", capture_output=True)
    assert done.returncode == 0
    for command in ("check", "simulate", "demo"):
        assert f"\n  {command} " in done.stdout
    assert "completion" not in done.stdout
    assert done.stderr == ""


def test_help_imports_nothing_heavy() -> None:
    """So that it is there at once: no numbers, no tables, no screens."""
    code = (
        "import sys; from decode.cli import main; main(['--help']);"
        "print(sorted({'numpy', 'pandas', 'rich', 'msgspec', 'pyarrow'} & set(sys.modules)))"
    )
    root = str(Path(cli.__file__).parents[1])
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, env={**os.environ, "PYTHONPATH": root}, check=True
    )
    assert done.stdout.splitlines()[-1] == "[]"


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no device that is always full here")
def test_a_full_standard_output_is_said_and_is_not_a_bug() -> None:
    with open("/dev/full", "w") as full:
        done = _run("--help", stdout=full, stderr=subprocess.PIPE)
    assert done.returncode == 2
    assert done.stderr == "the output cannot be written: there is no room left where it goes\n"


@pytest.mark.skipif(os.name != "posix", reason="pipes that close")
def test_a_reader_that_went_away_ends_us_quietly() -> None:
    read, write = os.pipe()
    os.close(read)
    try:
        done = _run("--help", stdout=write, stderr=subprocess.PIPE)
    finally:
        os.close(write)
    assert done.returncode == 141
    assert done.stderr == ""


def _scenario(*options: str) -> dict[str, Any]:
    """What the truth beside a simulation of 10 ms says it was made from."""
    assert main(["simulate", "board.toml", "-o", "made.csv", "--duration-s", "0.01", *options]) == 0
    scenario: dict[str, Any] = json.loads(Path("made.truth.json").read_text())["scenario"]
    return scenario


def test_a_simulation_is_a_capture_and_its_truth_beside_it(capture: str, capsys: pytest.CaptureFixture[str]) -> None:
    _scenario()
    assert Path("made.csv").read_text().splitlines()[0] == "Time [s],MA,SLO,A,B,Z"
    assert capsys.readouterr().out == "made.csv and made.truth.json written\n"


@pytest.mark.parametrize(
    ("options", "motion"),
    [
        ([], {"motion": "constant", "speed_rpm": 600.0}),
        (["--motion", "constant", "--speed-rpm", "-90"], {"motion": "constant", "speed_rpm": -90.0}),
        (
            ["--motion", "ramp", "--from-rpm", "10", "--speed-rpm", "90"],
            {"motion": "ramp", "from_rpm": 10.0, "to_rpm": 90.0},
        ),
        (["--motion", "reverse", "--speed-rpm", "90"], {"motion": "reverse", "speed_rpm": 90.0}),
        (["--motion", "standstill"], {"motion": "standstill"}),
    ],
)
def test_the_motion_is_the_one_asked_for(options: list[str], motion: dict[str, Any], capture: str) -> None:
    made = _scenario(*options)["motion"]
    assert {name: made[name] for name in motion} == motion


def test_a_sway_has_its_highest_speed_in_the_middle(capture: str) -> None:
    """60 rpm are 1 turn/s; a = v / (2 pi f) with f = 5 Hz is 1 / (10 pi) turns."""
    made = _scenario("--motion", "sway", "--speed-rpm", "60", "--sway-hz", "5")["motion"]
    assert made["frequency_hz"] == 5
    assert made["amplitude_turns"] == pytest.approx(1 / (10 * math.pi), rel=1e-12)
    # without a frequency: two swings in the capture's 10 ms
    assert _scenario("--motion", "sway", "--speed-rpm", "60")["motion"]["frequency_hz"] == pytest.approx(200)


def test_each_option_of_the_simulation_reaches_it(capture: str) -> None:
    options = {
        "sample_rate_hz": 50e6,
        "clock_hz": 2.5e6,
        "frame_rate_hz": 8000.0,
        "latency_s": 1e-6,
        "line_delay_s": 1e-7,
        "edge_jitter_s": 1e-8,
        "seed": 7,
    }
    arguments = [text for name, value in options.items() for text in (f"--{name.replace('_', '-')}", str(value))]
    made = _scenario(*arguments, "--complement", "a", "--complement", "b")
    assert {name: made[name] for name in options} == options
    assert made["complements"] == ["a", "b"]


def test_every_sample_gets_a_row_when_asked(capture: str) -> None:
    """10 ms at 1 MHz are 10000 samples; a header stands above them. A clock of 0.1 MHz has ten samples a period."""
    _scenario("--sample-rate-hz", "1e6", "--clock-hz", "1e5", "--frame-rate-hz", "1000", "--every-sample")
    assert len(Path("made.csv").read_text().splitlines()) == 10001


def test_the_same_seed_gives_the_same_capture_and_another_another(capture: str) -> None:
    made = []
    for seed in ("1", "1", "2"):
        _scenario("--edge-jitter-s", "1e-6", "--seed", seed)
        made.append(Path("made.csv").read_bytes())
    assert made[0] == made[1] != made[2]


def test_a_fault_is_in_the_truth(capture: str) -> None:
    assert main(["simulate", "board.toml", "-o", "m.csv", "--truth", "t.json", "--fault", "crc_mismatch@0.05"]) == 0
    faults = json.loads(Path("t.json").read_text())["faults"]
    assert [fault["kind"] for fault in faults] == ["crc_mismatch"]
    # within one frame of 62.5 us (16 kHz) after the time asked for
    assert 0.05 <= faults[0]["time_s"] < 0.05 + 62.5e-6


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("glitch", {"kind": "glitch", "time_s": None}),
        ("glitch@-0.5", {"kind": "glitch", "time_s": -0.5}),
        ("glitch@1e-3,role=b,width_s=2e-8", {"kind": "glitch", "time_s": 1e-3, "role": "b", "width_s": 2e-8}),
        ("crc_mismatch@0.1,bits=7+9", {"kind": "crc_mismatch", "time_s": 0.1, "bits": (7, 9)}),
        ("frame_short@0,clocks=2", {"kind": "frame_short", "time_s": 0.0, "clocks": 2}),
    ],
)
def test_a_fault_is_written_as_kind_time_and_parameters(text: str, fault: dict[str, Any]) -> None:
    parsed = cli.parse_fault(text)
    assert {name: getattr(parsed, name) for name in fault} == fault


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (["--fault", "glitch@soon"], "--fault cannot be read\n  found:    glitch@soon"),
        (["--fault", "glitch@"], "--fault cannot be read"),
        (["--fault", "glitch,speed=2"], "--fault has an unknown or a repeated parameter\n  found:    speed=2"),
        (["--fault", "glitch@1,time_s=2"], "--fault has an unknown or a repeated parameter"),
        (["--fault", "crc@0.1"], "column faults[0].kind: no such kind of fault"),
        (["-o", "board.toml"], "board.toml: this name is taken"),
        (["-o", "x.csv", "--truth", "x.csv"], "x.csv: this name is taken"),
        (["-o", "no/x.csv"], "no/x.csv: the folder does not exist"),
        (["-o", "-"], "-: a simulation is written to files"),
        (["--motion", "sideways"], "Usage: shaftproof simulate"),
        (["--sample-rate-hz", "nan"], "column sample_rate_hz: an impossible value"),
        (["--duration-s", "0"], "Usage: shaftproof simulate"),
    ],
)
def test_a_simulation_that_cannot_be_is_refused_and_writes_nothing(
    options: list[str], message: str, capture: str, capsys: pytest.CaptureFixture[str]
) -> None:
    arguments = options if "-o" in options else ["-o", "made.csv", *options]
    assert main(["simulate", "board.toml", *arguments]) == 2
    assert capsys.readouterr().err.startswith(message)
    assert sorted(path.name for path in Path().iterdir()) == ["board.csv", "board.toml"]


@pytest.fixture
def travelling(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> list[Path]:
    """Two demo captures where the demo looks for its own."""
    captures = []
    for name in ("healthy", "sick"):
        captures.append(tmp_path / f"{name}.csv")
        captures[-1].write_text("time\n0\n")
        captures[-1].with_suffix(".toml").write_text(TEMPLATE)
    monkeypatch.setattr(cli, "expect_demo_captures", lambda: captures)
    return captures


def test_the_demo_shows_the_first_screenful_of_each_and_passes_though_one_is_sick(
    pipeline: Standin, travelling: list[Path], capsys: pytest.CaptureFixture[str]
) -> None:
    pipeline.outcome = samples.SICK
    assert main(["demo", "--width", "80"]) == 0
    out = capsys.readouterr().out
    assert out.count("Verdict    FAIL") == 2
    assert "Demo capture 2 of 2" in out
    assert "Measurements" not in out
    assert out.index("What to try next") > out.rindex("Agreement")
    assert f"shaftproof check {travelling[1]}" in out


def test_what_the_demo_says_to_try_works(
    pipeline: Standin, travelling: list[Path], monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Every command it prints, but the one that stands for a capture of the reader's own."""
    monkeypatch.chdir(travelling[0].parent)
    main(["demo"])
    out = capsys.readouterr().out
    commands = [shlex.split(line) for line in out.splitlines() if line.startswith("    shaftproof ")]
    tried = [command[1:] for command in commands if "YOURS.csv" not in command]
    assert [command[0] for command in tried] == ["check", "check", "simulate"]
    assert [main(command) for command in tried] == [0, 0, 0]


def test_the_demo_s_own_captures_are_found_with_their_sheets() -> None:
    try:
        captures = cli.expect_demo_captures()
    except InputError:
        pytest.skip("the demo's captures are not made yet")
    assert any("sick" in path.name for path in captures)
    assert all(path.with_suffix(".toml").is_file() for path in captures)
