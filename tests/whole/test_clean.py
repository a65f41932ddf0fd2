"""A sound board stays sound: at least 20 000 frames each, at constant, swaying and reversing speed.

The truth is the simulator's, which is held against independent references in tests/bench.
"""

from pathlib import Path

import pytest
from boards import BISS, SPI, SSI, checked

from decode.bench import motion
from decode.bench.scenario import Scenario
from decode.judgement.records import AgreementRecord

FRAMES = 20_000
LATENCY_S = 4e-6

MOTIONS = {
    "constant": motion.constant(700.0),
    "sway": motion.sway(1.3, 2.0),
    "reverse": motion.reverse(900.0),
}
BOARDS = {"biss-c": (BISS, 16e3), "ssi": (SSI, 10e3), "spi": (SPI, 12e3)}


@pytest.mark.parametrize("moving", MOTIONS)
@pytest.mark.parametrize("board", BOARDS)
def test_nothing_is_found_on_a_sound_board(board: str, moving: str, tmp_path: Path) -> None:
    sheet, rate = BOARDS[board]
    scenario = Scenario(
        motion=MOTIONS[moving], duration_s=FRAMES / rate + 2 / rate, frame_rate_hz=rate, latency_s=LATENCY_S
    )
    simulation, result = checked(sheet, scenario, tmp_path)
    report = result.report
    assert report.serial is not None and report.incremental is not None and report.agreement is not None
    assert report.serial.frames == len(simulation.truth.frames) >= FRAMES
    assert report.serial.good == report.serial.frames
    assert report.serial.missing == 0
    assert [finding for finding in report.findings if finding.severity in ("fault", "warning")] == []
    assert report.incremental.counts_per_turn == 4096
    assert report.incremental.turns_seen >= 2
    turns = next(one for one in report.measurements if one.name == "counts_per_turn")
    assert (turns.min, turns.max, turns.verdict) == (4096, 4096, "pass")
    assert report.verdict == "pass"
    assert result.frames["position"].tolist() == [frame.position for frame in simulation.truth.frames]
    _expect_latency(report.agreement, moving)


def _expect_latency(agreement: AgreementRecord, moving: str) -> None:
    """The motion gives the latency or, at constant speed, cannot; then the report says why."""
    latency = agreement.latency_s
    if moving == "constant":
        assert latency is None
        assert agreement.latency_note == "not separable: the speed varied too little"
    else:
        assert latency is not None and agreement.latency_uncertainty_s is not None
        assert abs(latency - LATENCY_S) <= agreement.latency_uncertainty_s
