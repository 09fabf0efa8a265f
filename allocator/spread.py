"""How widely do measurements scatter: within subgroups, from part to part, in all; and how sure is that."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import gammaln

from allocator.errors import RangeError

Array = NDArray[np.float64]

D2 = 2.0 / math.sqrt(math.pi)
"""Mean range of two standard normal values, 1.128."""
D3 = math.sqrt(2.0 - 4.0 / math.pi)
"""Standard deviation of that range, 0.853."""
NEIGHBOURS = 2.0 / math.pi * (math.pi / 12.0 + math.sqrt(0.75) - 1.0)
"""Covariance of two moving ranges that share a value, over 2σ² (bivariate normal with correlation −1/2)."""


@dataclass(frozen=True)
class Spread:
    """A standard deviation with the law of its error: `of_law`² times `degrees` over σ² is chi-square.

    `of_law` is `std` itself, except where `std` is unbiased for σ rather than its square for σ².
    """

    std: float
    degrees: float
    of_law: float
    method: str


def total_spread(values: Array) -> Spread:
    """Return the standard deviation of all values about their mean, n − 1 degrees of freedom."""
    std = float(np.std(values, ddof=1))
    return Spread(std, len(values) - 1.0, std, "all parts")


def within_spread(values: Array, subgroups: Sequence[str] | None) -> Spread:
    """Return the short-term spread: pooled within subgroups, or by moving ranges where parts come one by one."""
    if subgroups is None:
        return moving_range_spread(values)
    std, degrees = pooled_within(values, subgroups)
    return Spread(std, float(degrees), std, "pooled within subgroups")


def pooled_within(values: Array, subgroups: Sequence[str]) -> tuple[float, int]:
    """Return the standard deviation pooled within subgroups, and its degrees of freedom n − number of subgroups.

    Raises
    ------
    RangeError
        When no subgroup has two parts.
    """
    _, group = np.unique(np.asarray(subgroups), return_inverse=True)
    size = np.bincount(group)
    degrees = len(values) - len(size)
    if degrees < 1:
        raise RangeError("a spread within subgroups needs a subgroup of two parts or more")
    # Deviations from the overall mean first: far from 0 the group means would lose their last digits.
    centred = values - values.mean()
    off = centred - (np.bincount(group, centred) / size)[group]
    return math.sqrt(float(off @ off) / degrees), degrees


def moving_range_spread(values: Array) -> Spread:
    """Return the standard deviation by the mean moving range of two over 1.128, for parts in the order made.

    Its error follows a chi law whose degrees of freedom match the exact variance of the mean moving range of
    independent normal values, about 0.6 per part.
    """
    n = len(values)
    std = float(np.mean(np.abs(np.diff(values)))) / D2
    relative = ((n - 1) * D3**2 + 4.0 * (n - 2) * NEIGHBOURS) / ((n - 1) * D2) ** 2
    degrees = chi_degrees(relative)
    return Spread(std, degrees, std * float(c4(degrees + 1.0)), "moving ranges of two")


def chi_degrees(relative_variance: float) -> float:
    """Return the degrees of freedom at which a chi variable has this variance over its squared mean.

    >>> round(chi_degrees(1.0 / c4(11) ** 2 - 1.0), 6)
    10.0
    """
    low, high = 1e-3, 2.0 / relative_variance
    for _ in range(100):
        middle = 0.5 * (low + high)
        above = 1.0 / float(c4(middle + 1.0)) ** 2 - 1.0 > relative_variance
        low, high = (middle, high) if above else (low, middle)
    return 0.5 * (low + high)


def c4(n: ArrayLike) -> Any:
    """Return E(s)/σ for the standard deviation s of n normal values.

    >>> round(float(c4(5)), 4)
    0.94
    """
    nu = np.asarray(n, dtype=float) - 1.0
    return (np.sqrt(2.0 / nu) * np.exp(gammaln(0.5 * (nu + 1.0)) - gammaln(0.5 * nu)))[()]
