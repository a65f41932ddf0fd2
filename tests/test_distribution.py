"""Exact distributions: the same as numpy on the raw numbers, however they were handed over."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from decode.distribution import Distribution

NUMBERS = st.lists(st.integers(-(2**40), 2**40) | st.integers(-3, 3), min_size=1, max_size=60)


def of(*parts: list[int], quantum: float = 1.0) -> Distribution:
    made = Distribution(quantum)
    for part in parts:
        made.add(np.array(part, np.int64))
    return made


@given(st.lists(NUMBERS, min_size=1, max_size=4))
def test_distinct_values_and_their_counts(parts: list[list[int]]) -> None:
    """Oracle: numpy.unique over all numbers at once."""
    together = of(*parts)
    values, counts = np.unique(np.concatenate(parts), return_counts=True)
    assert together.values.tolist() == values.tolist()
    assert together.counts.tolist() == counts.tolist()
    assert together.n == sum(map(len, parts))


@given(NUMBERS, st.integers(0, 100))
def test_percentile_is_the_smallest_value_that_so_many_do_not_exceed(numbers: list[int], percent: int) -> None:
    """Oracle: numpy's method "inverted_cdf" on the raw numbers (Hyndman and Fan 1996, definition 1)."""
    assert of(numbers).percentile(percent) == np.percentile(numbers, percent, method="inverted_cdf")


@pytest.mark.parametrize(
    ("percent", "value"), [(0, 15), (5, 15), (20, 15), (20.001, 20), (40, 20), (50, 35), (80, 40), (100, 50)]
)
def test_percentiles_worked_out(percent: float, value: int) -> None:
    """15 20 35 40 50: each is a fifth of all, so 20 % do not exceed 15 and a little more than 20 % take the next."""
    assert of([50, 15, 40, 20, 35]).percentile(percent) == value


def test_percentile_is_in_the_unit() -> None:
    """3 quanta of 10 ns."""
    assert of([1, 3, 5], quantum=1e-8).percentile(50) == pytest.approx(3e-8)


def test_the_values_in_the_unit() -> None:
    assert of([2, -1], quantum=0.25).in_unit().tolist() == [-0.25, 0.5]


@pytest.mark.parametrize(("number", "value"), [(0.049, 0), (0.051, 1), (-0.051, -1), (0.149, 1), (0.151, 2)])
def test_rounded_to_the_nearest_quantum(number: float, value: int) -> None:
    """A quantum of 0.1: either side of each half."""
    made = Distribution(0.1)
    made.add_rounded(np.array([number]))
    assert made.values.tolist() == [value]


def test_an_empty_one() -> None:
    empty = Distribution(1.0)
    empty.add([])
    assert (empty.n, empty.in_unit().size) == (0, 0)
    with pytest.raises(ValueError, match="empty distribution"):
        empty.percentile(50)


def test_numbers_near_the_end_of_64_bits_stay_exact() -> None:
    """No float lies between 2**62 and its neighbour, so a detour over floats would merge them."""
    assert of([2**62, 2**62 + 1]).values.tolist() == [2**62, 2**62 + 1]
    assert math.isclose(of([2**62]).percentile(50), 2.0**62)
