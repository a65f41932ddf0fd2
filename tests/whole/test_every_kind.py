"""Every kind of finding: made at a known time, found, named, placed, and nothing else called a fault.

`test_the_table_of_kinds` draws the table (pytest -s shows it). The truth is the simulator's, which makes each fault
as its cause would and is held against independent references in tests/bench.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import NamedTuple

import msgspec
import pytest
from boards import BISS, BISS_LIFE, SPI, SSI, SSI_CHECKED, checked

from decode.bench import motion
from decode.bench.scenario import Fault, Scenario
from decode.rules.kinds import KINDS
from decode.sheet import Sheet

AT = (0.071, 0.161)
TURN_S = 60 / 900
WITHIN_A_TURN = {"turn_count_wrong", "index_missing", "index_extra", "index_misplaced", "index_width"}
WHOLE_CAPTURE = {"undersampled", "direction_opposed", "scale_wrong", "latency_high", "residual_high"}
ONCE = {"line_stuck", "time_reversal", "offset_step", "turn_count_wrong"}

STEP_BACK_S = {"time_reversal": 0.02}
"""By how much the time column steps back where it does."""

BOARDS = {
    "parity_mismatch": (SSI_CHECKED, SPI),
    "fixed_mismatch": (SSI_CHECKED,),
    "life_break": (BISS_LIFE,),
    "no_acknowledge": (BISS,),
    "no_start_bit": (BISS,),
    "crc_mismatch": (BISS, BISS_LIFE),
    "error_flag": (BISS, SPI),
    "warning_flag": (BISS,),
    "timeout_short": (BISS, SSI),
}
"""Boards on which a kind can be; all three interfaces where it is not named."""


class Case(NamedTuple):
    kind: str
    sheet: Sheet
    board: str


def cases() -> Iterator[Case]:
    for kind in KINDS:
        for sheet in BOARDS.get(kind, (BISS, SSI, SPI)):
            assert sheet.serial is not None
            yield Case(kind, sheet, sheet.serial.interface + ("+" if sheet in (BISS_LIFE, SSI_CHECKED) else ""))


def scenario_of(kind: str) -> Scenario:
    times: tuple[float | None, ...] = (None,) if kind in WHOLE_CAPTURE else AT[:1] if kind in ONCE else AT
    moving = motion.ramp(300.0, 1500.0) if kind == "latency_high" else motion.constant(900.0)
    return Scenario(
        motion=moving,
        duration_s=0.36,
        frame_rate_hz=8e3,
        complements=("a",) if kind == "pair_mismatch" else (),
        faults=tuple(Fault(kind, time, duration_s=STEP_BACK_S.get(kind)) for time in times),
    )


def with_complement(sheet: Sheet, kind: str) -> Sheet:
    if kind != "pair_mismatch":
        return sheet
    return msgspec.structs.replace(sheet, lines={**sheet.lines, "a_n": "A_n"})


@pytest.mark.parametrize("case", list(cases()), ids=lambda case: f"{case.kind}-{case.board}")
def test_the_kind_is_found_and_nothing_else(case: Case, tmp_path: Path) -> None:
    scenario = scenario_of(case.kind)
    simulation, result = checked(with_complement(case.sheet, case.kind), scenario, tmp_path)
    report = result.report
    assert report.serial is not None
    made = simulation.truth.faults
    found = [finding for finding in report.findings if finding.kind == case.kind]
    others = [finding for finding in report.findings if finding.kind != case.kind and finding.severity == "fault"]
    assert others == []
    assert len(found) == len(made) == len(scenario.faults)
    frame_s = 1 / 8e3
    slack = TURN_S if case.kind in WITHIN_A_TURN else frame_s
    if case.kind not in WHOLE_CAPTURE:
        for finding, truth in zip(found, made, strict=True):
            # A step back has two times, the row above it and the row it goes to; the truth tells the latter.
            assert abs(finding.time_s - finding.evidence.get("back_s", 0.0) - truth.time_s) <= slack
            if truth.frame is not None:
                assert finding.frame == truth.frame
    faulty = {number for truth in made for number in truth.frames} if KINDS[case.kind].room == "serial" else set()
    severe = KINDS[case.kind].severity == "fault"
    assert report.serial.missing == (len(made) if case.kind == "frame_missing" else 0)
    assert report.serial.faulty == (len(faulty) if severe and case.kind != "frame_missing" else 0)
    assert (report.verdict == "fail") is severe


def test_the_table_of_kinds(tmp_path: Path) -> None:
    """One row a kind, on the first board that can have it: made, found, when. Drawn from runs of its own."""
    rows = [f"{'kind':<20} {'board':<8} {'made':>4} {'found':>5}  first made, first found (s)"]
    for case in {case.kind: case for case in reversed(list(cases()))}.values():
        simulation, result = checked(with_complement(case.sheet, case.kind), scenario_of(case.kind), tmp_path)
        found = [finding for finding in result.report.findings if finding.kind == case.kind]
        made = simulation.truth.faults
        rows.append(
            f"{case.kind:<20} {case.board:<8} {len(made):>4} {len(found):>5}  "
            f"{made[0].time_s:.6f} {found[0].time_s if found else float('nan'):.6f}"
        )
    print("\n" + "\n".join(rows))
    assert {row.split()[0] for row in rows[1:]} == set(KINDS)
    assert all(row.split()[2] == row.split()[3] for row in rows[1:])
