"""Over which stretches of sigma level is a law convex in the defect intensity, and what stands for it where not."""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.curves import Curves
from allocator.roots import root_between

Array = NDArray[np.float64]
GRID = 65
"""Levels at which the curvature's sign is read; the smooth laws change it at most a few times."""
SMALL_P = 0.15
"""Below this defect probability a power law of any exponent is convex (the limit is 0.218 at exponent 0.1)."""
CHORDS = 24
"""Chords that stand for one stretch that is not convex."""


@dataclass(frozen=True)
class Stretch:
    """A stretch of sigma levels [σ]; `lines` (δ rising, yearly cost) where straight pieces stand for the law."""

    low: float
    high: float
    lines: tuple[Array, Array] | None


def convex_stretches(curve: Curves, low: float, high: float) -> list[Stretch]:
    """Return stretches that cover low to high, each convex in δ: the law itself, or a chord below a concave piece.

    A chord lies below a concave curve, so a bound built on it holds; the cost of a plan is never read off it.

    Parameters
    ----------
    curve : Curves
        One row.
    low, high : float [σ]
    """
    if low == high or known_convex(curve, np.array([low]))[0]:
        return [Stretch(low, high, None)]
    levels = np.linspace(low, high, GRID)
    bend = _curvature(curve, levels)
    if np.all(bend >= 0.0):
        return [Stretch(low, high, None)]
    cuts = [low, *_sign_changes(curve, levels, bend), high]
    stretches: list[Stretch] = []
    for left, right in itertools.pairwise(cuts):
        if _curvature(curve, np.array([0.5 * (left + right)]))[0] >= 0.0:
            stretches.append(Stretch(left, right, None))
        else:
            stretches.extend(_chords(curve, left, right))
    return stretches


def known_convex(curves: Curves, low: Array) -> NDArray[np.bool_]:
    """Return where theory already says so: decades always, one item past its drift and well below a fifth bad.

    Parameters
    ----------
    curves : Curves
    low : shape (n_rows,) [σ]
        From where on each law is to be convex.
    """
    past_drift = ~curves.copied & (low * (1.0 - curves.k) >= curves.shift)
    unsure = np.flatnonzero(past_drift & (curves.kind == cv.POWER) & (curves.parameter < 1.0))
    past_drift[unsure] = cv.log_probability(curves.take(unsure), low[unsure]) < np.log(SMALL_P)
    return np.asarray(past_drift | (curves.kind == cv.DECADE))


def _curvature(curve: Curves, levels: Array) -> Array:
    many = curve.take(np.zeros(len(levels), dtype=int))
    return cv.smooth_slopes(many, cv.intensity(many, levels))[2]


def _sign_changes(curve: Curves, levels: Array, bend: Array) -> list[float]:
    changes = np.flatnonzero((bend[:-1] < 0.0) != (bend[1:] < 0.0))
    return [
        root_between(lambda z: _curvature(curve, np.array([z]))[0], levels[i], levels[i + 1], absolute=1e-13)
        for i in changes
    ]


def _chords(curve: Curves, left: float, right: float) -> list[Stretch]:
    ends = np.linspace(left, right, CHORDS + 1)
    many = curve.take(np.zeros(len(ends), dtype=int))
    delta, cost = cv.intensity(many, ends), cv.smooth_cost(many, ends)
    return [Stretch(ends[i], ends[i + 1], (delta[[i + 1, i]], cost[[i + 1, i]])) for i in range(CHORDS)]
