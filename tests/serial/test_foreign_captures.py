"""Captures that others' simulations wrote, through the front door: ../shared/captures, skipped where that is absent."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest

from decode.capture.source import open_capture
from decode.incremental.decoder import QuadratureDecoder
from decode.pipeline import check
from decode.serial.clock import Rhythm, find_bursts
from decode.serial.frames import words
from decode.serial.interfaces import Habit, read_biss
from decode.serial.timing import data_phase
from decode.sheet import CaptureKeys, Serial, from_toml
from decode.spans import Edges

CAPTURES = Path(__file__).parents[2].parent / "shared" / "captures"


def expect(name: str) -> Path:
    path = CAPTURES / name
    if not path.exists():
        pytest.skip(f"{name} is not beside this checkout")
    return path


# --- a biss-c master and slave whose word changes its width with every frame -----------------------------------------


def serial_of(bits: int) -> Serial:
    sheet = from_toml(
        f"""
        [serial]
        interface = "biss-c"
        fields = [
          {{ name = "position", bits = {bits} }},
          {{ name = "error", bits = 1, active = "low" }},
          {{ name = "warning", bits = 1, active = "low" }},
          {{ name = "crc", bits = 6, polynomial = 0x43, inverted = true }},
        ]
        """
    )
    assert sheet.serial is not None
    return sheet.serial


@pytest.mark.parametrize("rows_per_span", [200_000, 500])
def test_every_frame_of_a_changing_width(rows_per_span: int) -> None:
    """100 frames of different widths, each as the list beside the dump has it, and each with its CRC right.

    The readers take one width for a capture, so each frame is read with its own. Source: biss_truth.csv, written by the
    simulation itself.
    """
    truth = list(csv.DictReader(expect("biss_truth.csv").read_text().splitlines()))
    capture = open_capture(expect("biss_lines.vcd"), CaptureKeys(), rows_per_span=rows_per_span)
    lines = [capture.column("biss_sck_o"), capture.column("biss_dat_o")]
    spans = list(capture.spans(lines))
    clock, data = (Edges.none(spans[0].lines[line].initial) for line in lines)
    for span in spans:
        clock, data = clock.then(span.lines[lines[0]]), data.then(span.lines[lines[1]])
    rhythm = Rhythm.of(clock)
    assert rhythm is not None
    assert rhythm.period * float(capture.tick) == pytest.approx(1.2e-6)
    bursts, stray = find_bursts(clock, None, rhythm)
    assert (len(bursts), stray.size, len(truth)) == (100, 0, 100)
    stops = np.append(bursts.opens[1:], capture.last + 1)
    phase = data_phase(bursts, data, rhythm)
    for number, row in enumerate(truth):
        serial = serial_of(int(row["bits"]))
        one = bursts.take(slice(number, number + 1))
        habit = Habit(clocks=int(one.count[0] // 2), phase=phase)
        reading = read_biss(one, data, serial, rhythm, habit, stops[number : number + 1])
        word = words(reading.bits, serial)
        assert reading.complete[0]
        assert word.crc_ok[0] == 1
        assert int(word.position[0]) == int(row["frame_value_unsigned"])


# --- a knob turned up and down again ---------------------------------------------------------------------------------


def test_a_knob_from_python() -> None:
    """A leads B going up: 510 counts, each 50 us after the one before, the last at 25.59 ms; then 509 down.

    Source: the note that came with the capture.
    """
    capture = open_capture(expect("quadrature_knob.vcd"), CaptureKeys(), rows_per_span=100)
    decoder = QuadratureDecoder("a", "b", None, None, float(capture.tick))
    parts = [decoder.feed(span) for span in capture.spans(["a", "b"])]
    counts = np.concatenate([part.counts for part in parts])
    seconds = np.concatenate([part.times for part in parts]) * float(capture.tick)
    assert counts.tolist() == [*range(1, 511), *range(509, 0, -1)]
    assert seconds[np.argmax(counts)] == pytest.approx(25.59e-3)
    assert np.diff(seconds) == pytest.approx(np.full(1018, 50e-6))
    assert not any(part.illegal.any() for part in parts)


def test_a_knob_through_check() -> None:
    """The same from the command's own function, with a sheet that says which lines A and B are: 1019 steps that
    leave one count, nothing illegal, and nothing to find fault with."""
    sheet = from_toml('[lines]\na = "A"\nb = "encoder.b"\n[incremental]\n')
    report = check(expect("quadrature_knob.vcd"), sheet).report
    incremental = report.incremental
    assert incremental is not None
    assert (incremental.edges, incremental.net_counts, incremental.illegal) == (1019, 1, 0)
    assert (report.verdict, report.findings, report.serial) == ("pass", [], None)
    assert report.capture.lines == {"a": "a", "b": "b"}
