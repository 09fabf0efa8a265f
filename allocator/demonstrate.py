"""What does a sample demonstrate: parts with so many bad ones, and the Cpk that must be observed to claim a target.

Both are one-sided: with the confidence asked for, the true figure is at least as good as what is claimed.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import betainc, chdtri, nctdtr, nctdtrit

from allocator.errors import RangeError
from allocator.roots import root_between

MOST_PARTS = 10**15
"""Beyond this a count of parts is no longer exact in floating point, nor of use to anyone."""


def parts_needed(delta: float, confidence: float, allowed_bad: int = 0) -> int:
    """Return how many parts, with at most so many bad ones among them, demonstrate a defect intensity.

    Model: a part is bad with probability 1 − e^−δ, independently. With no bad part allowed n = ⌈−ln(1 − C)/δ⌉, exact
    for that probability; else the least n with P(at most c bad of n) ≤ 1 − C, binomial.

    Parameters
    ----------
    delta : float [defects per part]
        Intensity to demonstrate, above 0; for a share p of bad parts it is −ln(1 − p).
    confidence : float
        C, above 0 and below 1.
    allowed_bad : int
        c, 0 or more.

    Raises
    ------
    RangeError
        When a figure is out of range, or more than 1e15 parts were needed.

    Notes
    -----
    Source: success-run theorem; binomial plans as in Birolini, Reliability Engineering, 2007, sect. 7.1.

    >>> parts_needed(-math.log(0.95), 0.95)
    59
    """
    _check_confidence(confidence)
    if not delta > 0.0 or allowed_bad < 0:
        raise RangeError(f"parts needed: intensity {delta} must be above 0, bad parts allowed {allowed_bad} 0 or more")
    # Half the chi-square quantile is the Poisson count; −ln(1 − C) where no bad part is allowed.
    counted = 0.5 * float(chdtri(2 * allowed_bad + 2, 1.0 - confidence))
    poisson = -math.log1p(-confidence) if allowed_bad == 0 else counted
    if poisson / delta > MOST_PARTS:
        raise RangeError(f"more than {MOST_PARTS:.0e} parts would be needed for an intensity of {delta:g}")
    if allowed_bad == 0:
        return math.ceil(poisson / delta)
    return _binomial_parts(-math.expm1(-delta), confidence, allowed_bad, poisson / delta)


def _binomial_parts(p: float, confidence: float, allowed_bad: int, near: float) -> int:
    """Return the least n with P(at most c bad of n) ≤ 1 − C, by doubling and halving from a near count."""
    low, high = allowed_bad, max(math.ceil(near), allowed_bad + 1)
    while betainc(allowed_bad + 1.0, high - allowed_bad, p) < confidence:
        low, high = high, 2 * high
    while high - low > 1:
        middle = (low + high) // 2
        enough = betainc(allowed_bad + 1.0, middle - allowed_bad, p) >= confidence
        low, high = (low, middle) if enough else (middle, high)
    return high


def observed_cpk_needed(target_cpk: float, n: int, confidence: float) -> float:
    """Return the Cpk that n parts must show for the true one to be at least the target, with that confidence.

    Model: normal measurements; 3√n·Ĉpk of one limit follows the noncentral t law with n − 1 degrees of freedom and
    noncentrality 3√n·Cpk. Two limits are never more demanding, so the bound holds for them too.

    Parameters
    ----------
    target_cpk : float
        Study index to claim.
    n : int
        Parts measured, 2 or more.
    confidence : float
        Above 0 and below 1.

    Raises
    ------
    RangeError
        When a figure is out of range.

    Notes
    -----
    Source: critical values of Pearn and Lin, Computers & Industrial Engineering 47 (2004) 351-369.

    >>> round(observed_cpk_needed(1.33, 50, 0.95), 3)
    1.612
    """
    _check_sample(n)
    _check_confidence(confidence)
    root = 3.0 * math.sqrt(n)
    return float(nctdtrit(n - 1, root * target_cpk, confidence)) / root


def lower_bound_cpk(observed: float, n: int, confidence: float, degrees: float | None = None) -> float:
    """Return the least true Cpk that n parts with this observed one still support, with that confidence.

    The inverse of `observed_cpk_needed` (exact for one limit, on the safe side for two).

    Parameters
    ----------
    observed : float
        Index as estimated.
    n : int
        Parts behind the mean, 2 or more.
    confidence : float
        Above 0 and below 1; 0.5 gives the median of what is supported, below it an upper limit.
    degrees : float, optional
        Degrees of freedom of the standard deviation (n − 1 unless given).

    Raises
    ------
    RangeError
        When a figure is out of range.

    >>> round(lower_bound_cpk(1.33, 30, 0.95), 2)
    1.02
    """
    _check_sample(n)
    _check_confidence(confidence)
    nu, root = (n - 1.0 if degrees is None else degrees), 3.0 * math.sqrt(n)
    t = root * observed

    def over(noncentral: float) -> float:
        below = float(nctdtr(nu, noncentral, t))
        # Where the law is 0 or 1 to all digits its series may give up.
        return (float(noncentral < t) if math.isnan(below) else below) - confidence

    # By Bissell's standard error the bound lies within a few of these; widened until it is bracketed.
    half = 3.0 * math.sqrt(1.0 + t * t / (2.0 * nu)) + 1.0
    low, high = t - half, t + half
    while over(low) < 0.0:
        low -= half
    while over(high) > 0.0:
        high += half
    return root_between(over, low, high, absolute=1e-12 * (1.0 + abs(t))) / root


def standard_error_cpk(observed: ArrayLike, n: ArrayLike, degrees: ArrayLike) -> Any:
    """Return Bissell's standard error of Cpk, √(1/(9n) + Cpk²/(2ν)) (Applied Statistics 39, 1990, 331-340).

    >>> round(float(standard_error_cpk(1.15, 45, 44)) * 1.96, 3)
    0.259
    """
    of_mean, of_spread = 1.0 / (9.0 * np.asarray(n)), np.asarray(observed) ** 2 / (2.0 * np.asarray(degrees))
    return np.sqrt(of_mean + of_spread)[()]


def _check_confidence(confidence: float) -> None:
    if not 0.0 < confidence < 1.0:
        raise RangeError(f"a confidence lies between 0 and 1, not at {confidence:g} (95 % is 0.95)")


def _check_sample(n: int) -> None:
    if n < 2:
        raise RangeError(f"a spread needs at least 2 parts, not {n}")
