"""A board's capture as a value change dump, checked end to end: the report of the delimited export of the same signal;
and lines that are unknown until a reset ends, or while dumping is off, are no fault of the board."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from decode.bench.board import Simulation, simulate
from decode.bench.scenario import Fault, Scenario
from decode.bench.writer import write_csv
from decode.pipeline import Checked, check
from decode.sheet import from_toml

BOARD = from_toml("""
[lines]
clock = "MA"
data = "SLO"
a = "A"
b = "B"

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
""")


def dump_of(simulation: Simulation, off: list[tuple[int, int]]) -> str:
    """The dump of a capture, with dumping off between each pair of ticks of `off`."""
    span = simulation.span()
    codes = {name: f"#{number}" for number, name in enumerate(span.lines)}
    events = [(span.start, 1, f"{edges.initial}{codes[name]}") for name, edges in span.lines.items()]
    for name, edges in span.lines.items():
        changes = zip(edges.times.tolist(), edges.levels.tolist(), strict=True)
        events += [(time, 1, f"{level}{codes[name]}") for time, level in changes]
    for start, stop in off:
        events = [event for event in events if not start <= event[0] < stop]
        unknown = " ".join(f"x{code}" for code in codes.values())
        known = " ".join(f"{edges.between(0, stop).final}{codes[name]}" for name, edges in span.lines.items())
        events += [(start, 0, f"$dumpoff {unknown} $end"), (stop, 0, f"$dumpon {known} $end")]
    definitions = "".join(f"$var wire 1 {code} {name} $end\n" for name, code in codes.items())
    picoseconds = int(simulation.tick * 10**12)
    lines, now = [], -1
    for time, _, text in sorted(events):
        lines += [] if time == now else [f"#{time * picoseconds}"]
        lines.append(text)
        now = time
    head = f"$timescale 1ps $end\n$scope module board $end\n{definitions}$upscope $end\n$enddefinitions $end\n"
    return head + "\n".join(lines) + f"\n#{(span.stop - 1) * picoseconds}\n"


def checked(tmp_path: Path, scenario: Scenario, off: list[tuple[int, int]]) -> tuple[Checked, Checked]:
    """(the delimited export's, the dump's) results."""
    simulation = simulate(BOARD, scenario)
    write_csv(simulation, tmp_path / "board.csv")
    (tmp_path / "board.vcd").write_text(dump_of(simulation, off))
    return check(tmp_path / "board.csv", BOARD), check(tmp_path / "board.vcd", BOARD)


@pytest.mark.parametrize("faults", [(), (Fault("crc_mismatch", time_s=0.01), Fault("frame_missing", time_s=0.02))])
def test_the_report_of_the_delimited_export(tmp_path: Path, faults: tuple[Fault, ...]) -> None:
    """The same frames, counts, findings, measurements and verdict."""
    export, dump = checked(tmp_path, Scenario(duration_s=0.05, faults=faults), [])
    pd.testing.assert_frame_equal(dump.frames, export.frames)
    ours, theirs = dump.report, export.report
    assert (ours.serial, ours.incremental, ours.verdict) == (theirs.serial, theirs.incremental, theirs.verdict)
    assert [(one.kind, one.frame, one.line, one.cause) for one in ours.findings] == [
        (one.kind, one.frame, one.line, one.cause) for one in theirs.findings
    ]
    assert [one.kind for one in ours.findings] == [fault.kind for fault in faults]
    assert [one.time_s for one in ours.findings] == pytest.approx([one.time_s for one in theirs.findings])
    assert [(one.name, one.n, one.verdict) for one in ours.measurements] == [
        (one.name, one.n, one.verdict) for one in theirs.measurements
    ]
    assert figures(dump) == pytest.approx(figures(export))


def figures(result: Checked) -> list[float]:
    found = [(one.min, one.median, one.max, one.uncertainty) for one in result.report.measurements]
    return [-1.0 if figure is None else figure for row in found for figure in row]


def test_unknown_levels_are_no_fault(tmp_path: Path) -> None:
    """At 100 MHz: unknown for the first millisecond and from 20.003 to 25.007 ms, in the middle of frames. Frames come
    at 16 kHz, so that 96 of 800 at most are lost or cut; the rest is good, and nothing is found wrong."""
    off = [(0, 100_000), (2_000_300, 2_500_700)]
    export, dump = checked(tmp_path, Scenario(duration_s=0.05), off)
    serial, whole = dump.report.serial, export.report.serial
    assert serial is not None
    assert whole is not None
    assert whole.frames == 800
    assert 800 - 100 <= serial.frames == serial.good < 800 - 94
    assert (serial.missing, dump.report.findings) == (0, [])
    assert dump.report.verdict == export.report.verdict != "fail"
    words = {round(time * 1e9): raw for time, raw in zip(export.frames["time_s"], export.frames["raw"], strict=True)}
    assert [words[round(time * 1e9)] for time in dump.frames["time_s"]] == dump.frames["raw"].tolist()
