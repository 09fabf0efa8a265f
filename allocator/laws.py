"""What does going from one sigma level to a better one cost: the shapes of the laws of improvement.

A shape is 0 at the starting level z0 and multiplies a scale in money; with tolerance ∝ 1/z the power law is the
reciprocal-power family of the cost-tolerance literature (Chase and Greenwood, Manufacturing Review 1, 1988).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from allocator.errors import RangeError

LOG_TEN = float(np.log(10.0))


def power(z: ArrayLike, start: ArrayLike, exponent: ArrayLike) -> Any:
    """Return (z/z0)^a − 1 for z, z0 > 0 [σ] and a > 0.

    >>> float(power(6.0, 3.0, 1.0))
    1.0
    """
    return np.expm1(np.asarray(exponent) * np.log(np.asarray(z, dtype=float) / start))[()]


def exponential(z: ArrayLike, start: ArrayLike, rate: ArrayLike) -> Any:
    """Return exp(a(z − z0)) − 1 for z, z0 [σ] and a > 0 [1/σ].

    >>> float(exponential(4.0, 4.0, 2.0))
    0.0
    """
    return np.expm1(np.asarray(rate) * (np.asarray(z, dtype=float) - start))[()]


def decade(log_p: ArrayLike, log_start: ArrayLike) -> Any:
    """Return log10(p0/p), the number of tenfold cuts of the defect probability, from the logarithms of both.

    >>> round(float(decade(np.log(1e-5), np.log(1e-3))), 12)
    2.0
    """
    return ((np.asarray(log_start) - np.asarray(log_p)) / LOG_TEN)[()]


def lower_envelope(
    intensity: NDArray[np.float64], cost: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.bool_]]:
    """Return the lower convex envelope of quotes in the defect intensity, and which quotes lie on it.

    Parameters
    ----------
    intensity : shape (n_points,) [defects per item]
        δ of today's level first, then of the quotes, in any order.
    cost : shape (n_points,)
        0 for today, then the quoted costs.

    Returns
    -------
    knots, costs : shape (n_knots,)
        In rising intensity up to today's, costs falling and convex; quotes worse than today or above the envelope are
        left out.
    kept : bool, shape (n_points,)

    Raises
    ------
    RangeError
        When no intensity is given.
    """
    if len(intensity) == 0:
        raise RangeError("an envelope needs today's level")
    order = [i for i in np.lexsort((cost, intensity)) if intensity[i] < intensity[0] or i == 0]
    hull: list[int] = []
    for i in order:
        if hull and intensity[i] == intensity[hull[-1]]:
            continue
        while len(hull) > 1 and _above(hull[-2], hull[-1], i, intensity, cost):
            hull.pop()
        hull.append(int(i))
    kept = np.zeros(len(intensity), dtype=bool)
    kept[hull] = True
    return intensity[hull], cost[hull], kept


def _above(left: int, middle: int, right: int, x: NDArray[np.float64], y: NDArray[np.float64]) -> bool:
    """Return whether the middle point lies on or above the chord from left to right."""
    return bool((y[middle] - y[left]) * (x[right] - x[left]) >= (y[right] - y[left]) * (x[middle] - x[left]))
