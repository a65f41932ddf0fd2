"""One fault, one finding: what follows from a fault is taken out of the list and counted."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from decode.anomalies import Anomalies
from decode.distribution import Distribution
from decode.incremental.result import IncrementalResult, Turns
from decode.judgement.evidence import CaptureFacts, Evidence, SerialFacts
from decode.judgement.faults import SAMPLES_NEEDED, docket
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
    only,
    ticks_of,
    within,
)
from decode.lines.activity import LineActivity
from decode.rules.kinds import KINDS
from decode.serial.continuity import Cadence
from decode.serial.frames import Frames
from decode.sheet import Field, Incremental, Serial, Sheet

LINES = {"clock": "MA", "data": "SLO", "a": "A", "b": "B", "index": "Z"}
CYCLE, PERIOD = 40, 1000
"""Ticks of an A/B cycle and from frame to frame."""


def of(kind: str, *times: int, line: str | None = None, **evidence: Any) -> Anomalies:
    return Anomalies(kind, np.array(times, np.int64), line=line, evidence=evidence)


# ---- taking out ---------------------------------------------------------------------------------------------------


def test_what_is_withdrawn_is_counted_by_kind() -> None:
    found = Docket([of("glitch", 1, 2, 3), of("index_extra", 2), of("glitch", 9), of("glitch")])
    assert found.withdraw(("glitch", "index_extra"), within(2, 8)) == 3
    assert found.withdrawn == {"glitch": 2, "index_extra": 1}
    assert [(one.kind, one.times.tolist()) for one in found.anomalies] == [("glitch", [1]), ("glitch", [9])]
    assert found.withdraw(("glitch",)) == 2
    assert (found.anomalies, found.withdrawn["glitch"]) == ([], 4)


def test_nothing_is_held_of_nothing() -> None:
    found = Docket([of("glitch")])
    found.add(of("index_extra"))
    assert not found.has("glitch", "index_extra")
    assert (found.of("glitch"), found.withdraw(("glitch",)), found.withdrawn) == ([], 0, {})
    assert ticks_of(found.anomalies).tolist() == []


def test_some_of_the_occurrences_keep_all_their_columns() -> None:
    whole = replace(
        of("glitch", 1, 2, 3, width=np.array([7, 8, 9])), frames=np.array([4, 5, 6]), causes=["x", None, "z"]
    )
    part = only(whole, np.array([True, False, True]))
    assert part.frames is not None
    assert (part.times.tolist(), part.frames.tolist()) == ([1, 3], [4, 6])
    assert (list(part.causes or []), list(part.evidence["width"])) == (["x", "z"], [7, 9])


@pytest.mark.parametrize(
    ("which", "taken"),
    [
        (from_on(20), [20, 21]),
        (within(19, 20), [19, 20]),
        (of_line("A"), [19, 20, 21]),
        (of_line("B"), []),
        (near(np.array([23]), 2), [21]),
        (near(np.array([23]), 3), [20, 21]),
        (near(np.array([17]), 2), [19]),
        (near(np.array([], np.int64), 9), []),
    ],
)
def test_which_occurrences(which: Any, taken: list[int]) -> None:
    """Of three at 19, 20 and 21: both ends are included."""
    one = of("glitch", 19, 20, 21, line="A")
    assert one.times[which(one)].tolist() == taken


@given(st.lists(st.integers(0, 40)), st.lists(st.tuples(st.integers(-5, 45), st.integers(-5, 45)), min_size=1))
def test_any_of_many_within(ticks: list[int], stretches: list[tuple[int, int]]) -> None:
    """Oracle: the plain double loop."""
    start, stop = (np.array([min(pair) for pair in stretches]), np.array([max(pair) for pair in stretches]))
    expected = [any(low <= tick <= high for tick in ticks) for low, high in zip(start, stop, strict=True)]
    assert any_within(np.array(ticks, np.int64), start, stop).tolist() == expected


def test_the_lists_name_kinds_that_are() -> None:
    for kinds in (OF_EDGES, OF_COUNT, OF_BITS, OF_SERIAL, OF_SERIAL_TIMING):
        assert set(kinds) <= set(KINDS)


# ---- the rules ----------------------------------------------------------------------------------------------------


def counted(*anomalies: Anomalies, edges: int = 1000, illegal: int = 0, spacing: int = 10) -> IncrementalResult:
    """A/B edges `spacing` ticks apart, with these anomalies."""
    spacings, turns = Distribution(1.0), Distribution(1.0)
    spacings.add([spacing] * edges)
    none = np.empty(0, np.int64)
    return IncrementalResult(
        edges=edges,
        net_counts=edges,
        illegal=illegal,
        x1_naive=0,
        x4_without_short_pulses=edges,
        short_pulse_ticks=None,
        counts_per_turn=None,
        index_pulses=0,
        index_partial=0,
        index_state_seen=None,
        index_state_expected=None,
        index_state_fits=None,
        fastest_cycle_ticks=CYCLE,
        mean_cycle_ticks=float(CYCLE),
        distributions={"edge_spacing_s": spacings, "counts_per_turn": turns},
        by_direction={},
        by_state={},
        index=None,
        turns=Turns(none, none, none, none),
        anomalies=list(anomalies),
    )


def evidence(*anomalies: Anomalies, **more: Any) -> Evidence:
    """A capture from 0 to 100 000 ticks in which the capture room found these."""
    capture = CaptureFacts("board.csv", "", 9, 1e-8, 1, 0, 100_000, "", [], list(anomalies))
    active = {name: LineActivity(edges=100, first=5, last=99_995, level_at_start=1) for name in LINES.values()}
    told: dict[str, Any] = {"sheet": Sheet(), "lines": LINES, "capture": capture, "activity": active}
    return Evidence(**(told | more))


def left(some: Evidence) -> list[tuple[str, list[int]]]:
    return sorted((one.kind, one.times.tolist()) for one in docket(some, []).anomalies)


def serial_facts(sheet: Serial, *anomalies: Anomalies) -> SerialFacts:
    none = np.empty(0, np.int64)
    timings = {"clock_period": Distribution(1.0)}
    cadence = Cadence(float(PERIOD), none, none, none)
    return SerialFacts(Frames.none(sheet), cadence, timings, None, None, [], list(anomalies))


@pytest.mark.parametrize("spacing", [SAMPLES_NEEDED - 1, SAMPLES_NEEDED])
def test_a_capture_too_coarse_says_nothing_of_edges(spacing: int) -> None:
    """Fewer than four samples from edge to edge: one finding for all of them, which tells how many it stands for."""
    edges = [of(kind, 50, start_ticks=[0], stop_ticks=[90], counts=[4]) for kind in OF_EDGES]
    some = evidence(incremental=counted(*edges, of("offset_step", 60), spacing=spacing))
    found = docket(some, [])
    coarse = found.of("undersampled")
    if spacing == SAMPLES_NEEDED:
        assert not coarse
        assert found.has("glitch", "index_extra")
    else:
        assert coarse[0].evidence["findings_withdrawn"] == [len(OF_EDGES) + 1]
        assert [one.kind for one in found.anomalies] == ["undersampled"]


def test_a_stuck_channel_spoils_the_count_from_then_on() -> None:
    """Channel A falls silent at 500: what came before stays."""
    count = [of(kind, 499, 500, 700) for kind in OF_COUNT if kind not in ("illegal_transition", "turn_count_wrong")]
    later = [of("offset_step", 499, 600), of("position_stale", 650), of("scale_wrong", 0), of("latency_high", 0)]
    found = left(evidence(incremental=counted(*count, *later), silent={"a": 500}))
    assert ("line_stuck", [500]) in found
    assert all(times == [499] for kind, times in found if kind != "line_stuck")
    assert {kind for kind, _ in found} >= {"edge_too_close", "index_missing", "offset_step"}
    assert not {kind for kind, _ in found} & {"position_stale", "scale_wrong", "latency_high"}


def test_a_stuck_index_misses_no_index() -> None:
    some = evidence(
        incremental=counted(of("index_missing", 100, 200), of("edge_too_close", 150)),
        sheet=Sheet(incremental=Incremental(cycles_per_turn=100)),
    )
    quiet = dict(some.activity) | {"Z": LineActivity(edges=0, first=None, last=None, level_at_start=0)}
    assert left(replace(some, activity=quiet)) == [("edge_too_close", [150]), ("line_stuck", [0])]


def test_a_stuck_clock_spoils_every_frame() -> None:
    """And the mismatch of its own pair."""
    sheet = Serial(interface="ssi", fields=(Field(name="position", bits=4),))
    bits = [of(kind, 70) for kind in ("crc_mismatch", "frame_missing", "clock_glitch")]
    some = evidence(
        of("pair_mismatch", 3, line="MA", duration_ticks=[9]),
        of("pair_mismatch", 3, line="A", duration_ticks=[9]),
        sheet=Sheet(serial=sheet),
        serial=serial_facts(sheet, *bits, of("edge_too_close", 80)),
    )
    quiet = dict(some.activity) | {"MA": LineActivity(edges=0, first=None, last=None, level_at_start=1)}
    assert left(replace(some, activity=quiet)) == [
        ("edge_too_close", [80]),
        ("line_stuck", [0]),
        ("pair_mismatch", [3]),
    ]


def test_a_broken_pair_spoils_what_is_read_while_it_is_broken() -> None:
    """A and its complement are equal from 100 to 200, both included; the serial side has nothing to do with it."""
    pair = of("pair_mismatch", 100, line="A", duration_ticks=[100])
    edges = of("edge_too_close", 99, 100, 200, 201)
    found = left(evidence(incremental=counted(edges, of("crc_mismatch", 150)), pair_anomalies=[pair]))
    assert found == [("crc_mismatch", [150]), ("edge_too_close", [99, 201]), ("pair_mismatch", [100])]


def turn(start: int, stop: int) -> Anomalies:
    return of("turn_count_wrong", stop, start_ticks=[start], stop_ticks=[stop], counts=[399])


def test_a_lost_count_explains_its_turn_its_step_and_the_edge_beside_it() -> None:
    """A and B changed together at 5000: the turn around it, the step within eight frames and a cycle, the short state
    within a cycle; the turn and the step elsewhere stay."""
    sheet = Serial(interface="ssi", fields=(Field(name="position", bits=4),))
    reach = 8 * PERIOD + CYCLE
    some = evidence(
        incremental=counted(
            of("illegal_transition", 5000),
            turn(4900, 5100),
            turn(60_000, 60_008),
            of("offset_step", 5000 + reach, 5000 + reach + 1),
            of("edge_too_close", 5000 - CYCLE, 5000 + CYCLE, 5000 + CYCLE + 1),
            illegal=1,
        ),
        sheet=Sheet(serial=sheet),
        serial=serial_facts(sheet),
    )
    assert left(some) == [
        ("edge_too_close", [5000 + CYCLE + 1]),
        ("illegal_transition", [5000]),
        ("offset_step", [5000 + reach + 1]),
        ("turn_count_wrong", [60_008]),
    ]


def test_a_miscounted_turn_explains_the_step_within_it() -> None:
    """From 8000 to 16000 and an eighth of that on either side; and a scale that only seemed wrong."""
    steps = of("offset_step", 6999, 7000, 12_000, 17_000, 17_001)
    found = left(evidence(incremental=counted(turn(8000, 16_000), steps, of("scale_wrong", 0))))
    assert found == [("offset_step", [6999, 17_001]), ("turn_count_wrong", [16_000])]


@pytest.mark.parametrize("kind", ["scale_wrong", "direction_opposed"])
def test_a_wrong_scale_or_direction_makes_a_residual_of_itself(kind: str) -> None:
    found = left(evidence(of(kind, 0), of("residual_high", 5), of("latency_high", 6), of("crc_mismatch", 7)))
    assert found == sorted([(kind, [0]), ("crc_mismatch", [7])])


def test_a_direction_that_is_turned_round_explains_the_index_state() -> None:
    """Only the finding of another A/B state, not an index that moved."""
    moved, other = of("index_misplaced", 9), of("index_misplaced", 3, state_seen=["a=0 b=1"])
    assert left(evidence(of("direction_opposed", 0), moved, other)) == [
        ("direction_opposed", [0]),
        ("index_misplaced", [9]),
    ]


def test_without_a_cause_everything_stays() -> None:
    some = [
        of("residual_high", 5),
        of("offset_step", 6),
        of("edge_too_close", 7),
        of("index_misplaced", 8, state_seen=[""]),
    ]
    assert left(evidence(*some)) == sorted((one.kind, one.times.tolist()) for one in some)
