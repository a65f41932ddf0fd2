"""The lines of a frame against timing worked out by hand. One tick is 10 ns, one clock 1 us unless said."""

from pathlib import Path

import numpy as np
import pytest

from decode.bench.board import Scenario, Simulation, simulate
from decode.bench.motion import standstill
from decode.errors import InputError
from decode.sheet import Field, Serial, Sheet
from decode.spans import Edges

REAL = Path(__file__).parents[3] / "shared" / "captures" / "biss0.prn"

BISS = (
    Field(name="position", bits=8),
    Field(name="error", bits=1),
    Field(name="warning", bits=1),
    Field(name="crc", bits=6, polynomial=0x43, inverted=True),
)


def one_frame(serial: Serial, position: int, bits: int, **scenario: object) -> Simulation:
    """One frame of a shaft at rest at `position`, its first clock edge at 50 us (tick 5000)."""
    rest = Scenario(
        motion=standstill(),
        start_angle_turns=(position + 0.5) / 2**bits,
        duration_s=200e-6,
        frame_rate_hz=5e3,
        clock_hz=1e6,
        **scenario,  # type: ignore[arg-type]
    )
    lines: dict[str, str | int] = {"clock": "C", "data": "D"}
    if serial.interface == "spi":
        lines["select"] = "S"
    return simulate(Sheet(lines=lines, serial=serial), rest)


def levels(edges: Edges, ticks: list[int]) -> str:
    return "".join(map(str, edges.level_at(np.array(ticks)).tolist()))


def test_biss_frame() -> None:
    """8 bits of position 178, both flags 1: 5 + 16 = 21 clocks.

        tick   5000   5050   5150      5250   5350  5450 ...
        clock  ‾‾|____|‾‾|___|‾‾|__ ..
        data   ‾‾‾‾‾‾‾‾‾‾‾‾‾‾|_________|‾‾‾‾‾‾|_____|‾ ...
               start  latch  ack+110ns start  CDS   bit 7

    Rising edge r is at 5050 + 100 r; data follows 110 ns = 11 ticks later. Acknowledge: r = 1, 5161. Start: r = 2,
    5261. The last rising edge, r = 20, is at 7050; the time-out ends 20 us later, at 9050.
    Word: 10110010 1 1 000101. Source: open motor-controller firmware's unit test of this frame (Apache-2.0, 2025).
    """
    simulation = one_frame(Serial(interface="biss-c", fields=BISS), 178, 8)
    clock, data = simulation.lines["C"], simulation.lines["D"]
    assert (clock.initial, data.initial) == (1, 1)
    assert clock.times.tolist() == [5000 + 50 * edge for edge in range(42)]
    assert data.times[:4].tolist() == [5161, 5261, 5361, 5461]
    sampled = levels(data, [5050 + 100 * r + 50 for r in range(21)])
    assert sampled == "1" + "0" + "1" + "0" + "10110010" + "11" + "000101" + "0"
    assert (int(data.times[-1]), data.final) == (9050, 1)
    frame = simulation.truth.frames[0]
    assert (frame.time_s, frame.latch_s, frame.position) == (50e-6, 50.5e-6, 178)
    assert frame.raw == f"{0b1011001011000101:04x}"


def test_biss_busy_clocks_prolong_the_acknowledge() -> None:
    """Three busy clocks: start at r = 5, 24 clocks in all. Source: the frame's definition."""
    simulation = one_frame(Serial(interface="biss-c", fields=BISS), 178, 8, busy_clocks=3)
    assert simulation.lines["C"].times.size == 48
    assert simulation.lines["D"].times[:2].tolist() == [5161, 5050 + 500 + 11]


def test_biss_reply_over_a_long_cable() -> None:
    """Cable of 1.5 us one way: data 3 us later, the clocks stay. Time-out seen at 7050 + 2000 + 300.

    Source: two cable delays between an edge and its answer at the master's end.
    """
    near = one_frame(Serial(interface="biss-c", fields=BISS), 178, 8)
    far = one_frame(Serial(interface="biss-c", fields=BISS), 178, 8, line_delay_s=1.5e-6)
    assert far.lines["C"].times.tolist() == near.lines["C"].times.tolist()
    assert far.lines["D"].times.tolist() == (near.lines["D"].times + 300).tolist()


def test_biss_control_bits() -> None:
    """CDS 1 keeps data high for two clocks after the acknowledge. With CDM 1 the clock falls once more half a clock
    after its last rising edge (7050) and rises half a clock after data is back (9050). Source: definition of CDM."""
    simulation = one_frame(Serial(interface="biss-c", fields=BISS), 178, 8, cdm="1", cds="1")
    assert simulation.lines["C"].times[-3:].tolist() == [7050, 7100, 9100]
    assert levels(simulation.lines["D"], [5300, 5400, 5500]) == "111"


