"""How fast and how large: every row of docs/performance.md against its yardstick, in one run.

    python tests/benchmarks/run.py                      all rows but the long ones
    python tests/benchmarks/run.py --long               these as well: ten times the length, 5 GB (10 GB of disk)
    python tests/benchmarks/run.py --rows load hand     some
    python tests/benchmarks/run.py --small              whether it works at all, in a minute; the figures mean nothing

Work and yardstick are whole processes, start-up included, run in turns: one warm-up each, then A B A B ..., and the
ratio is taken pair by pair. Every run's answers are held against the truth; a wrong one ends the benchmark with exit
code 1. A target that is missed does not: this measures, it does not judge. Inputs are made on first use and kept.
Needs os.wait4, so Linux or macOS.
"""

from __future__ import annotations

import argparse
import json
import os
import statistics
import subprocess
import sys
import tempfile
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path
from typing import Any

import inputs
from inputs import ROOT, Input
from processes import Figures, Job, Run, WrongAnswerError, pairs, run

HAND_SCRIPT = Path(__file__).with_name("hand_script.py")
KEPT = Path(tempfile.gettempdir()) / "shaftproof-benchmarks"
TIMES = 5
MEGABYTE = 1e6
GOOD, UNDECIDED = 0, 3
HEADINGS = (
    "row",
    "work",
    "yardstick",
    "work s",
    "yardstick s",
    "processor s",
    "ratio (min–max)",
    "target",
    "met",
    "peak MB",
)


# -- the processes --------------------------------------------------------------------------------------------------


def python(*arguments: str | Path) -> list[str]:
    return [sys.executable, *map(str, arguments)]


def check(capture: Input) -> Job:
    """`shaftproof check CAPTURE --json REPORT`, its report held against the truth."""
    report = capture.capture.with_suffix(".report.json")
    report.unlink(missing_ok=True)
    command = python("-m", "decode", "check", capture.capture, "--sheet", capture.sheet, "--json", report)
    return Job(command, partial(expect_report, capture, report))


def expect_report(capture: Input, report: Path, done: Run) -> None:
    """A sound board: nothing fails (a short capture may leave something undecided), and every count is the truth."""
    expect("exit code", done.code, (GOOD, UNDECIDED))
    found = json.loads(report.read_text(encoding="utf-8"))
    report.unlink()  # so that the next run cannot pass by this one's
    truth = capture.truth
    expect("rows", found["capture"]["rows"], (truth["rows"],))
    for name, wanted in (("frames", truth["frames"]), ("good", truth["frames"]), ("faulty", 0), ("missing", 0)):
        expect(name, found["serial"][name], (wanted,))
    for name in ("edges", "net_counts", "index_pulses", "counts_per_turn"):
        expect(name, found["incremental"][name], (truth[name],))
    expect("findings", found["findings"], ([],))


def by_hand(capture: Input, *options: str) -> Job:
    return Job(python(HAND_SCRIPT, capture.capture, *options), partial(expect_by_hand, capture))


def expect_by_hand(capture: Input, done: Run) -> None:
    expect("exit code", done.code, (GOOD,))
    found, truth = json.loads(done.output), capture.truth
    for name in ("frames", "edges", "net_counts", "index_pulses", "counts_per_turn"):
        expect(name, found[name], (truth[name],))
    expect("good", found["good"], (truth["frames"],))
    for name in ("illegal", "turns_with_other_counts"):
        expect(name, found[name], (0,))
    # Some thousand frames at places all over the turn: the positions must be spread over it, too.
    top = 2**inputs.POSITION_BITS
    expect("positions", found["position_min"] < 0.01 * top and found["position_max"] > 0.99 * top, (True,))


def loaded(capture: Input) -> Job:
    """A general reader of CSV with nothing after it; it says how many rows it has, so that it must have them."""
    program = "import sys, pyarrow.csv; print(pyarrow.csv.read_csv(sys.argv[1]).num_rows)"
    return Job(python("-c", program, capture.capture), partial(expect_rows, capture))


def expect_rows(capture: Input, done: Run) -> None:
    expect("exit code", done.code, (GOOD,))
    expect("rows", int(done.output), (capture.truth["rows"],))


def ends_well(*arguments: str, output: str = "") -> Job:
    """output: what it must say."""
    return Job(python(*arguments), partial(expect_said, output))


def expect_said(output: str, done: Run) -> None:
    expect("exit code", done.code, (GOOD,))
    expect(f"{output!r} said", output in done.output, (True,))


def expect(what: str, found: Any, wanted: Sequence[Any]) -> None:
    if found not in wanted:
        raise WrongAnswerError(f"{what}: found {found!r}, expected {' or '.join(map(repr, wanted))}")


