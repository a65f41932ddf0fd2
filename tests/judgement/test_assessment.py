"""Distributions to measurements and verdicts: guard bands, statistics, the bound on an error rate."""

from __future__ import annotations

import time

import numpy as np
import pytest

from decode.distribution import Distribution
from decode.judgement.assessment import decide, measured, missing, single, stated, upper_bound_95
from decode.judgement.records import Limit, Measurement, Verdict

NAME = "state_width_deg"


def limit(low: float | None, high: float | None, source: str = "a data sheet") -> Limit:
    return Limit(min=low, max=high, source=source)


# ---- guard bands --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("value", "verdict"),
    [
        (17.0, "fail"),
        (17.99, "fail"),
        (18.0, "undecided"),
        (20.0, "undecided"),
        (21.99, "undecided"),
        (22.0, "pass"),
        (30.0, "pass"),
        (38.0, "pass"),
        (38.01, "undecided"),
        (42.0, "undecided"),
        (42.01, "fail"),
    ],
)
def test_a_value_against_limits_with_a_guard_band(value: float, verdict: Verdict) -> None:
    """Limits 20 and 40, uncertainty 2: a step either side of 18, 22, 38 and 42. Source: ISO 14253-1, conformity is
    proven inside by the uncertainty, non-conformity outside by it."""
    assert decide(value, value, 2.0, limit(20, 40)) == verdict


@pytest.mark.parametrize(
    ("smallest", "largest", "verdict"),
    [
        (22, 38, "pass"),
        (21, 38, "undecided"),
        (22, 39, "undecided"),
        (17, 39, "fail"),
        (21, 43, "fail"),
        (17, 43, "fail"),
    ],
)
def test_the_worse_end_decides(smallest: float, largest: float, verdict: Verdict) -> None:
    assert decide(smallest, largest, 2.0, limit(20, 40)) == verdict


@pytest.mark.parametrize(
    ("low", "high", "verdict"),
    [(None, 40, "pass"), (20, None, "pass"), (None, None, "pass"), (None, 28, "fail"), (32, None, "fail")],
)
def test_an_open_end_binds_nothing(low: float | None, high: float | None, verdict: Verdict) -> None:
    assert decide(30, 30, 1.0, limit(low, high)) == verdict


def test_without_uncertainty_the_limit_itself_passes() -> None:
    assert [decide(value, value, 0.0, limit(20, 40)) for value in (20, 40, 19.9, 40.1)] == ["pass"] * 2 + ["fail"] * 2


# ---- statistics ---------------------------------------------------------------------------------------------------


def of(values: list[float], counts: list[int] | None = None, **more: object) -> Measurement:
    told = {"uncertainty": 0.5, **more}
    return measured(NAME, "A", np.array(values), np.array(counts or [1] * len(values), np.int64), **told)  # type: ignore[arg-type]


def test_period_jitter_of_published_edges() -> None:
    """Edges at 0, 10.0, 20.2, 30.1, 40.0 and 50.3: periods 10, 10.2, 9.9, 9.9, 10.3 with mean 10.06, s 0.18166 (n - 1)
    and 0.4 from peak to peak (exact arithmetic). Source of the definition: JESD65B as restated in SiTime AN10007."""
    edges = np.array([0, 10.0, 20.2, 30.1, 40.0, 50.3])
    tenths = Distribution(0.1)
    tenths.add_rounded(np.diff(edges))
    one = measured("clock_period_jitter_s", "MA", tenths.in_unit() - 10.06, tenths.counts, uncertainty=0.1)
    assert one.n == 5
    assert one.mean == pytest.approx(0.0, abs=1e-12)
    assert one.std == pytest.approx(0.18166, abs=5e-6)
    assert one.min is not None
    assert one.max is not None
    assert (one.max - one.min, one.median) == (pytest.approx(0.4), pytest.approx(-0.06))


def test_counts_weigh_the_values_whatever_their_order() -> None:
    """2 once, 1 three times, 4 four times: mean 21/8, median the fourth of eight."""
    one = of([2.0, 1.0, 4.0], [1, 3, 4])
    assert (one.n, one.min, one.max, one.mean, one.median) == (8, 1.0, 4.0, 2.625, 2.0)
    assert one.std == pytest.approx(float(np.std([2, 1, 1, 1, 4, 4, 4, 4], ddof=1)))


