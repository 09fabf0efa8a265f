"""Which skewed family describes a characteristic that cannot fall below zero, and what index does it give."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import log_ndtr, ndtri

from allocator.results.study import Fit
from allocator.signals import normal_fit, weibull_fit

Array = NDArray[np.float64]
NEAR_ONE, MEDIAN, NEAR_ZERO = 0.99865010196837, 0.5, 0.00134989803163
"""What a normal law holds below +3σ, its mean and −3σ: the percentiles that stand for them."""
LOGNORMAL, WEIBULL = "lognormal", "Weibull"
NEWTON_STEPS, SETTLED = 30, 1e-9


@dataclass(frozen=True)
class Family:
    """A fitted family: of ln x the mean and standard deviation (lognormal), or scale and shape (Weibull).

    The two parameters may be arrays, one entry per sample.
    """

    name: str
    first: Any
    second: Any

    def quantile(self, share: float) -> Any:
        """Return the value below which this share lies."""
        if self.name == LOGNORMAL:
            return np.exp(self.first + self.second * ndtri(share))
        return self.first * (-np.log1p(-share)) ** (1.0 / self.second)

    def log_below(self, x: ArrayLike) -> Any:
        """Return ln F(x) for x > 0."""
        if self.name == LOGNORMAL:
            return log_ndtr((np.log(x) - self.first) / self.second)
        return np.log(-np.expm1(-((np.asarray(x) / self.first) ** self.second)))

    def log_above(self, x: ArrayLike) -> Any:
        """Return ln(1 − F(x)) for x > 0."""
        if self.name == LOGNORMAL:
            return log_ndtr(-(np.log(x) - self.first) / self.second)
        return -((np.asarray(x) / self.first) ** self.second)

    def likelihood(self, x: Array) -> float:
        """Return the log-likelihood of a sample, shape (n,)."""
        if self.name == LOGNORMAL:
            off = (np.log(x) - self.first) / self.second
            return float(np.sum(-0.5 * off**2 - np.log(self.second * x * np.sqrt(2.0 * np.pi))))
        scaled = x / self.first
        return float(
            np.sum(np.log(self.second / self.first) + (self.second - 1.0) * np.log(scaled) - scaled**self.second)
        )

    def draw(self, rng: np.random.Generator, size: tuple[int, int]) -> Array:
        """Return samples of the family."""
        if self.name == LOGNORMAL:
            return np.asarray(np.exp(self.first + self.second * rng.standard_normal(size)))
        return np.asarray(self.first * rng.standard_exponential(size) ** (1.0 / self.second))


def fitted(name: str, x: Array) -> Family:
    """Return the family fitted to positive values along the last axis, by maximum likelihood (lognormal: s of ln x).

    Parameters
    ----------
    name : str
        'lognormal' or 'Weibull'.
    x : shape (…, n)
    """
    logs = np.log(x)
    if name == LOGNORMAL:
        return Family(name, logs.mean(axis=-1), logs.std(axis=-1, ddof=1))
    highest = logs.max(axis=-1, keepdims=True)
    centred = logs - highest  # at most 0, so that no power overflows
    shape = 1.2 / logs.std(axis=-1, keepdims=True)
    mean = centred.mean(axis=-1, keepdims=True)
    for _ in range(NEWTON_STEPS):
        powers = np.exp(shape * centred)
        whole = powers.sum(axis=-1, keepdims=True)
        first = (powers * centred).sum(axis=-1, keepdims=True) / whole
        second = (powers * centred**2).sum(axis=-1, keepdims=True) / whole
        # In ln(shape) the step never leaves the positive shapes.
        residual, slope = 1.0 / shape + mean - first, -1.0 / shape**2 - (second - first**2)
        step = np.clip(-residual / (slope * shape), -1.0, 1.0)
        shape = shape * np.exp(step)
        if np.max(np.abs(step)) < SETTLED:
            break
    scale = highest + np.log(np.exp(shape * centred).mean(axis=-1, keepdims=True)) / shape
    return Family(name, np.exp(scale[..., 0]), shape[..., 0])


def best_family(x: Array) -> Family:
    """Return the likelier of the two families fitted to a sample of positive values."""
    return max((fitted(name, x) for name in (LOGNORMAL, WEIBULL)), key=lambda family: family.likelihood(x))


def percentile_indices(family: Family, lsl: float | None, usl: float | None) -> tuple[Any, Any]:
    """Return Pp (None with one limit) and Ppk by percentiles.

    Ppk is the least of (USL − X50)/(X99.865 − X50) and (X50 − LSL)/(X50 − X0.135), Pp the width of the limits over
    X99.865 − X0.135. Source: percentile method of ISO 22514-2.
    """
    high, middle, low = (family.quantile(share) for share in (NEAR_ONE, MEDIAN, NEAR_ZERO))
    sides = []
    if usl is not None:
        sides.append((usl - middle) / (high - middle))
    if lsl is not None:
        sides.append((middle - lsl) / (middle - low))
    whole = (usl - lsl) / (high - low) if usl is not None and lsl is not None else None
    return whole, np.min(np.stack(sides), axis=0)


def outside(family: Family, lsl: float | None, usl: float | None) -> float:
    """Return the share of parts outside the limits by the family."""
    above = 0.0 if usl is None else float(np.exp(family.log_above(usl)))
    return above + (0.0 if lsl is None else float(np.exp(family.log_below(lsl))))


def fit_of(family: Family, x: Array) -> Fit:
    """Return how well the family describes the values."""
    if family.name == LOGNORMAL:
        test = normal_fit(np.log(x))
        return Fit(LOGNORMAL, test.statistic, test.p, test.doubtful)
    ordered = np.sort(x)
    return weibull_fit(family.log_below(ordered), family.log_above(ordered))


def normal_scores(family: Family, x: Array) -> Array:
    """Return the values on the scale on which the family is normal."""
    below, above = family.log_below(x), family.log_above(x)
    # From the nearer tail, so that far values do not round to infinity.
    return np.asarray(np.where(below < above, ndtri(np.exp(below)), -ndtri(np.exp(above))))
