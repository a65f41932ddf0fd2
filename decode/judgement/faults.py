"""What the machines cannot see alone: lines that are stuck, sampling too coarse, disagreement; then the folding."""

from __future__ import annotations

import numpy as np

from decode.anomalies import Anomalies
from decode.judgement.evidence import Evidence, modulus
from decode.judgement.folding import (
    OF_BITS,
    OF_COUNT,
    OF_EDGES,
    OF_SERIAL,
    OF_SERIAL_TIMING,
    Docket,
    any_within,
    from_on,
    near,
    of_line,
    ticks_of,
    within,
)
from decode.judgement.records import Measurement
from decode.serial.causes import frame_anomalies, missing_anomalies
from decode.spans import BoolArray, IntArray

SAMPLES_NEEDED = 4
"""Samples in a clock period and in an A/B state below which nothing is decided (common practice, no source)."""

READABLE = 4.5
"""Samples in a clock period as it looks, below which clock edges can be missed and no frame can be judged: fewer than
two alias, and then look like two to four (sampling theorem)."""

AGREES_WITHIN = 1.5
"""Counts within which the serial position bears the count of a turn out (common practice, no source)."""

STUCK_FRAMES = 10
"""A data line that is stuck for the last so many frames counts as stuck for good."""


def docket(evidence: Evidence, measurements: list[Measurement]) -> Docket:
    """Every anomaly of the capture with consequences folded into their causes."""
    found = Docket([*evidence.capture.anomalies, *evidence.pair_anomalies])
    if evidence.serial is not None and evidence.sheet.serial is not None:
        serial = evidence.serial
        for one in serial.anomalies:
            found.add(one)
        for one in missing_anomalies(serial.cadence, evidence.lines):
            found.add(one)
        word = modulus(evidence.sheet.serial)
        for one in frame_anomalies(serial.frames, evidence.sheet.serial, serial.habit, evidence.lines, word):
            found.add(one)
    if evidence.incremental is not None:
        for one in evidence.incremental.anomalies:
            found.add(one)
        _index_state(evidence, found)
    _agreement(evidence, measurements, found)
    _fold(evidence, found)
    return found


def _fold(evidence: Evidence, found: Docket) -> None:
    coarse = too_coarse(evidence)
    stuck = _stuck(evidence, found)
    for one in stuck:
        found.add(one)
    for role in coarse:
        _add_coarse(evidence, found, role)
    _fold_stuck(evidence, found, stuck)
    _fold_pairs(evidence, found)
    illegal = ticks_of(found.of("illegal_transition"))
    if illegal.size:
        _fold_illegal(evidence, found, illegal)
    _fold_spikes(evidence, found)
    _many_index(evidence, found)
    _move_index(evidence, found)
    _fold_turns(found)
    if found.has("illegal_transition", "turn_count_wrong") and _turns_are_right(evidence):
        found.withdraw(("scale_wrong", "residual_high"))
    if found.has("direction_opposed", "scale_wrong"):
        found.withdraw(("residual_high", "latency_high"))
    if found.has("direction_opposed"):
        found.withdraw(("index_misplaced",), lambda one: np.full(len(one), "state_seen" in one.evidence))


# ---- the capture --------------------------------------------------------------------------------------------------


def too_coarse(evidence: Evidence) -> list[str]:
    """The roles ("clock", "a") whose edges come too fast for the sampling."""
    step, coarse = evidence.capture.grid, []
    if evidence.serial is not None:
        periods, rhythm = evidence.serial.timings["clock_period"], evidence.serial.rhythm
        phases = 0.0 if rhythm is None else min(rhythm.high, rhythm.low)
        slow = periods.n > 0 and periods.percentile(50) < SAMPLES_NEEDED * step
        if slow or (rhythm is not None and phases <= SAMPLES_NEEDED / 2 * step):
            coarse.append("clock")
    result = evidence.incremental
    if result is not None and result.edges:
        spacing = result.distributions["edge_spacing_s"]
        mostly_illegal = result.illegal > result.edges / 20
        shortest = spacing.percentile(1) if spacing.n >= SAMPLES_NEEDED else None
        if mostly_illegal or (shortest is not None and shortest < SAMPLES_NEEDED * step):
            fastest = evidence.capture.last - evidence.capture.first
            if shortest is not None or fastest / result.edges < SAMPLES_NEEDED * SAMPLES_NEEDED * step:
                coarse.append("a")
    return coarse


