"""The best that one way per step can give: levels from the interior-point solve, evaluated exactly."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.choice import Choice, Outcome, evaluate, keeps_limits
from allocator.problem import CAPITAL, COST, Problem
from allocator.solve.interior import Point, minimise
from allocator.solve.program import Program, build_program

Array = NDArray[np.float64]


@dataclass(frozen=True)
class FixedAnswer:
    """The evaluated best choice among given ways, a proven bound for these ways, and the price of each limit.

    `price` holds the fall of the objective per unit of each limit, None where nothing continuous can move.
    """

    outcome: Outcome
    bound: float
    price: dict[str, float] | None


def solve_fixed(problem: Problem, rows: NDArray[np.int64], hopeless: float | None = None) -> FixedAnswer | None:
    """Return the best levels for one way per step, None when these ways cannot keep the budgets and limits.

    The search stops early, at a worse answer, once its bound passes `hopeless`.
    """
    program = build_program(problem, rows)
    point = minimise(program, problem.objective, _limits(problem), hopeless)
    if point is None:
        return None
    outcome = evaluate(problem.line, problem.options, _choice(problem, rows, program, point))
    if not keeps_limits(problem, outcome):
        return None
    return FixedAnswer(
        outcome, min(point.bound, outcome.value(problem.objective)), point.prices if program.size else None
    )


def _limits(problem: Problem) -> dict[str, float]:
    limits = dict(problem.budgets)
    if problem.capital is not None:
        limits[CAPITAL] = problem.capital
    if problem.spend is not None:
        limits[COST] = problem.spend
    return limits


def _choice(problem: Problem, rows: NDArray[np.int64], program: Program, point: Point) -> Choice:
    """Turn intensities back into sigma levels, held inside each way's own range."""
    ways = problem.options.ways
    delta = program.intensities(point.v)
    z = ways.z_low[rows].copy()
    moving = np.flatnonzero(ways.moves[rows])
    if len(moving):
        some = rows[moving]
        inside = np.clip(delta[moving], ways.delta_low[some], ways.delta_high[some])
        z[moving] = np.clip(cv.sigma(ways.curves.take(some), inside), ways.z_low[some], ways.z_high[some])
    return Choice(rows, z)
