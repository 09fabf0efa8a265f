"""The best that one way per step can give: levels from the interior-point solve, evaluated exactly."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.choice import Choice, Outcome, evaluate, keeps_limits
from allocator.errors import SolverError
from allocator.flow import GATE_FIELDS, Gates, inspection_cost, loads, run
from allocator.problem import CAPITAL, COST, Problem, within
from allocator.scenario.model import YIELD_NAMES
from allocator.solve.answers import Market
from allocator.solve.duty import build_duty
from allocator.solve.interior import GAP, Point, minimise
from allocator.solve.price import Near, clear
from allocator.solve.program import Program, build_program

Array = NDArray[np.float64]
PRICE, INTERIOR, AT_AN_END, STILL = (
    "one price for all steps",
    "interior point",
    "every step at its best",
    "plain evaluation",
)
"""Methods: the last two where every level stands at an end of its range, and where none can move."""
MOST_LEVELS = 1_500
"""Levels that the interior point works out together: its tables grow with their square."""
TOO_MANY = (
    "{:,} levels move under a limit on money, and at most {:,} can be worked out together; "
    "ask without the limit, or for a part of the line"
)


@dataclass(frozen=True)
class FixedAnswer:
    """The evaluated best choice among given ways, a proven bound for these ways, the price of each limit, and by what.

    `price` holds the fall of the objective per unit of each limit, None where nothing continuous can move.
    """

    outcome: Outcome
    bound: float
    price: dict[str, float] | None
    method: str


def solve_fixed(
    problem: Problem, rows: NDArray[np.int64], hopeless: float | None = None, near: Near | None = None
) -> FixedAnswer | None:
    """Return the best levels for one way per step, None when these ways cannot keep the budgets and limits.

    The search stops early, at a worse answer, once its bound passes `hopeless`; it starts from `near`, if given.

    Raises
    ------
    SolverError
        When so many levels move under a limit on money that they cannot be worked out together.
    """
    ways = problem.options.ways
    if not _budgets_can_be_kept(problem, rows):
        return None
    if problem.objective in YIELD_NAMES and problem.capital is None and problem.spend is None:
        return _at_an_end(problem, rows, ways.z_high[rows])
    if problem.objective == CAPITAL and not problem.budgets and problem.spend is None:
        return _at_an_end(problem, rows, ways.z_low[rows])
    if _budgets_likely_rule(problem, near):
        by_price = _by_price(problem, rows, hopeless, near)
        if by_price is not None and keeps_limits(problem, by_price.outcome):
            return by_price
    if int(ways.moves[rows].sum()) > MOST_LEVELS:
        raise SolverError(TOO_MANY.format(int(ways.moves[rows].sum()), MOST_LEVELS))
    program = build_program(problem, rows)
    point = minimise(program, problem.objective, _limits(problem), hopeless)
    if point is None:
        return None
    outcome = evaluate(problem.line, problem.options, _choice(problem, rows, program, point))
    if not keeps_limits(problem, outcome):
        return None
    return FixedAnswer(
        outcome,
        min(point.bound, outcome.value(problem.objective)),
        point.prices if program.size else None,
        INTERIOR if program.size else STILL,
    )


def _budgets_can_be_kept(problem: Problem, rows: NDArray[np.int64]) -> bool:
    """Return whether the lowest intensities keep every budget, since no other do better by any of them."""
    if not problem.budgets:
        return True
    ways = problem.options.ways
    gates = Gates(*(getattr(ways.gates, name)[rows] for name in GATE_FIELDS))
    fewest = loads(problem.line, run(problem.line, ways.delta_low[rows], gates))
    return all(within(fewest[name], budget) for name, budget in problem.budgets.items())


def _at_an_end(problem: Problem, rows: NDArray[np.int64], z: Array) -> FixedAnswer:
    """Return an answer that no level could better: loads fall and capital rises with every level, all by themselves."""
    outcome, moves = evaluate(problem.line, problem.options, Choice(rows, z)), problem.options.ways.moves[rows].any()
    return FixedAnswer(
        outcome,
        outcome.value(problem.objective),
        dict.fromkeys(problem.budgets, 0.0) if moves else None,
        AT_AN_END if moves else STILL,
    )


def _budgets_likely_rule(problem: Problem, near: Near | None) -> bool:
    """Return whether budgets alone are likely to couple the steps: a limit that bound nearby is likely to bind here."""
    binds = problem.capital is not None and (near is None or near.prices.get(CAPITAL, 0.0) > 0.0)
    return problem.by_price and problem.objective == COST and problem.spend is None and not binds


def _by_price(
    problem: Problem, rows: NDArray[np.int64], hopeless: float | None, near: Near | None
) -> FixedAnswer | None:
    """Return the answer of the price road, a limit on capital left aside, where it closes the gap; else None.

    What keeps that limit all the same is the best answer under it too, and its price is then 0.
    """
    ways, line = problem.options.ways, problem.line
    moving = np.flatnonzero(ways.moves[rows])
    if not len(moving):
        outcome = evaluate(line, problem.options, Choice(rows, ways.z_low[rows]))
        return FixedAnswer(outcome, outcome.money.total, None, STILL) if keeps_limits(problem, outcome) else None
    gates = Gates(*(getattr(ways.gates, name)[rows] for name in GATE_FIELDS))
    only = len(rows) == len(ways)  # one way at every step: the table as it is
    curves = ways.curves if only else ways.curves.take(rows)
    z_low, z_high = ways.z_low[rows], ways.z_high[rows]
    ends = ways.delta_low[rows], ways.delta_high[rows]
    market = Market(curves, z_low, z_high, ways.lines.take(rows).pieces, ends)
    aside = _money_aside(problem, rows, gates)
    duty = build_duty(line, gates, problem.budgets)
    cleared = clear(market, duty, curves, GAP, near, np.inf if hopeless is None else hopeless - aside)
    if cleared is None:
        return None
    many = len(moving) > MOST_LEVELS
    given_up = hopeless is not None and cleared.bound + aside > hopeless
    if cleared.gap > 10.0 * GAP and not many and not given_up:
        return None
    known = market.levels(cleared.delta)
    z = np.where(np.isnan(known), z_low, np.clip(known, z_low, z_high))
    far = moving[np.isnan(known[moving])]
    z[far] = np.clip(cv.sigma(curves.take(far), cleared.delta[far]), z_low[far], z_high[far])
    outcome = evaluate(line, problem.options, Choice(rows, z))
    if not keeps_limits(problem, outcome):
        return None
    prices = dict(zip(problem.budgets, cleared.prices.tolist(), strict=True))
    if problem.capital is not None:
        prices[CAPITAL] = 0.0
    return FixedAnswer(outcome, min(cleared.bound + aside, outcome.money.total), prices, PRICE)


def _money_aside(problem: Problem, rows: NDArray[np.int64], gates: Gates) -> float:
    """Return the yearly money that no level changes: alternatives, purchases, inspection."""
    options, line = problem.options, problem.line
    bought = options.ways.uses[rows].any(axis=0)
    fixed = options.ways.fixed_cost[rows].sum() + options.purchase_cost[bought].sum()
    return float(fixed + np.sum(inspection_cost(line, gates)))


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
        unmoved = moving[inside >= ways.delta_high[some]]
        z[unmoved] = ways.z_low[rows[unmoved]]  # To the last digit: a limit of 0 on money takes no rounding of it.
    return Choice(rows, z)
