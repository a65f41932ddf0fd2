"""Frames and angles as tables for people and programs: one row a frame, or one row an edge."""

from __future__ import annotations

import numpy as np
import pandas as pd

from decode.judgement.evidence import Evidence, positions_per_turn
from decode.serial.frames import FRAME_KINDS
from decode.serial.words import hexadecimal
from decode.spans import FloatArray, IntArray


def frames_table(evidence: Evidence) -> pd.DataFrame:
    """One row a frame: frame, time_s (first clock edge), latch_s, clocks, raw (hex), each field by name,
    position_turns, crc_ok (empty without a CRC), faulty, kind (empty for none)."""
    serial, sheet = evidence.serial, evidence.sheet.serial
    if serial is None or sheet is None:
        names = ("frame", "time_s", "latch_s", "clocks", "raw", "position_turns", "crc_ok", "faulty", "kind")
        return pd.DataFrame({name: [] for name in names})
    frames, tick = serial.frames, evidence.capture.tick_s
    crc = pd.array(frames.crc_ok == 1, dtype="boolean")
    crc[frames.crc_ok < 0] = pd.NA
    return pd.DataFrame(
        {
            "frame": np.arange(len(frames)),
            "time_s": frames.first_edge * tick,
            "latch_s": frames.latch * tick,
            "clocks": frames.clocks,
            "raw": hexadecimal(frames.raw, sheet.sent_bits),
            **frames.fields,
            "position_turns": frames.position / positions_per_turn(sheet),
            "crc_ok": crc,
            "faulty": frames.kind != 0,
            "kind": np.array(FRAME_KINDS)[frames.kind],
        }
    )


def angles_table(evidence: Evidence, edges: tuple[IntArray, IntArray] | None) -> pd.DataFrame:
    """One row a frame: time_s at the latch, serial_turns unwrapped, counted_turns at that instant, residual_deg,
    speed_rpm. Without a serial line one row an edge; `edges` are its ticks and the count after each."""
    tick, turn = evidence.capture.tick_s, evidence.counts_per_turn()
    if evidence.serial is None:
        times, counts = edges if edges is not None else (np.empty(0, np.int64), np.empty(0, np.int64))
        nothing = np.full(times.size, np.nan)
        counted = counts / turn if turn else nothing
        seconds = np.asarray(times * tick, np.float64)
        speed = np.gradient(counted, seconds) * 60 if times.size > 1 and (np.diff(times) > 0).all() else nothing
        return _angles(seconds, nothing, counted, nothing, speed)
    frames, agreement, joined = evidence.serial.frames, evidence.agreement, evidence.joined
    nothing = np.full(len(frames), np.nan)
    serial, counted, residual, speed = nothing, nothing, nothing, nothing
    if joined is not None and turn:
        counted, speed = joined.counted / turn, joined.speed / turn / tick * 60
    if agreement is not None and agreement.serial_turns is not None:
        serial = agreement.serial_turns
        counted = counted if agreement.counted_turns is None else agreement.counted_turns
        residual = residual if agreement.residual_deg is None else agreement.residual_deg
    elif evidence.sheet.serial is not None:
        serial = _unwrapped(evidence)
    return _angles(np.asarray(frames.latch * tick, np.float64), serial, counted, residual, speed)


def _unwrapped(evidence: Evidence) -> FloatArray:
    """(n,) serial turns, each step taken the short way round; NaN where the position cannot be believed."""
    assert evidence.serial is not None and evidence.sheet.serial is not None
    frames, per_turn = evidence.serial.frames, positions_per_turn(evidence.sheet.serial)
    turns = np.full(len(frames), np.nan)
    turns[frames.usable] = np.unwrap(frames.position[frames.usable] / per_turn, period=1.0)
    return turns


def _angles(
    seconds: FloatArray, serial: FloatArray, counted: FloatArray, residual: FloatArray, speed: FloatArray
) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "time_s": seconds,
            "serial_turns": serial,
            "counted_turns": counted,
            "residual_deg": residual,
            "speed_rpm": speed,
        }
    )
