"""The plain loop that says what quadrature counting means; the vectorised engine is held against it."""

from __future__ import annotations

from collections.abc import Iterable

from decode.incremental.quadrature import ILLEGAL, STEP_OF_STATES


def count_states(states: Iterable[int]) -> tuple[int, int]:
    """(net count, illegal steps) of a sequence of states 2 * A + B, looked at one after the other."""
    count = illegal = 0
    before: int | None = None
    for state in states:
        if before is not None:
            step = STEP_OF_STATES[4 * before + state]
            if step == ILLEGAL:
                illegal += 1
            else:
                count += step
        before = state
    return count, illegal


def count_edges(state: int, edges: Iterable[tuple[int, str]]) -> tuple[list[tuple[int, int, bool]], int]:
    """Count (tick, "a" or "b") toggles from a first state; edges of both lines at one tick are one look.

    Returns ([(tick, count after, illegal)], net count). At most one toggle per line and tick.
    """
    toggles: dict[int, int] = {}
    for tick, line in edges:
        toggles[tick] = toggles.get(tick, 0) ^ (2 if line == "a" else 1)
    rows = []
    count = 0
    for tick in sorted(toggles):
        after = state ^ toggles[tick]
        step = STEP_OF_STATES[4 * state + after]
        count += 0 if step == ILLEGAL else step
        rows.append((tick, count, step == ILLEGAL))
        state = after
    return rows, count
