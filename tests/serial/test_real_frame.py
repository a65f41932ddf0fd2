"""One BiSS C frame recorded inside an FPGA, sample by sample (public firmware repository, its own description)."""

from pathlib import Path

import numpy as np
import pytest

from decode.serial.frames import Frames
from decode.serial.receiver import Receiver
from decode.sheet import from_toml
from decode.spans import Edges, Span, cut

CAPTURE = Path(__file__).parents[2].parent / "shared" / "captures" / "biss0.prn"
NANOSECONDS = 8  # 125 MHz

SHEET = from_toml(
    """
    [serial]
    interface = "biss-c"
    fields = [
      { name = "position", bits = 32 },
      { name = "error", bits = 1, active = "low" },
      { name = "warning", bits = 1, active = "low" },
      { name = "crc", bits = 6, polynomial = 0x43, inverted = true },
    ]
    """
)


@pytest.fixture(scope="module")
def span() -> Span:
    if not CAPTURE.exists():
        pytest.skip("the shared captures are not beside this checkout")
    samples = np.loadtxt(CAPTURE, dtype=np.int8)
    ticks = np.arange(len(samples), dtype=np.int64)
    clock, data = (Edges.from_samples(ticks, samples[:, column]) for column in (0, 1))
    return Span(0, len(samples), {"clock": clock, "data": data})


def received(spans: list[Span]) -> tuple[Receiver, Frames]:
    assert SHEET.serial is not None
    receiver = Receiver(SHEET.serial, "clock", "data")
    parts = [receiver.feed(one) for one in spans]
    return receiver, Frames.concatenate([*parts, receiver.finish()])


def test_the_frame_is_read_as_its_description_says(span: Span) -> None:
    """Source: the recording's own description: 45 rising clock edges, acknowledge 1 clock, control bit 0, 458, both
    flags 1, CRC 0x2E as sent and good."""
    _, frames = received([span])
    assert len(frames) == 1
    assert frames.clocks.tolist() == [45]
    assert {name: values.tolist() for name, values in frames.fields.items()} == {
        "position": [458],
        "error": [1],
        "warning": [1],
        "crc": [0x2E],
        "cds": [0],
        "cdm": [0],
        "acknowledge_clocks": [1],
    }
    assert frames.crc_ok.tolist() == [1]
    assert frames.kind.tolist() == [0]


def test_its_timing_is_what_its_description_says(span: Span) -> None:
    """Source: the recording's own description: half periods of 62 or 63 samples, data 13 or 14 samples after the
    rising clock edge, back high 204 samples after the last clock edge."""
    receiver, _ = received([span])
    timings = {name: set((timing.values).tolist()) for name, timing in receiver.timings.items()}
    assert timings["clock_period"] == {125}
    assert timings["clock_high_s"] | timings["clock_low_s"] <= {62, 63}
    assert timings["data_delay_s"] <= {13, 14}
    assert timings["timeout_s"] == {204}
    assert timings["acknowledge_time_s"] == {125}


@pytest.mark.parametrize("every", [50, 997, 5000])
def test_cut_anywhere_the_frame_is_the_same(span: Span, every: int) -> None:
    whole_receiver, whole = received([span])
    receiver, frames = received(list(cut(span, range(0, span.stop, every))))
    assert frames.raw.tolist() == whole.raw.tolist()
    assert frames.first_edge.tolist() == whole.first_edge.tolist()
    for name, timing in receiver.timings.items():
        assert timing.values.tolist() == whole_receiver.timings[name].values.tolist()
        assert timing.counts.tolist() == whole_receiver.timings[name].counts.tolist()


def test_a_flipped_bit_fails_the_check(span: Span) -> None:
    """A pulse over one sampling edge turns one bit, which no CRC lets pass (exact arithmetic)."""
    times = span.lines["data"].times
    at = int(times[3]) + 250  # within a run of zeros
    spoilt = Edges.from_toggles(1, np.sort(np.concatenate([times, [at, at + 125]])))
    _, frames = received([Span(span.start, span.stop, {"clock": span.lines["clock"], "data": spoilt})])
    assert frames.crc_ok.tolist() == [0]
    assert frames.of_kind("crc_mismatch").tolist() == [0]
