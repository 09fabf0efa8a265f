"""The price road: one price of a defect, answered by all steps at once, where budgets alone couple the steps.

Scrap enters by its tangent at the flows seen last. At prices λ of the budgets and that tangent every step answers for
itself; the answers give a lower bound (separable Lagrangian), the exact cost of a point that meets them an upper one.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from allocator.curves import Curves
from allocator.solve.answers import Answers, Market
from allocator.solve.approach import approach
from allocator.solve.duty import Duty

Array = NDArray[np.float64]
PASSES = 80
PRICE_STEPS = 40
STALLED = 3
"""Passes without any gain after which the road gives up (another method takes over)."""
BUDGET_MET = 1e-13
"""A budget is balanced when the load is within this share of it."""
NEARLY_MET = 1e-10
"""The same where answers change smoothly with the price: what is left is filled by their slopes."""
ROUGHLY_MET = 1e-2
"""The same where the prices are only a start."""
WORTH_IT = 8
"""Steps from which prices and tangent are moved together first: on shorter lines that takes longer than it saves."""
SAMPLE = 1_000
"""Steps of a long line whose prices tell where to start."""


@dataclass
class Cleared:
    """A solved continuous problem: δ of every step, cost and bound [currency/year], and the price of each budget."""

    delta: Array
    total: float
    bound: float
    prices: Array
    passes: int

    @property
    def gap(self) -> float:
        return (self.total - self.bound) / max(abs(self.total), 1.0)


@dataclass(frozen=True)
class Near:
    """What the answer to a neighbouring question tells: its intensities, shape (n_steps,), and prices by limit."""

    intensity: Array
    prices: dict[str, float]


def clear(
    market: Market, duty: Duty, curves: Curves, gap: float, near: Near | None = None, hopeless: float = np.inf
) -> Cleared | None:
    """Return the cheapest intensities for one way per step, None when the budgets cannot be kept.

    Parameters
    ----------
    market : Market
        One way per step, in the steps' order.
    duty : Duty
    curves : Curves
        Of the market's ways.
    gap : float
        Relative gap at which to stop.
    near : Near, optional
        Prices and intensities to start from.
    hopeless : float, optional [currency/year]
        Stop as soon as the bound passes this.
    """
    if any(float(w @ market.low) + fixed > budget * (1.0 + 1e-12) + 4e-16 for w, fixed, budget in duty.loads):
        return None
    stalled = 0
    here, money, slope, price = _start(market, duty, near)
    best, best_total, best_bound = here, np.inf, -np.inf
    history: list[tuple[float, float]] = []
    for passes in range(1, PASSES + 1):  # noqa: B007
        answers, price, met = balance(market, duty, slope, price)
        best_bound = max(best_bound, _bound(market, duty, answers, money, slope, here, price))
        there = _inside(market.low, _filled(market, duty, met, price), duty)
        cost = met.cost if there is met.delta else _moved_cost(met, there, market, curves)
        there_money, there_slope = duty.money(there)
        total = there_money + float(np.sum(cost))
        if total > best_total:
            there, total = _along(market, curves, duty, best, there, best_total)
            there_money, there_slope = duty.money(there)
        if total < best_total:
            best, best_total = there, total
        here, money, slope = there, there_money, there_slope
        stalled = stalled + 1 if history and history[-1] == (best_total, best_bound) else 0
        history.append((best_total, best_bound))
        if stalled == STALLED:
            break
        if best_total - best_bound <= gap * max(abs(best_total), 1.0) or best_bound > hopeless:
            break
    return Cleared(best, best_total, best_bound, price, passes)


def _start(market: Market, duty: Duty, near: Near | None) -> tuple[Array, float, Array, Array]:
    """Return intensities, scrap's tangent there and prices to start from; as near the optimum as few passes lead."""
    price, start = np.full(len(duty.loads), np.nan), market.high
    if near is not None:
        price, start = np.array([near.prices.get(name, np.nan) for name in duty.names]), near.intensity
    here = _inside(market.low, np.clip(start, market.low, market.high), duty)
    money, slope = duty.money(here)
    if market.size >= WORTH_IT and market.smooth and not market.still and np.isfinite(money):
        here, price = approach(market, duty, slope, here, _prices_of_some(market, duty, slope, price))
        here = _inside(market.low, here, duty)
        money, slope = duty.money(here)
    return here, money, slope, price


