"""Further limits on lines too long for the master: a price of each, or the budget at which the money just does.

At a price μ ≥ 0 of capital the question is an ordinary one without that limit, and its bound less μ·limit is a bound of
the limited one. The best yield for the money lies between a budget that provably no plan keeps within the money and
one that a plan keeps.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.choice import Choice, Outcome, evaluate, keeps_limits
from allocator.problem import CAPITAL, COST, Problem, within
from allocator.roots import root_between
from allocator.solve.fixed import FixedAnswer
from allocator.solve.mixprice import fewest_defects, serves
from allocator.solve.price import Near
from allocator.ways import Lines, Ways

Array = NDArray[np.float64]
SHIPPED = "shipped_yield"
Ask = Callable[[Problem, Near | None], FixedAnswer]
"""Answers a question that the price road serves, from a neighbouring one."""
FIRST_SHARE = 0.01
"""Share of the yearly total that the whole of a limit costs at the price tried first."""
STEP, STEPS = 4.0, 40
CHEAPEST, DEAREST = 1e-12, 1e12
TINY = 1e-300
LEAST_SHARE = 1e-15
"""Share of a load below which no budget is looked at: where some way makes no defects at all."""
SAME, SAME_WHOLE = 1e-10, 1e-5
"""Prices or budgets are the same when their logarithms differ by less: levels alone, and with ways to choose."""
SHORT = (1e-9, 1e-8, 1e-7, 1e-6, 1e-5)
"""Shares by which a yield's load is undercut to prove that no plan within the money goes so far."""
SETTLED = 1e-10
"""Gap at which the search ends."""
BY_PRICES = {
    CAPITAL: "one price for all steps and one for capital",
    SHIPPED: "one price for all steps and one for what escapes",
}
BY_BUDGETS = "one price for all steps, budget by budget"


def serves_with_a_second_yield(problem: Problem) -> bool:
    """Return whether two yields are asked for of which one is the shipped one: what escapes gets a price then."""
    return serves(problem) and len(problem.budgets) == 2 and SHIPPED in problem.budgets


def serves_with_limits(problem: Problem) -> bool:
    """Return whether a question with one limit on money, or for the least capital, comes down to ones without."""
    if problem.spend is not None and (problem.capital is not None or problem.objective == COST):
        return False
    return serves(replace(problem, objective=COST, capital=None, spend=None))


def solve_limited(problem: Problem, ask: Ask) -> FixedAnswer | None:
    """Return the best answer of a question that `serves_with_limits`; None where none was found within the limits."""
    if problem.objective == COST:
        return _within(problem, ask, SHIPPED if problem.capital is None else CAPITAL)
    if problem.objective == CAPITAL:
        return _least_capital(problem, ask)
    return _best_yield(problem, ask)


@dataclass(frozen=True)
class _Priced:
    """A limit that gets a price: the question at a price, how much of the limit an answer uses, and its end."""

    name: str
    limit: float
    at: Callable[[float], Problem]
    used: Callable[[Outcome], float]


def _priced(problem: Problem, name: str) -> _Priced:
    if name == CAPITAL:
        assert problem.capital is not None
        return _Priced(name, problem.capital, lambda p: _at_capital_price(problem, p), lambda o: o.capital)
    return _Priced(name, problem.budgets[name], lambda p: _at_escape_price(problem, p), lambda o: o.loads[name])


@dataclass
class _Trail:
    """What was asked so far at prices of a limit: the best answer within it, the last beyond it, the bound."""

    problem: Problem
    ask: Ask
    priced: _Priced
    best: Outcome | None = None
    beyond: Outcome | None = None
    bound: float = -math.inf
    prices: dict[str, float] = field(default_factory=dict)
    near: Near | None = None

    def over(self, log_price: float) -> float:
        """Return by which share the limit is exceeded at a price; 0 once the best is proven to be it."""
        price, limit = math.exp(log_price), self.priced.limit
        free = self.ask(self.priced.at(price), self.near)
        self.near = Near(free.outcome.flow.intensity, free.price or {})
        outcome = evaluate(self.problem.line, self.problem.options, free.outcome.choice)
        used = self.priced.used(outcome)
        self.bound = max(self.bound, free.bound - price * limit)
        if not within(used, limit):
            self.beyond = outcome
        elif self.best is None or outcome.money.total < self.best.money.total:
            self.best, self.prices = outcome, {**(free.price or {}), self.priced.name: price}
        if self.best is not None and self.best.money.total - self.bound <= SETTLED * abs(self.best.money.total):
            return 0.0
        # What just keeps the limit is not settled yet, so it counts as below.
        return (used - limit) / max(limit, TINY) or -SETTLED


