"""Which indices does a process have, and between which limits do they lie: normal and percentile studies."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtri, ndtr

from allocator import bounded
from allocator.bounded import Family
from allocator.demonstrate import lower_bound_cpk
from allocator.errors import RangeError
from allocator.results.study import Index, Indices
from allocator.spread import Spread

Array = NDArray[np.float64]
NONE = Index(None, None, None)
REFITS, SEED = 2000, 20_260_301
"""Samples drawn from a fitted family for the limits of its index, always the same ones."""
REFIT_VALUES = 200_000
"""Values drawn at once, to bound the memory."""


def normal_indices(
    mean: float, within: Spread, total: Spread, n: int, lsl: float | None, usl: float | None, confidence: float
) -> Indices:
    """Return Cp, Cpk (within) and Pp, Ppk (total) of a normal characteristic with two-sided limits.

    Parameters
    ----------
    mean : float
    within, total : Spread
    n : int
        Parts behind the mean.
    lsl, usl : float or None
        Limits, at least one.
    confidence : float
        Of the limits.

    Notes
    -----
    Cp and Pp: exact, by the chi-square law of the variance. Cpk and Ppk: by the noncentral t law, exact for one limit;
    with two limits the nearer one is taken as the only one, and the limits cover 93.8 to 95.5 % for 95 %.
    """
    half = None if lsl is None or usl is None else 0.5 * (usl - lsl)
    shares = _outside(mean, total.std, lsl, usl)
    return Indices(
        cp=_whole_index(half, within, confidence),
        cpk=_near_index(nearest(mean, lsl, usl), within, n, confidence),
        pp=_whole_index(half, total, confidence),
        ppk=_near_index(nearest(mean, lsl, usl), total, n, confidence),
        modelled_ppm=1e6 * shares,
    )


def nearest(mean: float, lsl: float | None, usl: float | None) -> float:
    """Return the distance from the mean to the nearer limit, negative where the mean lies beyond it."""
    return min(np.inf if usl is None else usl - mean, np.inf if lsl is None else mean - lsl)


def _whole_index(half: float | None, spread: Spread, confidence: float) -> Index:
    if half is None:
        return NONE
    lower, upper = (
        half / (3.0 * spread.of_law) * math.sqrt(chdtri(spread.degrees, above) / spread.degrees)
        for above in (0.5 + 0.5 * confidence, 0.5 - 0.5 * confidence)
    )
    return Index(half / (3.0 * spread.std), lower, upper)


def _near_index(distance: float, spread: Spread, n: int, confidence: float) -> Index:
    tail = 0.5 - 0.5 * confidence
    index = distance / (3.0 * spread.of_law)
    lower, upper = (lower_bound_cpk(index, n, c, spread.degrees) for c in (1.0 - tail, tail))
    return Index(distance / (3.0 * spread.std), lower, upper)


def at_least(distance: float, spread: Spread, n: int, confidence: float) -> float:
    """Return the one-sided lower limit of the index of the nearer limit."""
    return lower_bound_cpk(distance / (3.0 * spread.of_law), n, confidence, spread.degrees)


def _outside(mean: float, std: float, lsl: float | None, usl: float | None) -> float:
    above = 0.0 if usl is None else float(ndtr(-(usl - mean) / std))
    return above + (0.0 if lsl is None else float(ndtr(-(mean - lsl) / std)))


def without_gauge(spread: Spread, gauge_variance: float) -> Spread:
    """Return the spread less the variance that the gauge adds to every reading.

    Raises
    ------
    RangeError
        When nothing is left.
    """
    left = spread.std**2 - gauge_variance
    if left <= 0.0:
        raise RangeError(
            f"the gauge would explain all of the spread ({spread.method}): its standard deviation is "
            f"{math.sqrt(gauge_variance):.4g}, that of the parts {spread.std:.4g}"
        )
    share = math.sqrt(left) / spread.std
    return replace(spread, std=spread.std * share, of_law=spread.of_law * share)


def percentile_study(family: Family, values: Array, lsl: float | None, usl: float | None, confidence: float) -> Indices:
    """Return Pp and Ppk of a fitted family by percentiles; there is no short-term index.

    The limits are those of the index over samples of the same size drawn from the fitted family and fitted anew, as
    ratios to the index itself and turned round (so that a ratio that runs high lowers the limit).
    """
    whole, near = bounded.percentile_indices(family, lsl, usl)
    drawn_whole, drawn_near = _refitted(family, len(values), lsl, usl)
    return Indices(
        cp=NONE,
        cpk=NONE,
        pp=NONE if whole is None else _by_refits(float(whole), drawn_whole, confidence),
        ppk=_by_refits(float(near), drawn_near, confidence),
        modelled_ppm=1e6 * bounded.outside(family, lsl, usl),
    )


def _refitted(family: Family, n: int, lsl: float | None, usl: float | None) -> tuple[Array, Array]:
    rng = np.random.default_rng(SEED)
    whole, near, batch = [], [], max(1, REFIT_VALUES // n)
    for done in range(0, REFITS, batch):
        again = bounded.fitted(family.name, family.draw(rng, (min(batch, REFITS - done), n)))
        wide, close = bounded.percentile_indices(again, lsl, usl)
        near.append(close)
        whole.append(close if wide is None else wide)
    return np.concatenate(whole), np.concatenate(near)


def _by_refits(value: float, drawn: Array, confidence: float) -> Index:
    tail = 0.5 - 0.5 * confidence
    low, high = np.quantile(drawn, [tail, 1.0 - tail])
    if value <= 0.0 or low <= 0.0:
        return Index(value, 2.0 * value - float(high), 2.0 * value - float(low))
    return Index(value, value * value / float(high), value * value / float(low))