@pytest.mark.parametrize(("counts", "median"), [([1, 1, 1], 2.0), ([1, 1, 2], 2.0), ([1, 1, 3], 3.0), ([2, 1, 1], 1.0)])
def test_the_median_is_a_value_that_came(counts: list[int], median: float) -> None:
    """Of an even number the lower of the two in the middle."""
    assert of([1.0, 2.0, 3.0], counts).median == median


def test_one_value_has_no_spread() -> None:
    assert of([3.0]).std is None


def test_without_a_limit_there_is_no_verdict() -> None:
    assert (of([3.0]).verdict, of([3.0]).reason) == (None, None)


def test_a_verdict_and_its_reason() -> None:
    assert (of([90.0], limit=limit(60, 120)).verdict, of([90.0], limit=limit(60, 120)).reason) == ("pass", None)
    near = of([60.1], limit=limit(60, 120))
    assert (near.verdict, near.reason) == ("undecided", "nearer to the limit than the uncertainty")


def test_what_is_spoilt_decides_nothing() -> None:
    """Not even what would fail by far."""
    one = of([3.0], limit=limit(60, 120), spoilt="sampled too coarsely")
    assert (one.verdict, one.reason) == ("undecided", "sampled too coarsely")


@pytest.mark.parametrize(("source", "verdict"), [("sheet, limits.state_width_deg", "undecided"), ("US Digital", None)])
def test_what_is_missing_leaves_only_the_sheet_s_limit_undecided(source: str, verdict: Verdict | None) -> None:
    asked = limit(60, 120, source)
    for one in (of([], limit=asked), missing(NAME, "A", asked, "the capture holds none of it")):
        assert (one.n, one.mean, one.verdict, one.reason) == (0, None, verdict, "the capture holds none of it")


@pytest.mark.parametrize(
    ("high", "source", "verdict"),
    [
        (1.9, "common practice", None),
        (2.0, "common practice", "undecided"),
        (1.9, "sheet, limits.scale_error", "undecided"),
    ],
)
def test_a_customary_limit_too_tight_to_decide_does_not_bind(high: float, source: str, verdict: Verdict | None) -> None:
    """An uncertainty of 1 needs limits 2 apart at the least."""
    assert single("scale_error", 0.2, uncertainty=1.0, limit=limit(0, high, source)).verdict == verdict


def test_single_numbers() -> None:
    one = single("latency_s", 3e-6, uncertainty=1e-8, limit=limit(None, 40e-6), n=500)
    assert (one.n, one.min, one.max, one.mean, one.verdict) == (500, 3e-6, 3e-6, 3e-6, "pass")
    assert stated(limit(0, 1, "sheet, limits.latency_s"))
    assert not stated(limit(0, 1, "half a count in a turn"))


# ---- the bound on an error rate -----------------------------------------------------------------------------------


@pytest.mark.parametrize(("faulty", "mean"), [(1, 4.744), (2, 6.296), (5, 10.513), (10, 16.962)])
def test_upper_bound_of_some_faults(faulty: int, mean: float) -> None:
    """Source: upper one-sided 95 % limits of a Poisson mean, standard tables."""
    assert upper_bound_95(faulty, 1000) == pytest.approx(mean / 1000, abs=5e-7)


def test_upper_bound_of_no_fault() -> None:
    """Three in n: the rule of three (the exact limit is 2.996)."""
    assert upper_bound_95(0, 600) == 0.005


@pytest.mark.parametrize(
    ("faulty", "n", "bound"), [(0, 0, None), (0, 1, 1.0), (0, 3, 1.0), (3, 3, 1.0), (100, 100, 1.0)]
)
def test_the_bound_is_a_rate(faulty: int, n: int, bound: float | None) -> None:
    assert upper_bound_95(faulty, n) == bound


def test_many_faults_take_no_time() -> None:
    """A million of ten million. The limit is the 95 % point of a gamma distribution of shape k + 1, for large k that is
    k + 1 + z sqrt(k + 1) + (z ** 2 - 1) / 3 with z = 1.64485: 1 001 646.42 (Cornish and Fisher 1938)."""
    begun = time.perf_counter()
    bound = upper_bound_95(1_000_000, 10_000_000)
    assert time.perf_counter() - begun < 1.0
    assert bound == pytest.approx(0.100_164_642, abs=2e-9)
