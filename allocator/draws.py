"""What could the true capabilities be behind estimates from samples: levels drawn by the laws of estimation error."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from allocator.capability import log_good, sigma_from_log_defects
from allocator.states import States

Array = NDArray[np.float64]
LEAST_LEVEL = 1e-9
"""Keeps a division and a logarithm off 0 for processes that are all bad."""


@dataclass(frozen=True)
class Behind:
    """What is behind the estimates, arrays of shape (n_steps,).

    Parameters
    ----------
    sample : [parts]
        nan where the capability is taken as exact.
    bad : [parts]
        Bad ones among them where they were counted, nan where only their share is known.
    centred : bool
        Where an alternative sets the offset, so that the error of the mean no longer matters.
    """

    sample: Array
    bad: Array
    centred: NDArray[np.bool_]


def draw_levels(rng: np.random.Generator, states: States, z: Array, behind: Behind) -> States:
    """Return the states, at the sigma levels planned, that steps may really have, drawn once each.

    Measured: σ² by its chi-square law, ν·σ̂²/χ²_ν with ν = n − 1, and the mean by its normal law, σ/√n. Counted: the
    share of bad items by Beta(x + 1/2, n − x + 1/2). A step raised above its state's own level by a law keeps the
    relative error of that level, and the mean where it really is: what was measured is today's process, and the
    improvement starts from it. `doubt` works the same laws out for a plan with confidence; the two share no code, and
    the tests hold them against each other.

    Parameters
    ----------
    rng : Generator
    states : States
        One per step, before any law; their levels are the estimates.
    z : shape (n_steps,) [σ]
        Sigma level planned.
    """
    levels, known = states.levels, ~np.isnan(behind.sample)
    counted = known & levels.attribute
    measured_z, measured_k = _measured(rng, states, z, behind)
    drawn_z = np.where(counted, _counted(rng, states, z, behind), np.where(known, measured_z, z))
    drawn_k = np.where(known & ~counted, measured_k, levels.k)
    return replace(states, levels=replace(levels, sigma_level=drawn_z, k=drawn_k))


def _measured(rng: np.random.Generator, states: States, z: Array, behind: Behind) -> tuple[Array, Array]:
    levels, n = states.levels, np.fmax(behind.sample, 2.0)
    ratio = np.sqrt(rng.chisquare(n - 1.0) / (n - 1.0))
    off = rng.standard_normal(len(n)) / np.sqrt(n)
    k = levels.k + np.where(behind.centred, 0.0, off / (np.maximum(levels.sigma_level, LEAST_LEVEL) * ratio))
    # With two limits the offset counts to the nearer one, whichever that is.
    return z * ratio, np.where(levels.sides == 2, np.abs(k), k)


def _counted(rng: np.random.Generator, states: States, z: Array, behind: Behind) -> Array:
    levels, opportunities = states.levels, states.opportunities
    n, bad = np.fmax(behind.sample, 1.0), behind.bad
    estimate = -opportunities * log_good(levels.log_p)  # defects per item
    hits = np.where(np.isnan(bad), -np.expm1(-estimate) * n, bad)
    drawn = -np.log1p(-rng.beta(hits + 0.5, np.maximum(n - hits, 0.0) + 0.5))
    planned = -opportunities * log_good(replace(levels, sigma_level=z).log_p)
    log_p = np.minimum(np.log(-np.expm1(-planned * drawn / estimate / opportunities)), -LEAST_LEVEL)
    return np.asarray(sigma_from_log_defects(log_p, levels.k, levels.shift, levels.sides), dtype=float)
