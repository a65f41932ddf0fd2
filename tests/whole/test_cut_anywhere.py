"""A capture cut into spans anywhere gives the same report and the same tables as the whole.

The invariant in words: what a machine says depends on the edges, never on where one span ended and the next began.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import msgspec
import pandas as pd
import pytest
from boards import BISS_LIFE, SPI, SSI_CHECKED
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from decode.bench import motion
from decode.bench.board import simulate
from decode.bench.scenario import Fault, Scenario
from decode.bench.writer import write_csv
from decode.capture.source import Capture, open_capture
from decode.pipeline import Checked, check_capture
from decode.report.document import to_json
from decode.sheet import Sheet
from decode.spans import Span, cut

CYCLES = 32
BOARDS = {
    name: msgspec.structs.replace(sheet, incremental=msgspec.structs.replace(sheet.incremental, cycles_per_turn=CYCLES))
    for name, sheet in {"biss-c": BISS_LIFE, "ssi": SSI_CHECKED, "spi": SPI}.items()
    if sheet.incremental is not None
}
FAULTS = {
    "biss-c": ("crc_mismatch", "frame_missing", "no_start_bit", "life_break", "glitch", "index_missing", "time_gap"),
    "ssi": ("timeout_short", "fixed_mismatch", "frame_short", "position_jump", "turn_count_wrong", "time_reversal"),
    "spi": ("frame_long", "position_stale", "data_stuck", "illegal_transition", "index_misplaced", "clock_glitch"),
}


class Recut:
    """A capture whose spans are cut again at `ticks`."""

    def __init__(self, capture: Capture, ticks: Sequence[int]) -> None:
        self._capture, self._ticks = capture, ticks

    def __getattr__(self, name: str) -> Any:
        return getattr(self._capture, name)

    def spans(self, columns: Sequence[str]) -> Iterator[Span]:
        for span in self._capture.spans(columns):
            yield from cut(span, self._ticks)


def small_scenario(interface: str, faults: Sequence[str], seed: int) -> Scenario:
    times = [0.012 + 0.009 * number for number in range(len(faults))]
    return Scenario(
        motion=motion.sway(1.2, 18.0) if seed % 2 else motion.constant(3000.0),
        duration_s=0.06,
        frame_rate_hz=2000.0,
        seed=seed,
        cut_start=seed % 3 == 0,
        faults=tuple(Fault(kind, time) for kind, time in zip(faults, times, strict=True)),
    )


def expect_same(one: Checked, other: Checked) -> None:
    assert to_json(one.report) == to_json(other.report)
    pd.testing.assert_frame_equal(one.frames, other.frames)
    pd.testing.assert_frame_equal(one.angles, other.angles)


def opened(path: Path, sheet: Sheet, rows: int = 200_000) -> Capture:
    return open_capture(path, sheet.capture, rows_per_span=rows)


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_cut_at_any_tick(data: st.DataObject, tmp_path: Path) -> None:
    interface = data.draw(st.sampled_from(sorted(BOARDS)))
    faults = data.draw(st.lists(st.sampled_from(FAULTS[interface]), max_size=3, unique=True))
    seed = data.draw(st.integers(0, 5))
    sheet = BOARDS[interface]
    path = tmp_path / "capture.csv"
    write_csv(simulate(sheet, small_scenario(interface, faults, seed)), path)
    whole = check_capture(opened(path, sheet), sheet)
    capture = opened(path, sheet, data.draw(st.sampled_from([200_000, 977, 100])))
    ticks = data.draw(st.lists(st.integers(0, round(0.06 / float(capture.tick))), max_size=40))
    expect_same(whole, check_capture(Recut(capture, ticks), sheet))


@pytest.mark.parametrize("interface", sorted(BOARDS))
def test_a_row_a_span(interface: str, tmp_path: Path) -> None:
    """The reader's own cuts are tested in its room; here the machines get every row as a span of its own."""
    sheet = BOARDS[interface]
    scenario = msgspec.structs.replace(small_scenario(interface, FAULTS[interface][:1], 1), duration_s=0.016)
    path = tmp_path / "capture.csv"
    simulation = simulate(sheet, scenario)
    write_csv(simulation, path)
    capture = opened(path, sheet)
    scale = float(simulation.tick) / float(capture.tick)
    rows = {round(int(tick) * scale) for edges in simulation.lines.values() for tick in edges.times}
    expect_same(check_capture(opened(path, sheet), sheet), check_capture(Recut(capture, sorted(rows)), sheet))
