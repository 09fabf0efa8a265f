"""Equipment by price: passes of pricing, filling the budget and exact evaluation, for lines of any length.

It serves where one budget couples the steps, their gates are not a choice and nothing is bought together; the bound is
the priced Lagrangian at the tangent of scrap, lifted where the remainder could be settled whole.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from allocator.problem import COST, Problem, within
from allocator.scenario.model import YIELD_NAMES
from allocator.solve.answers import Market
from allocator.solve.choose import Index, Menu, Priced, balance_menu, fill_budget, price_menu
from allocator.solve.fixed import FixedAnswer, solve_fixed
from allocator.solve.price import Duty, Near, build_duty
from allocator.solve.reduce import first_ways, gates_given, gates_of_first

Array = NDArray[np.float64]
PASSES = 12


@dataclass
class _Found:
    """The best answer and bound so far."""

    best: FixedAnswer | None = None
    bound: float = -np.inf
    extra: Array = field(default_factory=lambda: np.zeros(0))
    """What each way adds to `extra_bound`, the bound of the last pass, at the least."""
    extra_bound: float = -np.inf

    def gap(self) -> float:
        if self.best is None:
            return float("inf")
        total = self.best.outcome.money.total
        return (total - self.bound) / max(abs(total), 1.0)


def serves(problem: Problem) -> bool:
    """Return whether the price alone can settle this question: no limit on money, no gate and no purchase to choose."""
    if problem.objective != COST or problem.capital is not None or problem.spend is not None:
        return False
    return not problem.options.ways.uses.any() and gates_given(problem)


def best_of_a_yield(problem: Problem) -> bool:
    """Return whether the best of a yield is asked where every step can simply do its best."""
    unlimited = problem.capital is None and problem.spend is None
    return problem.objective in YIELD_NAMES and unlimited and gates_given(problem)


def fewest_defects(problem: Problem) -> Index:
    """Return the way of every step that gets its defects lowest, the cheaper of two; it keeps any budget that can be.

    The best of every yield at once, where no gate is a choice and money sets no limit.
    """
    ways = problem.options.ways
    order = np.lexsort((ways.fixed_cost, ways.delta_low, ways.step))
    return np.asarray(order[np.flatnonzero(np.diff(ways.step[order], prepend=-1))], dtype=np.int64)


@dataclass(frozen=True)
class ByPrice:
    """The best answer, its bound, and the ways that no better plan can take (bool, shape (n_ways,))."""

    best: FixedAnswer
    bound: float
    excluded: NDArray[np.bool_]


def solve_by_price(problem: Problem, gap: float, near: Near | None = None) -> ByPrice | None:
    """Return the best answer with its bound, None where no choice that keeps the limits was found.

    Parameters
    ----------
    problem : Problem
        One that `serves`.
    gap : float
        Relative gap at which to stop.
    near : Near, optional
        What is known from a neighbouring question.
    """
    ways, line = problem.options.ways, problem.line
    first = first_ways(problem)
    fixed = ways.fixed_cost + (line.shipped * line.per_finished)[ways.step] * ways.gates.per_item
    market = Market(ways.curves, ways.z_low, ways.z_high, ways.lines.pieces)
    menu = Menu(market, first, ways.step, fixed)
    budgets = {problem.split: problem.budgets[problem.split]} if problem.split in problem.budgets else {}
    duty = build_duty(line, gates_of_first(problem), budgets)
    here, price, found = np.minimum.reduceat(market.low, first), 1.0, _Found()
    if near is not None:
        here, price = near.intensity, near.prices.get(problem.split) or 1.0
    for _ in range(PASSES):
        before = found.best
        rows, price = _one_pass(problem, menu, duty, here, price, found)
        if rows is not None:
            _offer(problem, rows, found)
        if found.gap() <= gap or (found.best is before and before is not None):
            break
        if found.best is not None:
            here = found.best.outcome.flow.intensity
    if found.best is None:
        return None
    total = found.best.outcome.money.total
    excluded = found.extra > total - found.extra_bound + 1e-9 * abs(total)
    excluded[found.best.outcome.choice.rows] = False
    return ByPrice(found.best, found.bound, excluded)


def _offer(problem: Problem, rows: Index, found: _Found) -> None:
    hopeless = None if found.best is None else found.best.outcome.money.total
    answer = solve_fixed(problem, rows, hopeless)
    if answer is not None and (hopeless is None or answer.outcome.money.total < hopeless):
        found.best = answer


def _one_pass(
    problem: Problem, menu: Menu, duty: Duty, here: Array, price: float, found: _Found
) -> tuple[Index | None, float]:
    """Price the menu at the tangent in `here`, lift the bound, and return the choice that fills the budget."""
    money, slope = duty.money(here)
    rest = money - float(slope @ here)
    if not duty.loads:
        priced = price_menu(menu, slope, slope, 0.0)
        _note(menu, found, priced, rest + _least(menu, priced))
        return priced.best, 0.0
    weight, used, budget = duty.loads[0]
    free = budget - used
    under, over = balance_menu(menu, slope, weight, free, price)
    sides = [side for side in (under, over) if side is not None]
    bounds = [rest + _least(menu, side) - side.price * free for side in sides]
    tightest = int(np.argmax(bounds))
    _note(menu, found, sides[tightest], bounds[tightest])
    if over is None:
        return under.best, 0.0
    if not within(under.load, free):
        return None, under.price
    if found.best is None:
        _offer(problem, under.best, found)
    allowed = np.inf if found.best is None else max(found.best.outcome.money.total - bounds[tightest], 0.0)
    rows, lift = fill_budget(menu, weight, free, sides[tightest], allowed)
    found.bound = max(found.bound, bounds[tightest] + lift)
    return (under.best if rows is None else rows), under.price


def _note(menu: Menu, found: _Found, priced: Priced, bound: float) -> None:
    found.bound = max(found.bound, bound)
    found.extra, found.extra_bound = priced.value - priced.value[priced.best][menu.step], bound


def _least(menu: Menu, priced: Priced) -> float:
    return float(np.sum(priced.value[priced.best]))
