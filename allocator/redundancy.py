"""How often does a set of copies fail when only some of them are needed, with a share of common causes."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import betainc, betaln

NEWTON_STEPS = 200


def failure(p: ArrayLike, installed: ArrayLike, needed: ArrayLike, common_cause: ArrayLike) -> Any:
    """Return the probability that fewer than `needed` of `installed` copies are good.

    Model (beta factor): 1 − (1 − βp)·P(at least m of n good at (1−β)p); the binomial tail is the regularised
    incomplete beta function I_x(n−m+1, m), exact in deep tails.

    Parameters
    ----------
    p : array_like [1]
        Defect probability of one copy.
    installed, needed : array_like of int
        n and m, 1 ≤ m ≤ n.
    common_cause : array_like [1]
        β, the share of one copy's failures that takes all copies.

    >>> round(1.0 - float(failure(0.02, 2, 1, 0.0)), 6)
    0.9996
    """
    p, n, m, beta = (np.asarray(x, dtype=float) for x in (p, installed, needed, common_cause))
    independent = betainc(n - m + 1.0, m, (1.0 - beta) * p)
    return (beta * p + (1.0 - beta * p) * independent)[()]


def failure_slopes(p: ArrayLike, installed: ArrayLike, needed: ArrayLike, common_cause: ArrayLike) -> tuple[Any, Any]:
    """Return the first and second derivative of `failure` in p (same parameters, 0 < p < 1)."""
    p, n, m, beta = (np.asarray(x, dtype=float) for x in (p, installed, needed, common_cause))
    x, a = (1.0 - beta) * p, n - m + 1.0
    with np.errstate(divide="ignore", invalid="ignore"):
        density = np.exp((a - 1.0) * np.log(x) + (m - 1.0) * np.log1p(-x) - betaln(a, m))
        curve = density * ((a - 1.0) / x - (m - 1.0) / (1.0 - x))
    density = np.where(x > 0.0, density, np.where(a == 1.0, m, 0.0))
    curve = np.where(x > 0.0, curve, 0.0)
    tail = betainc(a, m, x)
    first = beta * (1.0 - tail) + (1.0 - beta * p) * (1.0 - beta) * density
    second = (1.0 - beta * p) * (1.0 - beta) ** 2 * curve - 2.0 * beta * (1.0 - beta) * density
    return first[()], second[()]


def one_copy(total: ArrayLike, installed: ArrayLike, needed: ArrayLike, common_cause: ArrayLike) -> Any:
    """Return ln p of one copy so that the set fails with probability `total`, the inverse of `failure`.

    Newton on ln F against ln p, which is close to a straight line, kept inside a shrinking bracket; relative error of p
    about 1e-13 (p below 1e-300 is taken as 0).

    >>> round(float(np.exp(one_copy(0.0004, 2, 1, 0.0))), 6)
    0.02
    """
    total, n, m, beta = np.broadcast_arrays(
        *(np.asarray(x, dtype=float) for x in (total, installed, needed, common_cause))
    )
    low, high = np.full(total.shape, -690.0), np.zeros(total.shape)
    wanted = np.log(np.maximum(total, 1e-300))
    log_p = np.clip(wanted, low, -1e-9)
    settled = np.zeros(total.shape, dtype=bool)
    for _ in range(NEWTON_STEPS):
        p = np.exp(log_p)
        fails = failure(p, n, m, beta)
        low, high = np.where(fails > total, low, log_p), np.where(fails > total, log_p, high)
        with np.errstate(divide="ignore", invalid="ignore"):
            moved = log_p - (np.log(fails) - wanted) * fails / (failure_slopes(p, n, m, beta)[0] * p)
        moved = np.where((moved > low) & (moved < high), moved, 0.5 * (low + high))
        # A level that has settled is left alone, so that a result does not depend on what else is in the array.
        log_p, settled = (
            np.where(settled, log_p, moved),
            settled | (np.abs(moved - log_p) <= 1e-14 * np.abs(moved)),
        )
        if settled.all():
            break
    return log_p[()]
