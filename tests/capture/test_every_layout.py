"""One signal in every layout of docs/layouts.md: the same frames, counts, findings and verdict from each.

The reference is the plain CSV, which is held against the simulator's truth; the simulator is tested in tests/bench.
Times may differ by what the layout cannot print, which stands beside each.
"""

from __future__ import annotations

import re
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from exports import LAYOUTS, SHEET, Export, Layout, Signal, simulated

from decode.pipeline import Checked, check

PAGE = (Path(__file__).parents[2] / "docs" / "layouts.md").read_text(encoding="utf-8")


@cache
def signal(*, faulty: bool, rate: float, every_sample: bool) -> Signal:
    simulation = simulated(faulty=faulty, rate=rate)
    return Signal.of_samples(simulation) if every_sample else Signal.of_changes(simulation)


@pytest.fixture(scope="module")
def references(tmp_path_factory: pytest.TempPathFactory) -> dict[tuple[bool, float], Checked]:
    """What the plain CSV gives, with picoseconds printed, so that nothing is lost."""
    found = {}
    for faulty in (False, True):
        for rate in (12.5e6, 24e6):
            path = tmp_path_factory.mktemp("reference") / "plain.csv"
            export = Export(time=lambda time: f"{round(time * 10**12)}", header=("Time [ps]", *SHEET.lines.values()))
            path.write_bytes(export.write(signal(faulty=faulty, rate=rate, every_sample=False)))
            found[faulty, rate] = check(path, SHEET)
    return found


@pytest.mark.parametrize("faulty", [False, True])
def test_the_reference_is_the_truth(references: dict[tuple[bool, float], Checked], faulty: bool) -> None:
    """40 frames at 4 kHz in 10 ms, and the positions that the simulator sent; one CRC and one index are wrong or none
    is. Source: the simulator's truth."""
    report = references[faulty, 12.5e6].report
    truth = simulated(faulty=faulty).truth
    frames = references[faulty, 12.5e6].frames
    assert report.serial is not None
    assert report.serial.frames == len(truth.frames) >= 38
    assert list(frames["raw"]) == [f"0x{(frame.raw or '').upper()}" for frame in truth.frames]
    assert sorted(f.kind for f in report.findings) == (["crc_mismatch", "index_missing"] if faulty else [])
    assert report.verdict == ("fail" if faulty else "pass")


def roles(checked: Checked) -> dict[str, str]:
    return {column: role for role, column in checked.report.capture.lines.items()}


def expect_same(found: Checked, wanted: Checked, layout: Layout) -> None:
    """All that does not depend on how a time is printed is equal; times are, but for the layout's resolution."""
    assert found.report.verdict == wanted.report.verdict
    assert found.report.serial == wanted.report.serial
    ours, theirs = found.report.incremental, wanted.report.incremental
    assert ours is not None and theirs is not None
    assert ours.edges == theirs.edges + layout.edges_from_unknown
    for name in ("net_counts", "counts_per_turn", "turns_seen", "illegal", "index_pulses"):
        assert getattr(ours, name) == getattr(theirs, name)
    assert [(f.kind, f.severity, f.frame, roles(found).get(f.line or "")) for f in found.report.findings] == [
        (f.kind, f.severity, f.frame, roles(wanted).get(f.line or "")) for f in wanted.report.findings
    ]
    kept = [name for name in wanted.frames.columns if name not in ("time_s", "latch_s")]
    assert found.frames[kept].equals(wanted.frames[kept])
    for name in ("time_s", "latch_s"):
        apart = np.abs(found.frames[name] - layout.shift - wanted.frames[name])
        assert apart.max() <= layout.resolution
    for ours_found, theirs_found in zip(found.report.findings, wanted.report.findings, strict=True):
        assert abs(ours_found.time_s - layout.shift - theirs_found.time_s) <= layout.resolution


@pytest.mark.parametrize("layout", LAYOUTS, ids=lambda layout: f"{layout.group}-{layout.name}".replace(" ", "_"))
def test_every_layout(layout: Layout, references: dict[tuple[bool, float], Checked], tmp_path: Path) -> None:
    """A healthy and a sick board."""
    for faulty in (False, True):
        path = tmp_path / "capture.csv"
        path.write_bytes(layout.write(signal(faulty=faulty, rate=layout.rate, every_sample=layout.every_sample)))
        found = check(path, layout.sheet)
        expect_same(found, references[faulty, layout.rate], layout)
        assert found.report.capture.notes


@pytest.mark.parametrize("layout", LAYOUTS, ids=lambda layout: f"{layout.group}-{layout.name}".replace(" ", "_"))
def test_the_uncertainty_of_every_layout(layout: Layout, tmp_path: Path) -> None:
    """The sampling step goes into every uncertainty: 80 ns, whatever the times are printed with, 41.667 ns at 24 MHz.
    Printed to 100 ns, steps of 80 ns are lost in the rounding, and the last digit is what is known."""
    path = tmp_path / "capture.csv"
    path.write_bytes(layout.write(signal(faulty=False, rate=layout.rate, every_sample=layout.every_sample)))
    expected = 100e-9 if layout.name == "seven decimals" else 1 / layout.rate
    # Date-times are whole nanoseconds, and so is what is found of their step.
    assert check(path, layout.sheet).report.capture.tick_s == pytest.approx(expected, rel=1e-3)


def test_the_table_in_the_docs_is_what_is_tested() -> None:
    """Row by row, in order."""
    part = PAGE.split("\n## What is read\n")[1].split("\n## ")[0]
    rows = [re.split(r"\s*\|\s*", line.strip("| ")) for line in part.splitlines() if line.startswith("| ")][1:]
    told = [(row[0], row[1]) for row in rows if not set(row[0]) <= set("- ")]
    assert told == [(layout.group, layout.name) for layout in LAYOUTS]
