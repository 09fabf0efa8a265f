"""Solve one question: choose the method by its size, and say what stands in the way when nothing keeps the limits."""

from __future__ import annotations

import itertools
import math
import time
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from allocator.choice import Outcome, keeps_limits
from allocator.errors import SolverError
from allocator.problem import CAPITAL, COST, Problem, within
from allocator.solve.fixed import AT_AN_END, PRICE, FixedAnswer, solve_fixed
from allocator.solve.mixed import solve_mixed
from allocator.solve.mixprice import ByPrice, best_of_a_yield, fewest_defects, serves, solve_by_price
from allocator.solve.money_limits import serves_with_a_second_yield, serves_with_limits, solve_limited
from allocator.solve.price import Near
from allocator.solve.reduce import first_choices, ways_by_step, without_dominated, without_excessive

SMALL_MOVING, SMALL_STILL = 40, 3000
"""Choices solved one by one rather than by branch and bound: with levels to find in each, and without."""
GAP = 1e-7
"""Gap aimed at; the promise is 1e-6 continuous and 1e-4 mixed up to 200 steps of 6 ways."""
GAP_LARGE = 2e-5
GAP_PRICED = 1e-6
"""Gap at which the price road's answer with choices is good enough; else the remainder is settled."""
LARGE = 250
"""Ways above which the wider aim applies."""
SECONDS = 60.0
SECONDS_LEFT = 20.0
"""Time for the remainder that the price could not settle: its answer has a proof already."""
LONGEST_MASTER = 4000
"""Steps beyond which the price road's answer stands with its printed gap: the master would take minutes."""
TOO_LONG = (
    "a line of {:,} steps with a shared purchase, a choice of gates or two limits at once is more than can be searched "
    "(at most {:,} steps); ask without these, or for a part of the line"
)
NOT_BY_PRICE = (
    "no plan was found for several yields under a limit on money on a line of {:,} steps; ask for one yield, "
    "or without the limit"
)
MANY_LEVELS = 100
"""Levels that move above which a limit on money is priced rather than worked out with all levels together."""
BRANCHED = "branch and bound"


@dataclass(frozen=True)
class Solved:
    """The best choice found, its proven bound and gap, and the price of each limit; no outcome when infeasible.

    `blocked` names the limit (a yield, "capital" or "cost") that no choice keeps beside the ones before it, and `least`
    a value that it cannot go below.
    """

    problem: Problem
    outcome: Outcome | None
    bound: float
    gap: float
    price: dict[str, float] | None
    method: str
    seconds: float
    blocked: str | None = None
    least: float = math.nan

    @property
    def near(self) -> Near | None:
        """What a neighbouring question can start from."""
        return None if self.outcome is None else Near(self.outcome.flow.intensity, self.price or {})


def solve(problem: Problem, starts: list[NDArray[np.int64]] | None = None, near: Near | None = None) -> Solved:
    """Return the best choice for the problem's objective, with its proof.

    Parameters
    ----------
    problem : Problem
    starts : list of int arrays, optional
        Choices (rows of the problem's own table) worth trying first, from a neighbouring question.
    near : Near, optional
        Prices and intensities of a neighbouring question.
    """
    began = time.monotonic()
    reduced = without_excessive(without_dominated(problem))
    translated = _in_reduced(problem, reduced, starts or [])
    solved = _by_size(reduced, translated, near=near) or _first_feasible(without_dominated(problem))
    if solved.outcome is not None and solved.problem.objective != problem.objective:
        # What was found keeps every limit; now it can serve as the start that the search was missing.
        found = _by_size(reduced, _in_reduced(solved.problem, reduced, [solved.outcome.choice.rows]))
        if found is None:
            raise SolverError("a plan that keeps every limit is known but could not be improved; report the scenario")
        solved = found
    return replace(solved, seconds=time.monotonic() - began)


