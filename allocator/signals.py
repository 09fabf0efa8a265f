"""Do measurements look like one steady, normal process: control chart rules, normality, outliers.

Nothing is removed here; what looks odd is named.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.special import log_ndtr, stdtrit

from allocator.results.study import Fit, Signal
from allocator.spread import D2, D3, c4

Array = NDArray[np.float64]
FEWEST = 8
"""Parts below which neither normality nor outliers can be judged."""
RUN, TREND = 9, 6
"""Points in a row on one side of the mean, and steadily rising or falling (Nelson, J. Quality Technology 16, 1984)."""
MOST_OUTLIERS = 10
ALPHA = 0.05
WEIBULL_CRITICAL = 0.757
"""5 % point of the adjusted statistic for a Weibull with both parameters fitted (D'Agostino and Stephens, 1986)."""


def chart_signals(values: Array, names: Sequence[str], subgroups: Sequence[str] | None, within: float) -> list[Signal]:
    """Return the rules that a chart of subgroup means and deviations, or of single values and ranges, breaks.

    Rules: a point beyond three standard errors; nine in a row on one side of the mean; six in a row rising or falling;
    a spread beyond its upper limit.

    Parameters
    ----------
    values : shape (n,)
        In the order made.
    names : sequence of str, length n
        What each value is called, where there are no subgroups.
    subgroups : sequence of str or None
    within : float
        Standard deviation within subgroups, or from part to part.
    """
    if subgroups is None:
        ranges = np.abs(np.diff(values))
        wide = ranges > (1.0 + 3.0 * D3 / D2) * D2 * within
        spread = _named("moving ranges", "beyond the upper limit", np.append(False, wide), names)
        return _mean_signals("single values", values, within, values.mean(), names) + spread
    labels, first, group = np.unique(np.asarray(subgroups), return_index=True, return_inverse=True)
    order = np.argsort(first)
    size, names = np.bincount(group)[order], [str(label) for label in labels[order]]
    means = (np.bincount(group, values) / np.bincount(group))[order]
    deviations = np.array([np.std(values[group == i], ddof=1) if np.sum(group == i) > 1 else 0.0 for i in order])
    factor = c4(np.maximum(size, 2))
    wide = deviations > within * (factor + 3.0 * np.sqrt(1.0 - factor**2))
    found = _mean_signals("subgroup means", means, within / np.sqrt(size), values.mean(), names)
    return found + _named("subgroup deviations", "beyond the upper limit", wide, names)


def _mean_signals(chart: str, points: Array, error: Array | float, mean: float, names: Sequence[str]) -> list[Signal]:
    side, step = np.sign(points - mean), np.sign(np.diff(points))
    found = _named(chart, "beyond three standard errors", np.abs(points - mean) > 3.0 * error, names)
    found += _named(chart, f"{RUN} in a row on one side of the mean", in_a_row(side, RUN), names)
    rising = in_a_row(step, TREND - 1)
    both_ends = np.append(rising, False) | np.append(False, rising)
    return found + _named(chart, f"{TREND} in a row rising or falling", both_ends, names)


def _named(chart: str, rule: str, where: NDArray[np.bool_], names: Sequence[str]) -> list[Signal]:
    places = tuple(names[i] for i in np.flatnonzero(where).tolist())
    return [Signal(chart, rule, places)] if places else []


def in_a_row(signs: Array, least: int) -> NDArray[np.bool_]:
    """Return where a sign other than 0 is one of at least so many equal ones in a row.

    >>> in_a_row(np.array([1.0, 1.0, 1.0, -1.0, 0.0, 0.0, 0.0]), 3).tolist()
    [True, True, True, False, False, False, False]
    """
    starts = np.flatnonzero(np.diff(signs, prepend=np.nan) != 0.0)
    length = np.diff(np.append(starts, len(signs)))
    return np.asarray(np.repeat(length >= least, length) & (signs != 0.0))


def normal_fit(values: Array) -> Fit:
    """Return the Anderson-Darling test of normality with fitted mean and standard deviation.

    Source: Stephens' adjustment and p-values, D'Agostino and Stephens, Goodness-of-Fit Techniques, 1986, table 4.9.
    """
    n = len(values)
    scores = np.sort((values - values.mean()) / np.std(values, ddof=1))
    adjusted = anderson_darling(log_ndtr(scores), log_ndtr(-scores)) * (1.0 + 0.75 / n + 2.25 / n**2)
    p = _normal_p(adjusted)
    return Fit("normal", adjusted, p, p < ALPHA)


def weibull_fit(log_below: Array, log_above: Array) -> Fit:
    """Return the test of a fitted Weibull from ln F and ln(1 − F) of the sorted values: a critical value, no p."""
    adjusted = anderson_darling(log_below, log_above) * (1.0 + 0.2 / math.sqrt(len(log_below)))
    return Fit("Weibull", adjusted, None, adjusted > WEIBULL_CRITICAL)


def anderson_darling(log_below: Array, log_above: Array) -> float:
    """Return A² = −n − Σ(2i − 1)(ln F_i + ln(1 − F_(n+1−i)))/n from both logarithms at the sorted values."""
    n = len(log_below)
    weight = 2.0 * np.arange(1, n + 1) - 1.0
    return float(-n - np.mean(weight * (log_below + log_above[::-1])))


def _normal_p(a: float) -> float:
    if a >= 0.6:
        return math.exp(1.2937 - 5.709 * min(a, 13.0) + 0.0186 * min(a, 13.0) ** 2)
    if a >= 0.34:
        return math.exp(0.9177 - 4.279 * a - 1.38 * a**2)
    if a >= 0.2:
        return 1.0 - math.exp(-8.318 + 42.796 * a - 59.938 * a**2)
    return 1.0 - math.exp(-13.436 + 101.14 * a - 223.73 * a**2)


def outliers(values: Array) -> list[int]:
    """Return the positions of values that do not belong with the others, worst first (generalised ESD, 5 %).

    At most ten, and at most a fifth of the sample. Source: Rosner, Technometrics 25 (1983) 165-172.
    """
    left, found, last = np.arange(len(values)), [], 0
    for i in range(1, min(MOST_OUTLIERS, len(values) // 5) + 1):
        some, nu = values[left], len(left) - 2
        off = np.abs(some - some.mean()) / np.std(some, ddof=1)
        worst = int(np.argmax(off))
        t = float(stdtrit(nu, 1.0 - ALPHA / (2.0 * len(left))))
        if off[worst] > (len(left) - 1) * t / math.sqrt((nu + t * t) * len(left)):
            last = i
        found.append(int(left[worst]))
        left = np.delete(left, worst)
        if np.ptp(values[left]) == 0.0:
            break
    return found[:last]
