"""Wherever a capture is cut into spans, everything comes out the same: the promise that lets captures be of any
length."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from shafts import TICK_S, board, toggled

from decode.distribution import Distribution
from decode.incremental.decoder import QuadratureDecoder
from decode.incremental.quadrature import Counts
from decode.sheet import Incremental
from decode.spans import Edges, Span, cut

SHEET = Incremental(cycles_per_turn=4, index_width_counts=1, index_states="a=0 b=0")


def plain(value: Any) -> Any:
    """Any result as nested plain values that compare."""
    if isinstance(value, Distribution):
        return (value.quantum, value.values.tolist(), value.counts.tolist())
    if isinstance(value, np.ndarray):
        return [str(one) for one in value.tolist()]
    if isinstance(value, dict):
        return {key: plain(one) for key, one in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(one) for one in value]
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    return value


def everything(spans: list[Span], sheet: Incremental | None) -> tuple[list[Any], Any]:
    decoder = QuadratureDecoder("A", "B", "Z", sheet, TICK_S, 20)
    rows: list[Any] = []
    for span in spans:
        part: Counts = decoder.feed(span)
        assert part.start == (rows[-1][1] if rows else 0)
        rows += zip(part.times.tolist(), part.counts.tolist(), part.illegal.tolist(), strict=True)
    return rows, plain(decoder.finish())


motions = st.lists(st.tuples(st.integers(-40, 60), st.sampled_from([20, 30, 33, 60, 400])), min_size=1, max_size=6)
faults = st.lists(st.tuples(st.sampled_from("ABZ"), st.integers(0, 3000), st.integers(1, 40)), max_size=6)
cuts = st.one_of(st.none(), st.lists(st.integers(1, 6000), max_size=20))
"""Ticks to cut at, or None for before and after every edge."""


def a_capture(legs: list[tuple[int, int]], pulses: list[tuple[str, int, int]]) -> Span:
    place, way = 2.5, []
    for distance, state in legs:
        if distance:
            way.append((place + distance, abs(distance) * state))
            place += distance
    span = board(2.5, way or [(3.5, 30)], turn=16, index=(4, 1))
    for line, start, width in pulses:
        if start + width < span.stop:
            span = toggled(span, line, [start, start + width])
    return span


@settings(max_examples=40, deadline=None)
@given(motions, faults, cuts, st.booleans())
def test_cuts(legs, pulses, at, stated):
    """Motion that sways, starts and stops, pulses on every line, cut anywhere down to one edge a span: same counts,
    distributions, tables and findings."""
    span = a_capture(legs, pulses)
    sheet = SHEET if stated else None
    whole = everything([span], sheet)
    if at is None:
        at = sorted({int(tick) + after for edges in span.lines.values() for tick in edges.times for after in (0, 1)})
    assert everything(list(cut(span, at)), sheet) == whole


raw_levels = st.lists(st.tuples(st.integers(0, 60), st.sampled_from([0, 1, 2])), max_size=30)


@settings(max_examples=100, deadline=None)
@given(raw_levels, raw_levels, raw_levels, st.lists(st.integers(1, 60), max_size=12))
def test_cuts_of_anything(a, b, z, at):
    """Not an encoder at all, with levels that are not known and several edges at one tick."""
    lines = {}
    for name, column in zip("ABZ", (a, b, z), strict=True):
        rows = sorted(column, key=lambda row: row[0])
        times, levels = np.array([row[0] for row in rows], np.int64), np.array([row[1] for row in rows], np.int8)
        lines[name] = Edges.from_samples(times, levels, before=0)
    span = Span(0, 61, lines)
    assert everything(list(cut(span, at)), SHEET) == everything([span], SHEET)


def test_results_hold_something():
    """The property above would hold for empty results too: here the capture has all of it."""
    span = a_capture([(60, 30), (-20, 33), (55, 30)], [("A", 700, 3), ("Z", 1200, 20)])
    _, result = everything([span], SHEET)
    filled = [name for name, found in result["distributions"].items() if found[1]]
    assert set(filled) == set(result["distributions"])
    assert [one["kind"] for one in result["anomalies"]] == ["glitch", "index_extra"]
    assert result["turns"]["counts"]
