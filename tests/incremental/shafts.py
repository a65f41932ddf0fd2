"""Shafts with an ideal encoder, made of exact crossings, for the tests of the incremental lines.

Place p (in counts) is between two edges where p is not whole. State of count c, from place c to c + 1, is the c-th of
00 10 11 01 as A B; so A changes at odd places and B at even ones. The index is high from place `first` to `first +
width`, once a turn.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from decode.incremental.decoder import QuadratureDecoder
from decode.incremental.result import IncrementalResult
from decode.sheet import Incremental
from decode.spans import Edges, Span

TICK_S = 1e-8


def crossings(place: float, legs: Iterable[tuple[float, float]]) -> list[tuple[float, float, int]]:
    """(time, whole place, direction) of everything a shaft passes that starts at `place` and does `legs` of (to
    place, ticks)."""
    passed = []
    now = 0.0
    for target, ticks in legs:
        way = 1 if target > place else -1
        inner = np.arange(np.ceil(min(place, target)), np.floor(max(place, target)) + 1)
        if way < 0:
            inner = inner[::-1]
        passed += [(now + (whole - place) / (target - place) * ticks, int(whole), way) for whole in inner.tolist()]
        place, now = target, now + ticks
    return passed


def board(
    place: float,
    legs: Iterable[tuple[float, float]],
    turn: int = 64,
    index: tuple[float, float] = (0, 1),
    delay: float = 0.0,
) -> Span:
    """The capture of lines A, B and Z on a shaft; index edges come `delay` ticks late. index: (first place, width)."""
    legs = list(legs)
    passed = crossings(place, legs)
    rise, width = index
    count = int(np.floor(place))
    a = [round(time) for time, whole, _ in passed if whole % 2]
    b = [round(time) for time, whole, _ in passed if not whole % 2]
    z = [round(time + delay) for time, whole, _ in passed if whole % turn in (rise % turn, (rise + width) % turn)]
    return Span(
        0,
        round(sum(ticks for _, ticks in legs)),
        {
            "A": Edges.from_toggles(int(count % 4 in (1, 2)), a),
            "B": Edges.from_toggles(int(count % 4 in (2, 3)), b),
            "Z": Edges.from_toggles(int((place - rise) % turn < width), z),
        },
    )


def steady(turns: float, turn: int = 64, state: int = 240, place: float = 10.5, **more: object) -> Span:
    """A shaft at constant speed; negative `turns` count down."""
    distance = turns * turn
    return board(place, [(place + distance, abs(distance) * state)], turn, **more)  # type: ignore[arg-type]


def toggled(span: Span, line: str, times: Iterable[int]) -> Span:
    """The same capture with further toggles of one line: a pair is a pulse, a pair that was there is taken out."""
    old = span.lines[line]
    ticks = old.times.tolist()
    for time in times:
        if time in ticks:
            ticks.remove(time)
        else:
            ticks.append(time)
    return Span(
        span.start, span.stop, {**span.lines, line: Edges.from_toggles(old.initial, sorted(ticks))}, span.joined
    )


def moved(span: Span, line: str, which: int, by: int) -> Span:
    """The same capture with one edge of one line displaced by some ticks."""
    old = span.lines[line]
    times = old.times.copy()
    times[which] += by
    return Span(span.start, span.stop, {**span.lines, line: Edges(old.initial, times, old.levels)}, span.joined)


def decoded(
    spans: Span | Iterable[Span], cycles: int | None = 16, limit: float | None = None, **sheet: object
) -> IncrementalResult:
    """The result of a capture of A, B and Z."""
    decoder = QuadratureDecoder(
        "A",
        "B",
        "Z",
        Incremental(cycles_per_turn=cycles, **sheet),
        TICK_S,
        limit,  # type: ignore[arg-type]
    )
    for span in [spans] if isinstance(spans, Span) else spans:
        decoder.feed(span)
    return decoder.finish()


def findings(result: IncrementalResult) -> list[tuple[str, int]]:
    """(kind, tick) of everything found wrong, in order of time."""
    found = [(one.kind, int(tick)) for one in result.anomalies for tick in one.times]
    return sorted(found, key=lambda item: (item[1], item[0]))


def kinds(result: IncrementalResult) -> list[str]:
    """The kinds alone, in order of time."""
    return [kind for kind, _ in findings(result)]


def evidence(result: IncrementalResult, kind: str) -> dict[str, list[object]]:
    """The evidence columns of one kind."""
    (one,) = [anomaly for anomaly in result.anomalies if anomaly.kind == kind]
    return {name: np.asarray(column).tolist() for name, column in one.evidence.items()}
