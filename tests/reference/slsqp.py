"""The same least cost by another road: scipy's SLSQP over ln δ, on nothing but the counted totals of `recount`.

Slower and without a bound; it is here to hold `convex.py` and the closed formulas of `combination.py` to account.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.optimize import minimize

from tests.reference.combination import Combination
from tests.reference.recount import recount

FEASIBLE = 1e-8


def least_cost(
    scenario: dict, problem: Combination, budgets: dict[str, float], starts: int = 6, seed: int = 0
) -> float:
    """Least total of one combination found from several starts; inf where none ends feasible."""
    low, high = np.log(problem.low), np.log(problem.high)
    limit = scenario.get("limits", {}).get("capital")
    unit = max(abs(problem.cost(problem.high)), abs(problem.cost(problem.low)), 1e-9)
    seen: dict[bytes, dict] = {}

    def counted(x: np.ndarray) -> dict:
        key = x.tobytes()
        if key not in seen:
            # SLSQP steps outside the bounds by rounding
            inside = np.exp(np.clip(x, low, high))
            seen[key] = recount(scenario, problem.choice(scenario, inside))
        return seen[key]

    def room(x: np.ndarray) -> np.ndarray:
        result = counted(x)
        left = [1 - result["exponents"][name] / budget for name, budget in budgets.items()]
        if limit is not None:
            left.append((limit - result["capital"]) / max(1.0, abs(limit)))
        return np.array(left)

    limits = [{"type": "ineq", "fun": room}] if budgets or limit is not None else []
    rng, best = np.random.default_rng(seed), math.inf
    for start in range(starts):
        share = np.full(len(low), (0.5, 0.05, 0.95)[start]) if start < 3 else rng.random(len(low))
        found = minimize(
            lambda x: counted(x)["annual_cost"]["total"] / unit,
            low + share * (high - low),
            method="SLSQP",
            bounds=list(zip(low, high, strict=True)),
            constraints=limits,
            options={"ftol": 1e-13, "maxiter": 300},
        )
        if not limits or float(np.min(room(found.x))) >= -FEASIBLE:
            best = min(best, counted(found.x)["annual_cost"]["total"])
    return best
