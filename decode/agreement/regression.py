"""Weighted least squares with a level of its own for every segment.

The levels are eliminated first (each column less its mean over the segment), so thousands of segments cost no more
than one. The design is made in pieces and never held whole.

The uncertainties are the largest of three: the textbook one, which takes the errors of all frames as independent; one
from the scores of consecutive groups of frames, since an encoder's errors last for many frames where the shaft moves
slowly; and one from the scores of the cells of the turn, since they come again where the shaft comes again (both are
sandwich estimates). Sources: JCGM 100:2008 clause 4.2 for the standard uncertainty; the sandwich is common practice
in regression.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from decode.spans import FloatArray, IntArray

PIECE = 1 << 16
"""Frames worked on at a time."""

GROUPS = 40
"""Consecutive groups of frames for the sandwich."""

CELLS = 4096
"""Cells of the turn for the other sandwich, at most."""

Design = Callable[[int, int], FloatArray]
"""Rows [low, high) of the design, (high - low, c)."""


@dataclass(frozen=True, slots=True, eq=False)
class Fitted:
    """A fit of n rows with c columns in s segments.

    coefficients: (c,). covariance: (c, c). levels, weights: (s,) of each segment; without any weight the level is 0.
    means: (s, c) of the design over each segment. spread: (c,) standard deviation of each column once the levels and
    the other columns are taken out of it. segment: (n,) of each row. residual: (n,) of every row, weightless too.
    together: how many times the variance of a mean of rows exceeds that of independent ones, at least 1.
    """

    coefficients: FloatArray
    covariance: FloatArray
    levels: FloatArray
    weights: FloatArray
    means: FloatArray
    spread: FloatArray
    segment: IntArray
    residual: FloatArray
    together: float


def fit(
    target: FloatArray,
    design: Design,
    columns: int,
    weight: FloatArray,
    starts: IntArray,
    cell: IntArray,
    floor: float,
    tied: FloatArray,
) -> Fitted:
    """Fit target = level of the segment + design @ coefficients.

    target, weight: (n,). starts: (s,) first row of each segment, starts[0] = 0. cell: (n,) below CELLS, the part of
    the turn a row is in. floor: the least standard deviation that a single row can have. tied: (c,) weight of the
    knowledge that a coefficient is zero, in rows; 0 where there is none.
    """
    segment = np.repeat(np.arange(starts.size), np.diff(np.append(starts, target.size)))
    sums = np.zeros((starts.size, columns + 2))
    products = np.zeros((columns + 1, columns + 1))
    for low in range(0, target.size, PIECE):
        high = min(low + PIECE, target.size)
        joint = np.column_stack([design(low, high), target[low:high]])
        weighted = joint * weight[low:high, np.newaxis]
        products += weighted.T @ joint
        first, borders = _groups(segment[low:high])
        sums[first] += np.add.reduceat(np.column_stack([weighted, weight[low:high]]), borders)
    weights = sums[:, -1]
    means = sums[:, :-1] / np.where(weights > 0, weights, 1.0)[:, np.newaxis]
    products -= (means * weights[:, np.newaxis]).T @ means
    inverse = invert(products[:-1, :-1] + np.diag(tied))
    coefficients = inverse @ products[:-1, -1]
    levels = means[:, -1] - means[:, :-1] @ coefficients
    residual, sandwiches, together = _second_pass(
        target, design, weight, segment, cell, means[:, :-1], levels, coefficients
    )
    freedom = max(1.0, float(weight.sum()) - columns - np.count_nonzero(weights))
    variance = max(float(np.dot(weight, residual * residual)) / freedom, floor * floor)
    covariance = _largest([*(inverse @ scores @ inverse for scores in sandwiches), inverse * variance])
    own = np.diag(inverse) * max(float(weight.sum()), 1.0)
    spread = np.where(own > 0, 1 / np.sqrt(np.where(own > 0, own, 1.0)), 0.0)
    return Fitted(coefficients, covariance, levels, weights, means[:, :-1], spread, segment, residual, together)


def _groups(labels: IntArray) -> tuple[IntArray, IntArray]:
    """The label of each run of equal labels and the row it starts at."""
    borders = np.concatenate([[0], np.flatnonzero(np.diff(labels)) + 1])
    return labels[borders], borders


def _second_pass(
    target: FloatArray,
    design: Design,
    weight: FloatArray,
    segment: IntArray,
    cell: IntArray,
    means: FloatArray,
    levels: FloatArray,
    coefficients: FloatArray,
) -> tuple[FloatArray, list[FloatArray], float]:
    """Residuals, the products of the scores by time and by cell, and `Fitted.together`."""
    residual = np.empty(target.size)
    groups = min(GROUPS, max(1, target.size // 8))
    group = np.arange(target.size) * groups // max(1, target.size)
    scores = [np.zeros((groups, coefficients.size + 1)), np.zeros((CELLS, coefficients.size + 1))]
    for low in range(0, target.size, PIECE):
        high = min(low + PIECE, target.size)
        rows, inside = design(low, high), segment[low:high]
        residual[low:high] = target[low:high] - rows @ coefficients - levels[inside]
        pull = residual[low:high] * weight[low:high]
        score = np.column_stack([(rows - means[inside]) * pull[:, np.newaxis], pull])
        for sums, label in zip(scores, (group, cell), strict=True):
            for column in range(score.shape[1]):
                sums[:, column] += np.bincount(label[low:high], score[:, column], sums.shape[0])
    alone = float(np.sum((residual * weight) ** 2))
    products = [(sums.T @ sums) * _few(int(np.count_nonzero(sums.any(axis=1)))) for sums in scores]
    together = max(float(product[-1, -1]) for product in products) / alone if alone > 0 else 1.0
    return residual, [product[:-1, :-1] for product in products], max(1.0, together)


def _few(groups: int) -> float:
    """What a sandwich of few groups falls short of."""
    return groups / max(1, groups - 1)


def invert(products: FloatArray) -> FloatArray:
    """Inverse of a Gram matrix; a column that does not vary, or only as others do, is given no say."""
    scale = np.sqrt(np.maximum(np.diag(products), 0))
    scale = np.where(scale > 0, scale, 1.0)
    return np.asarray(np.linalg.pinv(products / np.outer(scale, scale), 1e-12, True) / np.outer(scale, scale))


def _largest(estimates: list[FloatArray]) -> FloatArray:
    """A covariance with the first estimate's correlations and, column by column, the largest deviation of all."""
    deviations = np.sqrt(np.maximum([np.diag(estimate) for estimate in estimates], 0))
    first, largest = deviations[0], deviations.max(axis=0)
    factor = np.where(first > 0, largest / np.where(first > 0, first, 1), 1.0)
    mixed = estimates[0] * np.outer(factor, factor)
    np.fill_diagonal(mixed, largest**2)
    return np.asarray(mixed)
