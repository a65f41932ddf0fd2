"""Exact distributions of whole numbers.

An interval in a capture is a whole number of ticks, so its distribution is a table of distinct values and how often
each came: minimum, maximum, mean and any percentile follow exactly and no sample is kept. Angles are rounded to a
stated small unit first and then treated alike.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from decode.spans import FloatArray, IntArray


class Distribution:
    """How often each whole number came. `quantum` is what one means, in the measurement's unit.

    values: (k,) distinct numbers, rising. counts: (k,) how often each was added.
    """

    def __init__(self, quantum: float) -> None:
        self.quantum = quantum
        self.values: IntArray = np.empty(0, np.int64)
        self.counts: IntArray = np.empty(0, np.int64)

    def add(self, numbers: npt.ArrayLike) -> None:
        """Count each of `numbers` (whole numbers of quanta)."""
        fresh, times = np.unique(np.asarray(numbers, np.int64), return_counts=True)
        self.add_counted(fresh, times)

    def add_counted(self, fresh: IntArray, times: IntArray) -> None:
        """Count fresh[i] (distinct, rising) times[i] times."""
        if fresh.size == 0:
            return
        merged, where = np.unique(np.concatenate([self.values, fresh]), return_inverse=True)
        counts = np.zeros(merged.size, np.int64)
        np.add.at(counts, where, np.concatenate([self.counts, times]))
        self.values, self.counts = merged, counts

    def add_rounded(self, numbers: FloatArray) -> None:
        """Count each of `numbers`, given in the measurement's unit, to the nearest quantum."""
        self.add(np.rint(numbers / self.quantum).astype(np.int64))

    @property
    def n(self) -> int:
        """How many numbers were added."""
        return int(self.counts.sum())

    def in_unit(self) -> FloatArray:
        """(k,) the distinct values in the measurement's unit."""
        return np.asarray(self.values * self.quantum, np.float64)

    def percentile(self, percent: float) -> float:
        """The smallest added value, in the measurement's unit, that `percent` % of all do not exceed.

        Raises ValueError where nothing was added.
        """
        if self.values.size == 0:
            raise ValueError("an empty distribution has no percentile")
        total = np.cumsum(self.counts)
        rank = max(1, int(np.ceil(percent / 100 * total[-1])))
        return float(self.values[np.searchsorted(total, rank)] * self.quantum)
