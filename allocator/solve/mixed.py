"""Which way to run each step when equipment must be taken whole: cutting planes, then branch and bound, with proof."""

from __future__ import annotations

import time
from collections.abc import Iterable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from allocator.problem import COST, Problem
from allocator.solve.backend import solve_whole
from allocator.solve.cuts import cuts_at, cuts_for_choice, first_cuts
from allocator.solve.rows import Master, build_master, nearest_choice
from allocator.solve.search import Search

Array = NDArray[np.float64]
ROUNDS_WHOLE = 25


def solve_mixed(
    problem: Problem, starts: Iterable[NDArray[np.int64]], gap: float, seconds: float, enough: float | None = None
) -> Search:
    """Search for the best choice and prove it.

    Parameters
    ----------
    problem : Problem
    starts : list of int arrays, shape (n_steps,)
        Ways to try first; at least one must keep the limits for the scales of the master to be set by it.
    gap : float
        Relative gap aimed at.
    seconds : float
        Time after which the best so far is returned with the gap proven by then.
    enough : float, optional
        Stop as soon as a choice is at or below this value, or none can be.
    """
    began = time.monotonic()
    search = Search(problem, None, -np.inf, {}, enough)
    for rows in starts:
        search.offer(rows)
        if search.done(gap):
            return search
    if search.best is None:
        return search
    from allocator.solve.tree_search import TreeSearch  # here, because most questions need no solver

    master = _master(search)
    tree = TreeSearch(search, master, gap, began + seconds)
    tree.grow()
    for _ in range(ROUNDS_WHOLE if tree.left_open else 0):
        left = seconds - (time.monotonic() - began)
        if search.done(gap) or left <= 0.5 or not _solve_whole(search, master, tree.excluded, gap, left):
            break
    return search


def _master(search: Search) -> Master:
    """Build the master around the best answer so far, which sets its scales and the ends of its flows."""
    problem, best = search.problem, search.best
    assert best is not None
    outcome = best.outcome
    load = outcome.loads[problem.split]
    defect_scale = problem.budgets.get(problem.split, 0.0) or load or max(outcome.loads.values()) or 1.0
    money = problem.spend if problem.spend is not None else outcome.money.total
    money_scale = max(abs(money), abs(outcome.money.improvement), 1e-6)
    master = build_master(problem, defect_scale, money_scale, _most_exponent(search))
    first_cuts(master, [outcome.flow.exponent, np.zeros_like(outcome.flow.exponent)])
    cuts_for_choice(master, outcome.choice.rows, outcome.flow.intensity, outcome.flow.exponent)
    return master


def _most_exponent(search: Search) -> float:
    """Return an end for the flow exponents that no better plan can pass: its scrap alone would cost more."""
    problem, best = search.problem, search.best
    assert best is not None
    line, ways = problem.line, problem.options.ways
    weight = line.shipped * line.per_finished * line.net_cost
    steps = np.zeros(line.n_steps)
    np.maximum.at(steps, ways.step, ways.delta_high + ways.gates.scrap_of_good)
    most = float(np.sum(steps * np.maximum(line.per_finished, 1.0)) * max(1.0, float(np.max(1.0 / line.per_finished))))
    money = (
        problem.spend
        if problem.spend is not None
        else (best.outcome.money.total if problem.objective == COST else None)
    )
    if money is not None and np.all(weight > 0.0):
        savings = -np.minimum(ways.fixed_cost, 0.0).sum() - np.minimum(problem.options.purchase_cost, 0.0).sum()
        most = min(most, float(np.log1p((max(money, 0.0) + savings) / weight.min())) * 1.01 + 1e-6)
    return min(most, 600.0)


def _solve_whole(search: Search, master: Master, excluded: NDArray[np.bool_], gap: float, seconds: float) -> bool:
    """Solve the integer master once, offer its choice and cut it off where it was wrong; False when nothing moved."""
    rows = master.rows()
    high = rows.high.copy()
    high[master.layout.pick[excluded]] = 0.0
    answer = solve_whole(replace(rows, high=high), 0.3 * gap, seconds)
    if answer is None:
        # Only ways that cannot beat the best plan are excluded, so nothing better is left.
        assert search.best is not None
        search.bound = search.value(search.best)
        return False
    bound, before = answer.bound * master.objective_scale, (search.bound, search.best)
    # The tree's own tolerances add up with the size of the programme.
    safety = (1e-9 + 2e-10 * len(search.problem.options.ways)) * abs(bound)
    assert search.best is not None
    search.bound = max(search.bound, min(bound - safety, search.value(search.best)))
    chosen = nearest_choice(master, answer.x)
    known = chosen.tobytes() in search.tried
    added = cuts_at(master, answer.x)
    found = search.offer(chosen)
    if found is None:
        master.upper.add({int(master.layout.pick[w]): 1.0 for w in chosen}, len(chosen) - 1.0)
    else:
        cuts_for_choice(master, chosen, found.outcome.flow.intensity, found.outcome.flow.exponent)
    return not (known and added == 0 and found is not None and (search.bound, search.best) == before)
