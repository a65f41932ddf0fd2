"""The machines take values and give values: importing one brings in no screen, no file format and no command."""

from __future__ import annotations

import json
import subprocess
import sys

import pytest

MACHINES = [
    "decode.spans",
    "decode.distribution",
    "decode.anomalies",
    "decode.errors",
    "decode.sheet",
    "decode.lines.activity",
    "decode.lines.pairs",
    "decode.serial.receiver",
    "decode.serial.continuity",
    "decode.serial.causes",
    "decode.incremental.decoder",
    "decode.agreement.latch",
    "decode.agreement.fit",
    "decode.agreement.silence",
    "decode.judgement.judge",
    "decode.bench.board",
]
FOREIGN = {"rich", "typer", "click", "pandas", "pyarrow"}
OURS = {"decode.report", "decode.cli", "decode.capture", "decode.pipeline"}


def imported_with(module: str) -> set[str]:
    """Everything a fresh interpreter has once it has imported `module`: top-level names, and our rooms."""
    program = f"import json, sys, {module}; print(json.dumps(sorted(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True)
    names: list[str] = json.loads(done.stdout)
    return {name.split(".")[0] for name in names} | {".".join(name.split(".")[:2]) for name in names}


def test_the_machines_bring_in_no_screen_and_no_file_format() -> None:
    """All of them in one interpreter, which is the same as each alone for what must not come."""
    assert imported_with(", ".join(MACHINES)) & (FOREIGN | OURS) == set()


@pytest.mark.parametrize("module", ["decode.spans", "decode.errors"])
def test_what_every_room_uses_stands_alone(module: str) -> None:
    """Spans need numpy and errors nothing: no other module of ours comes along."""
    assert {name for name in imported_with(module) if name.startswith("decode.")} == {module}


def test_the_package_alone_costs_nothing() -> None:
    assert imported_with("decode") & (FOREIGN | OURS | {"numpy", "msgspec", "decode.sheet"}) == set()


def test_what_must_not_come_would_be_seen() -> None:
    """Guards the tests above against names that are never there."""
    assert imported_with("decode.pipeline") >= {"pandas", "decode.capture", "decode.pipeline"}
    assert imported_with("decode.cli") >= {"typer", "decode.cli"}
    assert imported_with("decode.report.terminal") >= {"rich", "decode.report"}
