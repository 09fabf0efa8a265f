"""Do sample sizes and Cpk bounds agree with published tables, with each other and with simulation?"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binom

from allocator.demonstrate import lower_bound_cpk, observed_cpk_needed, parts_needed, standard_error_cpk
from allocator.errors import RangeError

DRAWS = 10_000
FOUR_DIGITS = 5e-4
ROUND_TRIP = 1e-8

# Success-run theorem, n = ln(1 − C)/ln R rounded up: classical table, from memory and recomputed. The value 298 for
# R 0.99, C 0.95 in a reliability engineer's primer (Quality Council of Indiana) is one short: 0.99^298 > 0.05.
ZERO_BAD = {
    (0.90, 0.90): 22, (0.90, 0.95): 29, (0.90, 0.99): 44, (0.95, 0.90): 45, (0.95, 0.95): 59, (0.95, 0.99): 90,
    (0.99, 0.90): 230, (0.99, 0.95): 299, (0.99, 0.99): 459,
}  # fmt: skip

# Least n with at most c = 0, 1, 2, 3, 4 bad: 59, 93, … and 22, 38, … are the classical binomial tables (from memory).
WITH_BAD = {
    (0.95, 0.95): (59, 93, 124, 153, 181), (0.99, 0.95): (299, 473, 628, 773, 913), (0.90, 0.90): (22, 38, 52, 65, 78),
    (0.90, 0.95): (29, 46, 61, 76, 89), (0.95, 0.90): (45, 77, 105, 132, 158),
}  # fmt: skip


@pytest.mark.parametrize(("reliability", "confidence"), ZERO_BAD)
def test_zero_bad_agrees_with_the_success_run_table(reliability: float, confidence: float) -> None:
    assert parts_needed(-math.log(reliability), confidence) == ZERO_BAD[reliability, confidence]


@pytest.mark.parametrize(("reliability", "confidence"), WITH_BAD)
def test_some_bad_agree_with_the_binomial_tables(reliability: float, confidence: float) -> None:
    delta = -math.log(reliability)
    needed = tuple(parts_needed(delta, confidence, bad) for bad in range(5))
    assert needed == WITH_BAD[reliability, confidence]


def test_poisson_plan_of_birolini_is_nearly_the_binomial_one() -> None:
    """Birolini, Reliability Engineering, Springer 2007, sect. 7.1: 2 % at most, one bad allowed, 90 %: n = 195."""
    assert parts_needed(-math.log1p(-0.02), 0.90, 1) == pytest.approx(195, abs=2)


@pytest.mark.parametrize("delta", [1e-9, 3.4e-6, 2e-3, 0.5, 30.0])
@pytest.mark.parametrize("bad", [0, 1, 7])
def test_parts_needed_is_the_least_number_that_demonstrates(delta: float, bad: int) -> None:
    """Against the binomial law of scipy.stats, where one part fewer must not be enough."""
    n, share = parts_needed(delta, 0.95, bad), -math.expm1(-delta)
    assert binom.cdf(bad, n, share) <= 0.05 * (1.0 + 1e-9)
    assert n == bad + 1 or binom.cdf(bad, n - 1, share) > 0.05 * (1.0 - 1e-9)


# Critical values for the claim Cpk > C at 95 %, worst case over centring; such tables are in Pearn and Lin, Computers &
# Industrial Engineering 47 (2004) 351-369 (digits here recomputed from the noncentral t law).
OBSERVED = {
    (30, 1.00): 1.3029, (30, 1.33): 1.7198, (50, 1.00): 1.2195, (50, 1.33): 1.6120, (100, 1.00): 1.1461,
    (100, 1.33): 1.5172, (100, 1.50): 1.7089, (100, 1.67): 1.9008, (200, 1.00): 1.0992, (200, 1.33): 1.4570,
}  # fmt: skip


@pytest.mark.parametrize(("n", "target"), OBSERVED)
def test_cpk_to_observe(n: int, target: float) -> None:
    assert observed_cpk_needed(target, n, 0.95) == pytest.approx(OBSERVED[n, target], abs=FOUR_DIGITS)


def test_bound_of_a_soft_study() -> None:
    """1.33 on 30 parts: near 1.03 by Bissell's approximation (Applied Statistics 39, 1990), 1.02 exactly."""
    assert 1.33 - 1.6449 * standard_error_cpk(1.33, 30, 29) == pytest.approx(1.03, abs=0.005)
    assert lower_bound_cpk(1.33, 30, 0.95) == pytest.approx(1.0216, abs=FOUR_DIGITS)


@pytest.mark.parametrize(("cpk", "n", "bound"), [(1.33, 50, 1.09580), (1.33, 100, 1.16515), (1.67, 30, 1.29568)])
def test_bissell_bounds(cpk: float, n: int, bound: float) -> None:
    """Formula of Bissell 1990 at three points; the exact bound lies within a hundredth of it."""
    assert cpk - 1.6448536 * standard_error_cpk(cpk, n, n - 1) == pytest.approx(bound, abs=1e-5)
    assert lower_bound_cpk(cpk, n, 0.95) == pytest.approx(bound, abs=0.01)


def test_interval_of_a_published_study() -> None:
    """Quality Digest, May 2000, "Last Word": Cpk 1.15 of 45 parts lies between 0.89 and 1.41 (95 %, two-sided)."""
    half = 1.959964 * standard_error_cpk(1.15, 45, 44)
    assert (1.15 - half, 1.15 + half) == pytest.approx((0.89, 1.41), abs=5e-3)
    assert lower_bound_cpk(1.15, 45, 0.975) == pytest.approx(0.89, abs=0.01)
    assert lower_bound_cpk(1.15, 45, 0.025) == pytest.approx(1.41, abs=0.01)


@pytest.mark.parametrize("n", [2, 5, 30, 1000, 100_000])
@pytest.mark.parametrize("confidence", [0.001, 0.05, 0.9, 0.999])
def test_bound_undoes_what_must_be_observed(n: int, confidence: float) -> None:
    for target in (-1.0, 0.01, 1.33, 10.0):
        observed = observed_cpk_needed(target, n, confidence)
        assert lower_bound_cpk(observed, n, confidence) == pytest.approx(target, rel=ROUND_TRIP, abs=ROUND_TRIP)


@pytest.mark.parametrize("n", [5, 30, 100])
def test_bound_covers_as_often_as_it_says(n: int) -> None:
    """One limit: the bound lies below the true index in 95 % of studies (exact); two centred limits: more often."""
    rng = np.random.default_rng(20_000 + n)
    x = rng.standard_normal((DRAWS, n))
    mean, spread = x.mean(axis=1), x.std(axis=1, ddof=1)
    needed = observed_cpk_needed(1.33, n, 0.95)
    one, two = (3.99 - mean) / (3.0 * spread), (3.99 - np.abs(mean)) / (3.0 * spread)
    assert 0.935 <= np.mean(one < needed) <= 0.965
    assert np.mean(two < needed) >= 0.935


@pytest.mark.parametrize(
    "call",
    [
        lambda: parts_needed(0.0, 0.9),
        lambda: parts_needed(1e-3, 1.0),
        lambda: parts_needed(1e-3, 0.9, -1),
        lambda: parts_needed(1e-20, 0.9),
        lambda: observed_cpk_needed(1.0, 1, 0.9),
        lambda: lower_bound_cpk(1.0, 30, 0.0),
    ],
)
def test_figures_out_of_range_are_refused(call: object) -> None:
    with pytest.raises(RangeError):
        call()  # type: ignore[operator]
