"""Distributions to measurements, and measurements to verdicts.

A limit is decided with the measurement's uncertainty as guard band on both of its sides (ISO 14253-1): inside by
more than the uncertainty passes, outside by more than it fails, between is undecided.
"""

from __future__ import annotations

import math

import msgspec
import numpy as np

from decode.judgement.records import Limit, Measurement, Verdict
from decode.rules.measurements import MEASUREMENTS
from decode.spans import FloatArray, IntArray


def decide(smallest: float, largest: float, uncertainty: float, limit: Limit) -> Verdict:
    """pass, fail or undecided for values from `smallest` to `largest`, all in the limit's unit."""
    low = -math.inf if limit.min is None else limit.min
    high = math.inf if limit.max is None else limit.max
    if smallest < low - uncertainty or largest > high + uncertainty:
        return "fail"
    if smallest >= low + uncertainty and largest <= high - uncertainty:
        return "pass"
    return "undecided"


def measured(
    name: str,
    line: str | None,
    values: FloatArray,
    counts: IntArray,
    *,
    uncertainty: float,
    limit: Limit | None = None,
    spoilt: str | None = None,
) -> Measurement:
    """A measurement from its exact distribution.

    values: (k,) distinct values in the measurement's unit. counts: (k,) how often each came. uncertainty: in the same
    unit. spoilt: why no verdict can stand whatever the numbers say.
    """
    definition = MEASUREMENTS[name]
    n = int(counts.sum())
    if n == 0:
        return missing(name, line, limit, spoilt or "the capture holds none of it")
    order = np.argsort(values)
    values, counts = values[order], counts[order]
    mean = float(np.average(values, weights=counts))
    variance = float(np.average((values - mean) ** 2, weights=counts))
    std = math.sqrt(variance * n / (n - 1)) if n > 1 else None
    median = float(values[np.searchsorted(np.cumsum(counts), (n + 1) // 2)])
    smallest, largest = float(values[0]), float(values[-1])
    verdict: Verdict | None = None
    reason = None
    if limit is not None:
        verdict = decide(smallest, largest, uncertainty, limit)
        if spoilt is not None:
            verdict, reason = "undecided", spoilt
        elif verdict == "undecided":
            reason = "nearer to the limit than the uncertainty"
    return Measurement(
        name=name,
        line=line,
        unit=definition.unit,
        n=n,
        min=smallest,
        median=median,
        mean=mean,
        max=largest,
        std=std,
        uncertainty=float(uncertainty),
        limit=limit,
        verdict=verdict,
        reason=reason,
    )


def single(
    name: str, value: float, *, uncertainty: float, limit: Limit | None = None, n: int = 1, line: str | None = None
) -> Measurement:
    """A measurement that is one number. A limit too tight for it to decide binds only if the sheet states it."""
    one = measured(name, line, np.array([value]), np.array([n], np.int64), uncertainty=uncertainty, limit=limit)
    if limit is None or one.verdict != "undecided" or stated(limit) or not _too_tight(limit, uncertainty):
        return one
    return msgspec.structs.replace(one, verdict=None, reason="the capture is too short to decide")


def stated(limit: Limit) -> bool:
    """Whether a limit is the sheet's, not a published or a customary one."""
    return limit.source.startswith("sheet")


def _too_tight(limit: Limit, uncertainty: float) -> bool:
    return limit.min is not None and limit.max is not None and limit.max - limit.min < 2 * uncertainty


def missing(name: str, line: str | None, limit: Limit | None, reason: str) -> Measurement:
    """A measurement the capture cannot give. Only a limit from the sheet leaves it undecided."""
    asked = limit is not None and stated(limit)
    return Measurement(
        name=name,
        line=line,
        unit=MEASUREMENTS[name].unit,
        n=0,
        min=None,
        median=None,
        mean=None,
        max=None,
        std=None,
        uncertainty=None,
        limit=limit,
        verdict="undecided" if asked else None,
        reason=reason,
    )


def upper_bound_95(faulty: int, n: int) -> float | None:
    """The error rate that is not exceeded with 95 % confidence after `faulty` of `n`; None for no trials.

    Poisson: the mean at which so few would be seen once in twenty times; 3/n for none (the rule of three).
    """
    if n == 0:
        return None
    if faulty == 0:
        return min(1.0, 3.0 / n)
    low, high = float(faulty), faulty + 5.0 * math.sqrt(faulty) + 10.0
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if _at_most(faulty, middle) > 0.05 else (low, middle)
    return min(1.0, high / n)


def _at_most(k: int, mean: float) -> float:
    """Probability of k or fewer events of a Poisson process with this mean, which is k or more.

    Each term is i / mean of the one above it, so those further down than 40 roots of k add nothing.
    """
    exactly = math.exp(k * math.log(mean) - mean - math.lgamma(k + 1))
    fewer = np.cumprod(np.arange(k, max(0, k - 40 * math.isqrt(k) - 40), -1) / mean)
    return exactly * (1.0 + float(fewer.sum()))
