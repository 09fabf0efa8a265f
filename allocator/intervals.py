"""Within which limits does a counted figure lie: 95 % intervals for shares, for counts and for means of batches."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.special import betaincinv, gammaincinv, stdtrit

Array = NDArray[np.float64]
CONFIDENCE = 0.95
FEW = 30
"""Below so many events the spread between batches says little, and the count itself gives the interval."""
_TAIL = 0.5 * (1.0 - CONFIDENCE)


def share_interval(hits: int, of: int) -> tuple[float, float]:
    """Return the 95 % interval of a share from `hits` in `of` tries (Jeffreys: Beta(x + 1/2, n − x + 1/2)).

    0 hits reach down to 0, and as many hits as tries up to 1. Source: Brown, Cai and DasGupta, Statistical Science 16
    (2001) 101-133.

    >>> tuple(round(x, 5) for x in share_interval(0, 1000))
    (0.0, 0.00251)
    """
    a, b = hits + 0.5, of - hits + 0.5
    low = 0.0 if hits == 0 else float(betaincinv(a, b, _TAIL))
    return low, 1.0 if hits == of else float(betaincinv(a, b, 1.0 - _TAIL))


def count_interval(events: int) -> tuple[float, float]:
    """Return the 95 % interval of the expected number of events when so many were seen (Jeffreys: Gamma(x + 1/2)).

    >>> tuple(round(x, 2) for x in count_interval(4))
    (1.35, 9.51)
    """
    low = 0.0 if events == 0 else float(gammaincinv(events + 0.5, _TAIL))
    return low, float(gammaincinv(events + 0.5, 1.0 - _TAIL))


def mean_interval(batches: Array, sizes: Array) -> tuple[float, float]:
    """Return the 95 % interval of a mean from the means of batches, by Student's t.

    Parameters
    ----------
    batches, sizes : shape (n_batches,)
        Mean and size of each batch; two batches or more.

    >>> tuple(round(x, 3) for x in mean_interval(np.array([1.0, 2.0, 3.0]), np.ones(3)))
    (-0.484, 4.484)
    """
    weights = sizes / sizes.sum()
    middle, degrees = float(weights @ batches), len(batches) - 1
    half = float(stdtrit(degrees, 1.0 - _TAIL)) * math.sqrt(float(weights @ (batches - middle) ** 2) / degrees)
    return middle - half, middle + half


def spread_interval(halves: Array) -> tuple[float, float]:
    """Return the middle 95 % of a figure that differs from line to line, freed of the chance within each line.

    Parameters
    ----------
    halves : shape (n_lines, 2)
        The figure of each line drawn, from two runs of equal size; their differences tell the chance within a line.
        The values are drawn together about their mean until their variance is that between the lines alone.
    """
    values = halves.mean(axis=1)
    middle, whole = float(values.mean()), float(values.var(ddof=1))
    within = float(np.mean((halves[:, 0] - halves[:, 1]) ** 2)) / 4.0
    share = math.sqrt(max(whole - within, 0.0) / whole) if whole > 0.0 else 0.0
    low, high = np.quantile(middle + (values - middle) * share, [_TAIL, 1.0 - _TAIL])
    of_mean = mean_interval(values, np.ones(len(values)))
    return min(float(low), of_mean[0]), max(float(high), of_mean[1])
