"""Between which totals may a plan's yearly cost come out: prices between their low and high, defects as they may be.

Every amount follows a triangular law from its low over the amount itself to its high, independently.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from allocator.choice import Outcome
from allocator.doubt import Shown
from allocator.flow import money, run
from allocator.picks import yearly_costs
from allocator.problem import Problem
from allocator.scenario.model import Costs, Scenario
from allocator.ways import law_cost

Array = NDArray[np.float64]
SCALES = ("price", "per_year", "per_item")
MOST_FLOWS, FEWEST_FLOWS, FLOW_STEPS = 2000, 200, 100_000
"""Draws whose flow is worked out one by one, and steps times draws beyond which they are fewer."""


def improvement_drawn(problem: Problem, outcome: Outcome, draws: int, seed: int) -> tuple[Array, int]:
    """Return the yearly cost of improvement in every draw, shape (draws,), and how many amounts have a range."""
    drawn, ranges = np.full(draws, outcome.money.improvement), 0
    for low, amount, high in _ranges(problem, outcome):
        rng = np.random.default_rng([seed, ranges])
        drawn = drawn + rng.triangular(low, amount, high, draws) - amount
        ranges += 1
    return drawn, ranges


def totals_drawn(problem: Problem, outcome: Outcome, shown: Shown, improvement: Array) -> Array:
    """Return the yearly total in the first of the draws, as many as are worth working out, shape (n_kept,)."""
    kept = min(len(improvement), MOST_FLOWS, max(FEWEST_FLOWS, FLOW_STEPS // problem.line.n_steps))
    totals, intensity = np.empty(kept), outcome.flow.intensity.copy()
    for m in range(kept):
        intensity[shown.steps] = shown.delta[m]
        totals[m] = money(problem.line, run(problem.line, intensity, outcome.flow.gates), float(improvement[m])).total
    return totals


def _ranges(problem: Problem, outcome: Outcome) -> Iterator[tuple[float, float, float]]:
    """Yield low, stated and high yearly cost of every amount with a range that the plan spends."""
    scenario, ways, rows = problem.scenario, problem.options.ways, outcome.choice.rows
    items = problem.line.per_finished * problem.line.shipped
    picks = ways.text.picks
    chosen = [a for a in picks.members[ways.text.pick[rows]].ravel().tolist() if a >= 0]
    offers = [picks.alternatives[a] for a in chosen]
    yield from _of_tables(scenario, offers, items[picks.owner[chosen]] if chosen else np.zeros(0))
    bought = [purchase for purchase, taken in zip(scenario.purchase, outcome.bought, strict=True) if taken]
    yield from _of_tables(scenario, bought, np.zeros(len(bought)))
    by_law = law_cost(ways, rows, outcome.choice.z)
    for step, cost in zip(scenario.step, by_law.tolist(), strict=True):
        if step.improve is not None and cost > 0.0:
            for key in SCALES:
                yield from _spread(step.improve, key, partial(_scaled, cost, getattr(step.improve, key)))


def _scaled(cost: float, stated: float, amount: float) -> float:
    return cost * amount / stated


def _of_tables(scenario: Scenario, tables: Sequence[Costs], items: Array) -> Iterator[tuple[float, float, float]]:
    for table, each in zip(tables, items.tolist(), strict=True):
        for key in SCALES:
            yearly = partial(_scaled, each, 1.0) if key == "per_item" else partial(_yearly, scenario, table, key)
            yield from _spread(table, key, yearly)


def _yearly(scenario: Scenario, table: Costs, key: str, amount: float) -> float:
    return float(yearly_costs(scenario, [table.model_copy(update={key: amount})])[0])


def _spread(table: Any, key: str, yearly: Any) -> Iterator[tuple[float, float, float]]:
    low, high = getattr(table, f"{key}_low", None), getattr(table, f"{key}_high", None)
    if low is None and high is None:
        return
    amount = getattr(table, key)
    ends = (amount if low is None else low, amount, amount if high is None else high)
    if ends[0] < ends[2]:
        yield tuple(float(yearly(end)) for end in ends)  # type: ignore[misc]
