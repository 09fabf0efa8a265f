"""How often does a process at a given sigma level miss its limits, and back: normal tails, deep and exact.

Notation: z = T/σ is the sigma level as if centred, T the half-width of the limits, k = |mean − mid-spec|/T the
fixed offset, s the drift allowance in σ, p the defect probability per opportunity. All functions take scalars or
arrays that broadcast together.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import log_ndtr, ndtri_exp

Array = NDArray[np.float64]

LOG_ROOT_TWO_PI = 0.5 * np.log(2.0 * np.pi)
MOST_STEPS = 40
NEAR_ENOUGH = 1e-6
"""Relative length of a step of Halley's method after which its error, of third order in the step, is rounding."""


def _arguments(z: ArrayLike, k: ArrayLike, shift: ArrayLike, sides: ArrayLike) -> tuple[Array, Array, Array, Array]:
    """Return the near and far tail arguments, the two slopes' factor k, and where the far tail counts."""
    z, k, shift = (np.asarray(x, dtype=float) for x in (z, k, shift))
    near = shift - z * (1.0 - k)
    far = -(z * (1.0 + k) + shift)
    return near, far, k, np.asarray(sides) == 2


def log_defects(z: ArrayLike, k: ArrayLike = 0.0, shift: ArrayLike = 0.0, sides: ArrayLike = 2) -> Any:
    """Return ln p, the logarithm of the defect probability per opportunity.

    Model: p = Φ(−(z(1−k) − s)) + Φ(−(z(1+k) + s)) with two limits, the first term with one.

    Parameters
    ----------
    z : array_like [σ]
        Sigma level T/σ, as if centred.
    k : array_like [1]
        Offset of the mean from mid-spec as a share of T, 0 ≤ k < 1.
    shift : array_like [σ]
        Drift allowance.
    sides : array_like of 1 or 2
        Number of limits.

    Returns
    -------
    array or float
        ln p; its absolute error is below 1e-12 for z up to 37 and it does not underflow beyond.

    >>> round(float(np.exp(log_defects(3.0))) * 1e6, 3)
    2699.796
    """
    near, far, _, two = _arguments(z, k, shift, sides)
    one_tail = log_ndtr(near)
    if one_tail.ndim == 0 or one_tail.shape != two.shape:
        return np.where(two, np.logaddexp(one_tail, log_ndtr(far)), one_tail)[()]
    one_tail[two] = np.logaddexp(one_tail[two], log_ndtr(far[two]))
    return one_tail


def defects(z: ArrayLike, k: ArrayLike = 0.0, shift: ArrayLike = 0.0, sides: ArrayLike = 2) -> Any:
    """Return p, the defect probability per opportunity (see `log_defects`).

    Relative error below 1e-12 while p is a normal number (z up to about 37); 0 beyond, where `log_defects` goes on.

    >>> round(float(defects(6.0, shift=1.5)) * 1e6, 1)
    3.4
    """
    return np.exp(log_defects(z, k, shift, sides))[()]


def log_slopes(z: ArrayLike, k: ArrayLike, shift: ArrayLike, sides: ArrayLike) -> tuple[Any, Any, Any]:
    """Return ln p with p'/p and p''/p, the relative first and second derivatives in z.

    Parameters as in `log_defects`; all three stay finite where p itself underflows.
    """
    near, far, k, two = _arguments(z, k, shift, sides)
    log_p = log_defects(z, k, shift, sides)
    near_density = np.exp(-0.5 * near**2 - LOG_ROOT_TWO_PI - log_p)
    far_density = np.where(two, np.exp(-0.5 * far**2 - LOG_ROOT_TWO_PI - log_p), 0.0)
    first = -(1.0 - k) * near_density - (1.0 + k) * far_density
    second = -((1.0 - k) ** 2) * near * near_density - (1.0 + k) ** 2 * far * far_density
    return log_p, first[()], second[()]