def _by_size(
    problem: Problem, starts: list[NDArray[np.int64]], enough: float | None = None, near: Near | None = None
) -> Solved | None:
    """Solve choice by choice, by price, or by branch and bound; None when no choice that keeps the limits is known."""
    if _long_under_a_limit(problem):
        asks_capital = problem.objective == CAPITAL
        objective = COST if asks_capital else problem.objective
        free = _by_size(replace(problem, objective=objective, capital=None, spend=None), starts, near=near)
        if free is None or free.outcome is None:
            return None
        if not asks_capital and keeps_limits(problem, free.outcome):
            return replace(free, problem=problem)  # A limit that does not bind costs nothing.
        if serves_with_limits(problem):
            return _by_price_of_the_limit(problem, starts, enough)
    few = SMALL_MOVING if problem.options.ways.moves.any() else SMALL_STILL
    choices = _count_choices(problem, few)
    if choices <= few:
        return _every_choice(problem, choices, near)
    gap = GAP if len(problem.options.ways) <= LARGE else GAP_LARGE
    if best_of_a_yield(problem):
        answer = solve_fixed(problem, fewest_defects(problem))
        return None if answer is None else _solved(problem, answer, answer.bound, AT_AN_END)
    if serves(problem):
        priced = solve_by_price(problem, GAP_PRICED, near, SECONDS_LEFT)
        solved = None if priced is None else _solved(problem, priced.best, priced.bound, PRICE)
        if len(problem.budgets) > 1 and (solved is None or solved.gap > GAP_PRICED):
            if problem.line.n_steps > LONGEST_MASTER:
                solved = _with_a_second_price(problem, solved)
            elif priced is not None and solved is not None:
                solved = _settle_remainder(problem, priced, solved)
        if solved is not None:
            return solved
    return _branch_and_bound(problem, starts, gap, enough)


def _long_under_a_limit(problem: Problem) -> bool:
    """Return whether a limit on money couples so many steps that its price is the better way."""
    if problem.capital is None and problem.spend is None and problem.objective != CAPITAL:
        return False
    ways = problem.options.ways
    return len(ways) > LARGE or len(np.unique(ways.step[ways.moves])) > MANY_LEVELS


def _by_price_of_the_limit(problem: Problem, starts: list[NDArray[np.int64]], enough: float | None) -> Solved | None:
    """Solve by a price of the limit; where that leaves a gap, and the line is not too long, branch from there."""
    short = problem.line.n_steps <= LONGEST_MASTER and len(problem.options.ways) > problem.line.n_steps
    try:
        limited = solve_limited(problem, _ask_free)
    except SolverError:
        if not short:
            raise
        limited = None
    if limited is None:
        return _branch_and_bound(problem, starts, GAP_LARGE, enough) if short else None
    solved = _solved(problem, limited, limited.bound, limited.method)
    if solved.gap <= GAP_LARGE or not short:
        return solved
    search = solve_mixed(problem, [limited.outcome.choice.rows, *starts], GAP_LARGE, SECONDS_LEFT, enough)
    best = limited
    if search.best is not None and search.value_of_best < limited.outcome.value(problem.objective):
        best = search.best
    return _solved(problem, best, max(search.bound, limited.bound), f"{limited.method}, then {BRANCHED}")


def _with_a_second_price(problem: Problem, solved: Solved | None) -> Solved | None:
    """Return the better of an answer to two yields and one in which the shipped yield has a price of its own."""
    if not serves_with_a_second_yield(problem):
        return solved
    second = solve_limited(problem, _ask_free)
    if second is None:
        return solved
    other = _solved(problem, second, second.bound, second.method)
    if solved is None:
        return other
    bound = max(solved.bound, other.bound)
    best = min((solved, other), key=lambda one: math.inf if one.outcome is None else one.outcome.money.total)
    assert best.outcome is not None
    gap = (best.outcome.money.total - bound) / max(abs(best.outcome.money.total), 1.0)
    return replace(best, bound=bound, gap=gap)


def _ask_free(problem: Problem, near: Near | None) -> FixedAnswer:
    """Answer a question without limits on money by price alone; what that leaves open stays in the bound."""
    if len(problem.options.ways) == problem.line.n_steps:
        answer = solve_fixed(problem, np.arange(problem.line.n_steps), near=near)
    else:
        priced = solve_by_price(problem, GAP_PRICED, near)
        answer = None if priced is None else replace(priced.best, bound=priced.bound)
    if answer is None:
        raise SolverError(NOT_BY_PRICE.format(problem.line.n_steps))
    return answer


def _branch_and_bound(
    problem: Problem, starts: list[NDArray[np.int64]], gap: float, enough: float | None
) -> Solved | None:
    if problem.line.n_steps > LONGEST_MASTER:
        raise SolverError(TOO_LONG.format(problem.line.n_steps, LONGEST_MASTER))
    search = solve_mixed(problem, starts or first_choices(problem), gap, SECONDS, enough)
    if search.best is None and starts:
        search = solve_mixed(problem, first_choices(problem), gap, SECONDS, enough)
    if search.best is None:
        return None
    return _solved(problem, search.best, search.bound, f"cutting planes and {BRANCHED}")


