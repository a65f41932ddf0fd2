"""Lines whose level is unknown for a time: until a reset ends, or while a simulation does not record.

        clock  xxxxxxxx~~~~~~~~~~~~~~\\_/~\\_/~ ... ~~~~\\_/~xxxxxxxxxxxxx~\\_/~~~~~~~~\\_/~ ...
                       reset ends     frames     |cut  unknown       cut|  frames

Whatever the unknown stretch does not touch decodes as without it; what it touches is counted as cut and not blamed.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pytest

from decode.bench.board import simulate
from decode.bench.scenario import Scenario
from decode.serial.clock import known_parts
from decode.serial.frames import Frames
from decode.serial.receiver import Receiver
from decode.sheet import Serial, Sheet, from_toml
from decode.spans import UNKNOWN, Edges, Span, cut

SHEETS = {
    "biss-c": """
        fields = [
          { name = "position", bits = 19 }, { name = "error", bits = 1, active = "low" },
          { name = "warning", bits = 1, active = "low" },
          { name = "crc", bits = 6, polynomial = 0x43, inverted = true },
        ]
        """,
    "ssi": 'coding = "gray"\nfields = [{ name = "turns", bits = 12 }, { name = "position", bits = 13 }]',
    "spi": 'mode = 1\nfields = [{ name = "position", bits = 14 }, { name = "parity", bits = 1, kind = "even" }]',
}


def sheet_of(interface: str) -> Sheet:
    select = 'select = "CS"' if interface == "spi" else ""
    head = f'[lines]\nclock = "MA"\ndata = "SLO"\n{select}\n[serial]\ninterface = "{interface}"\n'
    return from_toml(head + SHEETS[interface])


def serial_of(sheet: Sheet) -> Serial:
    assert sheet.serial is not None
    return sheet.serial


def clean(sheet: Sheet, duration_s: float = 0.004) -> Span:
    return simulate(sheet, Scenario(duration_s=duration_s, start_angle_turns=0.2)).span()


def overlaid(edges: Edges, start: int, stop: int) -> Edges:
    """A line that is unknown from `start` up to `stop`, ticks."""
    before = edges.between(0, start)
    after = Edges(edges.initial, *(column[edges.times > stop] for column in (edges.times, edges.levels)))
    back = int(edges.level_at(np.array([stop]))[0])
    middle = Edges(before.final, np.array([start, stop]), np.array([UNKNOWN, back], np.int8))
    if start == 0:
        return Edges(UNKNOWN, np.array([stop]), np.array([back], np.int8)).then(after)
    return before.then(middle).then(after)


def with_unknown(span: Span, names: Sequence[str], start: int, stop: int) -> Span:
    lines = {name: overlaid(edges, start, stop) if name in names else edges for name, edges in span.lines.items()}
    return Span(span.start, span.stop, lines, span.joined)


def received(sheet: Sheet, spans: Sequence[Span]) -> tuple[Frames, Receiver]:
    select = "CS" if serial_of(sheet).interface == "spi" else None
    receiver = Receiver(serial_of(sheet), "MA", "SLO", select)
    parts = [*(receiver.feed(span) for span in spans), receiver.finish()]
    return Frames.concatenate(parts), receiver


def rows(frames: Frames) -> list[tuple[object, ...]]:
    """A row a frame: when, how many clocks, the word, what is wrong."""
    columns = (frames.first_edge, frames.last_edge, frames.latch, frames.clocks, frames.position, frames.kind)
    return list(
        zip(
            *(column.tolist() for column in columns),
            frames.raw.tobytes().hex(" ", frames.raw.shape[1]).split(),
            strict=True,
        )
    )


LINES = {
    "clock": ["MA"],
    "data": ["SLO"],
    "select": ["CS"],
    "all": ["MA", "SLO", "CS"],
}


@pytest.mark.parametrize("interface", SHEETS)
def test_until_reset_ends(interface: str) -> None:
    """All lines are unknown, and go to their resting levels between the second and the third frame: those two are not
    there, every other is as it was, none is blamed, and nothing was cut."""
    sheet = sheet_of(interface)
    span = clean(sheet)
    whole, _ = received(sheet, [span])
    assert len(whole) > 15
    end = int(whole.last_edge[1] + whole.first_edge[2]) // 2
    frames, receiver = received(sheet, [with_unknown(span, LINES["all"], 0, end)])
    assert rows(frames) == rows(whole)[2:]
    assert not frames.kind.any()
    assert receiver.partial == 0
    assert receiver.anomalies() == []


@pytest.mark.parametrize(
    ("interface", "lines"),
    [(interface, lines) for interface in SHEETS for lines in LINES if lines != "select" or interface == "spi"],
)
@pytest.mark.parametrize(("first", "last"), [(3, 3), (3, 5)])
@pytest.mark.parametrize("where", ["bits", "pause"])
def test_in_the_middle(interface: str, lines: str, first: int, last: int, where: str) -> None:
    """Unknown from the middle of one frame to the middle of the same or a later one, or from pause to pause. Frames it
    does not touch are as they were; those it touches are gone, without blame, and at least those it ends in are
    counted."""
    sheet = sheet_of(interface)
    span = clean(sheet)
    whole, _ = received(sheet, [span])
    if where == "bits":
        middle = (whole.first_edge + whole.last_edge) // 2
        start, stop = (
            int(middle[first]),
            int(middle[last] + (first == last) * (whole.last_edge[first] - middle[first]) // 2),
        )
    else:
        pause = (whole.last_edge[:-1] + whole.first_edge[1:]) // 2
        start, stop = int(pause[first - 1]), int(pause[last])
    frames, receiver = received(sheet, [with_unknown(span, LINES[lines], start, stop)])
    assert rows(frames) == [row for number, row in enumerate(rows(whole)) if not first <= number <= last]
    assert not frames.kind.any()
    assert receiver.anomalies() == []
    if where == "bits" or lines == "data":
        assert receiver.partial >= 1
    else:
        assert receiver.partial == 0


@pytest.mark.parametrize("interface", SHEETS)
@pytest.mark.parametrize("pieces", [2, 7, 1000])
def test_wherever_cut(interface: str, pieces: int) -> None:
    """Three unknown stretches, one of them at the very start, in spans cut evenly and at the edges of the stretches:
    the same frames, and as many counted as cut."""
    sheet = sheet_of(interface)
    span = clean(sheet)
    whole, _ = received(sheet, [span])
    damaged = with_unknown(span, LINES["all"], 0, int(min(whole.latch[0], whole.first_edge[0]) - 1))
    damaged = with_unknown(damaged, LINES["clock"], int(whole.first_edge[2] + 5), int(whole.last_edge[2] - 5))
    damaged = with_unknown(damaged, LINES["all"], int(whole.last_edge[5] - 5), int(whole.first_edge[7] + 5))
    expected, once = received(sheet, [damaged])
    at = [*np.linspace(span.start, span.stop, pieces, dtype=int).tolist(), *damaged.lines["MA"].times[-400:].tolist()]
    at += [tick for edges in damaged.lines.values() for tick in edges.times[edges.levels == UNKNOWN].tolist()]
    frames, receiver = received(sheet, list(cut(damaged, at)))
    assert rows(frames) == rows(expected)
    assert frames.segment.tolist() == expected.segment.tolist()
    assert receiver.partial == once.partial > 0
    assert [row for row in rows(whole) if row not in rows(frames)] == [rows(whole)[number] for number in (2, 5, 6, 7)]


def test_one_edge_of_a_frame_at_the_end() -> None:
    """A biss-c capture that ends right behind the first clock edge of a frame: the frames before are there."""
    sheet = sheet_of("biss-c")
    span = clean(sheet)
    whole, _ = received(sheet, [span])
    short = next(iter(cut(span, [int(whole.first_edge[9]) + 1])))
    frames, receiver = received(sheet, [short])
    assert rows(frames) == rows(whole)[:9]
    assert receiver.partial == 1


def test_known_parts() -> None:
    """One line is unknown from 10 to 20 and falls at 30, the other changes at 20 by way of unknown: parts begin at 10
    and 20, and an edge from or to an unknown level is in none."""
    one = Edges(1, np.array([10, 20, 30]), np.array([2, 1, 0], np.int8))
    other = Edges(0, np.array([5, 20, 20, 20]), np.array([1, 0, 2, 1], np.int8))
    span = Span(0, 40, {"one": one, "other": other, "free": one})
    told = []
    for part in known_parts(span, ["one", "other"]):
        lines = [(part.lines[name].initial, part.lines[name].times.tolist()) for name in ("one", "other")]
        told.append((part.start, part.stop, part.joined, *lines))
    assert told == [
        (0, 10, True, (1, []), (0, [5])),
        (10, 20, False, (2, []), (1, [])),
        (20, 40, False, (1, [30]), (1, [])),
    ]
    assert [part.lines["free"].times.tolist() for part in known_parts(span, ["one", "other"])] == [[], [10], [20, 30]]


def test_a_span_without_unknown_levels_is_left_as_it_is() -> None:
    """The very same object: captures that know all levels pay nothing."""
    span = Span(0, 40, {"one": Edges.from_toggles(0, [3, 9])})
    assert next(iter(known_parts(span, ["one"]))) is span