# -- the rows -------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Row:
    """keys: the inputs it needs. limit: the most that its figure may be. long: only when asked for."""

    work: str
    yardstick: str
    keys: tuple[str, ...]
    limit: float
    measure: Callable[[Bench, Row], Line]
    long: bool = False


@dataclass(frozen=True)
class Line:
    """What was measured. figure: what is held against the limit; the spread goes with it."""

    work: Figures
    yardstick: Figures | None
    figure: float
    shown: str
    target: str


@dataclass(frozen=True)
class Bench:
    """Where the inputs are, and how often each process is run."""

    folder: Path
    small: bool
    times: int
    inputs: dict[str, Input] = field(default_factory=dict)
    checks: dict[str, Run] = field(default_factory=dict)

    def input(self, key: str) -> Input:
        """Made in a process of its own where it is not there yet."""
        if key not in self.inputs:
            found = inputs.kept(self.folder, key, self.small)
            if found is None:
                print(f"making the input {key} ...", file=sys.stderr, flush=True)
                options = ["--small"] if self.small else []
                subprocess.run(python(Path(inputs.__file__), self.folder, key, *options), cwd=ROOT, check=True)
                found = inputs.kept(self.folder, key, self.small)
            assert found is not None
            self.inputs[key] = found
        return self.inputs[key]

    def checked(self, key: str) -> Run:
        """One check of it, without a yardstick; the same one for every row that asks."""
        if key not in self.checks:
            self.checks[key] = run(check(self.input(key)), ROOT)
        return self.checks[key]

    def pairs(self, work: Job, yardstick: Job) -> tuple[Figures, Figures]:
        return pairs(work, yardstick, ROOT, self.times)


def ratio(bench: Bench, row: Row, work: Job, yardstick: Job) -> Line:
    one, other = bench.pairs(work, yardstick)
    ratios = [a.wall / b.wall for a, b in zip(one.runs, other.runs, strict=True)]
    middle = statistics.median(ratios)
    return Line(one, other, middle, f"{middle:.2f} ({min(ratios):.2f}–{max(ratios):.2f})", f"≤ {row.limit:g}")


def against_load(bench: Bench, row: Row) -> Line:
    capture = bench.input(row.keys[0])
    return ratio(bench, row, check(capture), loaded(capture))


def against_hand(bench: Bench, row: Row) -> Line:
    capture = bench.input(row.keys[0])
    return ratio(bench, row, check(capture), by_hand(capture))


def against_matrix(bench: Bench, row: Row) -> Line:
    capture = bench.input(row.keys[0])
    return ratio(bench, row, check(capture), by_hand(capture, "--matrix"))


def against_pandas(bench: Bench, row: Row) -> Line:
    return ratio(bench, row, check(bench.input(row.keys[0])), ends_well("-c", "import pandas"))


def help_text(bench: Bench, row: Row) -> Line:
    one, other = bench.pairs(ends_well("-m", "decode", "--help", output="Usage: "), ends_well("-c", "pass"))
    more = [a.wall - b.wall for a, b in zip(one.runs, other.runs, strict=True)]
    middle = statistics.median(more)
    return Line(one, other, middle, f"+{middle:.2f} s ({min(more):.2f}–{max(more):.2f})", f"≤ +{row.limit:g} s")


def by_length(bench: Bench, row: Row) -> Line:
    long, short = (bench.input(key) for key in row.keys)
    return ratio(bench, row, check(long), check(short))


def memory(bench: Bench, row: Row) -> Line:
    """Once is enough: memory does not vary as time does."""
    done = bench.checked(row.keys[0])
    peak = done.peak / MEGABYTE
    return Line(Figures([done]), None, peak, f"{peak:.0f} MB", f"≤ {row.limit:g} MB")


def counts_of_a_tenth(bench: Bench, row: Row) -> Line:
    """The figure is how many of the counts, per frame, differ: both reports are held against the truth of their own
    file, and the two truths against each other."""
    whole, tenth = (bench.input(key).truth for key in row.keys)
    done, _ = (bench.checked(key) for key in row.keys)
    names = ("edges", "net_counts", "index_pulses")
    differ = sum(whole[name] * tenth["frames"] != tenth[name] * whole["frames"] for name in names)
    return Line(Figures([done]), None, differ, f"{differ} of {len(names)} differ", "none differs")