def _settle_remainder(problem: Problem, priced: ByPrice, solved: Solved) -> Solved:
    """Branch and bound over the ways that the price could not exclude; what is excluded is in no better plan."""
    kept = np.flatnonzero(~priced.excluded)
    small = replace(problem, options=replace(problem.options, ways=problem.options.ways.take(kept)))
    rows = np.searchsorted(kept, priced.best.outcome.choice.rows).astype(np.int64)
    try:
        search = solve_mixed(small, [rows], GAP_PRICED, SECONDS_LEFT)
    except SolverError:
        return solved  # The priced answer stands with its own proof.
    assert search.best is not None
    bound = max(min(search.bound, search.value(search.best)), priced.bound)
    method = f"{PRICE}, {BRANCHED} over the {len(kept):,} ways left"
    settled = _solved(small, search.best, bound, method)
    return settled if settled.gap < solved.gap else solved


def _count_choices(problem: Problem, few: int) -> int:
    """Return how many choices there are, or any larger number once there are more than `few`."""
    counts = np.bincount(problem.options.ways.step)
    several = counts[counts > 1].tolist()
    return math.prod(several) if len(several) <= few else few + 1


def _every_choice(problem: Problem, choices: int, near: Near | None) -> Solved | None:
    best: FixedAnswer | None = None
    bound, methods = math.inf, dict[str, None]()
    each = itertools.product(*ways_by_step(problem)) if choices > 1 else [range(problem.line.n_steps)]
    for rows in each:
        value = None if best is None else best.outcome.value(problem.objective)
        answer = solve_fixed(problem, np.array(rows, dtype=np.int64), value, near)
        if answer is None:
            continue
        bound = min(bound, answer.bound)
        methods[answer.method] = None
        if value is None or answer.outcome.value(problem.objective) < value:
            best = answer
    if best is None:
        return None
    by = " or ".join(methods)
    method = by if choices == 1 else f"all {choices:,} choices, each by {by}"
    return _solved(problem, best, bound, method)


def _first_feasible(problem: Problem) -> Solved:
    """Find a choice that keeps every limit, taking the limits on one by one; or say which one cannot be kept.

    The money limits come first and the split yield last, so that what is reported for it is its best beside the others.
    """
    limits: list[tuple[str, float]] = []
    if problem.capital is not None:
        limits.append((CAPITAL, problem.capital))
    limits += [(name, budget) for name, budget in problem.budgets.items() if name != problem.split]
    if problem.split in problem.budgets:
        limits.append((problem.split, problem.budgets[problem.split]))
    if problem.spend is not None:
        limits.append((COST, problem.spend))
    kept = replace(problem, budgets={}, capital=None, spend=None)
    starts: list[NDArray[np.int64]] = []
    solved = Solved(problem, None, math.nan, math.nan, None, "", 0.0)
    for name, limit in limits:
        found = _by_size(replace(kept, objective=name), starts, enough=limit)
        assert found is not None, "the limits taken on so far were kept by an earlier choice"
        assert found.outcome is not None
        solved = found
        least = found.outcome.value(name)
        if not within(least, limit):
            return Solved(problem, None, solved.bound, solved.gap, None, solved.method, 0.0, name, solved.bound)
        starts = [found.outcome.choice.rows]
        if name == CAPITAL:
            kept = replace(kept, capital=limit)
        elif name == COST:
            kept = replace(kept, spend=limit)
        else:
            kept = kept.with_budget(name, limit)
    return solved


def _solved(problem: Problem, best: FixedAnswer, bound: float, method: str) -> Solved:
    value = best.outcome.value(problem.objective)
    bound = min(bound, value)
    least = 1.0 if problem.objective == COST else 1e-300
    return Solved(problem, best.outcome, bound, (value - bound) / max(abs(value), least), best.price, method, 0.0)


def _in_reduced(problem: Problem, reduced: Problem, starts: list[NDArray[np.int64]]) -> list[NDArray[np.int64]]:
    """Translate choices into rows of the reduced table; a way that was dropped is replaced by nothing (left out)."""
    if reduced is problem:
        return starts
    own, kept = problem.options.ways, reduced.options.ways
    translated = [kept.find(own, rows) for rows in starts]
    return [rows for rows in translated if -1 not in rows]


def sweep(problem: Problem, budgets: Sequence[float | None]) -> list[Solved]:
    """Return the cheapest plan at each budget of the split yield, other targets, floors and limits kept.

    Each answer starts from the one before, so budgets in falling (or rising) order are quickest.

    Parameters
    ----------
    problem : Problem
    budgets : sequence of float or None
        Defect budgets −ln(yield); None lifts the target.
    """
    reduced, answers = without_dominated(problem), list[Solved]()
    near, starts = None, list[NDArray[np.int64]]()
    for budget in budgets:
        solved = solve(reduced.with_budget(problem.split, budget), starts, near)
        answers.append(solved)
        if solved.outcome is not None:
            near = solved.near
            starts = [reduced.options.ways.find(solved.problem.options.ways, solved.outcome.choice.rows)]
    return answers
