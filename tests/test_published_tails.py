"""Do the tails agree with a 50-digit reference, and does the way back lead to the same probability?

The reference is the complementary error function of mpmath at 50 digits; arguments are a seeded random sample.
"""

from __future__ import annotations

import math
import random

import mpmath
import pytest

from allocator.capability import defects, log_defects, sigma_from_log_defects

DIGITS = 50
EDGE = 37.0
"""Sigma level at which p is about 1e-299, the last for which it is an ordinary number [σ]."""
PROBABILITY = 1e-12
"""Relative error of p that the program states."""
DEEP = 1e-11
"""Absolute error of ln p up to 100 σ: ln p is about -5,000 there, where numbers lie 9e-13 apart."""
ROUND_TRIP = 1e-10
"""Relative error of p after p → z → p that the program states."""
DEEP_ROUND_TRIP = 1e-11
"""Relative error of ln p after the way back, where p itself is no ordinary number any more."""
SAMPLE = 300

Case = tuple[float, float, float, int]


def tail(x: mpmath.mpf) -> mpmath.mpf:
    return mpmath.erfc(-x / mpmath.sqrt(2)) / 2


def exact(z: float, k: float, shift: float, sides: int) -> mpmath.mpf:
    """p as the model writes it, for exactly these doubles."""
    z_, k_, s_ = mpmath.mpf(z), mpmath.mpf(k), mpmath.mpf(shift)
    near = tail(s_ - z_ * (1 - k_))
    return near if sides == 1 else near + tail(-(z_ * (1 + k_) + s_))


def sample(seed: int, low: float, high: float, most_offset: float) -> list[Case]:
    """Random values between low and high, each with a random offset, shift and number of sides."""
    rng = random.Random(seed)
    return [
        (
            rng.uniform(low, high), rng.choice([0.0, rng.uniform(0.0, most_offset)]),
            rng.choice([0.0, 1.5, rng.uniform(0.0, 3.0)]), rng.choice([1, 2]),
        )
        for _ in range(SAMPLE)
    ]  # fmt: skip


def worst(errors: list[tuple[float, Case]]) -> tuple[float, Case]:
    return max(errors)


def test_p_is_exact_as_long_as_it_is_a_number() -> None:
    with mpmath.workdps(DIGITS):
        errors = [
            (float(abs(mpmath.mpf(float(defects(*case))) / exact(*case) - 1)), case)
            for case in sample(1, 0.0, EDGE, 0.99)
        ]
    assert worst(errors)[0] <= PROBABILITY, worst(errors)


def test_the_logarithm_goes_on_where_p_underflows() -> None:
    with mpmath.workdps(DIGITS):
        errors = [
            (float(abs(mpmath.mpf(float(log_defects(*case))) - mpmath.log(exact(*case)))), case)
            for case in sample(2, EDGE, 100.0, 0.3)
        ]
    assert worst(errors)[0] <= DEEP, worst(errors)
    assert float(defects(100.0)) == 0.0, "p itself is gone there, its logarithm is not"


def test_from_p_to_the_sigma_level_and_back() -> None:
    errors = []
    with mpmath.workdps(DIGITS):
        for log_p, k, shift, sides in sample(3, math.log(1e-300), math.log(0.9), 0.99):
            z = float(sigma_from_log_defects(log_p, k, shift, sides))
            back = exact(z, k, shift, sides) / mpmath.exp(mpmath.mpf(log_p))
            errors.append((float(abs(back - 1)), (log_p, k, shift, sides)))
    assert worst(errors)[0] <= ROUND_TRIP, worst(errors)


@pytest.mark.parametrize("p", [0.9, 0.5, 1e-3, 1e-12, 1e-100, 1e-300])
def test_the_ends_of_the_range_come_back(p: float) -> None:
    for k, shift, sides in ((0.0, 0.0, 1), (0.0, 0.0, 2), (0.0, 1.5, 2), (0.4, 1.5, 1), (0.4, 0.0, 2)):
        z = sigma_from_log_defects(math.log(p), k, shift, sides)
        assert float(defects(z, k, shift, sides)) == pytest.approx(p, rel=ROUND_TRIP), (k, shift, sides)


def test_the_way_back_from_beyond_the_smallest_number() -> None:
    errors = []
    with mpmath.workdps(DIGITS):
        for log_p, k, shift, sides in sample(4, -5000.0, -700.0, 0.9):
            z = float(sigma_from_log_defects(log_p, k, shift, sides))
            assert z > EDGE
            errors.append((float(abs(mpmath.log(exact(z, k, shift, sides)) / log_p - 1)), (log_p, k, shift, sides)))
    assert worst(errors)[0] <= DEEP_ROUND_TRIP, worst(errors)
