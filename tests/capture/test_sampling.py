"""The sampling step: found from the times, or not claimed."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from decode.capture.sampling import CHANCE, Intervals, maybe_step


def changes(step: float, printed: int, noise: float = 0.0, n: int = 2000) -> np.ndarray:
    """n times of changes on a grid of `step` ticks, half of them half a clock period of 12 steps apart, printed to
    `printed` ticks, with so many ticks rms of noise."""
    random = np.random.default_rng(7)
    counts = np.cumsum(np.where(random.random(n) < 0.5, 12, random.integers(1, 400, n)))
    times = np.rint(counts * step / printed) * printed + np.rint(random.normal(0, noise, n))
    return times.astype(np.int64)


@pytest.mark.parametrize(
    ("step", "printed", "noise", "is_exact"),
    [
        (10_000, 1000, 0, True),  # 100 MHz in ns
        (2_000, 1000, 0, True),
        (41_666 + 2 / 3, 1000, 0, False),  # 24 MHz in ns: 41 and 42
        (83_333 + 1 / 3, 1000, 0, False),
        (10_000, 1, 2.0, False),  # float noise of 2 ps on 10 ns
        (4_000, 1, 4.0, False),
    ],
)
def test_found(step: float, printed: int, noise: float, is_exact: bool) -> None:
    """The step put in, to a thousandth."""
    intervals = Intervals()
    intervals.add(np.diff(changes(step, printed, noise)))
    found = intervals.step(printed)
    assert found.ticks == pytest.approx(step, rel=1e-3)
    assert found.is_exact == is_exact


def test_wherever_it_is_cut() -> None:
    """Intervals taken in at once, or one by one."""
    steps = np.diff(changes(41_666.7, 1000, n=600))
    whole, pieces = Intervals(), Intervals()
    whole.add(steps)
    for step in steps:
        pieces.add(np.array([step]))
    assert whole.step(1000) == pieces.step(1000)


@settings(deadline=None, max_examples=60)
@given(st.integers(0, 2**32 - 1))
def test_no_step_by_chance(seed: int) -> None:
    """Times that lie on no grid: the last digit printed stays the bound. The chance of any other answer is far below
    one in a thousand for all seeds together: some 2000 steps are tried, each with one in a million."""
    assert CHANCE <= 1e-6
    random = np.random.default_rng(seed)
    intervals = Intervals()
    intervals.add(random.integers(40_000, 4_000_000, 3000) * 10 + random.integers(0, 10, 3000))
    assert intervals.step(1).ticks == 1


@pytest.mark.parametrize("intervals", [[100], [100, 200, 300], [100, 350]])
def test_a_few_intervals_prove_nothing(intervals: list[int]) -> None:
    """Three multiples of a hundred within one may be chance: (2 / 100)^2 is more than one in a million."""
    assert maybe_step(intervals, 1) is None
