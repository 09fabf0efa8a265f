"""What does one exact choice cost and yield: the plan recomputed from its ways and levels alone."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.flow import GATE_FIELDS, Flow, Gates, Line, loads, money, run
from allocator.problem import CAPITAL, COST, Problem, within
from allocator.results import Money
from allocator.states import States
from allocator.ways import Options, law_cost

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Choice:
    """One way per step and the sigma level to reach; both arrays of shape (n_steps,)."""

    rows: NDArray[np.int64]
    z: Array


@dataclass(frozen=True)
class Outcome:
    """What a choice gives: flow, loads, money, and per step its own improvement cost and capital (shared apart)."""

    choice: Choice
    flow: Flow
    loads: dict[str, float]
    money: Money
    improvement: Array
    capital_by_step: Array
    capital: float
    bought: NDArray[np.bool_]

    def value(self, objective: str) -> float:
        """Return what the objective minimises."""
        if objective == COST:
            return self.money.total
        return self.capital if objective == CAPITAL else self.loads[objective]


def evaluate(line: Line, options: Options, choice: Choice) -> Outcome:
    """Return the exact outcome of a choice; it knows nothing of how the choice was found."""
    ways, rows = options.ways, choice.rows
    gates = Gates(*(getattr(ways.gates, name)[rows] for name in GATE_FIELDS))
    flow = run(line, cv.intensity(ways.curves.take(rows), choice.z), gates)
    by_law = law_cost(ways, rows, choice.z)
    bought = np.asarray(ways.uses[rows].any(axis=0))
    improvement = ways.fixed_cost[rows] + by_law
    capital = ways.capital[rows] + ways.capital_per_cost[rows] * by_law
    return Outcome(
        choice=choice,
        flow=flow,
        loads=loads(line, flow),
        money=money(line, flow, float(improvement.sum() + options.purchase_cost[bought].sum())),
        improvement=improvement,
        capital_by_step=capital,
        capital=float(capital.sum() + options.purchase_capital[bought].sum()),
        bought=bought,
    )


def keeps_limits(problem: Problem, outcome: Outcome) -> bool:
    """Return whether every budget and limit of the problem is met by the evaluated outcome."""
    met = all(within(outcome.loads[name], budget) for name, budget in problem.budgets.items())
    if problem.capital is not None:
        met = met and within(outcome.capital, problem.capital)
    if problem.spend is not None:
        met = met and within(outcome.money.total, problem.spend)
    return met


def flow_of_states(line: Line, states: States) -> Flow:
    """Return the flow of a line whose steps stand in the given states (today's, say), nothing bought."""
    return run(line, states.intensity(), states.gates())
