"""When a capture begins says nothing about the board: shifted in time it gives the same, also across zero.

The invariant holds exactly, since a time is a whole number of ticks (exact arithmetic).
"""

from pathlib import Path

import pytest
from boards import BISS, SPI, SSI, checked

from decode.bench import motion
from decode.bench.scenario import Fault, Scenario
from decode.sheet import Sheet


@pytest.mark.parametrize("sheet", [BISS, SSI, SPI], ids=["biss-c", "ssi", "spi"])
def test_a_capture_that_begins_before_zero(sheet: Sheet, tmp_path: Path) -> None:
    shift = -0.06
    shifted = Scenario(
        motion=motion.constant(1200.0), duration_s=0.12, frame_rate_hz=4e3, start_time_s=shift,
        faults=(Fault("frame_missing", 0.05 + shift),),
    )  # fmt: skip
    plain = Scenario(
        motion=motion.constant(1200.0), duration_s=0.12, frame_rate_hz=4e3, faults=(Fault("frame_missing", 0.05),)
    )
    results = [checked(sheet, scenario, tmp_path)[1] for scenario in (plain, shifted)]
    one, other = (result.report for result in results)
    assert one.serial == other.serial
    assert one.incremental == other.incremental
    assert results[0].frames["raw"].tolist() == results[1].frames["raw"].tolist()
    assert [found.kind for found in one.findings] == [found.kind for found in other.findings] == ["frame_missing"]
    assert other.findings[0].time_s == pytest.approx(one.findings[0].time_s + shift, abs=1e-9)
    assert [measured.median for measured in one.measurements if measured.unit == "s"] == pytest.approx(
        [measured.median for measured in other.measurements if measured.unit == "s"], abs=1e-12
    )
