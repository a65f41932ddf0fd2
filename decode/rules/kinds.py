"""The kinds of finding, as a table: the code, the messages and docs/findings.md all read it."""

from __future__ import annotations

from typing import Literal, NamedTuple

from decode.anomalies import Severity


class Kind(NamedTuple):
    """One kind of finding.

    name: as it stands in a report. room: which part of the capture it is about. severity: what it counts as unless
    an occurrence says otherwise. meaning: one sentence. looks_like: what it looks like in the capture. comes_from:
    its usual causes.
    """

    name: str
    room: Literal["capture", "lines", "serial", "incremental", "agreement"]
    severity: Severity
    meaning: str
    looks_like: str
    comes_from: str


_TABLE = (
    Kind(
        "time_reversal",
        "capture",
        "warning",
        "the time column goes backwards",
        "a row whose time is before the row above it",
        "two exports joined in the wrong order, or a counter in the analyser that wrapped",
    ),
    Kind(
        "time_gap",
        "capture",
        "warning",
        "a stretch of time is missing from the capture",
        "rows stop on every line at once and go on later",
        "trigger windows joined without their gap, an analyser that lost samples",
    ),
    Kind(
        "undersampled",
        "capture",
        "warning",
        "the capture is too coarse for what it is asked",
        "fewer than four samples per clock period or per A/B state",
        "the sampling rate is set too low for this clock or this speed",
    ),
    Kind(
        "line_stuck",
        "capture",
        "fault",
        "a line never moves although it should",
        "no edge on a line while its partners are busy",
        "a probe not connected, a broken wire, a dead driver, a wrong line named in the sheet",
    ),
    Kind(
        "glitch",
        "lines",
        "fault",
        "a pulse too short to be real",
        "out and back on one line within a small part of the local interval",
        "coupled noise, ringing, a threshold inside the signal's slope",
    ),
    Kind(
        "pair_mismatch",
        "lines",
        "fault",
        "both lines of a differential pair have the same level",
        "a line and its complement equal for longer than their skew",
        "one leg broken, not driven or not probed",
    ),
    Kind(
        "frame_missing",
        "serial",
        "fault",
        "a frame that was due did not come",
        "the clock stays idle where the frame rate asks for a burst",
        "the clock master skipped a cycle",
    ),
    Kind(
        "frame_short",
        "serial",
        "fault",
        "a burst with too few clocks",
        "the clock stops before the word is out, or pauses inside it",
        "a master set to another word length, an interrupted bit-banged clock, a lost clock edge",
    ),
    Kind(
        "frame_long",
        "serial",
        "fault",
        "a burst with too many clocks",
        "more clock edges than the word needs",
        "a master set to another word length, double clocking",
    ),
    Kind(
        "no_acknowledge",
        "serial",
        "fault",
        "the encoder did not acknowledge",
        "the data line stays high through the whole burst",
        "no supply, nobody connected, the time-out of the frame before still running",
    ),
    Kind(
        "no_start_bit",
        "serial",
        "fault",
        "the encoder acknowledged but never started to send",
        "the data line goes low and stays low to the end of the burst",
        "the encoder was busy for longer than the master waited",
    ),
    Kind(
        "crc_mismatch",
        "serial",
        "fault",
        "the CRC does not fit the word",
        "a frame of the right length whose check value is not the one computed",
        "flipped bits on the line, or wrong CRC settings where every frame has it",
    ),
    Kind(
        "parity_mismatch",
        "serial",
        "fault",
        "the parity bit does not fit the word",
        "an odd number of the covered bits is wrong",
        "flipped bits on the line, or the wrong kind of parity where about half the frames have it",
    ),
    Kind(
        "fixed_mismatch",
        "serial",
        "fault",
        "a fixed field or a repeated copy does not have the value it must",
        "a padding or separator bit of the wrong level, or two copies of one word that differ",
        "flipped bits, a word slipped by a bit, or wrong field boundaries where every frame has it",
    ),
    Kind(
        "error_flag",
        "serial",
        "fault",
        "the encoder reports an error",
        "the error bit has its active level",
        "the sensor lost its signal; or the polarity in the sheet is wrong where every frame has it",
    ),
    Kind(
        "warning_flag",
        "serial",
        "warning",
        "the encoder reports a warning",
        "the warning bit has its active level",
        "signal level, temperature or supply near a limit",
    ),
    Kind(
        "data_stuck",
        "serial",
        "fault",
        "the data line does not move during a burst",
        "no data edge between the first clock edge and the time-out",
        "broken data wire, no supply, a short; fail-safe receivers read high when open",
    ),
    Kind(
        "position_jump",
        "serial",
        "fault",
        "a position that does not fit its neighbours",
        "one or a few frames away from where the frames around them, and the count, say the shaft is",
        "an undetected bit error, disagreeing tracks in the sensor, turns and position out of step",
    ),
    Kind(
        "position_stale",
        "serial",
        "fault",
        "the position stands still while the shaft turns",
        "the same position again although the count moved on",
        "a word sent twice, a latch that was not triggered, the last good value repeated by firmware",
    ),
    Kind(
        "life_break",
        "serial",
        "fault",
        "the sign-of-life counter did not go on by one",
        "the counter repeats or skips from one frame to the next",
        "a frame repeated or lost on the way, firmware that hangs",
    ),
    Kind(
        "clock_glitch",
        "serial",
        "fault",
        "a clock pulse too short to be real",
        "two clock edges much closer than half a period",
        "ringing or reflections: missing or double termination, stubs, crosstalk",
    ),
    Kind(
        "setup_violation",
        "serial",
        "fault",
        "data changes too close to the sampling edge",
        "a data edge just before the instant at which the bit is read",
        "line delay, a clock too fast for the cable, a slow driver",
    ),
    Kind(
        "timeout_short",
        "serial",
        "fault",
        "the next frame began before the time-out had run out",
        "a burst starts while the data line is still held low after the frame before",
        "a pause between frames shorter than the encoder's monoflop or time-out",
    ),
    Kind(
        "illegal_transition",
        "incremental",
        "fault",
        "A and B changed together",
        "a step between states that differ in both lines",
        "a missed state: noise on both lines, too coarse sampling, over-speed",
    ),
    Kind(
        "turn_count_wrong",
        "incremental",
        "fault",
        "a turn with the wrong number of counts",
        "index to index is not the count of the sheet",
        "lost or extra edges in that turn; a wrong resolution where every turn has it",
    ),
    Kind(
        "index_missing",
        "incremental",
        "fault",
        "a turn without its index pulse",
        "the count passes the place of the index and no pulse comes",
        "a weak or dirty index track, a broken line",
    ),
    Kind(
        "index_extra",
        "incremental",
        "fault",
        "an index pulse where none belongs",
        "a pulse away from the place where the index comes in the other turns",
        "noise on the one line that has no redundancy, several index marks by design",
    ),
    Kind(
        "index_misplaced",
        "incremental",
        "fault",
        "the index pulse came at another angle",
        "a turn's only pulse, away from where it comes in the other turns",
        "a loose disc or read head, hysteresis, a damaged index track",
    ),
    Kind(
        "index_width",
        "incremental",
        "fault",
        "an index pulse of the wrong width",
        "the pulse is longer or shorter than the sheet or the other turns say",
        "gating other than stated, a dirty index track",
    ),
    Kind(
        "edge_too_close",
        "incremental",
        "fault",
        "two A/B edges closer than they may be",
        "one state far shorter than its neighbours, or below the stated edge spacing",
        "a displaced line of the code, uneven interpolation, an interpolator at its limit",
    ),
    Kind(
        "offset_step",
        "agreement",
        "fault",
        "serial position and count stepped apart and stayed apart",
        "the difference between both moves to another level",
        "counts lost or invented on A/B, or a serial position that slipped",
    ),
    Kind(
        "direction_opposed",
        "agreement",
        "fault",
        "serial position and count run in opposite senses",
        "the difference grows with twice the angle",
        "A and B swapped, one pair inverted, a direction setting",
    ),
    Kind(
        "scale_wrong",
        "agreement",
        "fault",
        "a turn of the serial position is not a turn of the count",
        "the difference grows in proportion to the angle",
        "another resolution than the sheet says, pulses and counts mixed up by 2 or 4",
    ),
    Kind(
        "latency_high",
        "agreement",
        "fault",
        "the serial position is older than it may be",
        "the difference follows the speed and is gone at standstill",
        "filtering in the encoder, a reply that belongs to the request before",
    ),
    Kind(
        "residual_high",
        "agreement",
        "fault",
        "serial position and count differ by more than they may",
        "what is left after offset, scale and latency is above its limit",
        "eccentric mounting, interpolation error, noise of the sensor",
    ),
)

KINDS: dict[str, Kind] = {kind.name: kind for kind in _TABLE}
