"""What could the true capabilities be behind estimates from samples: levels drawn by the laws of estimation error."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from allocator.capability import log_good, sigma_from_log_defects
from allocator.states import States

Array = NDArray[np.float64]


def draw_levels(rng: np.random.Generator, states: States, z: Array, sample: Array, bad: Array) -> tuple[States, Array]:
    """Return the states and sigma levels that steps may really have, drawn once each.

    Measured: σ² by its chi-square law, ν·σ̂²/χ²_ν with ν = n − 1, and the mean by its normal law, σ/√n. Counted: the
    share of bad items by Beta(x + 1/2, n − x + 1/2). A step raised above its state's own level by a law keeps the
    relative error of that level: what was measured is today's process, and the improvement starts from it.

    Parameters
    ----------
    rng : Generator
    states : States
        One per step, before any law; their levels are the estimates.
    z : shape (n_steps,) [σ]
        Sigma level planned.
    sample : shape (n_steps,)
        Parts behind each estimate, nan where the capability is taken as exact.
    bad : shape (n_steps,)
        Bad ones among them where they were counted, nan where only their share is known.
    """
    known = ~np.isnan(sample)
    counted = known & states.levels.attribute
    drawn_z, drawn_k = _measured(rng, states, z, sample)
    drawn_z = np.where(counted, _counted(rng, states, z, sample, bad), drawn_z)
    moved = np.where(known, drawn_z, z), np.where(known & ~counted, drawn_k, states.levels.k)
    return replace(states, levels=replace(states.levels, sigma_level=moved[0], k=moved[1])), moved[0]


def _measured(rng: np.random.Generator, states: States, z: Array, sample: Array) -> tuple[Array, Array]:
    n = np.where(np.isnan(sample), 2.0, sample)
    drawn_z = z * np.sqrt(rng.chisquare(n - 1.0) / (n - 1.0))
    k = states.levels.k + rng.standard_normal(len(n)) / (drawn_z * np.sqrt(n))
    # With two limits the offset counts to the nearer one, whichever that is.
    return drawn_z, np.where(states.levels.sides == 2, np.abs(k), k)


def _counted(rng: np.random.Generator, states: States, z: Array, sample: Array, bad: Array) -> Array:
    levels, opportunities = states.levels, states.opportunities
    n = np.where(np.isnan(sample), 2.0, sample)
    estimate = -opportunities * log_good(levels.log_p)  # defects per item
    hits = np.where(np.isnan(bad), -np.expm1(-estimate) * n, bad)
    drawn = -np.log1p(-rng.beta(hits + 0.5, np.maximum(n - hits, 0.0) + 0.5))
    planned = -opportunities * log_good(replace(levels, sigma_level=z).log_p)
    log_p = np.log(-np.expm1(-planned * drawn / estimate / opportunities))
    return np.asarray(sigma_from_log_defects(log_p, levels.k, levels.shift, levels.sides), dtype=float)
