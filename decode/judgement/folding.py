"""One fault, one finding.

A fault has consequences, and each machine reports what it sees. Here what follows from a fault elsewhere is taken
out of the list and counted in the evidence of the fault it follows from. The rules, most far-reaching first:

- a capture too coarse for a line says nothing of that line's edges;
- a line that is stuck spoils everything read from it from then on;
- a broken pair spoils what is read from it while it is broken;
- where A and B changed together a count is lost, so the miscounted turn and the step against the serial position
  follow; so does a second edge close to it;
- a turn that the index shows to be miscounted explains the step against the serial position within it;
- a wrong resolution or direction makes a large residual of itself.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import replace

import numpy as np

from decode.anomalies import Anomalies
from decode.spans import BoolArray, IntArray

OF_EDGES = (
    "illegal_transition",
    "edge_too_close",
    "glitch",
    "turn_count_wrong",
    "index_missing",
    "index_extra",
    "index_misplaced",
    "index_width",
)
OF_COUNT = (
    "illegal_transition",
    "edge_too_close",
    "turn_count_wrong",
    "index_missing",
    "index_extra",
    "index_misplaced",
    "index_width",
)
OF_BITS = (
    "no_acknowledge",
    "no_start_bit",
    "crc_mismatch",
    "parity_mismatch",
    "fixed_mismatch",
    "error_flag",
    "warning_flag",
    "data_stuck",
    "position_jump",
    "position_stale",
    "life_break",
    "setup_violation",
    "timeout_short",
    "frame_short",
    "frame_long",
)
OF_SERIAL = (*OF_BITS, "frame_missing", "clock_glitch")
OF_SERIAL_TIMING = ("setup_violation", "clock_glitch")

Which = Callable[[Anomalies], BoolArray]


class Docket:
    """The anomalies of a capture while consequences are sorted out.

    withdrawn: how many findings of each kind were taken out because another explains them.
    """

    def __init__(self, anomalies: Iterable[Anomalies]) -> None:
        self._held = [one for one in anomalies if len(one)]
        self.withdrawn: dict[str, int] = {}

    @property
    def anomalies(self) -> list[Anomalies]:
        return list(self._held)

    def has(self, *kinds: str) -> bool:
        return any(one.kind in kinds for one in self._held)

    def of(self, kind: str) -> list[Anomalies]:
        return [one for one in self._held if one.kind == kind]

    def add(self, anomalies: Anomalies) -> None:
        if len(anomalies):
            self._held.append(anomalies)

    def withdraw(self, kinds: Iterable[str], which: Which | None = None) -> int:
        """Take out the anomalies of `kinds` for which `which` holds (None: all); how many that were."""
        wanted, total = frozenset(kinds), 0
        kept: list[Anomalies] = []
        for one in self._held:
            gone = np.zeros(len(one), np.bool_)
            if one.kind in wanted:
                gone = np.ones(len(one), np.bool_) if which is None else which(one)
            number = int(gone.sum())
            if number:
                self.withdrawn[one.kind] = self.withdrawn.get(one.kind, 0) + number
                total += number
            if number < len(one):
                kept.append(only(one, ~gone) if number else one)
        self._held = kept
        return total


def only(anomalies: Anomalies, rows: BoolArray) -> Anomalies:
    """Some of the occurrences."""
    index = [int(row) for row in np.flatnonzero(rows)]
    return replace(
        anomalies,
        times=anomalies.times[index],
        frames=None if anomalies.frames is None else anomalies.frames[index],
        causes=None if anomalies.causes is None else [anomalies.causes[i] for i in index],
        evidence={name: [column[i] for i in index] for name, column in anomalies.evidence.items()},
    )


def from_on(tick: int) -> Which:
    """Occurrences at or after a tick."""
    return lambda one: np.asarray(one.times >= tick, np.bool_)


def within(start: int, stop: int) -> Which:
    """Occurrences from start to stop, both included."""
    return lambda one: np.asarray((one.times >= start) & (one.times <= stop), np.bool_)


def of_line(line: str | None) -> Which:
    """Occurrences on a line."""
    return lambda one: np.full(len(one), one.line == line)


def near(ticks: IntArray, distance: int) -> Which:
    """Occurrences not further than `distance` ticks from one of `ticks`."""
    return lambda one: any_within(ticks, one.times - distance, one.times + distance)


def any_within(ticks: IntArray, start: IntArray, stop: IntArray) -> BoolArray:
    """(n,) whether one of `ticks` lies from start[i] to stop[i], both included."""
    rising = np.sort(ticks)
    return np.asarray(
        np.searchsorted(rising, stop, side="right") > np.searchsorted(rising, start, side="left"), np.bool_
    )


def ticks_of(found: Iterable[Anomalies]) -> IntArray:
    """When any of them occurred."""
    return np.concatenate([np.empty(0, np.int64), *(one.times for one in found)])