def _add_coarse(evidence: Evidence, found: Docket, role: str) -> None:
    if role == "clock":
        assert evidence.serial is not None
        period = (evidence.serial.rhythm.period if evidence.serial.rhythm else 0.0) / evidence.capture.grid
        withdrawn = found.withdraw(OF_SERIAL_TIMING)
        withdrawn += found.withdraw(("glitch",), of_line(evidence.lines["data"]))
        if period < READABLE:
            withdrawn += found.withdraw(OF_SERIAL)
        samples = {"samples_per_period": [round(period, 2)]}
        first = evidence.serial.frames.first_edge[:1]
    else:
        withdrawn = found.withdraw((*OF_EDGES, "offset_step"))
        samples = {}
        first = np.array([evidence.capture.first], np.int64)
    time = first if first.size else np.array([evidence.capture.first], np.int64)
    found.add(
        Anomalies(
            "undersampled",
            time,
            line=evidence.lines[role],
            evidence={"needed_samples": [SAMPLES_NEEDED], "findings_withdrawn": [withdrawn], **samples},
        )
    )


# ---- stuck lines --------------------------------------------------------------------------------------------------


def _stuck(evidence: Evidence, found: Docket) -> list[Anomalies]:
    stuck = [*_stuck_serial(evidence), *_stuck_channels(evidence)]
    index = evidence.lines.get("index")
    turn = evidence.counts_per_turn()
    result = evidence.incremental
    if index is not None and turn is not None and result is not None and not any(stuck):
        activity = evidence.activity[index]
        travelled = abs(result.net_counts) / turn
        if activity.edges == 0 and travelled >= 1.5:
            stuck.append(_stuck_at(index, evidence.capture.first, activity.level_at_start))
    return stuck


def _stuck_at(line: str, tick: int, level: int) -> Anomalies:
    return Anomalies("line_stuck", np.array([tick], np.int64), line=line, evidence={"level": [level]})


def _stuck_serial(evidence: Evidence) -> list[Anomalies]:
    if evidence.serial is None:
        return []
    lines, frames = evidence.lines, evidence.serial.frames
    clock, data = evidence.activity[lines["clock"]], evidence.activity[lines["data"]]
    start = evidence.capture.first
    if clock.edges == 0:
        return [_stuck_at(lines["clock"], start, clock.level_at_start)]
    select = lines.get("select")
    if select is not None and evidence.activity[select].edges == 0:
        return [_stuck_at(select, start, evidence.activity[select].level_at_start)]
    if data.edges == 0:
        return [_stuck_at(lines["data"], start, data.level_at_start)]
    if any(one.kind == "time_reversal" for one in evidence.capture.anomalies):
        return []  # the last edge of a line is not its latest
    period = evidence.serial.cadence.period
    assert clock.last is not None
    if (
        period is not None
        and evidence.capture.last - clock.last > STUCK_FRAMES * period
        and len(frames) >= STUCK_FRAMES
    ):
        return [_stuck_at(lines["clock"], clock.last, evidence.serial.rhythm.rest if evidence.serial.rhythm else 1)]
    last = frames.is_any("data_stuck", "no_acknowledge")
    run = int(np.argmin(last[::-1])) if not last.all() else len(frames)
    if run >= STUCK_FRAMES and data.last is not None and data.last <= frames.last_edge[-run]:
        return [_stuck_at(lines["data"], data.last, data.level_at_start ^ (data.edges & 1))]
    return []


def _stuck_channels(evidence: Evidence) -> list[Anomalies]:
    stuck = []
    for role, since in evidence.silent.items():
        line = evidence.activity[evidence.lines[role]]
        stuck.append(_stuck_at(evidence.lines[role], since, line.level_at_start ^ (line.edges & 1)))
    return stuck


def _fold_stuck(evidence: Evidence, found: Docket, stuck: list[Anomalies]) -> None:
    roles = {line: role for role, line in evidence.lines.items()}
    for one in stuck:
        role, since = roles[one.line or ""], int(one.times[0])
        if role in ("a", "b"):
            found.withdraw(OF_COUNT, from_on(since))
            found.withdraw(("offset_step", "position_stale"), from_on(since))
            found.withdraw(("residual_high", "latency_high", "scale_wrong", "direction_opposed"))
        elif role == "index":
            found.withdraw(("index_missing",))
        elif role == "data":
            found.withdraw(OF_BITS, from_on(_first_frame_from(evidence, since)))
        else:
            found.withdraw(OF_SERIAL, from_on(since))
        found.withdraw(("pair_mismatch",), of_line(one.line))


def _first_frame_from(evidence: Evidence, tick: int) -> int:
    """First clock edge of the frame in which `tick` lies."""
    assert evidence.serial is not None
    edges = evidence.serial.frames.first_edge
    at = int(np.searchsorted(edges, tick, side="right")) - 1
    return tick if at < 0 else int(edges[at])


