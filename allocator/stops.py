"""The cheapest plan at every stop of a control over the promise: from the economic optimum to the highest reachable."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator.choice import Outcome
from allocator.flow import Flow, rework_cost, scrap_lost_at, yields
from allocator.plan import best_reachable, price_of_budget, rows_in
from allocator.problem import Problem, within
from allocator.results import RowAt, StepTarget, Stop, TodayLine
from allocator.scenario.model import Step
from allocator.solve.road import Solved, solve
from allocator.standing import flow_today, levels_today, line_today, load_shares, shipped_known
from allocator.targets import step_targets

Array = NDArray[np.float64]
Watch = Callable[[int, int], None]
END = "highest reachable"
BETWEEN = 42
"""Stops spread evenly in nines, beside the named ones."""
SAME = 1e-9
"""Two losses within this share of each other are one stop."""


@dataclass(frozen=True)
class Answer:
    """One promise and the answer to it; today has none."""

    label: str
    loss: float
    solved: Solved | None

    @property
    def outcome(self) -> Outcome | None:
        return None if self.solved is None else self.solved.outcome


def nines_of(loss: float) -> float:
    """Return −log10(loss), infinite at no loss."""
    return -math.log10(loss) if loss > 0.0 else math.inf


def answers(problem: Problem, watch: Watch | None = None) -> list[Answer]:
    """Return today and the cheapest plan at every stop, in rising promise.

    Only today where nothing can be promised at all: no choice keeps the floors and limits, or another target cannot be
    kept. `watch` is told how many promises of how many are answered.
    """
    today = Answer("today", _loss(line_today(problem).yields.__dict__, problem.split), None)
    best = None if problem.options.no_way else best_reachable(problem)
    if best is None or best.outcome is None:
        return [today]
    optimum = solve(problem.with_budget(problem.split, None), [rows_in(problem, best)])
    found = [today]
    before = optimum
    promises = _promises(problem, _reached(optimum, problem), _reached(best, problem), today.loss)
    for done, (label, loss) in enumerate(promises):
        if watch is not None:
            watch(done, len(promises))
        solved = _solve(problem, label, loss, optimum, best, before)
        if solved is not None and solved.outcome is not None:
            found.append(Answer(label, loss, solved))
            before = solved
    return sorted(found, key=lambda answer: (-answer.loss, answer.label != "today"))


def _loss(seen: dict[str, float | None], split: str) -> float:
    return seen[split.replace("yield", "loss")] or 0.0


def _reached(solved: Solved, problem: Problem) -> float:
    assert solved.outcome is not None
    return -math.expm1(-solved.outcome.loads[problem.split])


def _promises(problem: Problem, optimum: float, highest: float, today: float) -> list[tuple[str, float]]:
    """Return label and loss of every stop but today, in rising promise, each loss once; the named ones win."""
    named = [("economic optimum", optimum), (END, highest)]
    if problem.split in problem.budgets:
        named.insert(0, ("target", -math.expm1(-problem.budgets[problem.split])))
    start, end = nines_of(optimum), nines_of(highest)
    if not math.isfinite(end):
        end = start + 3.0 if math.isfinite(start) else 3.0
    if end - start < 1e-3 * max(end, 1.0):
        start = min(start, nines_of(today))
    grid = [("", 10.0 ** -(start + (end - start) * i / (BETWEEN + 1))) for i in range(1, BETWEEN + 1)]
    whole = [("whole nine", 10.0**-n) for n in range(math.ceil(start), math.floor(end) + 1)]
    kept: list[tuple[str, float]] = []
    for label, loss in (*named, *whole, *grid):
        if highest * (1.0 - SAME) <= loss < 1.0 and not any(abs(loss - other) <= SAME * loss for _, other in kept):
            kept.append((label, loss))
    return sorted(kept, key=lambda stop: -stop[1])


def _solve(problem: Problem, label: str, loss: float, optimum: Solved, best: Solved, before: Solved) -> Solved | None:
    """Return the cheapest plan of one promise; the target's without any start, so that it is the plan's own answer."""
    assert optimum.outcome is not None
    if label == "target":
        return solve(problem)
    budget = -math.log1p(-loss)
    if within(optimum.outcome.loads[problem.split], budget):
        return optimum
    if label == END:
        return best
    asked = problem.with_budget(problem.split, budget)
    return solve(asked, [rows_in(problem, before), rows_in(problem, best)], before.near)


def describe_stops(problem: Problem, found: Sequence[Answer], rows: Sequence[Sequence[int]]) -> tuple[Stop, ...]:
    """Return every stop with its rows, each the steps of one row."""
    today = line_today(problem)
    return tuple(
        _today(problem, answer, today, rows) if answer.solved is None else _stop(problem, answer, today, rows)
        for answer in found
    )


def _today(problem: Problem, answer: Answer, today: TodayLine, rows: Sequence[Sequence[int]]) -> Stop:
    flow = flow_today(problem)
    total = None if today.money is None else today.money.total
    sigma = [level.sigma_level for level in levels_today(problem)]
    kept = _figures(problem, flow, np.zeros(problem.line.n_steps))
    return Stop(
        label=answer.label, nines=nines_of(answer.loss), asked_yield=1.0 - answer.loss, asked_loss=answer.loss,
        yields=today.yields, money=today.money, against_today=None if total is None else 0.0,
        cost_per_unit=None if total is None else total / problem.line.shipped, capital=0.0, price_per_ppm=None,
        purchases=(), rows=tuple(_row_at(steps, sigma, kept, None, None) for steps in rows), gap=None,
    )  # fmt: skip


def _stop(problem: Problem, answer: Answer, today: TodayLine, rows: Sequence[Sequence[int]]) -> Stop:
    solved, outcome = answer.solved, answer.outcome
    assert solved is not None
    assert outcome is not None
    asked = problem.with_budget(problem.split, -math.log1p(-answer.loss))
    ways = solved.problem.options.ways
    targets = step_targets(problem, ways, outcome)
    # At the end nothing can be traded any more: every figure above the last slope would be a price.
    price = None if answer.label == END else price_of_budget(solved, asked)
    total = outcome.money.total
    sigma = outcome.choice.z.tolist()
    kept = _figures(problem, outcome.flow, outcome.improvement)
    known = shipped_known(problem, ways.states.take(outcome.choice.rows))
    return Stop(
        label=answer.label, nines=nines_of(answer.loss), asked_yield=1.0 - answer.loss, asked_loss=answer.loss,
        yields=yields(problem.line, outcome.flow, known), money=outcome.money,
        against_today=None if today.money is None else total - today.money.total,
        cost_per_unit=total / problem.line.shipped, capital=outcome.capital,
        price_per_ppm=None if price is None else price * 1e-6 / (1.0 - answer.loss),
        purchases=tuple(
            name for name, bought in zip(problem.options.purchase_names, outcome.bought, strict=True) if bought
        ),
        rows=tuple(_row_at(steps, sigma, kept, targets, problem.scenario.step) for steps in rows), gap=solved.gap,
    )  # fmt: skip


def _figures(problem: Problem, flow: Flow, improvement: Array) -> dict[str, list[float]]:
    """Return what adds up over the steps of a row."""
    return {
        "budget_share": load_shares(problem.line, flow, problem.split).tolist(),
        "improvement": improvement.tolist(),
        "scrap": scrap_lost_at(problem.line, flow).tolist(),
        "rework": rework_cost(problem.line, flow).tolist(),
    }


def _row_at(
    steps: Sequence[int],
    sigma: list[float],
    figures: dict[str, list[float]],
    targets: Sequence[StepTarget] | None,
    asked: Sequence[Step] | None,
) -> RowAt:
    levels = [sigma[i] for i in steps]
    mine = [] if targets is None else [targets[i] for i in steps]
    chosen = [] if asked is None else [asked[i] for i in steps]
    single = mine[0] if len(mine) == 1 else None
    return RowAt(
        sigma_low=min(levels),
        sigma_high=max(levels),
        alternatives=single.alternatives if single else (),
        law=single.law if single else None,
        changed=sum(1 for target in mine if target.alternatives or target.law),
        judged=any(map(_judged, chosen, mine)),
        floor_distance=single.floor_distance if single else None,
        **{name: sum(values[i] for i in steps) for name, values in figures.items()},
    )


def _judged(step: Step, target: StepTarget) -> bool:
    """Return whether what is chosen for a step carries a judged figure."""
    chosen = [a for a in step.alternative if a.name in target.alternatives]
    tables = [*chosen, *(a.capability for a in chosen), *([step.improve] if target.law else [])]
    return any(table is not None and table.evidence == "judged" for table in tables)