def sigma_from_log_defects(log_p: ArrayLike, k: ArrayLike = 0.0, shift: ArrayLike = 0.0, sides: ArrayLike = 2) -> Any:
    """Return the sigma level z whose defect probability is exp(log_p), the inverse of `log_defects`.

    Parameters
    ----------
    log_p : array_like
        ln p, below 0 (with two limits p cannot exceed 1, reached at z = 0).
    k, shift, sides
        As in `log_defects`.

    Returns
    -------
    array or float [σ]
        z; p → z → p comes back within 1e-10 relative. Negative where one tail alone exceeds Φ(s).

    Notes
    -----
    One limit: closed form. Two limits: p/2 ≤ near tail ≤ p brackets z; Halley's method on ln p starts at the end
    where one tail rules: the lower one where the mean lies off the middle, the upper one where the tails are alike.

    >>> round(float(sigma_from_log_defects(np.log(3.4e-6), shift=1.5, sides=1)), 3)
    6.0
    """
    target, offset, drift, limits = np.broadcast_arrays(*(np.asarray(x, dtype=float) for x in (log_p, k, shift, sides)))
    low = (drift - ndtri_exp(target)) / (1.0 - offset)
    two = limits == 2
    if not np.any(two):
        return low[()]
    low = np.where(two, np.maximum(low, 0.0), low)
    high = np.maximum((drift - ndtri_exp(target - np.log(2.0))) / (1.0 - offset), low)
    z = np.where(two & (offset == 0.0) & (drift == 0.0), high, low)
    z, target, offset, drift, low, high, two = np.atleast_1d(z, target, offset, drift, low, high, two)
    z[two] = _inverted(*(x[two] for x in (z, target, offset, drift, low, high)))
    return z.reshape(limits.shape)[()]


def _inverted(z: Array, target: Array, offset: Array, drift: Array, low: Array, high: Array) -> Array:
    """Return the levels with two limits by Halley's method from z, all arrays of one shape (n,).

    A level that has settled is left alone, so that a result does not depend on what else is in the array.
    """
    moving = np.arange(len(z))
    for _ in range(MOST_STEPS):
        value, slope, bend = log_slopes(z[moving], offset[moving], drift[moving], 2)
        newton = (value - target[moving]) / slope
        step = newton / (1.0 - 0.5 * newton * (bend - slope**2) / slope)
        moved = np.clip(z[moving] - step, low[moving], high[moving])
        far = np.abs(moved - z[moving]) > NEAR_ENOUGH * np.maximum(np.abs(z[moving]), 1.0)
        z[moving] = moved
        moving = moving[far]
        if len(moving) == 0:
            break
    return z


def log_good(log_p: ArrayLike) -> Any:
    """Return ln(1 − p) from ln p without cancellation.

    >>> float(log_good(np.log(0.25))) == float(np.log(0.75))
    True
    """
    log_p = np.minimum(np.asarray(log_p, dtype=float), 0.0)
    if (log_p < -np.log(2.0)).all():
        return np.log1p(-np.exp(log_p))[()]
    with np.errstate(divide="ignore"):
        return np.where(log_p < -np.log(2.0), np.log1p(-np.exp(log_p)), np.log(-np.expm1(log_p)))[()]


def study_index(z: ArrayLike, k: ArrayLike) -> Any:
    """Return Cpk = z(1 − k)/3, as measured on parts, without the drift allowance.

    >>> float(study_index(4.0, 0.25))
    1.0
    """
    return (np.asarray(z, dtype=float) * (1.0 - np.asarray(k, dtype=float)) / 3.0)[()]


def index_after_shift(z: ArrayLike, k: ArrayLike, shift: ArrayLike) -> Any:
    """Return (z(1 − k) − s)/3, what is left of the study index after the drift allowance.

    >>> float(index_after_shift(6.0, 0.0, 1.5))
    1.5
    """
    return study_index(z, k) - np.asarray(shift, dtype=float) / 3.0
