"""How many hidden defects can a plan that keeps its budgets let through: ends that keep the master tight.

A hidden defect is found later, and costs the final yield unless it is reworked, or it escapes. What it uses of a
budget at least, over all gates on offer further on, limits how many of them a plan can carry.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator.flow import from_start
from allocator.problem import Problem

Array = NDArray[np.float64]
Uses = Callable[[float, float, float], float]
MARGIN = 1.0 + 1e-6
"""A budget may be exceeded by its rounding."""


@dataclass(frozen=True)
class HiddenEnds:
    """Upper ends of hidden defects per item, in any plan that keeps the budgets.

    Parameters
    ----------
    made : shape (n_steps,) [defects/item]
        All that the steps up to and including this one can make.
    leaving : shape (n_budgets, n_steps) [load per hidden defect per item leaving]
        The least that a defect hidden behind each gate uses of every budget.
    budgets : shape (n_budgets,)
    per_found : shape (n_budgets, n_steps) [load per defect found and not reworked]
    """

    made: Array
    leaving: Array
    budgets: Array
    per_found: Array

    def behind(self, step: int) -> float:
        """Return the most that can leave a step's gate hidden, per item."""
        return min(float(self.made[step]), _least(self.budgets, self.leaving[:, step]))

    def before(self, step: int, earlier: float, reworked: float) -> float:
        """Return the most that can reach a step hidden when it has this gate, per item."""
        uses = earlier * (1.0 - reworked) * self.per_found[:, step] + (1.0 - earlier) * self.leaving[:, step]
        return min(float(self.made[step]), _least(self.budgets, uses))


def _least(budgets: Array, uses: Array) -> float:
    used = uses > 0.0
    return float(np.min(budgets[used] / uses[used], initial=np.inf)) * MARGIN


def hidden_ends(problem: Problem) -> HiddenEnds:
    """Return the ends of hidden defects for a question with the budgets that it has."""
    line, ways = problem.line, problem.options.ways
    most = np.zeros(line.n_steps)
    np.maximum.at(most, ways.step, ways.delta_high)
    q = line.per_finished
    names = list(problem.budgets)
    per_found = np.array([q if name == "final_yield" else np.zeros(line.n_steps) for name in names])
    return HiddenEnds(
        made=np.asarray(from_start(line, q * most) / q),
        leaving=np.array([_least_uses(problem, name, found) for name, found in zip(names, per_found, strict=True)])
        .reshape(len(names), line.n_steps),
        budgets=np.array([problem.budgets[name] for name in names]),
        per_found=per_found.reshape(len(names), line.n_steps),
    )  # fmt: skip


def _least_uses(problem: Problem, name: str, per_found: Array) -> Array:
    """Return what a defect hidden behind each gate uses of one budget at least, over all gates that may follow."""
    line, ways = problem.line, problem.options.ways
    if name == "rolled_yield":
        return line.per_finished
    lost = ways.gates.earlier * (1.0 - ways.gates.reworked) * per_found[ways.step]
    missed = 1.0 - ways.gates.earlier
    behind, before = np.zeros(line.n_steps), np.zeros(line.n_steps)
    rows = np.searchsorted(ways.step, np.arange(line.n_steps + 1))
    for i in range(line.n_steps - 1, -1, -1):
        feeds = int(line.feeds[i])
        behind[i] = 1.0 if feeds < 0 else line.per_unit[i] * before[feeds]
        mine = slice(rows[i], rows[i + 1])
        before[i] = float(np.min(lost[mine] + missed[mine] * behind[i]))
    return behind