def _fold_pairs(evidence: Evidence, found: Docket) -> None:
    """What is read from a line while its pair is broken follows from that."""
    roles = {line: role for role, line in evidence.lines.items()}
    for pair in found.of("pair_mismatch"):
        role = roles[pair.line or ""]
        kinds = OF_SERIAL if role in ("clock", "data") else (*OF_COUNT, "offset_step")
        for start, length in zip(pair.times, pair.evidence["duration_ticks"], strict=True):
            begin = _first_frame_from(evidence, int(start)) if role in ("clock", "data") else int(start)
            stop = int(start) + int(length)
            found.withdraw(kinds, within(begin, stop))


# ---- counts -------------------------------------------------------------------------------------------------------


def _fold_illegal(evidence: Evidence, found: Docket, illegal: IntArray) -> None:
    serial = evidence.serial
    frame = int(serial.cadence.period or 0) if serial is not None else 0
    cycle = int(evidence.incremental.mean_cycle_ticks or 0) if evidence.incremental is not None else 0
    found.withdraw(("offset_step",), near(illegal, 8 * frame + cycle))
    found.withdraw(("edge_too_close", "glitch"), near(illegal, cycle))

    def miscounted(one: Anomalies) -> BoolArray:
        return any_within(
            illegal, *(np.asarray(one.evidence[name], np.int64) for name in ("start_ticks", "stop_ticks"))
        )

    found.withdraw(("turn_count_wrong",), miscounted)


def _move_index(evidence: Evidence, found: Docket) -> None:
    """Where the serial position bears the count out, a turn that seems miscounted is an index that moved.

    The serial position alone can tell these apart when the index moves for several turns running.
    """
    agreement, serial, result = evidence.agreement, evidence.serial, evidence.incremental
    if agreement is None or agreement.serial_turns is None or agreement.scale_wrong or serial is None:
        return
    assert result is not None
    turn = evidence.counts_per_turn()
    known = np.isfinite(agreement.serial_turns)
    if not known.any() or result.index is None or turn is None:
        return
    latches, serial_turns = serial.frames.latch[known].astype(np.float64), agreement.serial_turns[known]

    def borne_out(one: Anomalies) -> BoolArray:
        start, stop = (np.asarray(one.evidence[name], np.int64) for name in ("start_ticks", "stop_ticks"))
        travelled = np.abs(np.interp(stop, latches, serial_turns) - np.interp(start, latches, serial_turns)) * turn
        inside = (start >= latches[0]) & (stop <= latches[-1])
        return np.asarray(inside & (np.abs(travelled - np.asarray(one.evidence["counts"])) < AGREES_WITHIN), np.bool_)

    rises = _displaced(evidence, found)
    if rises.size and found.withdraw(("turn_count_wrong",), borne_out):
        causes = ["the count agrees with the serial position over these turns, so the index moved"] * rises.size
        found.add(Anomalies("index_misplaced", rises, line=evidence.lines.get("index"), causes=causes))


def _displaced(evidence: Evidence, found: Docket) -> IntArray:
    """Ticks of the index pulses that lie more than a count and a half from where most of them lie, by the serial
    position, and are not told yet."""
    agreement, serial, result = evidence.agreement, evidence.serial, evidence.incremental
    turn = evidence.counts_per_turn()
    assert agreement is not None and agreement.serial_turns is not None and serial is not None and turn is not None
    assert result is not None and result.index is not None
    known = np.isfinite(agreement.serial_turns)
    table = result.index
    right = np.array([role == "index" for role in table.role], np.bool_) & ~table.turned
    middle = (table.rise_ticks + table.fall_ticks)[right] / 2
    if middle.size == 0:
        return np.empty(0, np.int64)
    turns = np.interp(middle, serial.frames.latch[known].astype(np.float64), agreement.serial_turns[known])
    apart = (turns[:, None] - turns[None, :] + 0.5) % 1.0 - 0.5
    usual = int(np.argmin(np.median(np.abs(apart), axis=0)))
    off = np.abs(apart[:, usual]) > 1.5 / turn
    rises = table.rise_ticks[right][off]
    return np.setdiff1d(rises, ticks_of([*found.of("index_misplaced"), *found.of("index_extra")]))


def _turns_are_right(evidence: Evidence) -> bool:
    """Whether most turns, index to index, have the counts of the sheet."""
    assert evidence.incremental is not None
    told = evidence.incremental.distributions["counts_per_turn"]
    return told.n > 0 and evidence.sheet.incremental is not None and told.percentile(50) == evidence.counts_per_turn()


