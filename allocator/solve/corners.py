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
FEW, SAMPLE = 2_000, 100
"""Turns that are sorted at once, and how many tell where the middle of many more lies."""


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
    rows = rows[_by_step_then(delta[rows], step[rows])]
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


def _by_step_then(value: Array, step: Index) -> Index:
    """Return the order by step and, within each, by rising value; steps of alike many ways are sorted side by side."""
    first = np.flatnonzero(np.diff(step, prepend=-1))
    count = np.diff(np.append(first, len(step)))
    widest = int(count.max(initial=0))
    if widest * len(first) > 2 * len(step):
        order = np.argsort(value)
        return order[np.argsort(step[order], kind="stable")]
    there = np.arange(widest) < count[:, None]
    side_by_side = np.full(there.shape, np.inf)
    side_by_side[there] = value
    return (first[:, None] + np.argsort(side_by_side, axis=1))[there]


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
    saved = weight[hull.step] * hull.saved
    turned = price <= 0.0
    left = load - float(saved[turned].sum())
    if left <= free:
        return 0.0, _after(hull, hull.step[turned]), None
    order, left, enough = _last_to_turn(price, saved, turned, left, free)
    taken = int(np.searchsorted(np.cumsum(saved[order]), left - free))
    if taken >= len(order) and not enough:
        return None
    taken = min(taken, len(order) - 1)  # What is enough before rounding is enough after it.
    before = np.append(hull.step[turned], hull.step[order[:taken]])
    last = order[taken]
    return float(price[last]), _after(hull, np.append(before, hull.step[last])), _after(hull, before)


def _last_to_turn(
    price: Array, saved: Array, turned: NDArray[np.bool_], left: float, free: float
) -> tuple[Index, float, bool]:
    """Return in order of price the turns among which the budget comes to be kept, the load before them, and if it does.

    Turns that are worth it before any of these are added to `turned`. Few are ever sorted: half of what is open is
    taken or left at a time.
    """
    open_, enough = np.flatnonzero(~turned), False
    while len(open_) > FEW:
        those = price[open_]
        pivot = np.median(those[:: len(those) // SAMPLE])
        low = those <= pivot if (those > pivot).any() else those < pivot
        if not low.any():
            break
        after = left - float(saved[open_[low]].sum())
        enough = enough or after <= free
        if after > free:
            turned[open_[low]] = True
            left, open_ = after, open_[~low]
        else:
            open_ = open_[low]
    return open_[np.argsort(price[open_], kind="stable")], left, enough


def _after(hull: Corners, turned: Index) -> Index:
    """Return each step's way after the given steps have turned, once for every mention."""
    return np.asarray(hull.rows[hull.last - np.bincount(turned, minlength=len(hull.last))], dtype=np.int64)
