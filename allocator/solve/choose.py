"""Which way to run each step at a price of defects: every step takes its best way, and a small remainder is settled.

At the price λ that balances the budget each step's best way gives the bound. The load jumps where a step changes its
way, so the budget is rarely met exactly: among the ways whose reduced cost (value at λ above the step's best) is small,
the best combination that fits is found by merging Pareto lists, exact within the lists' length.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator.solve.answers import Answers, Market

Array = NDArray[np.float64]
Index = NDArray[np.int64]
PRICE_STEPS = 60
CLOSE = 1e-13
LONGEST_LIST = 20_000
CORE_STEPS = 40
"""Steps whose second-best ways are close enough to the best to be worth combining."""


@dataclass(frozen=True)
class Menu:
    """The ways of all steps in the steps' order, priced apart from defects.

    Parameters
    ----------
    market : Market
    first : int, shape (n_steps,)
        Row of each step's first way; rows of a step are contiguous.
    step : int, shape (n_ways,)
    fixed : shape (n_ways,) [currency/year]
        What a way costs besides its law.
    """

    market: Market
    first: Index
    step: Index
    fixed: Array


@dataclass(frozen=True)
class Priced:
    """Every way's answer and value at a price, each step's best way, and the load of these."""

    answers: Answers
    value: Array
    best: Index
    load: float
    price: float


def price_menu(menu: Menu, slope: Array, weight: Array, price: float) -> Priced:
    """Return all answers at λ = `price`, with scrap's slope and the load weight per step [shape (n_steps,)]."""
    per_way = (slope + price * weight)[menu.step]
    answers = menu.market.answer(per_way)
    value = menu.fixed + answers.cost + per_way * answers.delta
    least = np.minimum.reduceat(value, menu.first)
    places = np.where(value <= least[menu.step], np.arange(len(value)), len(value))
    best = np.minimum.reduceat(places, menu.first)
    return Priced(answers, value, best, float(weight @ answers.delta[best]), price)


def balance_menu(menu: Menu, slope: Array, weight: Array, free: float, start: float) -> tuple[Priced, Priced | None]:
    """Return the priced menus just under and just over the budget `free` (None where the budget does not bind).

    The price is bracketed by factors from `start` and then halved on a logarithmic scale, with regula falsi where the
    load changes smoothly.
    """
    nothing = price_menu(menu, slope, weight, 0.0)
    if nothing.load <= free:
        return nothing, None
    over, under = nothing, price_menu(menu, slope, weight, max(start, 1e-9))
    factor = 1.3
    while under.load > free:
        over = under
        under = price_menu(menu, slope, weight, under.price * factor)
        factor = min(factor**2, 1e4)
        if under.price > 1e200:
            return under, over
    if over.price == 0.0:
        trial, factor = under, 1.3
        while trial.load <= free and trial.price > 1e-12:
            under = trial
            trial = price_menu(menu, slope, weight, trial.price / factor)
            factor = min(factor**2, 1e4)
        over = trial if trial.load > free else nothing
    return _narrow(menu, slope, weight, free, under, over)


def _narrow(menu: Menu, slope: Array, weight: Array, free: float, under: Priced, over: Priced) -> tuple[Priced, Priced]:
    for turn in range(PRICE_STEPS):
        if under.price - over.price <= CLOSE * under.price or free - under.load <= CLOSE * free:
            break
        if np.array_equal(under.best, over.best) and not menu.market.still:
            guess = _secant(under, over, free)
        elif turn % 3 == 2:
            guess = 0.5 * (under.price + over.price)
        else:
            guess = _secant(under, over, free)
        middle = price_menu(menu, slope, weight, min(max(guess, over.price), under.price))
        if middle.load <= free:
            under = middle
        else:
            over = middle
    return under, over


def _secant(under: Priced, over: Priced, free: float) -> float:
    """Return the price at which the load would meet the budget on a straight line between both sides."""
    if over.load <= under.load:
        return 0.5 * (under.price + over.price)
    share = (over.load - free) / (over.load - under.load)
    return over.price + min(max(share, 0.02), 0.98) * (under.price - over.price)


def fill_budget(menu: Menu, weight: Array, free: float, priced: Priced, allowed: float) -> Index:
    """Return each step's way: the best at the price, but for a few that together fit the budget best.

    Parameters
    ----------
    priced : Priced
        At the balancing price; its best ways may overrun the budget or leave room.
    allowed : float [currency/year]
        Combinations that lift the bound by more than this are not worth looking at.
    """
    base, delta = priced.best, priced.answers.delta
    extra = priced.value - priced.value[base][menu.step]
    change = weight[menu.step] * (delta - delta[base][menu.step])
    room = free - priced.load
    others = (extra <= allowed) & (np.arange(len(extra)) != base[menu.step])
    steps = menu.step[others]
    if len(steps) == 0:
        return base
    nearest = np.full(len(base), np.inf)
    np.minimum.at(nearest, steps, extra[others])
    core = np.argsort(nearest, kind="stable")[:CORE_STEPS]
    core = core[np.isfinite(nearest[core])]
    options = [np.flatnonzero(others & (menu.step == i)) for i in core] if len(core) < 200 else []
    chosen = _merge(options, extra, change, priced.price, room, allowed)
    if chosen is None:
        return base
    rows = base.copy()
    for i, row in zip(core, chosen, strict=True):
        rows[i] = row if row >= 0 else rows[i]
    return rows


def _merge(
    options: list[Index], extra: Array, change: Array, price: float, room: float, allowed: float
) -> list[int] | None:
    """Return the way taken in each core step (−1 for its best), least in value among those that fit; None if none fit.

    A list entry is (change of load, added value); one with no more load and no higher final value stands for another.
    """
    load, added = np.zeros(1), np.zeros(1)
    history: list[tuple[Index, Index]] = []
    fall = np.array([min(float(change[rows].min(initial=0.0)), 0.0) for rows in options])
    later = np.concatenate([np.cumsum(fall[::-1])[::-1][1:], [0.0]]) if len(options) else fall
    for place, rows in enumerate(options):
        picks = np.concatenate([[-1], rows])
        steps_load = np.concatenate([[0.0], change[rows]])
        steps_added = np.concatenate([[0.0], extra[rows]])
        all_load = (load[:, None] + steps_load).ravel()
        all_added = (added[:, None] + steps_added).ravel()
        keep = _undominated(all_load, all_added, price, room - later[place], allowed)
        history.append((keep // len(picks), picks[keep % len(picks)]))
        load, added = all_load[keep], all_added[keep]
    fits = np.flatnonzero(load <= room)
    if len(fits) == 0:
        return None
    at = int(fits[np.argmin(added[fits] - price * load[fits])])
    chosen: list[int] = []
    for parents, taken in reversed(history):
        chosen.append(int(taken[at]))
        at = int(parents[at])
    return chosen[::-1]


def _undominated(load: Array, added: Array, price: float, room: float, allowed: float) -> Index:
    final = added - price * load
    keep = np.flatnonzero((added <= allowed) & (load <= room))
    order = keep[np.lexsort((final[keep], load[keep]))]
    least = np.minimum.accumulate(final[order])
    first = np.concatenate([[True], least[1:] < least[:-1]]) if len(order) else np.zeros(0, dtype=bool)
    kept = order[first]
    if len(kept) > LONGEST_LIST:
        kept = kept[np.argsort(added[kept], kind="stable")[:LONGEST_LIST]]
    return np.asarray(kept, dtype=np.int64)
