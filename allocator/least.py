"""How much money would do, where a limit on it leaves no plan, and the plan that comes nearest."""

from __future__ import annotations

from dataclasses import replace

from allocator.errors import SolverError
from allocator.problem import CAPITAL, COST, Problem
from allocator.results import LeastNeeded
from allocator.solve.road import Solved, solve

ROOM = 1e-9
"""Share by which a limit is loosened when it was itself worked out."""


def least_capital(problem: Problem) -> tuple[LeastNeeded, Solved]:
    """Return the least capital that keeps the floors, and the cheapest plan with no more than that."""
    floors_alone = replace(problem, budgets={}, capital=None, spend=None)
    thrifty = solve(replace(floors_alone, objective=CAPITAL))
    assert thrifty.outcome is not None, "every step has a way, and nothing else is asked for"
    capital = thrifty.outcome.capital
    cheapest = solve(replace(floors_alone, objective=COST, capital=capital + ROOM * abs(capital)))
    nearest = cheapest if cheapest.outcome is not None else thrifty
    assert problem.capital is not None
    return LeastNeeded(CAPITAL, problem.capital, capital, _capital_for_targets(problem)), nearest


def least_total(problem: Problem) -> tuple[LeastNeeded, Solved]:
    """Return the least yearly total that keeps everything else that was asked, and its plan."""
    cheapest = solve(replace(problem, spend=None, objective=COST))
    assert cheapest.outcome is not None, "the limit on the total was the last to be taken on"
    assert problem.spend is not None
    total = cheapest.outcome.money.total
    return LeastNeeded("total", problem.spend, total, None), cheapest


def capital_for_targets(problem: Problem) -> LeastNeeded | None:
    """Return how much capital would bring a target within reach, where there is a limit on it."""
    if problem.capital is None:
        return None
    return LeastNeeded(CAPITAL, problem.capital, None, _capital_for_targets(problem))


def _capital_for_targets(problem: Problem) -> float | None:
    if not problem.budgets:
        return None
    try:
        solved = solve(replace(problem, capital=None, spend=None, objective=CAPITAL))
    except SolverError:  # A line too long to be asked this; what was asked is answered all the same.
        return None
    return None if solved.outcome is None else solved.outcome.capital