def _within(problem: Problem, ask: Ask, name: str) -> FixedAnswer | None:
    """Search the price at which a limit is just kept."""
    trail = _Trail(problem, ask, _priced(problem, name))
    free = ask(trail.priced.at(0.0), None)
    here = math.log(FIRST_SHARE * max(abs(free.outcome.money.total), 1.0) / max(trail.priced.limit, TINY))
    here = min(max(here, math.log(CHEAPEST)), math.log(DEAREST))
    step = math.log(STEP) * (1.0 if trail.over(here) > 0.0 else -1.0)
    for _ in range(STEPS):
        before, here = here, here + step
        if trail.over(here) * step <= 0.0:
            root_between(trail.over, min(before, here), max(before, here), absolute=_same(problem))
            break
    if trail.best is None:
        return None
    best = trail.best
    if name == CAPITAL and trail.beyond is not None:
        best = _blended(problem, best, trail.beyond)
    return FixedAnswer(best, min(trail.bound, best.money.total), trail.prices, BY_PRICES[name])


def _same(problem: Problem) -> float:
    return SAME if len(problem.options.ways) == problem.line.n_steps else SAME_WHOLE


def _blended(problem: Problem, kept: Outcome, beyond: Outcome) -> Outcome:
    """Spend capital that is left over: some steps go over to the dearer answer, which saves about as much per capital.

    The largest that still fit go first; where together they break a budget, fewer of them.
    """
    assert problem.capital is not None
    more, left = beyond.capital_by_step - kept.capital_by_step, problem.capital - kept.capital
    taken = []
    for i in np.argsort(-more, kind="stable").tolist():
        if 0.0 < more[i] <= left:
            taken.append(i)
            left -= more[i]
    while taken:
        rows, z = kept.choice.rows.copy(), kept.choice.z.copy()
        rows[taken], z[taken] = beyond.choice.rows[taken], beyond.choice.z[taken]
        tried = evaluate(problem.line, problem.options, Choice(rows, z))
        if keeps_limits(problem, tried) and tried.money.total < kept.money.total:
            return tried
        taken = taken[: len(taken) // 2]
    return kept


def _least_capital(problem: Problem, ask: Ask) -> FixedAnswer:
    answer = ask(_thrifty(problem), None)
    outcome = evaluate(problem.line, problem.options, answer.outcome.choice)
    return FixedAnswer(outcome, min(answer.bound, outcome.capital), None, answer.method)


@dataclass
class _Yields:
    """What was asked so far at budgets of one yield: the best within the money, and what provably no plan reaches."""

    problem: Problem
    free: Problem
    limit: float
    ask: Ask
    best: Outcome | None = None
    price: float | None = None
    proven: float = -math.inf
    near: Near | None = None

    def over(self, log_budget: float) -> float:
        """Return by which share the cheapest plan at a budget exceeds the money; 0 once no better is left."""
        name, budget = self.problem.objective, math.exp(log_budget)
        answer = self.ask(replace(self.free, split=name).with_budget(name, budget), self.near)
        self.near = Near(answer.outcome.flow.intensity, answer.price or {})
        spent = answer.outcome.money.total
        if within(spent, self.limit):
            outcome = evaluate(self.problem.line, self.problem.options, answer.outcome.choice)
            if self.best is None or outcome.loads[name] < self.best.loads[name]:
                self.best, self.price = outcome, (answer.price or {}).get(name)
        elif not within(answer.bound, self.limit):
            self.proven = max(self.proven, budget)
        if self.best is not None and self.best.loads[name] <= self.proven * (1.0 + SETTLED):
            return 0.0
        return (spent - self.limit) / max(abs(self.limit), 1.0) or -SETTLED


def _best_yield(problem: Problem, ask: Ask) -> FixedAnswer | None:
    """Search the budget of the yield at which the cheapest plan costs, or ties up, just what is allowed."""
    name, spends = problem.objective, problem.spend is not None
    limit = problem.spend if spends else problem.capital
    assert limit is not None
    free = replace(problem, objective=COST, spend=None, capital=None)
    found = _Yields(problem, free if spends else _thrifty(free), limit, ask)
    cheapest = ask(found.free, None)
    if not within(cheapest.outcome.money.total, limit):
        return None
    found.best = evaluate(problem.line, problem.options, cheapest.outcome.choice)
    ways, rows = problem.options.ways, fewest_defects(problem)
    least = evaluate(problem.line, problem.options, Choice(rows, ways.z_high[rows])).loads[name]
    most = found.best.loads[name]
    if most <= least:
        return FixedAnswer(found.best, most, None, BY_BUDGETS)
    low, high = math.log(max(least, LEAST_SHARE * most)), math.log(most)
    if found.over(low) > 0.0 and found.over(high) < 0.0:
        root_between(found.over, low, high, absolute=_same(problem))
    for share in SHORT:
        if found.proven >= found.best.loads[name] * (1.0 - share) or least >= found.best.loads[name]:
            break
        found.over(math.log(found.best.loads[name]) + math.log1p(-share))
    money = COST if spends else CAPITAL
    prices = {money: 1.0 / found.price} if found.price else dict[str, float]()
    bound = max(found.proven, least)
    return FixedAnswer(found.best, min(bound, found.best.loads[name]), prices, BY_BUDGETS)


def _all_scaled(ways: Ways, share: Array, fixed_cost: Array) -> Ways:
    """Return the ways with the money of their laws multiplied, and other fixed costs."""
    lines = Lines(len(ways), {w: (delta, cost * share[w]) for w, (delta, cost) in ways.lines.pieces.items()})
    return replace(
        ways, curves=replace(ways.curves, scale=ways.curves.scale * share), lines=lines, fixed_cost=fixed_cost
    )


def _at_escape_price(problem: Problem, price: float) -> Problem:
    """Return the question without the shipped yield, an escaping defect costing more: `price` per unit of its load."""
    line = replace(problem.line, escape_cost=problem.line.escape_cost + price / problem.line.shipped)
    (other,) = [name for name in problem.budgets if name != SHIPPED]
    return replace(problem.with_budget(SHIPPED, None), line=line, split=other)


def _at_capital_price(problem: Problem, price: float) -> Problem:
    """Return the question without its limit on capital, every unit of capital costing a price [currency/year]."""
    ways = problem.options.ways
    priced = _all_scaled(ways, 1.0 + price * ways.capital_per_cost, ways.fixed_cost + price * ways.capital)
    return replace(problem, capital=None, options=replace(problem.options, ways=priced))


def _thrifty(problem: Problem) -> Problem:
    """Return the question in which capital is the only money; a law that ties up none goes as far as it can."""
    line, ways = problem.line, problem.options.ways
    nothing = np.zeros(line.n_steps)
    gates = replace(ways.gates, rework_cost=0.0 * ways.gates.rework_cost, per_item=0.0 * ways.gates.per_item)
    priced = replace(_all_scaled(ways, ways.capital_per_cost, ways.capital.copy()), gates=gates)
    free = np.flatnonzero(ways.moves & (ways.capital_per_cost == 0.0))
    kind, z_low, delta_high = priced.curves.kind.copy(), priced.z_low.copy(), priced.delta_high.copy()
    kind[free], z_low[free], delta_high[free] = cv.NONE, ways.z_high[free], ways.delta_low[free]
    pieces = {w: piece for w, piece in priced.lines.pieces.items() if ways.capital_per_cost[w] > 0.0}
    priced = replace(
        priced, curves=replace(priced.curves, kind=kind), z_low=z_low, delta_high=delta_high,
        lines=Lines(len(priced), pieces),
    )  # fmt: skip
    return replace(
        problem, objective=COST, capital=None, options=replace(problem.options, ways=priced),
        line=replace(line, net_cost=nothing, lost=nothing, escape_cost=0.0),
    )  # fmt: skip
