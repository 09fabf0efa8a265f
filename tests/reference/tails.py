"""How often does one opportunity go wrong, and which sigma level gives a stated probability?

Two forms of the same tail: `exact_p` with 50 digits (mpmath), and `log_p` in floats for the thousands of evaluations of
a search. `test_reference_self.py` holds one against the other.
"""

from __future__ import annotations

import math

import mpmath
from scipy.optimize import brentq
from scipy.special import log_ndtr

FARTHEST_TAIL = 37.0
"""Beyond this distance [σ] the normal tail underflows a float."""


def exact_p(z: float, k: float = 0.0, s: float = 0.0, sides: int = 2) -> mpmath.mpf:
    """Defect probability of one opportunity, 50 digits."""
    with mpmath.workdps(50):
        near = mpmath.ncdf(-(mpmath.mpf(z) * (1 - mpmath.mpf(k)) - mpmath.mpf(s)))
        if sides == 1:
            return near
        return near + mpmath.ncdf(-(mpmath.mpf(z) * (1 + mpmath.mpf(k)) + mpmath.mpf(s)))


def log_p(z: float, k: float = 0.0, s: float = 0.0, sides: int = 2) -> float:
    """Natural logarithm of the defect probability."""
    near = float(log_ndtr(s - z * (1 - k)))
    if sides == 1:
        return near
    far = float(log_ndtr(-(z * (1 + k) + s)))
    top, low = max(near, far), min(near, far)
    return top + math.log1p(math.exp(low - top))


def p_of(z: float, k: float = 0.0, s: float = 0.0, sides: int = 2) -> float:
    """Defect probability of one opportunity."""
    return math.exp(log_p(z, k, s, sides))


def dp_dz(z: float, k: float = 0.0, s: float = 0.0, sides: int = 2) -> float:
    """Change of the defect probability with the sigma level (negative)."""
    slope = -(1 - k) * _density(z * (1 - k) - s)
    if sides == 2:
        slope -= (1 + k) * _density(z * (1 + k) + s)
    return slope


def _density(x: float) -> float:
    return math.exp(-0.5 * x * x) / math.sqrt(2 * math.pi)


def z_for(p: float, k: float = 0.0, s: float = 0.0, sides: int = 2) -> float:
    """Sigma level at which the defect probability is p: a bracket, no formula to get wrong."""
    goal = math.log(p)
    # two-sided, p falls from 1 at z = 0; one-sided, a process worse than a coin has a negative level
    low = 0.0 if sides == 2 else -(FARTHEST_TAIL + s) / (1 - k)
    high = (FARTHEST_TAIL + s) / (1 - k)
    return float(brentq(lambda z: log_p(z, k, s, sides) - goal, low, high, xtol=1e-14, rtol=8.9e-16, maxiter=500))


def group_p(p: float, copies: dict | None) -> float:
    """Probability that fewer than `needed` of the `installed` copies are good, or that the common cause strikes."""
    if copies is None:
        return p
    installed, needed, beta = _terms(copies)
    x = (1 - beta) * p
    short = math.fsum(
        math.comb(installed, bad) * x**bad * (1 - x) ** (installed - bad)
        for bad in range(installed - needed + 1, installed + 1)
    )
    return beta * p + short - beta * p * short


def exact_group_p(p: float, copies: dict) -> mpmath.mpf:
    """The same from the formula as written, 1 − (1 − βp)·P(at least m good), with 50 digits."""
    with mpmath.workdps(60):
        installed, needed, beta = _terms(copies)
        x = (1 - mpmath.mpf(beta)) * mpmath.mpf(p)
        enough = mpmath.fsum(
            mpmath.binomial(installed, good) * (1 - x) ** good * x ** (installed - good)
            for good in range(needed, installed + 1)
        )
        return 1 - (1 - mpmath.mpf(beta) * mpmath.mpf(p)) * enough


def group_slope(p: float, copies: dict | None) -> float:
    """Change of `group_p` with p."""
    if copies is None:
        return 1.0
    installed, needed, beta = _terms(copies)
    x = (1 - beta) * p
    spare = installed - needed
    rise = installed * math.comb(installed - 1, spare) * x**spare * (1 - x) ** (needed - 1) * (1 - beta)
    short = (group_p(p, copies) - beta * p) / (1 - beta * p)
    return beta * (1 - short) + rise * (1 - beta * p)


def _terms(copies: dict) -> tuple[int, int, float]:
    return copies["installed"], copies["needed"], copies.get("common_cause", 0.0)
