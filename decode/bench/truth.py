"""What a simulated capture holds, to hold results against."""

from __future__ import annotations

from typing import Any

import msgspec


class FrameTruth(msgspec.Struct, frozen=True):
    """One whole frame, in the order captured.

    time_s: first clock edge. latch_s: latch edge. Both are the capture's samples. position, turns: as the encoder
    sent them, None where the sheet has no such field or no word came. angle_turns: what the encoder's sensor read
    (with offset), not rounded. counted_turns: the A/B count at the latch edge over the counts of a turn.
    raw: the word as it stood on the line, in hex, most significant bit first; None where the burst holds no whole
    word. kind: what is wrong with the frame.
    """

    time_s: float
    latch_s: float
    position: int | None
    turns: int | None
    angle_turns: float
    counted_turns: float | None
    raw: str | None
    kind: str | None


class FaultTruth(msgspec.Struct, frozen=True):
    """One fault as made. time_s: when. frame: the first frame that has it. frames: all of them. line: the column."""

    kind: str
    time_s: float
    frame: int | None
    frames: list[int]
    line: str | None
    detail: str


class Truth(msgspec.Struct, frozen=True, kw_only=True):
    """The truth beside a capture.

    counts_per_turn: of the encoder as built. net_counts: A/B counts over the capture. edges: A/B edges.
    index_pulses: wholly inside the capture. direction: of the count against the serial position. latency_s: serial
    position older than the count. serial_offset_turns: serial position minus shaft angle, before any fault.
    cut_frames: bursts that the capture's ends cut; they are not among the frames. missing: frames that never came.
    """

    interface: str | None
    start_s: float
    stop_s: float
    tick_s: float
    lines: dict[str, str]
    cut_frames: int
    missing: int
    faults: list[FaultTruth]
    counts_per_turn: int | None
    net_counts: int | None
    edges: int | None
    index_pulses: int | None
    direction: int | None
    latency_s: float
    serial_offset_turns: float
    scenario: dict[str, Any]
    frames: list[FrameTruth]
