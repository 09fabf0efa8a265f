"""What couples the steps of one question once their gates are fixed: budgets, and the money of scrap and rework."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator.flow import OVERFLOW, Gates, Line, from_start, gradient, run

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Duty:
    """What couples the steps, all linear in δ but the scrap; arrays of shape (n_steps,).

    Parameters
    ----------
    line, gates
    loads : list of (weight, fixed, budget)
        Σ weight·δ + fixed ≤ budget, for every yield with a target.
    names : tuple
        Of the loads.
    """

    line: Line
    gates: Gates
    loads: list[tuple[Array, float, float]]
    names: tuple[str, ...] = ()

    def money(self, delta: Array) -> tuple[float, Array]:
        """Return scrap, rework and escapes [currency/year] at δ, and their slope in δ, shape (n_steps,)."""
        line, gates = self.line, self.gates
        flow = run(line, delta, gates)
        weight = line.shipped * line.per_finished * line.net_cost
        rework = line.shipped * line.per_finished * gates.rework_cost * gates.reworked
        with np.errstate(over="ignore"):
            thrown = weight * np.exp(np.minimum(flow.exponent, OVERFLOW))
        value = (
            float(np.sum(thrown) - np.sum(weight) + rework @ flow.found)
            + line.shipped * line.escape_cost * flow.escapes
        )
        per_found = (1.0 - gates.reworked) * from_start(line, thrown) + rework
        return value, gradient(line, gates, per_found, line.shipped * line.escape_cost)


def build_duty(line: Line, gates: Gates, budgets: dict[str, float]) -> Duty:
    """Return the couplings of a line whose gates are fixed."""
    q, n = line.per_finished, line.n_steps
    weights: dict[str, Callable[[], tuple[Array, float]]] = {
        "rolled_yield": lambda: (q, 0.0),
        "final_yield": lambda: (gradient(line, gates, q * (1.0 - gates.reworked), 1.0), float(q @ gates.scrap_of_good)),
        "shipped_yield": lambda: (gradient(line, gates, np.zeros(n), 1.0), 0.0),
    }
    return Duty(line, gates, [(*weights[name](), budget) for name, budget in budgets.items()], tuple(budgets))