def test_ssi_frame() -> None:
    """Turns 5, steps 100 in Gray: latch at the first falling edge, bit k at rising edge k, low at rising edge 26.

    Rising edge r (from 0) at 5050 + 100 r; sampled at the falling edge after it. The last falling edge, the 26th, is at
    7500; the monoflop lasts 20 us: data high again at 9500.
    Word: source in the test of words.
    """
    serial = Serial(
        interface="ssi", coding="gray", fields=(Field(name="turns", bits=12), Field(name="position", bits=13))
    )
    rest = Scenario(
        motion=standstill(), start_angle_turns=5 + 100.5 / 8192, duration_s=200e-6, frame_rate_hz=5e3, clock_hz=1e6
    )
    simulation = simulate(Sheet(serial=serial), rest)
    clock, data = simulation.lines["clock"], simulation.lines["data"]
    assert clock.times.tolist() == [5000 + 50 * edge for edge in range(52)]
    assert levels(data, [5100 + 100 * r for r in range(26)]) == "0000000001111000001010110" + "0"
    assert (int(data.times[-1]), data.final) == (9500, 1)
    assert levels(data, [5000, 5060]) == "11"
    assert (simulation.truth.frames[0].turns, simulation.truth.frames[0].position) == (5, 100)


def test_ssi_copies() -> None:
    """Two copies of 4 bits with two separators: 10 bits, 11 clocks. Source: definition of ring transmission."""
    serial = Serial(interface="ssi", fields=(Field(name="position", bits=4),), copies=2, separator_bits=2)
    simulation = one_frame(serial, 0b1101, 4)
    assert simulation.lines["C"].times.size == 22
    assert levels(simulation.lines["D"], [5100 + 100 * r for r in range(11)]) == "1101" + "00" + "1101" + "0"


@pytest.mark.parametrize(
    ("mode", "resting", "sampling"),
    # Source: microcontroller user manuals' SPI mode tables: modes 0 and 3 sample rising, 1 and 2 falling edges.
    [(0, 0, 1), (1, 0, 0), (2, 1, 0), (3, 1, 1)],
)
def test_spi_modes(mode: int, resting: int, sampling: int) -> None:
    """Eight bits 0xA6: read at the sampling edges, changed at the others. Select 1 us around the clocks."""
    simulation = one_frame(Serial(interface="spi", mode=mode, fields=(Field(name="position", bits=8),)), 0xA6, 8)
    clock, data, select = (simulation.lines[name] for name in "CDS")
    assert clock.initial == resting
    assert clock.times.tolist() == [5000 + 50 * edge for edge in range(16)]
    assert levels(data, clock.times[clock.levels == sampling].tolist()) == f"{0xA6:08b}"
    assert select.initial == 1
    assert select.times.tolist() == [4900, 5750 + 100]
    # In modes 0 and 2 the first bit is there 110 ns after select, else after the first clock edge.
    assert data.times[0] == (4911 if mode in (0, 2) else 5011)
    assert simulation.truth.frames[0].latch_s == 49e-6


def test_frames_that_run_into_each_other_are_refused() -> None:
    serial = Serial(interface="biss-c", fields=BISS)
    with pytest.raises(InputError, match="run into each other"):
        simulate(Sheet(serial=serial), Scenario(frame_rate_hz=30e3, clock_hz=1e6))


@pytest.mark.skipif(not REAL.exists(), reason="the recorded BiSS C frame is not beside this checkout")
def test_like_the_recorded_frame() -> None:
    """32 bits of position 458 with both flags 1, sampled at 125 MHz: the same number of clocks, the same level at
    every clock edge, and each data edge within two samples. Source: PandABlocks-FPGA, commit 916fb9a6 (Apache-2.0)."""
    samples = np.loadtxt(REAL, dtype=np.int8)
    moments = np.arange(samples.shape[0])
    clock, data = (Edges.from_samples(moments, samples[:, column].copy()) for column in (0, 1))
    fields = (Field(name="position", bits=32), *BISS[1:])
    scenario = Scenario(
        motion=standstill(),
        start_angle_turns=458.5 / 2**32,
        duration_s=200e-6,
        frame_rate_hz=5e3,
        clock_hz=1e6,
        sample_rate_hz=125e6,
        data_delay_s=108e-9,
        timeout_s=204 / 125e6,
    )
    made = simulate(Sheet(serial=Serial(interface="biss-c", fields=fields)), scenario).lines
    assert made["clock"].times.size == clock.times.size == 90
    assert made["clock"].initial == clock.initial
    assert made["data"].level_at(made["clock"].times).tolist() == data.level_at(clock.times).tolist()
    shift = made["clock"].times[0] - clock.times[0]
    assert made["data"].times.size == data.times.size
    assert np.max(np.abs(made["data"].times - data.times - shift)) <= 2
