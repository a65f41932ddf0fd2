"""What is to be simulated, as values: the motion, the transfer's timing, the analyser, and the faults."""

from __future__ import annotations

import msgspec

from decode.bench.motion import Constant, Motion


class Fault(msgspec.Struct, frozen=True):
    """One fault. `decode.bench.faults.FAULTS` says what each kind does and which of the parameters it takes.

    kind: a name of `decode.rules.kinds`. time_s: when, on the capture's own time axis: the first frame, edge or
    index from then on has it. None: from the start, or, for what concerns the whole capture, throughout.
    role: the line. frames: how many in a row. clocks: how many too few or too many. bits: which of the word, from 0
    for the first one sent. counts: A/B counts. level: 0 or 1. width_s, duration_s, margin_s, delay_s: times.
    seen: whether the encoder takes part in it. amplitude_deg: mechanical. scale, share, samples: ratios.
    """

    kind: str
    time_s: float | None = None
    role: str | None = None
    frames: int | None = None
    clocks: int | None = None
    bits: tuple[int, ...] | None = None
    counts: int | None = None
    level: int | None = None
    width_s: float | None = None
    duration_s: float | None = None
    margin_s: float | None = None
    delay_s: float | None = None
    seen: bool | None = None
    amplitude_deg: float | None = None
    scale: float | None = None
    share: float | None = None
    samples: float | None = None


class Scenario(msgspec.Struct, frozen=True, kw_only=True):
    """What happens during a simulated capture.

    The serial position sent at a latch edge is that of `latency_s` before this edge, as both are seen in the capture.
    """

    motion: Motion = Constant(600.0)
    duration_s: float = 0.1
    start_time_s: float = 0.0
    """Time of the capture's first sample on its own axis; may be negative."""
    start_angle_turns: float = 0.1
    sample_rate_hz: float = 100e6
    """The analyser's grid: every edge is shown at the sample it falls into."""
    seed: int = 0

    frame_rate_hz: float | None = None
    """None: the sheet's, else 16 kHz (biss-c) or 5 kHz."""
    clock_hz: float | None = None
    """None: 2 MHz (biss-c) or 1 MHz."""
    data_delay_s: float = 110e-9
    """From a driving clock edge to the change of data, at the encoder."""
    line_delay_s: float = 0.0
    """The cable, one way. Clock and data are probed at the master's end."""
    timeout_s: float = 20e-6
    """ssi: monoflop time from the last falling edge; biss-c: time-out from the last rising edge."""
    busy_clocks: int = 0
    """biss-c: clocks the acknowledge lasts longer than one."""
    cdm: str = "0"
    """biss-c: the master's control bit frame by frame, repeated."""
    cds: str = "0"
    """biss-c: the encoder's control data bit frame by frame, repeated."""
    select_lead_s: float = 1e-6
    """spi: from select to the first clock edge."""
    select_lag_s: float = 1e-6
    """spi: from the last clock edge to the end of select."""

    latency_s: float = 0.0
    """How much older than the count the serial position is at the latch edge."""
    serial_offset_turns: float = 0.0
    """Serial position minus shaft angle."""
    edge_jitter_s: float = 0.0
    """Rms displacement of the A/B edges, Gaussian; no edge overtakes another."""
    eccentricity_deg: float = 0.0
    """Once-per-turn reading error that serial position and A/B/Z share, up to 10 degrees."""

    complements: tuple[str, ...] = ()
    """Roles that also get a complement where the sheet names none; its column is the line's with _n."""
    cut_start: bool = False
    """The capture begins within a frame."""
    cut_end: bool = False
    """The capture ends within a frame."""
    faults: tuple[Fault, ...] = ()
