"""Whole processes, measured: wall time from the start of the interpreter to its end, processor time, peak memory."""

from __future__ import annotations

import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

SLOWER = ("PYTHONDONTWRITEBYTECODE", "PYTHONUNBUFFERED", "PYTHONPROFILEIMPORTTIME", "PYTHONDEVMODE")
"""Settings of a developer's shell that nobody who has the package installed has. With the first of them, modules of a
checkout are compiled anew in every run, and those of installed packages are not."""
BYTES_OF_MAXRSS = 1 if sys.platform == "darwin" else 1024


@dataclass(frozen=True)
class Run:
    """One process. wall, processor: seconds (user and system together). peak: resident bytes. output: what it said."""

    wall: float
    processor: float
    peak: int
    code: int
    output: str


@dataclass(frozen=True)
class Job:
    """A process to be measured. answers: raises WrongAnswerError where a run did not do the work."""

    command: Sequence[str]
    answers: Callable[[Run], None]


class WrongAnswerError(Exception):
    """A process ended otherwise than it should, or found something else than the truth: its time means nothing."""


def run(job: Job, folder: Path) -> Run:
    """Run it once, with its output in a file: no reader on the other end of a pipe takes part in the time."""
    with tempfile.TemporaryFile() as out, tempfile.TemporaryFile() as errors:
        surroundings = {name: value for name, value in os.environ.items() if name not in SLOWER}
        begin = time.perf_counter()
        process = subprocess.Popen(
            job.command, cwd=folder, env=surroundings, stdin=subprocess.DEVNULL, stdout=out, stderr=errors
        )
        try:
            _, status, usage = os.wait4(process.pid, 0)
        except BaseException:
            process.kill()
            process.wait()
            raise
        wall = time.perf_counter() - begin
        process.returncode = os.waitstatus_to_exitcode(status)
        out.seek(0)
        errors.seek(0)
        done = Run(
            wall,
            usage.ru_utime + usage.ru_stime,
            usage.ru_maxrss * BYTES_OF_MAXRSS,
            process.returncode,
            out.read().decode(errors="replace"),
        )
        try:
            job.answers(done)
        except WrongAnswerError as wrong:
            said = errors.read().decode(errors="replace").strip()
            raise WrongAnswerError(f"{' '.join(job.command)}\n{wrong}\n{said}".rstrip()) from wrong
        return done


@dataclass(frozen=True)
class Figures:
    """Runs of one job."""

    runs: Sequence[Run]

    @property
    def wall(self) -> float:
        return statistics.median(run.wall for run in self.runs)

    @property
    def processor(self) -> float:
        return statistics.median(run.processor for run in self.runs)

    @property
    def peak(self) -> int:
        return max(run.peak for run in self.runs)


def pairs(work: Job, yardstick: Job, folder: Path, times: int) -> tuple[Figures, Figures]:
    """Each once for warmth, then in turns, so that a slow minute of the machine meets both."""
    run(work, folder)
    run(yardstick, folder)
    done = [(run(work, folder), run(yardstick, folder)) for _ in range(times)]
    return Figures([one for one, _ in done]), Figures([other for _, other in done])