LOAD = "`pyarrow.csv.read_csv` alone"
CHANGES = "check --json, {rows} million change rows, {size} MB, {frames} frames"
SAMPLES = "check --json, {rows} million rows, one a sample, {size} MB"
ROWS = {
    "load": Row(CHANGES, LOAD, ("once",), 1.0, against_load),
    "hand": Row(CHANGES, "hand script, a loop over frames", ("once",), 0.30, against_hand),
    "hand-matrix": Row(CHANGES, "hand script, all frames at once", ("once",), 0.30, against_matrix),
    "load-long": Row(CHANGES, LOAD, ("ten-times",), 0.6, against_load, long=True),
    "every-sample": Row(SAMPLES, LOAD, ("every-sample",), 0.35, against_load),
    "1-mb": Row("check --json, {size} MB", '`python -c "import pandas"`', ("1-mb",), 2.5, against_pandas),
    "help": Row("--help", "`python -c pass`", (), 0.25, help_text),
    "memory": Row("peak memory, {size} MB", "", ("once",), 500, memory),
    "memory-5-gb": Row("peak memory, {size} MB", "", ("5-gb",), 500, memory, long=True),
    "linear": Row(CHANGES, "a tenth of the length", ("ten-times", "once"), 10.5, by_length, long=True),
    "counts": Row("counts per frame, {size} MB", "a tenth of it", ("once", "tenth"), 0, counts_of_a_tenth),
    "counts-5-gb": Row(
        "counts per frame, {size} MB", "a tenth of it", ("5-gb", "5-gb-tenth"), 0, counts_of_a_tenth, long=True
    ),
}


# -- the table ------------------------------------------------------------------------------------------------------


def cells(name: str, row: Row, line: Line, bench: Bench) -> tuple[str, ...]:
    one, other = line.work, line.yardstick
    return (
        name,
        said(row, bench),
        row.yardstick or "–",
        f"{one.wall:.2f}",
        "–" if other is None else f"{other.wall:.2f}",
        f"{one.processor:.2f}" if other is None else f"{one.processor:.2f} / {other.processor:.2f}",
        line.shown,
        line.target,
        "–" if bench.small else "yes" if line.figure <= row.limit else "no",
        f"{one.peak / MEGABYTE:.0f}" if other is None else f"{one.peak / MEGABYTE:.0f} / {other.peak / MEGABYTE:.0f}",
    )


def said(row: Row, bench: Bench) -> str:
    """The work in words, with the size of what is worked on."""
    if not row.keys:
        return row.work
    capture = bench.input(row.keys[0])
    return row.work.format(
        rows=f"{capture.truth['rows'] / 1e6:.1f}", size=f"{capture.megabytes:.0f}", frames=capture.truth["frames"]
    )


def show(rows: Sequence[Sequence[str]]) -> None:
    """The table in Markdown, as docs/performance.md has it."""
    for number, row in enumerate([HEADINGS, *rows]):
        print(f"| {' | '.join(row)} |")
        if number == 0:
            print("| --- " * len(row) + "|")


def machine() -> str:
    """What the figures were taken on, without its name."""
    memory = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 2**30
    busy = os.getloadavg()[0]
    version = sys.version.split()[0]
    return f"{os.cpu_count()} cores, {memory:.0f} GiB, {sys.platform}, Python {version}; load before: {busy:.1f}"


def chosen(names: Sequence[str] | None, long: bool) -> list[str]:
    return list(names) if names else [name for name, row in ROWS.items() if long or not row.long]


def main() -> int:
    parser = argparse.ArgumentParser(description="Measures shaftproof against its yardsticks.")
    parser.add_argument("--rows", nargs="+", choices=ROWS, metavar="NAME", help=f"only these: {', '.join(ROWS)}")
    parser.add_argument("--long", action="store_true", help="also the rows that need several GB of disk and minutes")
    parser.add_argument(
        "--small", action="store_true", help="a trial: short inputs, one pair; the figures mean nothing"
    )
    parser.add_argument("--times", type=int, default=TIMES, help=f"pairs a row (default: {TIMES})")
    parser.add_argument("--folder", type=Path, default=KEPT, help=f"where inputs are kept (default: {KEPT})")
    options = parser.parse_args()
    folder = options.folder.resolve()
    folder.mkdir(parents=True, exist_ok=True)
    bench = Bench(folder, options.small, 1 if options.small else options.times)
    names = chosen(options.rows, options.long)
    for key in dict.fromkeys(key for name in names for key in ROWS[name].keys):
        bench.input(key)
    print(machine(), end="\n\n", flush=True)
    table = []
    for name in names:
        print(f"measuring {name} ...", file=sys.stderr, flush=True)
        row = ROWS[name]
        try:
            table.append(cells(name, row, row.measure(bench, row), bench))
        except WrongAnswerError as wrong:
            print(f"{name}: a wrong answer, so there is nothing to measure\n{wrong}", file=sys.stderr)
            return 1
    show(table)
    return 0


if __name__ == "__main__":
    sys.exit(main())
