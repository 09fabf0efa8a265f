"""How do cost and defect intensity of a way move together: intensity from sigma level and back, cost and its slopes.

One row per way. The variable of the whole program is the defect intensity δ = −n·ln(1 − P), with P the defect
probability of one opportunity (of the set, where copies share the job).
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Any, cast

import numpy as np
from numpy.typing import NDArray

from allocator import laws, redundancy
from allocator.capability import log_defects, log_good, log_slopes, sigma_from_log_defects

Array = NDArray[np.float64]
NONE, POWER, EXPONENTIAL, DECADE, LINES = 0, 1, 2, 3, 4
"""Kinds of curve: no law; the three smooth laws; straight pieces (quotes, and chords of a non-convex stretch)."""


@dataclass(frozen=True)
class Curves:
    """The curves of many ways, arrays of shape (n_rows,).

    Parameters
    ----------
    k, shift, sides, opportunities
        The state of the way.
    installed, needed, common_cause
        Its copies; installed = 1 where there are none.
    start : [σ]
        z0, the level that the law starts from.
    kind : int
        NONE, POWER, EXPONENTIAL, DECADE or LINES.
    parameter
        Exponent or rate of the law.
    scale : [currency/year]
        Yearly cost per unit of the law's shape.
    """

    k: Array
    shift: Array
    sides: NDArray[np.int64]
    opportunities: Array
    installed: NDArray[np.int64]
    needed: NDArray[np.int64]
    common_cause: Array
    start: Array
    kind: NDArray[np.int64]
    parameter: Array
    scale: Array

    def take(self, rows: Any) -> Curves:
        """Return the curves of some rows."""
        return Curves(*(getattr(self, f.name)[rows] for f in fields(self)))

    @property
    def copied(self) -> NDArray[np.bool_]:
        return self.installed > 1


def log_probability(curves: Curves, z: Array) -> Array:
    """Return ln P of one opportunity at sigma level z (of the set of copies, where there are any)."""
    log_p = log_defects(z, curves.k, curves.shift, curves.sides)
    if not curves.copied.any():
        return cast(Array, log_p)
    with np.errstate(divide="ignore"):
        together = np.log(redundancy.failure(np.exp(log_p), curves.installed, curves.needed, curves.common_cause))
    return np.asarray(np.where(curves.copied, together, log_p))


def intensity(curves: Curves, z: Array) -> Array:
    """Return δ [defects per item] at sigma level z, shape (n_rows,)."""
    good: Array = log_good(log_probability(curves, z))
    return -curves.opportunities * good


def sigma(curves: Curves, delta: Array) -> Array:
    """Return the sigma level at which the defect intensity is `delta` > 0, the inverse of `intensity`."""
    probability = -np.expm1(-delta / curves.opportunities)
    return sigma_from_probability(curves, np.log(probability))


def sigma_from_probability(curves: Curves, log_probability_: Array) -> Array:
    """Return the sigma level (of one item) at which ln P of the opportunity has the given value."""
    log_p = log_probability_
    if curves.copied.any():
        alone = redundancy.one_copy(np.exp(log_p), curves.installed, curves.needed, curves.common_cause)
        log_p = np.where(curves.copied, alone, log_p)
    return np.asarray(sigma_from_log_defects(log_p, curves.k, curves.shift, curves.sides), dtype=float)


def intensity_slopes(curves: Curves, z: Array) -> tuple[Array, Array, Array]:
    """Return δ, dδ/dz and d²δ/dz², shape (n_rows,)."""
    log_p, first, second = log_slopes(z, curves.k, curves.shift, curves.sides)
    p = np.exp(log_p)
    total, total_z, total_zz = p, first * p, second * p
    if curves.copied.any():
        outer, outer2 = redundancy.failure_slopes(p, curves.installed, curves.needed, curves.common_cause)
        set_fails = redundancy.failure(p, curves.installed, curves.needed, curves.common_cause)
        total = np.where(curves.copied, set_fails, p)
        total_zz = np.where(curves.copied, outer2 * total_z**2 + outer * total_zz, total_zz)
        total_z = np.where(curves.copied, outer * total_z, total_z)
    good = -np.expm1(np.log(total))
    n = curves.opportunities
    return -n * log_good(np.log(total)), n * total_z / good, n * (total_zz / good + (total_z / good) ** 2)


def smooth_cost(curves: Curves, z: Array) -> Array:
    """Return the yearly cost of the law at sigma level z; 0 for rows without a smooth law."""
    cost = np.zeros(len(z))
    for kind, shape in ((POWER, laws.power), (EXPONENTIAL, laws.exponential)):
        rows = curves.kind == kind
        if rows.any():
            cost[rows] = shape(z[rows], curves.start[rows], curves.parameter[rows])
    rows = curves.kind == DECADE
    if rows.any():
        some = curves.take(rows)
        cost[rows] = laws.decade(log_probability(some, z[rows]), log_probability(some, some.start))
    return curves.scale * np.maximum(cost, 0.0)


def smooth_slopes(curves: Curves, delta: Array) -> tuple[Array, Array, Array]:
    """Return the yearly cost C(δ) with C' and C'' in δ, for rows with a smooth law, shape (n_rows,)."""
    cost, first, second = np.zeros(len(delta)), np.zeros(len(delta)), np.zeros(len(delta))
    rows = curves.kind == DECADE
    if rows.any():
        cost[rows], first[rows], second[rows] = _decade_slopes(curves.take(rows), delta[rows])
    rows = (curves.kind == POWER) | (curves.kind == EXPONENTIAL)
    if rows.any():
        cost[rows], first[rows], second[rows] = _sigma_law_slopes(curves.take(rows), delta[rows])
    return curves.scale * cost, curves.scale * first, curves.scale * second


def _decade_slopes(curves: Curves, delta: Array) -> tuple[Array, Array, Array]:
    """With P = 1 − exp(−δ/n): shape = log10(P0/P), whose slopes need no sigma level."""
    n = curves.opportunities
    probability, good = -np.expm1(-delta / n), np.exp(-delta / n)
    shape = laws.decade(np.log(probability), log_probability(curves, curves.start))
    first = -good / (laws.LOG_TEN * n * probability)
    return shape, first, -first / (n * probability)


def _sigma_law_slopes(curves: Curves, delta: Array) -> tuple[Array, Array, Array]:
    z = sigma(curves, delta)
    _, rise, bend = intensity_slopes(curves, z)
    a, start = curves.parameter, curves.start
    is_power = curves.kind == POWER
    with np.errstate(all="ignore"):
        grown = np.where(is_power, np.exp(a * np.log(z / start)), np.exp(a * (z - start)))
        first = np.where(is_power, a * grown / z, a * grown)
        second = np.where(is_power, a * (a - 1.0) * grown / z**2, a**2 * grown)
        shape = np.where(is_power, laws.power(z, start, a), laws.exponential(z, start, a))
    slope = first / rise
    return shape, slope, (second - slope * bend) / rise**2
