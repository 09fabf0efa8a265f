"""What does each extra nine cost: the least total at every nine up to the highest reachable, never beyond."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from allocator.cautions import cautions_of_input, what_is_assumed
from allocator.plan import best_reachable, binding_steps, price_of_budget, rows_in, summarise
from allocator.problem import Problem, pose, within
from allocator.results import BestReachable, Nines, NinesPoint, Yields
from allocator.scenario.model import Scenario
from allocator.solve.road import Solved, solve
from allocator.standing import line_today

TODAY = "today's yield"
END = "highest reachable"
SAME = 1e-9
"""Two losses within this share of each other are one point."""


@dataclass(frozen=True)
class _Stop:
    """A yield at which the price is asked for, by its loss, and why."""

    label: str
    loss: float

    @property
    def budget(self) -> float:
        return -math.log1p(-self.loss)


def nines_of(loss: float) -> float:
    """Return −log10(1 − yield), infinite at no loss.

    >>> round(nines_of(0.001), 12)
    3.0
    """
    return -math.log10(loss) if loss > 0.0 else math.inf


def price_nines(
    scenario: Scenario, *, of: str | None = None, targets: dict[str, float] | None = None, points: int | None = None
) -> Nines:
    """Return the least total at today's nines, each whole nine above, the target and the highest reachable.

    Parameters
    ----------
    scenario : Scenario
    of : str, optional
        The yield whose nines are priced; other targets, floors and limits are kept.
    targets : dict, optional
        Losses 1 − yield by yield name, in place of the scenario's own.
    points : int, optional
        Adds an even grid of that many points between today's nines and the highest reachable.

    Raises
    ------
    RangeError
        When `of` is no yield of this scenario.
    """
    problem = pose(scenario, of, targets)
    today = _loss(line_today(problem).yields, problem.split)
    answer = Nines(
        title=scenario.title, currency=scenario.currency, split=problem.split, today_nines=nines_of(today), rows=(),
        highest=None, missed_target_loss=None, optimum_yield=None, optimum_loss=None, optimum_total=None,
        assumed=what_is_assumed(problem), cautions=cautions_of_input(problem),
    )  # fmt: skip
    if problem.options.no_way:
        return answer
    best = best_reachable(problem)
    if best.outcome is None:
        return answer
    highest = summarise(problem, best, binding_steps(problem, best, None))
    optimum = solve(problem.with_budget(problem.split, None), [rows_in(problem, best)])
    assert optimum.outcome is not None
    load = optimum.outcome.loads[problem.split]
    return replace(
        answer, highest=highest, missed_target_loss=_missed(problem, highest),
        optimum_yield=math.exp(-load), optimum_loss=-math.expm1(-load), optimum_total=optimum.outcome.money.total,
        rows=_priced(problem, _stops(problem, today, highest, points), best, optimum),
    )  # fmt: skip


def _missed(problem: Problem, highest: BestReachable) -> float | None:
    """Return the loss that the target allows, where no plan has as little."""
    budget = problem.budgets.get(problem.split)
    allowed = math.inf if budget is None else -math.expm1(-budget)
    return allowed if allowed < highest.loss * (1.0 - SAME) else None


def _loss(yields: Yields, split: str) -> float:
    losses = {
        "rolled_yield": yields.rolled_loss,
        "final_yield": yields.final_loss,
        "shipped_yield": yields.shipped_loss,
    }
    return losses[split] or 0.0


def _stops(problem: Problem, today: float, highest: BestReachable, points: int | None) -> list[_Stop]:
    """Return the stops in rising yield, each loss once; nothing above the highest reachable."""
    stops = [_Stop(TODAY, today), _Stop(END, highest.loss)]
    budget = problem.budgets.get(problem.split)
    if budget is not None:
        stops.append(_Stop("target", -math.expm1(-budget)))
    end = nines_of(highest.loss)
    if math.isfinite(end):
        stops += [
            _Stop("whole nine", 10.0**-n) for n in range(math.floor(nines_of(today)) + 1, math.floor(end + SAME) + 1)
        ]
        stops += _grid(nines_of(today), end, points or 0)
    kept: list[_Stop] = []
    for stop in sorted(stops, key=lambda s: (-s.loss, s.label != TODAY)):
        reachable = stop.loss >= highest.loss * (1.0 - SAME)
        if reachable and 0.0 <= stop.loss < 1.0 and not (kept and abs(kept[-1].loss - stop.loss) <= SAME * stop.loss):
            kept.append(stop)
    return kept


def _grid(start: float, end: float, points: int) -> list[_Stop]:
    return [_Stop("grid", 10.0 ** -(start + (end - start) * i / (points + 1))) for i in range(1, points + 1)]


def _priced(problem: Problem, stops: list[_Stop], best: Solved, optimum: Solved) -> tuple[NinesPoint, ...]:
    priced: list[NinesPoint] = []
    before: Solved | None = None
    for stop in stops:
        asked = problem.with_budget(problem.split, stop.budget)
        solved = _answer(asked, stop, problem, best, optimum, before)
        if solved is None or solved.outcome is None:
            continue
        load, total = solved.outcome.loads[problem.split], solved.outcome.money.total
        priced.append(
            NinesPoint(
                label=stop.label,
                nines=nines_of(stop.loss),
                target_yield=1.0 - stop.loss,
                target_loss=stop.loss,
                yield_=math.exp(-load),
                loss=-math.expm1(-load),
                total=total,
                extra=total - priced[-1].total if priced else None,
                # At the end nothing can be traded any more: every figure above the last slope would be a price.
                price_of_defect_budget=None if solved is best else price_of_budget(solved, asked),
                changes=_changes(problem, before, solved),
                gap=solved.gap,
            )
        )
        before = solved
    return tuple(priced)


def _answer(
    asked: Problem, stop: _Stop, problem: Problem, best: Solved, optimum: Solved, before: Solved | None
) -> Solved | None:
    """Return the cheapest plan of one stop, from what is known where it is known."""
    assert optimum.outcome is not None
    if within(optimum.outcome.loads[problem.split], stop.budget):
        return optimum
    if stop.label == END:
        return best
    starts = [rows_in(problem, solved) for solved in (before, best) if solved is not None]
    return solve(asked, starts, (before or optimum).near)


def _changes(problem: Problem, before: Solved | None, after: Solved) -> tuple[str, ...]:
    """Say what one plan buys or drops against another, step by step and in shared purchases."""
    if before is None:
        return ()
    texts = []
    old, new = _bought(problem, before), _bought(problem, after)
    for name in old:
        texts += [f"{name}: take {thing}" for thing in new[name] if thing not in old[name]]
        texts += [f"{name}: drop {thing}" for thing in old[name] if thing not in new[name]]
    return tuple(texts)


def _bought(problem: Problem, solved: Solved) -> dict[str, tuple[str, ...]]:
    assert solved.outcome is not None
    text = solved.problem.options.ways.text
    things = {
        step.name: text[w].alternatives
        for step, w in zip(problem.scenario.step, solved.outcome.choice.rows, strict=True)
    }
    names = problem.options.purchase_names
    things["shared"] = tuple(n for n, bought in zip(names, solved.outcome.bought, strict=True) if bought)
    return things
