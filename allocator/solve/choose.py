"""Which way to run each step at a price of defects: every step takes its best way, and a small remainder is settled.

At the price λ that balances the budget each step's best way gives the bound. The load jumps where a step changes its
way, so the budget is rarely met exactly: among the ways whose reduced cost (value at λ above the step's best) is small,
the best combination that fits is found by merging Pareto lists, exact within the lists' length.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from allocator.solve.answers import Answers, Market
from allocator.solve.corners import Corners, balance, corners

Array = NDArray[np.float64]
Index = NDArray[np.int64]
PRICE_STEPS = 60
CLOSE = 1e-13
WIDEST = 30.0
"""Most by which the price is changed at once in search of the other side."""
BOUND_CLOSE = 1e-8
"""Share of the bound that may be left in it: a hundredth of the gap that is aimed at with equipment."""
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

    @property
    def pinned(self) -> bool:
        """Whether no way moves, smoothly or along straight pieces."""
        return self.market.still and self.market.smooth

    @cached_property
    def hull(self) -> Corners:
        """The corners of every step, where no way moves."""
        return corners(self.step, self.market.high, self.fixed + self.market.still_cost)


@dataclass(frozen=True)
class Priced:
    """Every way's answer and value at a price, each step's best way, and the load of these."""

    answers: Answers
    value: Array
    best: Index
    load: float
    price: float

    @property
    def cost(self) -> float:
        """What the best ways cost by the tangent of scrap, the budget's price apart."""
        return float(np.sum(self.value[self.best])) - self.price * self.load


def price_menu(menu: Menu, slope: Array, weight: Array, price: float) -> Priced:
    """Return all answers at λ = `price`, with scrap's slope and the load weight per step [shape (n_steps,)]."""
    per_way = (slope + price * weight)[menu.step]
    answers = menu.market.answer(per_way)
    value = menu.fixed + answers.cost + per_way * answers.delta
    if not menu.market.still:
        value += _still_to_gain(menu.market, answers, per_way)
    least = np.minimum.reduceat(value, menu.first)
    places = np.where(value <= least[menu.step], np.arange(len(value)), len(value))
    best = np.minimum.reduceat(places, menu.first)
    return Priced(answers, value, best, float(weight @ answers.delta[best]), price)


def _still_to_gain(market: Market, answers: Answers, per_way: Array) -> Array:
    """Return what answers that have not settled to the last digit may still gain (0 or less), so that values bound."""
    left = answers.slope + per_way
    gain = np.minimum(left * (market.low - answers.delta), left * (market.high - answers.delta))
    return np.asarray(np.minimum(gain, 0.0))


def balance_menu(menu: Menu, slope: Array, weight: Array, free: float, start: float) -> tuple[Priced, Priced | None]:
    """Return the priced menus just under and just over the budget `free` (None where the budget does not bind).

    Where no way moves it is read off the corners. Else it is bracketed by factors from `start` > 0 and narrowed by
    secants of the load, by the tangents of the bound and by halving, in turn.
    """
    if menu.pinned:
        read = _read_off(menu, slope, weight, free)
        if read is not None:
            return read
    under, over = price_menu(menu, slope, weight, start), None
    factor = 1.3
    while under.load > free:
        over, under = under, price_menu(menu, slope, weight, under.price * factor)
        factor = min(factor**2, WIDEST)
        if under.price > 1e200:
            return under, over
    while over is None:
        trial = price_menu(menu, slope, weight, under.price / factor if under.price > 1e-9 * start else 0.0)
        factor = min(factor**2, WIDEST)
        if trial.load > free:
            over = trial
        elif trial.price == 0.0:
            return trial, None
        else:
            under = trial
    return _narrow(menu, slope, weight, free, under, over)


def _read_off(menu: Menu, slope: Array, weight: Array, free: float) -> tuple[Priced, Priced | None] | None:
    """Return both sides of the balancing price, None where no price keeps the budget."""
    hull, delta = menu.hull, menu.market.high
    found = balance(hull, slope, weight, float(weight @ delta[hull.rows[hull.last]]), free)
    if found is None:
        return None
    price, under, over = found
    priced = price_menu(menu, slope, weight, price)
    sides = [replace(priced, best=rows, load=float(weight @ delta[rows])) for rows in (under, over) if rows is not None]
    return sides[0], sides[1] if over is not None else None


def first_price(menu: Menu, free: float) -> float:
    """Return a price of the right size: what steps differ by between their ways, per unit of budget."""
    spread = np.maximum.reduceat(menu.fixed, menu.first) - np.minimum.reduceat(menu.fixed, menu.first)
    laws = np.maximum.reduceat(menu.market.scale, menu.first)
    return max(float(np.sum(spread) + np.sum(laws)), 1e-9) / max(free, 1e-300)


def _narrow(menu: Menu, slope: Array, weight: Array, free: float, under: Priced, over: Priced) -> tuple[Priced, Priced]:
    """Draw both sides together until no price between them could lift the bound: it is concave in the price."""
    for turn in range(PRICE_STEPS):
        crossing, most = _tangents_meet(under, over, free)
        known = max(_bound(under, free), _bound(over, free))
        if most - known <= BOUND_CLOSE * abs(most) or under.price - over.price <= CLOSE * under.price:
            break
        guess = (_secant(under, over, free), crossing, _middle(under.price, over.price))[turn % 3]
        middle = price_menu(menu, slope, weight, min(max(guess, over.price), under.price))
        if middle.load <= free:
            under = middle
        else:
            over = middle
    return under, over


def _middle(high: float, low: float) -> float:
    """Return a price half way, on a logarithmic scale while the ends are far apart."""
    return float(np.sqrt(high * low)) if 0.0 < 4.0 * low < high else 0.5 * (high + low)