def _fold_spikes(evidence: Evidence, found: Docket) -> None:
    """A spike on the data line within a faulty frame is part of what spoilt it."""
    serial, data = evidence.serial, evidence.lines.get("data")
    if serial is None or len(serial.frames) == 0:
        return

    def spoilt(one: Anomalies) -> BoolArray:
        frame = np.maximum(np.searchsorted(serial.frames.first_edge, one.times, side="right") - 1, 0)
        beside = np.minimum(frame + 1, len(serial.frames) - 1)
        faulty = serial.frames.kind != 0
        return np.asarray((faulty[frame] | faulty[beside]) & (one.line == data), np.bool_)

    found.withdraw(("glitch",), spoilt)


def _many_index(evidence: Evidence, found: Docket) -> None:
    """Several index pulses at equal distances in each turn are one finding: by design, or one a pole pair."""
    result, turn = evidence.incremental, evidence.counts_per_turn()
    if result is None or turn is None or evidence.lines.get("index") is None:
        return
    told = result.distributions["counts_per_turn"]
    agreement = evidence.agreement
    borne_out = agreement is not None and agreement.scale_error is not None and not agreement.scale_wrong
    if told.n < 2 or not borne_out or not found.has("turn_count_wrong"):
        return
    between = told.percentile(50)
    number = round(turn / between)
    if number >= 2 and abs(turn / number - between) <= 1:
        time = ticks_of(found.of("turn_count_wrong"))[:1]
        found.withdraw(("turn_count_wrong", "index_misplaced", "index_extra", "index_missing"))
        cause = f"{number} index pulses in a turn, evenly spaced: by design, or one for each pole pair"
        found.add(
            Anomalies(
                "index_extra",
                time,
                line=evidence.lines["index"],
                causes=[cause],
                evidence={"pulses_per_turn": [number], "counts_between": [between]},
            )
        )


def _fold_turns(found: Docket) -> None:
    """The index shows that the count, not the serial position, went wrong in a turn."""
    for turn in found.of("turn_count_wrong"):
        for start, stop in zip(turn.evidence["start_ticks"], turn.evidence["stop_ticks"], strict=True):
            slack = (int(stop) - int(start)) // 8
            found.withdraw(("offset_step",), within(int(start) - slack, int(stop) + slack))
    if found.has("turn_count_wrong"):
        found.withdraw(("scale_wrong",))


def _index_state(evidence: Evidence, found: Docket) -> None:
    """One finding where the index is high in other A/B states than the sheet says."""
    result = evidence.incremental
    assert result is not None
    if result.index_state_fits is False and result.index is not None and result.index.rise_ticks.size:
        cause = f"the index is high at {result.index_state_seen}, the sheet says {result.index_state_expected}"
        found.add(
            Anomalies(
                "index_misplaced",
                result.index.rise_ticks[:1],
                line=evidence.lines.get("index"),
                causes=[cause],
                evidence={"state_seen": [result.index_state_seen], "state_expected": [result.index_state_expected]},
            )
        )


# ---- agreement ----------------------------------------------------------------------------------------------------


def _agreement(evidence: Evidence, measurements: list[Measurement], found: Docket) -> None:
    agreement, serial = evidence.agreement, evidence.serial
    if agreement is None or serial is None or agreement.direction is None:
        return
    start = serial.frames.first_edge[:1]
    if len(agreement.steps):
        found.add(
            Anomalies(
                "offset_step",
                agreement.steps.time,
                agreement.steps.after,
                evidence={"counts": np.round(agreement.steps.counts, 3), "uncertainty": agreement.steps.uncertainty},
            )
        )
    if agreement.direction_opposed:
        expected = evidence.sheet.incremental.direction if evidence.sheet.incremental else 1
        found.add(
            Anomalies("direction_opposed", start, evidence={"direction": [agreement.direction], "sheet": [expected]})
        )
    if agreement.scale_wrong:
        found.add(
            Anomalies(
                "scale_wrong",
                start,
                evidence={"counts_per_serial_turn": [agreement.counts_per_turn], "sheet": [evidence.counts_per_turn()]},
            )
        )
    failed = {one.name: one for one in measurements if one.verdict == "fail"}
    if "latency_s" in failed:
        found.add(Anomalies("latency_high", start, evidence={"latency_s": [agreement.latency_s]}))
    if "residual_deg" in failed and agreement.residual_deg is not None:
        used = np.abs(np.nan_to_num(agreement.residual_deg))
        used[agreement.outliers] = 0
        peak = int(np.argmax(used))
        found.add(
            Anomalies(
                "residual_high",
                serial.frames.first_edge[[peak]],
                np.array([peak], np.int64),
                evidence={"residual_deg": [round(float(agreement.residual_deg[peak]), 6)]},
            )
        )
