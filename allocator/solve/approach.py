"""How to come near the optimum of a line in few passes: prices and the tangent of scrap move together.

Every turn answers the last prices and tangent by one Newton step of every level, takes the tangent there, and reads off
the answers' slopes which prices would then balance the budgets; the turns before tell how far to follow. It has no
part in any proof: what it returns is only where the price road starts from.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator.solve.answers import Answers, Market
from allocator.solve.duty import Duty

Array = NDArray[np.float64]
TURNS = 25
FIRST_ROUNDS = 3
"""Newton steps of the first turn, whose levels start half way up their ranges."""
REMEMBERED = 2
"""Turns before the last one that are followed."""
CLOSE = 1e-11
"""Share of the money at stake that the turns may leave open."""


@dataclass(frozen=True)
class _Turn:
    """What a turn found: scrap's slope, the prices beside it, and what both are above the slopes of the answers."""

    slope: Array
    prices: Array
    miss: Array


def approach(market: Market, duty: Duty, slope: Array, here: Array, prices: Array) -> tuple[Array, Array]:
    """Return intensities and prices close to the optimum, from others in the neighbourhood.

    Parameters
    ----------
    market : Market
        One smooth way per step.
    duty : Duty
    slope, here : shape (n_steps,)
        Scrap's tangent at intensities `here`.
    prices : shape (n_budgets,) [currency/year per unit of budget]
    """
    weights = np.array([weight for weight, _, _ in duty.loads]).reshape(len(duty.loads), market.size)
    budgets = np.array([budget - fixed for _, fixed, budget in duty.loads])
    turns: list[_Turn] = []
    for number in range(TURNS):
        answers = market.answer(slope + prices @ weights, 1 if number else FIRST_ROUNDS)
        money, truer = duty.money(answers.delta)
        balanced = _balancing(answers, truer, weights, budgets)
        if balanced is None or not np.isfinite(money):
            break
        here, miss = answers.delta, truer + balanced @ weights + answers.slope
        if answers.give @ miss**2 <= CLOSE * (abs(money) + float(balanced @ budgets)):
            return here, balanced
        turns = [_Turn(truer, balanced, miss), *turns[:REMEMBERED]]
        slope, prices = _followed(turns, answers.give)
    return here, prices


def _balancing(answers: Answers, slope: Array, weights: Array, budgets: Array) -> Array | None:
    """Return the prices that balance the budgets beside scrap's slope, by the slopes of the answers; 0 where slack."""
    loads = weights @ (answers.delta - answers.give * (slope + answers.slope)) - budgets
    yields = (weights * answers.give) @ weights.T
    for count in range(len(budgets) + 1):
        for some in map(list, itertools.combinations(range(len(budgets)), count)):
            prices = np.zeros(len(budgets))
            if some:
                prices[some] = np.linalg.lstsq(yields[np.ix_(some, some)], loads[some])[0]
            over = loads - yields @ prices
            if (prices >= 0.0).all() and (over <= 1e-9 * budgets).all():
                return prices
    return None


def _followed(turns: list[_Turn], weight: Array) -> tuple[Array, Array]:
    """Return the mean of what the turns found that would have missed least, had all been straight."""
    last, others = turns[0], turns[1:]
    shares = np.zeros(len(others))
    if others:
        steps = np.array([turn.miss - last.miss for turn in others])
        weighted = steps * weight
        shares = np.linalg.lstsq(weighted @ steps.T, -(weighted @ last.miss), rcond=1e-10)[0]
    slope, prices = last.slope, last.prices
    for share, turn in zip(shares.tolist(), others, strict=True):
        slope, prices = slope + share * (turn.slope - last.slope), prices + share * (turn.prices - last.prices)
    return np.maximum(slope, 0.0), np.maximum(prices, 0.0)
