"""At which prices do ways without levels take turns: the lower hull of cost over defects, of all steps at once.

Between two corners of its hull a step changes its way at one price, whatever the other steps do. Sorted, these prices
give the load at every price, so the one that balances a budget is read off instead of searched for.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Index = NDArray[np.int64]


@dataclass(frozen=True)
class Corners:
    """The hulls' corners by step and rising defects, and the turns from each to the one before it, from the last on.

    Parameters
    ----------
    rows : int, shape (n_corners,)
        Way of each corner.
    last : int, shape (n_steps,)
        Corner of each step's way with most defects, best while defects cost nothing.
    step : int, shape (n_turns,)
        A step's own turns come in rising order of price.
    saved : shape (n_turns,)
        Defects per unit that the turn saves.
    price : shape (n_turns,) [currency/year per unit of δ]
        Price of the step's defects above which the turn is worth taking.
    """

    rows: Index
    last: Index
    step: Index
    saved: Array
    price: Array


def corners(step: Index, delta: Array, cost: Array) -> Corners:
    """Return the corners of each step's lower hull; ways of infinite cost stand on none.

    Parameters
    ----------
    step : int array, shape (n_ways,)
        In rising order; every step has a way of finite cost.
    delta : array, shape (n_ways,)
    cost : array, shape (n_ways,) [currency/year]
    """
    rows = np.flatnonzero(np.isfinite(cost))
    rows = rows[np.argsort(delta[rows])]
    rows = rows[np.argsort(step[rows], kind="stable")]
    while True:
        joined, saved = np.diff(step[rows]) == 0, np.diff(delta[rows])
        twins = np.flatnonzero(joined & (saved == 0.0))
        if len(twins):
            rows = np.delete(rows, twins + (cost[rows[twins + 1]] >= cost[rows[twins]]))
            continue
        saved[~joined] = 1.0
        price = -np.diff(cost[rows]) / saved
        # A way on or above the line between its neighbours is never alone the best.
        inner = joined[:-1] & joined[1:] & (price[:-1] <= price[1:])
        if not inner.any():
            break
        rows = np.delete(rows, np.flatnonzero(inner) + 1)
    turns = np.flatnonzero(joined)[::-1]
    last = np.append(np.flatnonzero(~joined), len(rows) - 1)
    return Corners(rows, last, step[rows[turns]], saved[turns], price[turns])


def balance(
    hull: Corners, slope: Array, weight: Array, load: float, free: float
) -> tuple[float, Index, Index | None] | None:
    """Return the price that balances a budget and each step's way on both sides of it, None where no price does.

    Parameters
    ----------
    hull : Corners
    slope, weight : arrays, shape (n_steps,)
        At the price λ a step's defects cost slope + λ·weight.
    load : float
        Load with every step at its last corner.
    free : float
        The budget.

    Returns
    -------
    price : float
        λ ≥ 0.
    under : int array, shape (n_steps,)
        The ways that keep the budget.
    over : int array, shape (n_steps,), or None where the budget does not bind
        The ways of a price just below.
    """
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        price = (hull.price - slope[hull.step]) / weight[hull.step]
    price[np.isnan(price)] = -np.inf
    order = np.argsort(price, kind="stable")
    price, step = price[order], hull.step[order]
    left = np.append(load, load - np.cumsum(weight[step] * hull.saved[order]))
    taken = idle = int(np.searchsorted(price, 0.0, side="right"))
    if left[idle] > free:
        taken += int(np.searchsorted(-left[idle:], -free))
    if taken == len(left):
        return None
    under = _after(hull, step[:taken])
    return (0.0, under, None) if taken == idle else (float(price[taken - 1]), under, _after(hull, step[: taken - 1]))


def _after(hull: Corners, turned: Index) -> Index:
    """Return each step's way after the given steps have turned, once for every mention."""
    return np.asarray(hull.rows[hull.last - np.bincount(turned, minlength=len(hull.last))], dtype=np.int64)
