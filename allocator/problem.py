"""What is asked: the line, what its steps could become, and which budgets, limits and objective apply."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

from allocator.errors import RangeError
from allocator.flow import Line, build_line
from allocator.scenario.model import YIELD_NAMES, Scenario
from allocator.ways import Options, build_options

COST = "cost"
"""The objective of the ordinary question; any of the three yields' names asks for the best of that yield."""
CAPITAL = "capital"
"""The objective that asks for the least capital, needed to see whether a capital limit can be kept at all."""
ROUNDING = 1e-12
"""A budget or limit exceeded by this share of itself is met: it is the rounding of the figures it was computed from."""


@dataclass(frozen=True)
class Problem:
    """One question to the solvers.

    Parameters
    ----------
    budgets : dict
        Defect budget D = −ln(yield) for every yield that has a target.
    split : str
        The yield whose budget is split and whose nines are priced.
    objective : str
        `COST`, or the yield whose load is to be as low as possible.
    capital, spend : float or None [currency, currency/year]
        Limits on capital and on the yearly total.
    by_price : bool
        Whether the price road may be taken; tests close it to hear what the general road says.
    """

    scenario: Scenario
    line: Line
    options: Options
    budgets: dict[str, float] = field(default_factory=dict)
    split: str = "final_yield"
    objective: str = COST
    capital: float | None = None
    spend: float | None = None
    by_price: bool = True

    def with_budget(self, name: str, budget: float | None) -> Problem:
        """Return the same question with one budget changed (None lifts it)."""
        others = {key: value for key, value in self.budgets.items() if key != name}
        if budget is not None:
            others[name] = budget
        return replace(self, budgets=others)

    def best_of(self, name: str) -> Problem:
        """Return the question for the best of one yield, everything else kept."""
        return replace(self.with_budget(name, None), objective=name)


def inspection_stated(scenario: Scenario) -> bool:
    """Return whether any table states an inspection; if none does, the shipped yield is unknown."""
    return scenario.default.inspection is not None or any(
        step.inspection is not None or any(a.inspection is not None for a in step.alternative) for step in scenario.step
    )


def pose(scenario: Scenario, of: str | None = None, losses: dict[str, float] | None = None) -> Problem:
    """Return the ordinary question of a scenario: least cost with its targets, floors and limits.

    Parameters
    ----------
    scenario : Scenario
    of : str, optional
        The yield to split (default: the first set of final, rolled, shipped).
    losses : dict, optional
        Losses 1 − yield by yield name, in place of the scenario's.

    Raises
    ------
    RangeError
        When `of` is no yield, or asks for the shipped yield of a line without a stated inspection.
    """
    line = build_line(scenario)
    stated: dict[str, float] = dict(scenario.target.losses) | (losses or {})
    budgets: dict[str, float] = {name: -math.log1p(-stated[name]) for name in YIELD_NAMES if name in stated}
    split = of or next(iter(budgets), "final_yield")
    if split not in YIELD_NAMES:
        raise RangeError(f"'{split}' is not a yield; allowed are {', '.join(YIELD_NAMES)}")
    if "shipped_yield" in (split, *budgets) and not inspection_stated(scenario):
        raise RangeError(
            "the shipped yield is unknown while no step states an inspection; state one, or use another yield"
        )
    return Problem(scenario, line, build_options(scenario, line), budgets, split, capital=scenario.limits.capital)


def within(value: float, limit: float) -> bool:
    """Return whether a value keeps a limit, up to the rounding of both."""
    return value <= limit + ROUNDING * abs(limit) + 4e-16
