"""Which ways can never be worth taking, and which choices are worth trying first."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.flow import GATE_FIELDS, Gates
from allocator.problem import Problem
from allocator.solve.duty import build_duty
from allocator.ways import Ways

SLACK = 1e-9
"""Share of a budget by which a way may exceed it before it is dropped: far above the rounding of the figures."""
CHOICE_GATE = tuple(name for name in GATE_FIELDS if name != "per_item")
"""What a gate does; its price per item does not touch the flow."""


def without_dominated(problem: Problem) -> Problem:
    """Return the problem without ways that another one of the same step beats in every respect.

    Only ways without a law, with the same gate and the same shared purchases are compared; the better one has no more
    defects, cost and capital.
    """
    ways = problem.options.ways
    plain = np.flatnonzero((ways.curves.kind == cv.NONE) & ~ways.moves)
    group = _comparable(ways, plain)
    order = np.argsort(group, kind="stable")
    rows, group = plain[order], group[order]
    columns = [column[rows] for column in (ways.delta_high, ways.fixed_cost, ways.capital)]
    beaten = np.zeros(len(rows), dtype=bool)
    for back in range(1, int(np.bincount(group).max(initial=0))):
        first = np.flatnonzero(group[:-back] == group[back:])
        no_worse = np.logical_and.reduce([column[first] <= column[first + back] for column in columns])
        no_better = np.logical_and.reduce([column[first] >= column[first + back] for column in columns])
        beaten[first[no_worse] + back] = True  # Of two that are the same the first stays.
        beaten[first[no_better & ~no_worse]] = True
    if not beaten.any():
        return problem
    keep = np.ones(len(ways), dtype=bool)
    keep[rows[beaten]] = False
    return replace(problem, options=replace(problem.options, ways=ways.take(np.flatnonzero(keep))))


def without_excessive(problem: Problem) -> Problem:
    """Return the problem without ways that alone use up a budget, all other steps at their best.

    Where no gate is a choice; near the best reachable yield this leaves few choices or one.
    """
    if not problem.budgets or not gates_given(problem):
        return problem
    ways = problem.options.ways
    fewest = ways.least_by_step(problem.line.n_steps)
    keep = np.ones(len(ways), dtype=bool)
    for weight, fixed, budget in build_duty(problem.line, gates_of_first(problem), problem.budgets).loads:
        used = float(weight @ fewest) + fixed
        over = used + weight[ways.step] * (ways.delta_low - fewest[ways.step])
        keep &= (over <= budget + SLACK * abs(budget)) | (ways.delta_low == fewest[ways.step])
    if keep.all():
        return problem
    return replace(problem, options=replace(problem.options, ways=ways.take(np.flatnonzero(keep))))


def first_ways(problem: Problem) -> NDArray[np.int64]:
    """Return the row of each step's first way; the table is in the steps' order."""
    return np.searchsorted(problem.options.ways.step, np.arange(problem.line.n_steps)).astype(np.int64)


def gates_of_first(problem: Problem) -> Gates:
    """Return the gate of each step's first way."""
    first = first_ways(problem)
    return Gates(*(getattr(problem.options.ways.gates, name)[first] for name in GATE_FIELDS))


def gates_given(problem: Problem) -> bool:
    """Return whether no gate is a choice: all ways of a step find, mend and reject the same."""
    ways, first = problem.options.ways, first_ways(problem)
    columns = [getattr(ways.gates, name) for name in CHOICE_GATE]
    return all(bool(np.array_equal(column, column[first][ways.step])) for column in columns)


def _comparable(ways: Ways, rows: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return a number for every way that is the same for ways of one step with the same gate and purchases."""
    same = [*(getattr(ways.gates, name)[rows] for name in GATE_FIELDS), *ways.uses[rows].T]
    step = ways.step[rows]
    first = np.searchsorted(step, step)
    if all(np.array_equal(column, column[first]) for column in same):
        return step
    order = np.lexsort((*same, step))
    new = np.logical_or.reduce([column[order][1:] != column[order][:-1] for column in (*same, step)])
    number = np.zeros(len(rows), dtype=np.int64)
    number[order[1:]] = np.cumsum(new)
    return number


def ways_by_step(problem: Problem) -> list[NDArray[np.int64]]:
    """Return the ways of every step, in file order."""
    ways = np.arange(len(problem.options.ways))
    return np.split(ways, np.searchsorted(problem.options.ways.step, np.arange(1, problem.line.n_steps)))


def first_choices(problem: Problem) -> list[NDArray[np.int64]]:
    """Return a few choices worth trying first: the least defects, the least spent, and prices in between."""
    ways = problem.options.ways
    per_finished = problem.line.per_finished[ways.step]
    defects = (
        per_finished * ways.delta_low * (1.0 - 0.5 * ways.gates.reworked) + per_finished * ways.gates.scrap_of_good
    )
    missed = per_finished * ways.delta_low * (1.0 - ways.gates.finds) + 1e-3 * defects * (1.0 - ways.gates.earlier)
    cost = ways.fixed_cost + problem.line.shipped * per_finished * ways.gates.per_item
    scale = float(np.sum(np.abs(cost))) / max(float(defects.sum()), 1e-300)
    scores = [defects, missed, cost + 1e-9 * scale * defects, ways.capital + 1e-9 * cost]
    scores += [cost + price * scale * defects for price in (0.1, 1.0, 10.0)]
    picked: list[NDArray[np.int64]] = []
    for score in scores:
        rows = np.array([mine[np.argmin(score[mine])] for mine in ways_by_step(problem)], dtype=np.int64)
        if not any(np.array_equal(rows, seen) for seen in picked):
            picked.append(rows)
    return picked
