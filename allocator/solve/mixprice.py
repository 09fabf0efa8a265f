"""Equipment by price: passes of pricing, filling the budget and exact evaluation, for lines of any length.

It serves where one budget couples the steps, their gates are not a choice and nothing is bought together; the bound is
the priced Lagrangian at the tangent of scrap, lifted where the remainder could be settled whole or branched over.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator.problem import COST, Problem
from allocator.scenario.model import YIELD_NAMES
from allocator.solve.answers import Market
from allocator.solve.branch import Tangent, branch, tangent_at
from allocator.solve.choose import Index, Menu, Priced, balance_menu, fill_budget, first_price, price_menu
from allocator.solve.duty import build_duty
from allocator.solve.fixed import FixedAnswer, solve_fixed
from allocator.solve.price import Near
from allocator.solve.reduce import gates_given, gates_of_first

Array = NDArray[np.float64]
PASSES = 12
NEARLY = 1e-3
"""Share of the money by which the tangent of scrap may miss it at the first ways that are offered."""
SHORT_LIST, LONGEST_LIST = 500, 20_000
"""Combinations kept while the budget is filled: at first, and where these leave more than the gap."""


def serves(problem: Problem) -> bool:
    """Return whether the price alone can settle this question: no limit on money, no gate and no purchase to choose."""
    if not problem.by_price or problem.objective != COST or problem.capital is not None or problem.spend is not None:
        return False
    return not problem.options.ways.uses.any() and gates_given(problem)


def best_of_a_yield(problem: Problem) -> bool:
    """Return whether the best of a yield is asked where every step can simply do its best."""
    unlimited = problem.by_price and problem.capital is None and problem.spend is None
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


def solve_by_price(problem: Problem, gap: float, near: Near | None = None, seconds: float = 0.0) -> ByPrice | None:
    """Return the best answer with its bound, None where no choice that keeps the limits was found.

    Parameters
    ----------
    problem : Problem
        One that `serves`.
    gap : float
        Relative gap at which to stop.
    near : Near, optional
        What is known from a neighbouring question.
    seconds : float
        Time for branching over what one price leaves open.
    """
    search = _Search(problem, near)
    for _ in range(PASSES):
        before = search.value, search.bound
        search.one_pass()
        if search.gap() > gap and (search.room > 0.5 * search.open(gap) or (search.value, search.bound) == before):
            search.fill(gap)
        if search.gap() <= gap or (search.value, search.bound) == before:
            break
        search.shrink()
    if search.best is None:
        return None
    if search.gap() > gap and seconds > 0.0 and search.duty.loads:
        search.branch(gap, seconds)
    return ByPrice(search.best, search.bound, search.excluded())


class _Search:
    """What is known so far: the best answer and bound, and the ways (`rows`) that a better plan can still take."""

    def __init__(self, problem: Problem, near: Near | None) -> None:
        self.problem, self.rows = problem, np.arange(len(problem.options.ways))
        budgets = {k: budget for k, budget in problem.budgets.items() if k == problem.split}
        self.duty = build_duty(problem.line, gates_of_first(problem), budgets)
        self.menu = _menu(problem, self.rows)
        self.best: FixedAnswer | None = None
        self.bound = -np.inf
        self.tried: set[bytes] = set()
        self.extra, self.extra_bound = np.zeros(len(self.rows)), -np.inf
        self.here = np.minimum.reduceat(self.menu.market.low, self.menu.first)
        self.price = 0.0
        self.room = 0.0
        """What the room left in the budget by the last pass is worth at its price, where combinations could fill it."""
        self.priced: Priced | None = None
        if self.duty.loads:
            _, used, budget = self.duty.loads[0]
            self.price = first_price(self.menu, budget - used)
        if near is not None:
            self.here, self.price = near.intensity, near.prices.get(problem.split) or self.price

    @property
    def value(self) -> float:
        return np.inf if self.best is None else self.best.outcome.money.total

    def gap(self) -> float:
        return (self.value - self.bound) / max(abs(self.value), 1.0) if self.best is not None else np.inf

    def open(self, gap: float) -> float:
        """Return what is left between answer and bound, or `gap` of the answer if that is more."""
        return max(self.value - self.bound, gap * abs(self.value))

    def one_pass(self) -> None:
        """Price the menu at the tangent of scrap seen last, lift the bound, and offer what answers."""
        tangent = self._near_tangent()
        self.room, self.priced = 0.0, None
        if not self.duty.loads:
            priced = price_menu(self.menu, tangent.slope, tangent.slope, 0.0)
            self._note(priced, tangent.rest + least(priced))
            self.offer(priced.best)
            return
        weight, used, budget = self.duty.loads[0]
        free = budget - used
        under, over = balance_menu(self.menu, tangent.slope, weight, free, self.price)
        self.price = under.price or self.price
        sides = [side for side in (under, over) if side is not None]
        bounds = [tangent.rest + least(side) - side.price * free for side in sides]
        best = int(np.argmax(bounds))
        self._note(sides[best], bounds[best])
        for side in sides[:1] if self.menu.pinned else sides:  # Where no way moves, the other cannot keep the budget.
            self.offer(side.best)
        if over is not None and self.best is not None and self.menu.market.still:
            self.room, self.priced = under.price * (free - under.load), sides[best]

    def _near_tangent(self) -> Tangent:
        """Return the tangent of scrap; where no way moves, at ways whose scrap it nearly tells, before an offer."""
        tangent, menu = tangent_at(self.duty, self.here), self.menu
        if self.best is not None or not self.duty.loads or not menu.pinned:
            return tangent
        weight, used, budget = self.duty.loads[0]
        for _ in range(PASSES):
            under, _ = balance_menu(menu, tangent.slope, weight, budget - used, self.price)
            here = under.answers.delta[under.best]
            truer = tangent_at(self.duty, here)
            off = truer.rest - tangent.rest + float((truer.slope - tangent.slope) @ here)
            if off <= NEARLY * abs(least(under)):
                break
            tangent, self.here, self.price = truer, here, under.price or self.price
        return tangent

    def fill(self, gap: float) -> None:
        """Fill the budget by combinations of ways at the last price, and lift the bound by what none of them saves.

        Short lists of them are quick, and mostly enough on long lines.
        """
        for longest in (SHORT_LIST, LONGEST_LIST):
            if self.priced is None or self.gap() <= gap:
                return
            weight, used, budget = self.duty.loads[0]
            allowed = max(self.value - self.extra_bound, 0.0)
            rows, lift = fill_budget(self.menu, weight, budget - used, self.priced, allowed, longest)
            self.bound = max(self.bound, self.extra_bound + lift)
            if rows is not None:
                self.offer(rows)

    def offer(self, chosen: Index) -> float:
        """Evaluate one way per step, given as rows of the menu, and return the least total so far."""
        rows = self.rows[chosen]
        if rows.tobytes() not in self.tried:
            self.tried.add(rows.tobytes())
            hopeless = None if self.best is None else self.value
            near = Near(self.here, {self.problem.split: self.price} if self.price else {})
            answer = solve_fixed(self.problem, rows, hopeless, near)
            if answer is not None and answer.outcome.money.total < self.value:
                self.best, self.here = answer, answer.outcome.flow.intensity
        return self.value

    def shrink(self) -> None:
        """Leave out of the menu what no better plan takes."""
        kept = np.flatnonzero(~self.excluded()[self.rows])
        if 2 * len(kept) < len(self.rows):
            self.rows = self.rows[kept]
            self.menu, self.extra = _menu(self.problem, self.rows), self.extra[kept]

    def branch(self, gap: float, seconds: float) -> None:
        """Branch over the ways left, without the steps that have one way only, which does not move."""
        self.shrink()
        menu = self.menu
        weight, used, budget = self.duty.loads[0]
        moves = self.problem.options.ways.moves[self.rows]
        settled = (np.bincount(menu.step, minlength=len(menu.first)) == 1) & ~moves[menu.first]
        if settled.all():
            return
        open_steps, rows, alone = np.flatnonzero(~settled), np.flatnonzero(~settled[menu.step]), menu.first[settled]
        delta = menu.market.high[alone]
        paid = float(np.sum(menu.fixed[alone] + menu.market.still_cost[alone]))

        def touch(here: Array) -> Tangent:
            every = np.empty(len(settled))
            every[settled], every[open_steps] = delta, here
            whole = tangent_at(self.duty, every)
            return Tangent(whole.slope[open_steps], whole.rest + paid + float(whole.slope[settled] @ delta))

        def offer(chosen: Index) -> float:
            every = menu.first.copy()
            every[open_steps] = rows[chosen]
            return self.offer(every)

        bound = branch(
            _menu(self.problem, self.rows[rows]), weight[open_steps], budget - used - float(weight[settled] @ delta),
            touch, self.here[open_steps], self.price, offer, gap, seconds,
        )  # fmt: skip
        self.bound = max(self.bound, min(bound, self.value))

    def excluded(self) -> NDArray[np.bool_]:
        """Return the ways of the problem that no better plan takes."""
        dropped = np.ones(len(self.problem.options.ways), dtype=bool)
        dropped[self.rows] = self.extra > self.value - self.extra_bound + 1e-9 * abs(self.value)
        if self.best is not None:
            dropped[self.best.outcome.choice.rows] = False
        return dropped

    def _note(self, priced: Priced, bound: float) -> None:
        """Keep the bound, and what each way would add to it at the least."""
        self.bound = max(self.bound, bound)
        self.extra, self.extra_bound = priced.value - priced.value[priced.best][self.menu.step], bound


def _menu(problem: Problem, rows: Index) -> Menu:
    """Return the menu of some ways; the steps that have any are numbered one after another."""
    ways, line = problem.options.ways, problem.line
    step = ways.step[rows]
    per_item = (line.shipped * line.per_finished)[step] * ways.gates.per_item[rows]
    # A copy of every way would be most of the memory that a long line takes.
    curves, lines = (
        (ways.curves, ways.lines) if len(rows) == len(ways) else (ways.curves.take(rows), ways.lines.take(rows))
    )
    ends = ways.delta_low[rows], ways.delta_high[rows]
    market = Market(curves, ways.z_low[rows], ways.z_high[rows], lines.pieces, ends)
    new = np.diff(step, prepend=-1) > 0
    return Menu(market, np.flatnonzero(new), np.cumsum(new) - 1, ways.fixed_cost[rows] + per_item)


def least(priced: Priced) -> float:
    return float(np.sum(priced.value[priced.best]))
