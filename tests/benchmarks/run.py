"""What does one case measure: time, gap and peak memory, in a process of its own (`python -m tests.benchmarks.run`)."""

from __future__ import annotations

import json
import math
import os
import resource
import sys
import time
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import log_ndtr

from allocator import curves as cv
from allocator.choice import Choice, evaluate, keeps_limits
from allocator.flow import GATE_FIELDS, Gates
from allocator.problem import Problem
from allocator.solve.duty import build_duty
from allocator.solve.reduce import first_ways
from allocator.solve.road import Solved, solve
from tests.benchmarks import peers
from tests.benchmarks.lines import Shape, draw, problem_of

Array = NDArray[np.float64]
ENOUGH_SECONDS, MOST_RUNS = 1.5, 7
"""Our own runs are repeated for so long and so often at most; the best counts."""
GAP = {"continuous": 1e-9, "mixed": 1e-6}
"""The gap at which answers are compared; a peer stops as soon as it is told that it is there."""
FLOOR_WAYS = 50_000
STALLED = 2
"""Rounds of a peer without any gain after which its best stands."""
Record = dict[str, Any]


def ours(shape: Shape) -> Record:
    """Return what our solver takes from a posed problem to the plan's arrays, beside one pass of the tails."""
    problem = problem_of(draw(shape))
    seconds, solved = _best_of(lambda: solve(problem))
    assert solved.outcome is not None
    passes = 1 + FLOOR_WAYS // len(problem.options.ways)  # short passes are below what the clock tells apart
    floor = _best_of(lambda: [one_pass_of_tails(problem) for _ in range(passes)])[0] / passes
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0
    return {
        "seconds": seconds,
        "gap": solved.gap,
        "floor": floor,
        "peak_MiB": peak,
        "method": solved.method,
        "binds": solved.outcome.loads["rolled_yield"] > 0.999 * problem.budgets["rolled_yield"],
    }


def one_pass_of_tails(problem: Problem) -> tuple[Array, Array]:
    """Return ln p and the density of every way, once: what any method must evaluate at least."""
    c, z = problem.options.ways.curves, problem.options.ways.z_low
    near, far = c.shift - z * (1.0 - c.k), -(z * (1.0 + c.k) + c.shift)
    two = c.sides == 2
    log_p, density = log_ndtr(near), np.exp(-0.5 * near * near)
    log_p[two] = np.logaddexp(log_p[two], log_ndtr(far[two]))
    density[two] += np.exp(-0.5 * far[two] ** 2)
    return log_p, density


def _best_of(task: Callable[[], Any]) -> tuple[float, Any]:
    best, began = float("inf"), time.process_time()
    for _ in range(MOST_RUNS):
        start = time.process_time()
        answer = task()
        best = min(best, time.process_time() - start)
        if time.process_time() - began > ENOUGH_SECONDS:
            break
    return best, answer


def beside(shape: Shape, peer: str) -> Iterator[Record]:
    """Yield our own time, then after every round of a peer its time so far and the gap of its best plan.

    Evaluating the peer's plan, exactly and against our proven bound, is not on its clock.
    """
    problem = problem_of(draw(shape))
    seconds, solved = _best_of(lambda: solve(problem))
    yield {"ours": seconds, "ours_gap": solved.gap}
    import cvxpy  # noqa: F401  # its second of start-up is on nobody's clock

    took, best, stalled = 0.0, np.inf, 0
    plans = _plans(problem, peer)
    while True:
        began = time.process_time(), time.perf_counter()
        try:
            plan = next(plans, None)
        except Exception as stop:  # a peer that gives up is an answer too
            yield {"stopped": str(stop).strip().split("\n")[0][:80]}
            return
        took += min(time.process_time() - began[0], time.perf_counter() - began[1])
        if plan is None:
            return
        gap = gap_of(problem, solved, plan)
        stalled = 0 if gap < best else stalled + 1
        if gap < best:
            best = gap
            yield {"seconds": took, "gap": gap}
        if best <= GAP[shape.kind] or stalled == STALLED:
            return


def _plans(problem: Problem, peer: str) -> Iterator[Choice]:
    """Return the plans of a peer, made to keep the budget where levels can move."""
    if peer == "whole":
        z = problem.options.ways.z_low
        return (Choice(rows, z[rows]) for rows in peers.whole_in_highs(problem))
    if peer == "slsqp":
        ways, first = problem.options.ways, first_ways(problem)
        duty = build_duty(problem.line, Gates(*(getattr(ways.gates, name)[first] for name in GATE_FIELDS)), {})
        return (_within_budget(problem, delta) for delta in peers.slsqp(problem, duty.money))
    return (_within_budget(problem, delta) for delta in peers.grid_in_cvxpy(problem, peer))


def _within_budget(problem: Problem, delta: Array) -> Choice:
    """Return the plan at some intensities, moved towards the lowest just so far that the budget is kept."""
    ways, line, budget = problem.options.ways, problem.line, problem.budgets["rolled_yield"]
    used, least = float(line.per_finished @ delta), float(line.per_finished @ ways.delta_low)
    share = max(used - budget, 0.0) / (used - least)
    delta = delta - share * (delta - ways.delta_low)
    return Choice(first_ways(problem), np.clip(cv.sigma(ways.curves, delta), ways.z_low, ways.z_high))


def gap_of(problem: Problem, solved: Solved, plan: Choice) -> float:
    """Return how far a plan, evaluated exactly, is above our proven bound; infinite where it breaks the budget."""
    outcome = evaluate(problem.line, problem.options, plan)
    if not keeps_limits(problem, outcome):
        return float("inf")
    total = outcome.money.total
    return (total - solved.bound) / max(abs(total), 1.0)


def main() -> None:
    asked = json.loads(sys.argv[1])
    shape = Shape(**asked["shape"])
    limit = math.ceil(asked["seconds"])
    resource.setrlimit(resource.RLIMIT_CPU, (limit, limit + 60))  # a busy machine takes nothing from anybody's time
    with os.fdopen(os.dup(1), "w") as answers:
        os.dup2(os.open(os.devnull, os.O_WRONLY), 1)  # solvers greet on stdout, past Python
        for record in [ours(shape)] if asked["peer"] is None else beside(shape, asked["peer"]):
            print(json.dumps(record), file=answers, flush=True)


if __name__ == "__main__":
    main()