def _prices_of_some(market: Market, duty: Duty, slope: Array, start: Array) -> Array:
    """Return the prices that balance the budgets of a sample of the steps, the tangent of scrap held."""
    every = slice(None, None, max(market.size // SAMPLE, 1))
    some = market if every.step == 1 else market.take(every)
    loads = []
    for weight, fixed, budget in duty.loads:
        share = float(weight[every] @ some.high) / max(float(weight @ market.high), 1e-300)
        loads.append((weight[every], 0.0, share * (budget - fixed)))
    return balance(some, replace(duty, loads=loads), slope[every], start, ROUGHLY_MET)[1]


def balance(
    market: Market, duty: Duty, slope: Array, start: Array, met: float = NEARLY_MET
) -> tuple[Answers, Array, Answers]:
    """Return the answers at the prices that balance the budgets (0 where slack), the prices, and a point meeting all.

    Scrap's slope is held fixed. One price is tried first, each budget in turn; where that breaks another budget, two
    prices together. `start` holds the prices of a neighbouring question, NaN where there is none; a budget counts as
    met within a share `met` of it.
    """
    count = len(duty.loads)
    priced = np.flatnonzero(start > 0.0).tolist()
    if len(priced) == 1:
        likely = _balance_one(market, duty, slope, priced[0], np.zeros(count), start[priced[0]], met)
        if _others_kept(duty, likely[2], tuple(priced)):
            return likely
    if len(priced) == 2:
        pair = _balance_two(market, duty, slope, priced[0], priced[1], start, met)
        if pair is not None and _others_kept(duty, pair[2], tuple(priced)):
            return pair
    answers = market.answer(_total_price(duty, slope, np.zeros(count)))
    broken = np.flatnonzero(_excess(duty, answers) > 0.0).tolist()
    if not broken:
        return answers, np.zeros(count), answers
    found: tuple[Answers, Array, Answers] = answers, np.zeros(count), answers
    for t in broken:
        found = _balance_one(market, duty, slope, t, np.zeros(count), start[t], met)
        if _others_kept(duty, found[2], (t,)):
            return found
    for t, u in itertools.combinations(range(count), 2):
        if t in broken or u in broken:
            both = _balance_two(market, duty, slope, t, u, start, met)
            if both is not None and _others_kept(duty, both[2], (t, u)):
                return both
    return found


def _others_kept(duty: Duty, answers: Answers, settled: tuple[int, ...]) -> bool:
    over = _excess(duty, answers)
    return all(over[t] <= 1e-12 for t in range(len(over)) if t not in settled)


def _balance_one(
    market: Market, duty: Duty, slope: Array, t: int, prices: Array, start: float, met: float
) -> tuple[Answers, Array, Answers]:
    """Balance one budget by its price, the other prices held.

    Straight pieces answer in jumps: where the load jumps over the budget, the point between the two sides of the jump
    meets it, and costs no more than their mean.
    """
    prices = prices.copy()
    prices[t] = start if np.isfinite(start) and start > 0.0 else _first_price(market, duty, t)
    low, high = 0.0, np.inf
    answers = market.answer(_total_price(duty, slope, prices))
    sides: dict[bool, Answers] = {}
    for _ in range(PRICE_STEPS if market.smooth else 2 * PRICE_STEPS):
        over = float(_excess(duty, answers)[t])
        if abs(over) <= (met if market.smooth else BUDGET_MET):
            return answers, prices, answers
        sides[over > 0.0] = answers
        low, high = (prices[t], high) if over > 0.0 else (low, prices[t])
        moved = _next_price(duty, answers, t, prices[t], over, low, high)
        if abs(moved - prices[t]) <= 1e-15 * prices[t] or moved < 1e-12:
            break
        prices[t] = moved
        answers = market.answer(_total_price(duty, slope, prices))
    if len(sides) == 2:
        return answers, prices, _between_sides(duty, t, sides[True], sides[False])
    return answers, prices, answers


def _balance_two(
    market: Market, duty: Duty, slope: Array, t: int, u: int, start: Array, met: float
) -> tuple[Answers, Array, Answers] | None:
    """Balance two budgets: the second's price is bracketed while the first follows it; None when they never meet."""
    prices = np.zeros(len(duty.loads))
    second = start[u] if np.isfinite(start[u]) and start[u] > 0.0 else _first_price(market, duty, u)
    first, low, high = float(start[t]), 0.0, np.inf
    for _ in range(PRICE_STEPS):
        prices[u] = second
        answers, settled, point = _balance_one(market, duty, slope, t, prices, first, met)
        first = float(settled[t])
        over = float(_excess(duty, point)[u])
        if abs(over) <= (met if market.smooth else 1e-12) or (high - low) <= 1e-14 * high:
            return answers, settled, point
        low, high = (second, high) if over > 0.0 else (low, second)
        second = _next_price(duty, answers, u, second, over, low, high)
        if second < 1e-12:
            break
    return None


def _between_sides(duty: Duty, t: int, over: Answers, under: Answers) -> Answers:
    weight, fixed, budget = duty.loads[t]
    most, least = float(weight @ over.delta) + fixed, float(weight @ under.delta) + fixed
    share = (budget - least) / (most - least) if most > least else 0.0
    parts = ("delta", "cost", "slope", "give")
    return Answers(*(share * getattr(over, name) + (1.0 - share) * getattr(under, name) for name in parts))


def _total_price(duty: Duty, slope: Array, prices: Array) -> Array:
    total = slope
    for (weight, _, _), price in zip(duty.loads, prices, strict=True):
        total = total + price * weight
    return total


def _excess(duty: Duty, answers: Answers) -> Array:
    """Return by how much each load exceeds its budget, as a share of what the steps may use."""
    return np.array([(w @ answers.delta + fixed - budget) / _free(budget, fixed) for w, fixed, budget in duty.loads])


def _free(budget: float, fixed: float) -> float:
    return max(budget - fixed, 1e-300)


def _first_price(market: Market, duty: Duty, t: int) -> float:
    """Return the price at which a typical step would spend a typical share of the budget."""
    _, fixed, budget = duty.loads[t]
    typical = float(np.sum(market.scale))
    return max(typical, 1e-9) / _free(budget, fixed)


def _next_price(duty: Duty, answers: Answers, t: int, price: float, over: float, low: float, high: float) -> float:
    """Newton on ln(load) against ln(price), kept inside what is known of the price."""
    weight, fixed, budget = duty.loads[t]
    used = (1.0 + over) * _free(budget, fixed)
    give = float(np.sum(weight * weight * answers.give)) * price
    moved = price
    if give > 0.0 and used > 0.0:
        moved = price * float(np.exp(np.clip(np.log1p(over) * used / give, -3.0, 3.0)))
    return moved if low < moved < high else _between(low, high, price)


def _between(low: float, high: float, price: float) -> float:
    """Return a price inside the bracket, on a logarithmic scale where both ends are known."""
    if not np.isfinite(high):
        return max(8.0 * price, 1e-9)
    return float(np.sqrt(low * high)) if low > 0.0 else 0.125 * high


def _inside(low: Array, delta: Array, duty: Duty) -> Array:
    """Return δ moved towards the lowest intensities just so far that every budget is kept."""
    share = 0.0
    for weight, fixed, budget in duty.loads:
        used, least = float(weight @ delta) + fixed, float(weight @ low) + fixed
        if used > budget and used > least:
            share = max(share, min((used - budget) / (used - least), 1.0))
    return delta if share == 0.0 else delta - share * (delta - low)


def _filled(market: Market, duty: Duty, answers: Answers, prices: Array) -> Array:
    """Return the answers' δ, what little is left of the priced budgets used up or given back along their slopes."""
    priced = [load for load, price in zip(duty.loads, prices.tolist(), strict=True) if price > 0.0]
    if not priced or not market.smooth:
        return answers.delta
    weights = np.array([weight for weight, _, _ in priced])
    left = np.array([budget - fixed for _, fixed, budget in priced]) - weights @ answers.delta
    replies = weights * answers.give
    share: Array = np.linalg.lstsq(replies @ weights.T, left)[0]
    return np.clip(answers.delta + share @ replies, market.low, market.high)


def _moved_cost(answers: Answers, delta: Array, market: Market, curves: Curves) -> Array:
    """Return the law cost at δ near the answers: to second order where it moved by rounding, exactly otherwise."""
    move = delta - answers.delta
    if market.smooth and np.max(np.abs(move) / np.maximum(delta, 1e-300), initial=0.0) < 1e-7:
        bend = np.divide(move, answers.give, out=np.zeros(len(move)), where=answers.give > 0.0)
        return answers.cost + (answers.slope + 0.5 * bend) * move
    return market.cost_at(delta, curves)


def _bound(
    market: Market, duty: Duty, answers: Answers, money: float, slope: Array, here: Array, prices: Array
) -> float:
    """Return the separable Lagrangian at the tangent of scrap in `here`, less what unsettled answers may still gain."""
    value = money + float(np.sum(answers.cost) + slope @ (answers.delta - here))
    for (weight, fixed, budget), price in zip(duty.loads, prices, strict=True):
        value += float(price) * (float(weight @ answers.delta) + fixed - budget)
    left = answers.slope + _total_price(duty, slope, prices)
    gain = np.minimum(left * (market.low - answers.delta), left * (market.high - answers.delta))
    return value + float(np.sum(np.minimum(gain, 0.0)))


def _along(
    market: Market, curves: Curves, duty: Duty, start: Array, end: Array, start_total: float
) -> tuple[Array, float]:
    """Step back along the segment until the exact cost falls (it is convex there); the start if it never does."""
    share = 0.5
    for _ in range(30):
        trial = start + share * (end - start)
        total = duty.money(trial)[0] + float(np.sum(market.cost_at(trial, curves)))
        if total < start_total:
            return trial, total
        share *= 0.5
    return start, start_total
