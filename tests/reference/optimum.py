"""The least total cost of a small scenario, by trying every combination of ways.

`python -m tests.reference.optimum --write` computes the optima of the random scenarios again and writes optima.csv.
"""

from __future__ import annotations

import csv
import itertools
import math
import sys
import time
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

from tests.reference.combination import Combination, Way, combine, ways_of
from tests.reference.convex import Task, solve
from tests.reference.line import split_target, target_yields
from tests.reference.recount import recount, violations

TABLE = Path(__file__).with_name("optima.csv")
SEEDS = range(240)
HARD_SEEDS = range(1000, 1040)
BUDGET_SLACK = 1e-9
"""Relative, for asking again at a yield just found to be the best."""
NO_DEFECTS = 1e-15
"""A budget of exactly nothing has no relative slack."""
LOOSE = 1e-6
"""Relative, for the softness of that answer."""


def optimum(
    scenario: dict,
    of: str | None = None,
    targets: dict | None = None,
    taking: Callable[[list[Way]], bool] | None = None,
) -> dict:
    """Least total cost meeting targets, floors and the capital limit.

    `targets` (yield name: yield or target table) replaces the scenario's; `taking` says which combinations of ways
    count (default: all). Returns {"total", "choice", "lower",
    "recount", "violations"}; total is inf and choice None where no choice meets them.
    """
    budgets = {name: -math.log(goal) for name, goal in target_yields(scenario, targets).items()}
    return _search(scenario, budgets, "cost", of, taking)


def best_reachable(
    scenario: dict, of: str | None = None, targets: dict | None = None, keep_others: bool = True
) -> dict:
    """Highest yield `of` with floors, capital limit (and other targets) kept; and the least cost of getting it.

    Returns {"yield", "loss", "exponent", "total", "choice", "total_from", "total_to"}, all None where even what is kept
    cannot be met.
    """
    of = of or split_target(scenario)
    kept = target_yields(scenario, targets) if keep_others else {}
    budgets = {name: -math.log(goal) for name, goal in kept.items() if name != of}
    best = _search(scenario, budgets, of, of)
    if best["choice"] is None:
        return dict.fromkeys(("yield", "loss", "exponent", "total", "choice", "total_from", "total_to"))
    exponent = best["total"]
    found = {"yield": math.exp(-exponent), "loss": -math.expm1(-exponent), "exponent": exponent}
    return found | _least_cost_there(scenario, budgets, of, exponent)


def _least_cost_there(scenario: dict, budgets: dict[str, float], of: str, exponent: float) -> dict:
    """Least cost at the best yield, and the range in which it lies.

    A step whose defects no longer count costs what the last part in 10⁹ of the budget allows, so the figure is soft:
    from below by the cost with a little more budget, from above by everything at its cap.
    """
    exponent = max(exponent, NO_DEFECTS)
    budgets = budgets | {of: exponent * (1 + BUDGET_SLACK)}
    cheapest = _search(scenario, budgets, "cost", of)
    loose = _search(scenario, budgets | {of: exponent * (1 + LOOSE)}, "cost", of)
    capped = [
        problem.cost(problem.low)
        for problem in combinations(scenario)
        if all(problem.exponent(name, problem.low) <= budget for name, budget in budgets.items())
    ]
    return {
        "total": cheapest["total"],
        "choice": cheapest["choice"],
        "total_from": loose["lower"],
        "total_to": max(min(capped, default=cheapest["total"]), cheapest["total"]),
    }


def combinations(scenario: dict) -> Iterator[Combination]:
    """Every combination of ways that can meet the floors."""
    for ways in itertools.product(*(ways_of(scenario, i) for i in range(len(scenario["step"])))):
        yield combine(scenario, list(ways))


def _search(
    scenario: dict,
    budgets: dict[str, float],
    minimise: str,
    of: str | None,
    taking: Callable[[list[Way]], bool] | None = None,
) -> dict:
    limit = scenario.get("limits", {}).get("capital")
    tasks = []
    for problem in combinations(scenario):
        if taking is not None and not taking(problem.ways):
            continue
        within = all(problem.exponent(n, problem.low) <= b * (1 + 1e-10) for n, b in budgets.items())
        if within and (limit is None or problem.capital_fixed <= limit + 1e-9 * max(1.0, abs(limit))):
            floor = problem.cheapest_thinkable() if minimise == "cost" else problem.exponent(minimise, problem.low)
            tasks.append((floor, Task(problem, budgets, limit, minimise)))
    tasks.sort(key=lambda pair: pair[0])
    total, lower, choice = math.inf, math.inf, None
    for floor, task in tasks:
        if floor >= total:
            lower = min(lower, floor)
            break
        outcome = solve(task, total)
        lower = min(lower, outcome.lower)
        if outcome.x is not None and outcome.value < total:
            total, choice = outcome.value, task.problem.choice(scenario, outcome.x)
    found = {"total": total, "lower": min(lower, total), "choice": choice}
    if choice is not None:
        found |= {"recount": recount(scenario, choice, of), "violations": violations(scenario, choice, {})}
    return found


def row_of(seed: int) -> dict:
    """One line of the table: what the program must find for this seed."""
    # imported here because the generator asks this module for reachable targets
    from tests.reference.generate import random_scenario

    start = time.perf_counter()
    scenario = random_scenario(seed, hard=seed in HARD_SEEDS)
    best = optimum(scenario)
    reach = best_reachable(scenario)
    told = {
        "seed": seed,
        "reached": best["choice"] is not None,
        "total": best["total"],
        "lower": best["lower"],
        "best_loss": reach["loss"],
        "best_from": reach["total_from"],
        "best_to": reach["total_to"],
    }
    told = {key: repr(value) if isinstance(value, float) else value for key, value in told.items()}
    return told | {"seconds": round(time.perf_counter() - start, 2)}


def write_table(seeds: list[int]) -> None:
    """Compute every seed on both cores and write the table."""
    with ProcessPoolExecutor(max_workers=2) as pool:
        rows = list(pool.map(row_of, seeds, chunksize=4))
    with TABLE.open("w", newline="", encoding="utf-8") as file:
        table = csv.DictWriter(file, fieldnames=list(rows[0]), lineterminator="\n")
        table.writeheader()
        table.writerows(rows)
    seconds = [row["seconds"] for row in rows]
    print(f"{len(rows)} seeds, {sum(seconds) / len(seconds):.2f} s on average, {max(seconds):.1f} s at most")


if __name__ == "__main__":
    if "--write" not in sys.argv:
        sys.exit("usage: python -m tests.reference.optimum --write")
    write_table([*SEEDS, *HARD_SEEDS])
