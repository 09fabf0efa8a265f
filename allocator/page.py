"""What is put before a design review: the plan, every stop of the control, the picture of the line, the sources."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from allocator.case import capital_case
from allocator.confidence import confident_plan
from allocator.errors import OutOfReachError, RangeError
from allocator.grouping import rows_of
from allocator.picture import divide, picture
from allocator.plan import binding_steps, make_plan, summarise
from allocator.problem import Problem, pose
from allocator.rehearsal import rehearse
from allocator.results import (
    BestReachable,
    CapitalCase,
    Confidence,
    LeftOut,
    Plan,
    Rehearsal,
    ReviewPage,
    Row,
    SupplierSheets,
    Weighed,
)
from allocator.scenario.model import Scenario
from allocator.sheets import supplier_sheets
from allocator.sources import sources_of
from allocator.standing import levels_today
from allocator.state import floor_words
from allocator.stops import Answer, Watch, answers, describe_stops
from allocator.variants import things
from allocator.weigh import weigh_purchases

UNITS, ITEMS = 300_000, 9_000_000
"""Units that the plan is rehearsed with, and fewer where the steps are many: about so many items."""

CONFIDENCE = 0.9
MOST_WEIGHED = 120
"""Things weighed, each by plans with it and without it; beyond it they are left to their own command."""
MOST_SHEETS = 200
"""Parts with a target sheet; beyond it the sheets are left to their own command."""


def review_page(scenario: Scenario, *, watch: Watch | None = None) -> ReviewPage:
    """Return everything the page of a design review shows, all figures worked out.

    Parameters
    ----------
    scenario : Scenario
        As read by `read_scenario`.
    watch : callable, optional
        Told how many stops of how many are worked out.
    """
    problem = pose(scenario)
    plan = make_plan(scenario)
    steps = rows_of(problem.line.feeds.tolist())
    rows = _rows(problem, steps)
    found = answers(problem, watch)
    shown = _opens_with(found, plan)
    outcome = found[shown].outcome
    return ReviewPage(
        file=scenario.file,
        plan=plan,
        highest=_highest(problem, found),
        rows=rows,
        grouped=len(steps) < len(scenario.step),
        stops=describe_stops(problem, found, steps),
        shown=shown,
        line=picture(problem, steps, None if outcome is None else outcome.flow),
        division=divide(plan, steps, [name_of_row(row) for row in rows]),
        sources=sources_of(scenario),
        weighed=_weighed(problem, scenario, plan, watch),
        case=_case(scenario, plan),
        confidence=_confidence(problem, plan),
        rehearsal=_rehearsal(scenario, plan),
        sheets=_sheets(scenario, plan, watch),
        left_out=tuple(_left_out(problem, scenario, plan)),
    )


def _case(scenario: Scenario, plan: Plan) -> CapitalCase | None:
    """Return the capital case of the plan, where there is a plan to pay for and a rate to discount by."""
    stated = scenario.demand.years is not None and scenario.demand.discount_rate is not None
    if not (stated and plan.reached and plan.today.money is not None):
        return None
    return capital_case(scenario)


def _rehearsal(scenario: Scenario, plan: Plan) -> Rehearsal | None:
    """Return the plan played through; None where there is none, or where the line ships next to nothing."""
    if not plan.reached:
        return None
    try:
        return rehearse(scenario, units=max(1_000, min(UNITS, ITEMS // len(scenario.step))))
    except OutOfReachError:
        return None


def _left_out(problem: Problem, scenario: Scenario, plan: Plan) -> Iterator[LeftOut]:
    """Yield what a plan allows to be shown, but of which there is too much for a page."""
    if plan.reached and len(things(problem)) > MOST_WEIGHED:
        yield LeftOut("weigh", len(things(problem)), MOST_WEIGHED)
    if plan.reached and _parts_bought(scenario) > MOST_SHEETS:
        yield LeftOut("suppliers", _parts_bought(scenario), MOST_SHEETS)


def _weighed(problem: Problem, scenario: Scenario, plan: Plan, watch: Watch | None) -> Weighed | None:
    """Return what everything is worth, where there is a plan to measure by and not too much to weigh."""
    if not plan.reached or len(things(problem)) > MOST_WEIGHED:
        return None
    return weigh_purchases(scenario, watch=watch)


def _confidence(problem: Problem, plan: Plan) -> Confidence | None:
    """Return how sure the plan is, where there is a target and some estimate states its sample."""
    if not (plan.reached and problem.budgets):
        return None
    try:
        found = confident_plan(problem, CONFIDENCE)
    except RangeError:
        return None
    return None if found is None else found[1]


def _sheets(scenario: Scenario, plan: Plan, watch: Watch | None) -> SupplierSheets | None:
    fits = 0 < _parts_bought(scenario) <= MOST_SHEETS
    return supplier_sheets(scenario, watch=watch) if plan.reached and fits else None


def _parts_bought(scenario: Scenario) -> int:
    return sum(1 for step in scenario.step if step.supplier is not None)


def _opens_with(found: Sequence[Answer], plan: Plan) -> int:
    """Return the stop of the target, of the best reachable when it is out of reach, or of the optimum without one."""
    labels = [answer.label for answer in found]
    first = ("target", "highest reachable") if plan.split in plan.targets else ("economic optimum",)
    return next((labels.index(label) for label in first if label in labels), 0)


def _highest(problem: Problem, found: Sequence[Answer]) -> BestReachable | None:
    """Return the highest reachable of the stops with what holds it there, None where only today could be shown."""
    best = found[-1].solved
    return None if best is None else summarise(problem, best, binding_steps(problem, best, None))


def _rows(problem: Problem, rows: Sequence[Sequence[int]]) -> tuple[Row, ...]:
    levels, steps = levels_today(problem), problem.scenario.step
    made = []
    for mine in rows:
        suppliers = {steps[i].supplier for i in mine}
        sigma = [levels[i].sigma_level for i in mine]
        made.append(
            Row(
                steps=tuple(steps[i].name for i in mine),
                supplier=suppliers.pop() if len(suppliers) == 1 else None,
                sigma_low=min(sigma),
                sigma_high=max(sigma),
                floor=floor_words(steps[mine[0]].at_least) if len(mine) == 1 else None,
                safety=any(steps[i].safety for i in mine),
            )
        )
    return tuple(made)


def name_of_row(row: Row) -> str:
    """Return a row's name: the step's own, or the first and the last with their number."""
    if len(row.steps) == 1:
        return row.steps[0]
    return f"{row.steps[0]} … {row.steps[-1]} ({len(row.steps)} steps)"
