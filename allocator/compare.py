"""How do several scenarios stand side by side: two suppliers, two volumes, two promises, each with its best plan?"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path

from allocator.errors import RangeError
from allocator.plan import make_plan
from allocator.results import Compared, Comparison, Plan, StepAcross, StepTarget, TakenAcross
from allocator.scenario.model import Scenario

SAME_LEVEL = 1e-3
"""Sigma levels within this share of each other are one level: prices move them that much at no cost to speak of."""
IMPROVE = "improve"
TAKEN, LEFT, NOT_OFFERED = "taken", "left", "not offered"


def compare_scenarios(scenarios: Sequence[Scenario], *, watch: Callable[[int, int], None] | None = None) -> Comparison:
    """Return the plans of several scenarios side by side; the first is the one that the others are held against.

    Parameters
    ----------
    scenarios : sequence of Scenario
        Two or more, each with its own demand, targets and limits.
    watch : callable, optional
        Told how many plans of how many are made.

    Raises
    ------
    RangeError
        With fewer than two scenarios.
    SolverError
        When a solver stops without an answer.
    """
    if len(scenarios) < 2:
        raise RangeError(f"a comparison needs two scenarios or more, got {len(scenarios)}")
    plans = []
    for scenario in scenarios:
        plans.append(make_plan(scenario))
        if watch is not None:
            watch(len(plans), len(scenarios))
    cases = tuple(
        Compared(
            label=label,
            file=scenario.file,
            plan=plan,
            total_over_first=_over(plans[0], plan, _total(plans[0]), _total(plan)),
            per_unit_over_first=_over(plans[0], plan, plans[0].cost_per_unit, plan.cost_per_unit),
            capital_over_first=_over(plans[0], plan, plans[0].capital, plan.capital),
        )
        for label, scenario, plan in zip(_labels(scenarios), scenarios, plans, strict=True)
    )
    return Comparison(
        cases=cases,
        cheapest=_cheapest(cases),
        taken=_taken(scenarios, plans),
        rows=_steps(plans),
        unlike=tuple(_unlike(scenarios, plans)),
    )


def _labels(scenarios: Sequence[Scenario]) -> list[str]:
    """Name every scenario by its file, or by its title when it comes from none, no name twice."""
    names = [Path(s.file).stem if Path(s.file).suffix else s.title or s.file for s in scenarios]
    seen: Counter[str] = Counter()
    labels = []
    for name in names:
        seen[name] += 1
        labels.append(name if seen[name] == 1 else f"{name} ({seen[name]})")
    return labels


def _total(plan: Plan) -> float | None:
    return None if plan.money is None else plan.money.total


def _over(first: Plan, other: Plan, mine: float | None, its: float | None) -> float | None:
    comparable = mine is not None and its is not None and first.currency == other.currency
    return its - mine if comparable and mine is not None and its is not None else None


def _cheapest(cases: Sequence[Compared]) -> str | None:
    """Return the label of the least cost per shipped unit among those that keep their promise, in one currency."""
    priced = [(c.plan.cost_per_unit, c.label) for c in cases if c.plan.reached and c.plan.cost_per_unit is not None]
    one_currency = len({case.plan.currency for case in cases}) == 1
    return min(priced)[1] if priced and one_currency else None


def _taken(scenarios: Sequence[Scenario], plans: Sequence[Plan]) -> tuple[TakenAcross, ...]:
    """Return what is offered anywhere, shared purchases first, in the order of the files."""
    offered = [_offers(scenario) for scenario in scenarios]
    chosen = [_chosen(plan) for plan in plans]
    return tuple(
        TakenAcross(
            step,
            what,
            tuple(
                NOT_OFFERED if (step, what) not in offers else TAKEN if (step, what) in takes else LEFT
                for offers, takes in zip(offered, chosen, strict=True)
            ),
        )
        for step, what in _once(thing for offers in offered for thing in offers)
    )


Thing = tuple[str | None, str]


def _offers(scenario: Scenario) -> list[Thing]:
    things: list[Thing] = [(None, purchase.name) for purchase in scenario.purchase]
    for step in scenario.step:
        things += [(step.name, alternative.name) for alternative in step.alternative]
        things += [(step.name, IMPROVE)] if step.improve is not None else []
    return things


def _chosen(plan: Plan) -> set[Thing]:
    things: set[Thing] = {(None, bought.name) for bought in plan.purchases}
    for step in plan.rows:
        things |= {(step.step, name) for name in step.alternatives}
        things |= {(step.step, IMPROVE)} if step.law is not None else set()
    return things


def _once(things: Iterable[Thing]) -> list[Thing]:
    return list(dict.fromkeys(things))


def _steps(plans: Sequence[Plan]) -> tuple[StepAcross, ...]:
    by_name = [{step.step: step for step in plan.rows} for plan in plans]
    names = dict.fromkeys(name for steps in by_name for name in steps)
    rows = [(name, tuple(steps.get(name) for steps in by_name)) for name in names]
    return tuple(StepAcross(name, targets, _differs(targets)) for name, targets in rows)


def _differs(targets: tuple[StepTarget | None, ...]) -> bool:
    there = [target for target in targets if target is not None]
    if len(there) < len(targets):
        return True
    levels = [target.target.sigma_level for target in there]
    same_choice = len({(t.supplier, t.alternatives, t.law) for t in there}) == 1
    return not same_choice or max(levels) - min(levels) > SAME_LEVEL * abs(max(levels))


def _unlike(scenarios: Sequence[Scenario], plans: Sequence[Plan]) -> Iterable[str]:
    """Say in words what the scenarios do not share, so that nobody reads their money as the same question."""
    if len({tuple(sorted(plan.target_losses.items())) for plan in plans}) > 1:
        yield "they do not promise the same yields"
    if len({plan.split for plan in plans}) > 1:
        yield "they split the budget of different yields"
    if len({plan.shipped_per_year for plan in plans}) > 1:
        yield "they ship different volumes: read the cost per shipped unit beside the total"
    if len({plan.currency for plan in plans}) > 1:
        yield "their money is in different currencies, so no difference is worked out"
    if len({scenario.demand.discount_rate for scenario in scenarios}) > 1:
        yield "they discount money at different rates"
    if len({scenario.demand.years for scenario in scenarios}) > 1:
        yield "they count money over different horizons"
    if len({scenario.target.escape_cost for scenario in scenarios}) > 1:
        yield "they put different costs on an escape"
