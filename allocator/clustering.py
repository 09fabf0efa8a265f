"""How many items are free of defects when defects come in clusters: negative binomial counts."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike


def clustered_yield(intensity: ArrayLike, alpha: ArrayLike) -> Any:
    """Return the share of items without a defect, (1 + δ/α)^−α, from a mean of δ defects per item.

    Parameters
    ----------
    intensity : array_like [defects per item]
        δ, the mean count, 0 or more.
    alpha : array_like
        α, above 0; the smaller, the more the defects cluster. inf is the Poisson count, exp(−δ).

    Notes
    -----
    Source: negative binomial yield model, as in Hennessy and Patterson, Computer Architecture, 6th ed., ch. 1.

    >>> round(float(clustered_yield(1.0, 2.0)), 6)
    0.444444
    """
    delta, alpha = np.asarray(intensity, dtype=float), np.asarray(alpha, dtype=float)
    poisson = np.isinf(alpha)
    finite = np.where(poisson, 1.0, alpha)
    return np.exp(np.where(poisson, -delta, -finite * np.log1p(delta / finite)))[()]


def rolled_yield(intensity: ArrayLike, alpha: ArrayLike, items: ArrayLike) -> float:
    """Return the share of units without a defect anywhere, Π yield^q with q items of each step in a unit.

    Parameters as in `clustered_yield`, shape (n_steps,); an approximation where q is not whole, since the cluster of
    an item that goes into several units is then split among them.
    """
    return float(np.prod(clustered_yield(intensity, alpha) ** np.asarray(items, dtype=float)))
