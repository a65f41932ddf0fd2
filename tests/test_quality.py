"""The rules a machine can check: types strict, lint clean, format as agreed."""

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]


@pytest.mark.parametrize(
    "command",
    [["mypy"], ["ruff", "check", "."], ["ruff", "format", "--check", "."]],
    ids=" ".join,
)
def test_clean(command: list[str]) -> None:
    done = subprocess.run([sys.executable, "-m", *command], cwd=ROOT, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout + done.stderr