def _bound(side: Priced, free: float) -> float:
    return float(np.sum(side.value[side.best])) - side.price * free


def _tangents_meet(under: Priced, over: Priced, free: float) -> tuple[float, float]:
    """Return the price at which the tangents of the bound on both sides meet, and their height there."""
    low, high, width = _bound(over, free), _bound(under, free), under.price - over.price
    rise, fall = over.load - free, free - under.load
    share = (high - low + fall * width) / (rise + fall) if rise + fall > 0.0 else 0.5 * width
    share = min(max(share, 0.0), width)
    return over.price + share, low + rise * share


def _secant(under: Priced, over: Priced, free: float) -> float:
    """Return the price at which the load would meet the budget on a straight line between both sides."""
    if over.load <= under.load:
        return 0.5 * (under.price + over.price)
    share = (over.load - free) / (over.load - under.load)
    return over.price + min(max(share, 0.02), 0.98) * (under.price - over.price)


def fill_budget(
    menu: Menu, weight: Array, free: float, priced: Priced, allowed: float, longest: int
) -> tuple[Index | None, float]:
    """Return each step's way, the best at the price but for a few that together fit best, and the bound's lift.

    Parameters
    ----------
    priced : Priced
        At the balancing price; its best ways may overrun the budget or leave room.
    allowed : float [currency/year]
        Combinations that lift the bound by more than this are not worth looking at.
    longest : int
        Combinations kept from step to step; more are cut.

    Returns
    -------
    rows : int array, shape (n_steps,), or None where no combination fits
    lift : float [currency/year]
        What every choice that fits must cost above the priced bound; 0 where not all combinations could be looked at,
        or levels that move could make room.
    """
    base, delta = priced.best, priced.answers.delta
    extra = priced.value - priced.value[base][menu.step]
    change = weight[menu.step] * (delta - delta[base][menu.step])
    room = free - priced.load
    candidates = np.flatnonzero((extra <= allowed) & (np.arange(len(extra)) != base[menu.step]))
    core, options, complete = _core(menu, candidates, extra, len(base))
    merged = _merge(options, extra, change, priced.price, room, allowed, longest)
    if merged is None:
        return None, 0.0
    chosen, lift, whole = merged
    rows = base.copy()
    for i, row in zip(core.tolist(), chosen, strict=True):
        if row >= 0:
            rows[i] = row
    exact = complete and whole and menu.market.still and not len(menu.market.pieces.rows)
    return rows, min(lift, allowed) if exact else 0.0


def _core(menu: Menu, candidates: Index, extra: Array, n_steps: int) -> tuple[Index, list[Index], bool]:
    """Return the steps worth combining, their candidate ways, and whether these are all there are."""
    nearest = np.full(n_steps, np.inf)
    np.minimum.at(nearest, menu.step[candidates], extra[candidates])
    near = np.flatnonzero(np.isfinite(nearest))
    core = near[np.argsort(nearest[near], kind="stable")[:CORE_STEPS]]
    place = np.full(n_steps, -1)
    place[core] = np.arange(len(core))
    options: list[list[int]] = [[] for _ in core]
    for way in candidates[place[menu.step[candidates]] >= 0].tolist():
        options[place[menu.step[way]]].append(way)
    return core, [np.array(ways, dtype=np.int64) for ways in options], len(near) <= CORE_STEPS


def _merge(
    options: list[Index], extra: Array, change: Array, price: float, room: float, allowed: float, longest: int
) -> tuple[list[int], float, bool] | None:
    """Return the way taken in each core step (−1 for its best), what that adds, and whether the lists were whole.

    A list entry is (change of load, added value); one with no more load and no higher final value stands for another.
    None when nothing fits.
    """
    load, added, whole = np.zeros(1), np.zeros(1), True
    history: list[tuple[Index, Index]] = []
    fall = [min(float(change[rows].min(initial=0.0)), 0.0) for rows in options]
    later = np.concatenate([np.cumsum(fall[::-1])[::-1][1:], [0.0]]) if options else np.zeros(0)
    for place, rows in enumerate(options):
        picks = np.concatenate([[-1], rows])
        all_load = (np.concatenate([[0.0], change[rows]])[:, None] + load).ravel()
        all_added = (np.concatenate([[0.0], extra[rows]])[:, None] + added).ravel()
        keep, cut = _undominated(all_load, all_added, price, room - later[place], allowed, longest)
        whole = whole and not cut
        history.append((keep % len(load), picks[keep // len(load)]))
        load, added = all_load[keep], all_added[keep]
    fits = np.flatnonzero(load <= room)
    if len(fits) == 0:
        return None
    final = added[fits] + price * (room - load[fits])
    at = int(fits[np.argmin(final)])
    chosen: list[int] = []
    for parents, taken in reversed(history):
        chosen.append(int(taken[at]))
        at = int(parents[at])
    return chosen[::-1], float(final.min()), whole


def _undominated(
    load: Array, added: Array, price: float, room: float, allowed: float, longest: int
) -> tuple[Index, bool]:
    """Return the entries worth keeping by rising load, and whether some had to be cut for length."""
    keep = np.flatnonzero((added <= allowed) & (load <= room))
    order = keep[np.argsort(load[keep], kind="stable")]  # quick, since one list after the other rises
    final = added[order] - price * load[order]
    kept = order[np.diff(np.minimum.accumulate(final), prepend=np.inf) < 0.0] if len(order) else order
    if len(kept) <= longest:
        return np.asarray(kept, dtype=np.int64), False
    least = np.sort(np.argpartition(added[kept], longest)[:longest])
    return np.asarray(kept[least], dtype=np.int64), True
