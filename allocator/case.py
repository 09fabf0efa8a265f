"""What is the capital case of the plan, or of one purchase: against today's line, and against the best without it?"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from allocator.alone import answer, best_with, line_alone, stand, users
from allocator.asker import total_of
from allocator.capital import cash_case
from allocator.cautions import cautions_of_input, what_is_assumed
from allocator.errors import RangeError
from allocator.levers import Subject
from allocator.problem import Problem, pose
from allocator.results import CapitalCase, CashCase
from allocator.scenario.model import Scenario
from allocator.solve.road import Solved
from allocator.stands import Stand, stand_today
from allocator.variants import IMPROVE, LAW, PURCHASE, Thing, find_thing, without

BUY, LEAVE, NEEDED = "buy", "leave", "needed"
SAME_TOTAL = 1e-6
"""A worth below this share of the totals compared is within the gap of the solves."""
TODAY, ALONE, WITHOUT = "today", "today (it alone added)", "the cheapest plan without it"
ASSUMED = (
    "Cash is booked at the end of its year, at today's prices, before tax; savings run in full from the first year.",
    "What is bought with a shorter life than the horizon is bought again at today's price when its life ends.",
    "Scrap, rework and inspection saved count as cash as entered; labour or machine hours among them are cash only if "
    "they are really not paid any more.",
    "Starts saved are capacity, escapes avoided are avoidance: neither is in the cash.",
    "What was spent before today, book values and tax shields do not enter; the present machine counts with its "
    "trade-in.",
)


def capital_case(scenario: Scenario, name: str | None = None) -> CapitalCase:
    """Return the capital case of the plan, or of one alternative, law or shared purchase.

    Parameters
    ----------
    scenario : Scenario
        With `demand.years` and `demand.discount_rate`.
    name : str, optional
        What to argue for, as "NAME" or "STEP: NAME"; without it, the whole plan.

    Raises
    ------
    RangeError
        When the scenario states no horizon or rate, the horizon exceeds 200 years, or the name is unknown or unclear.
    SolverError
        When a solver stops without an answer.
    """
    problem = pose(scenario)
    years, rate = scenario.demand.years, scenario.demand.discount_rate
    if years is None or rate is None:
        raise RangeError("a capital case needs demand.years (the horizon) and demand.discount_rate; state both")
    thing = None if name is None else find_thing(problem, name)
    empty = CapitalCase(
        title=scenario.title, currency=scenario.currency, shipped_per_year=problem.line.shipped, horizon_years=years,
        discount_rate=rate, subject=None if thing is None else thing.name,
        step=None if thing is None or thing.step < 0 else scenario.step[thing.step].name, verdict=None, in_plan=True,
        reached=False, total_with=None, total_without=None, cases=(), left_out=(),
        assumed=(*what_is_assumed(problem), *ASSUMED), cautions=cautions_of_input(problem),
    )  # fmt: skip
    return _of_plan(problem, empty) if thing is None else _of_thing(problem, thing, empty)


def _of_plan(problem: Problem, empty: CapitalCase) -> CapitalCase:
    solved = answer(problem)
    if solved is None:
        return replace(empty, left_out=("no plan keeps the targets, floors and limits: see allocator plan",))
    ours, today = stand(problem, solved), stand_today(problem)
    found = replace(empty, reached=True, total_with=ours.money.total, total_without=_finite(today.money.total))
    subject = frozenset((asset.step, asset.name) for asset in ours.assets)
    steps = frozenset(asset.step for asset in ours.assets if asset.step is not None)
    return _with_cases(found, [_Argued(problem, TODAY, ours, today, subject, steps)])


def _of_thing(problem: Problem, thing: Thing, empty: CapitalCase) -> CapitalCase:
    best = best_with(problem, thing)
    if best is None:
        return replace(
            empty, verdict=LEAVE, in_plan=False, left_out=("no plan with it keeps the targets, floors and limits",)
        )
    ours, banned = stand(problem, best), answer(without(problem, thing))
    subject, steps = _subject(problem, thing, best)
    argued = []
    if banned is not None:
        argued.append(_Argued(problem, WITHOUT, ours, stand(problem, banned), subject, steps))
    alone = line_alone(problem, thing, best)
    if alone is not None:
        argued.append(_Argued(problem, ALONE, alone, stand_today(problem), subject, steps))
    verdict = _verdict(best, banned)
    found = replace(
        empty,
        verdict=verdict,
        in_plan=verdict != LEAVE,
        reached=True,
        total_with=total_of(best),
        total_without=None if banned is None else total_of(banned),
        left_out=() if banned is not None else ("no plan without it keeps the targets, floors and limits",),
    )
    return _with_cases(found, argued)


@dataclass(frozen=True)
class _Argued:
    """One comparison to be made."""

    problem: Problem
    against: str
    ours: Stand
    theirs: Stand
    subject: Subject
    steps: frozenset[str]

    def case(self) -> CashCase | str:
        """Return the case, or in words why there is none."""
        if not (math.isfinite(self.ours.money.total) and math.isfinite(self.theirs.money.total)):
            return f"against {self.against}: the cost of a line that yields next to nothing is beyond any number"
        return cash_case(self.problem, self.against, self.ours, self.theirs, self.subject, self.steps)


def _with_cases(found: CapitalCase, argued: list[_Argued]) -> CapitalCase:
    made = [one.case() for one in argued]
    cases = tuple(case for case in made if not isinstance(case, str))
    return replace(found, cases=cases, left_out=(*found.left_out, *(case for case in made if isinstance(case, str))))


def _finite(total: float) -> float | None:
    return total if math.isfinite(total) else None


def _verdict(best: Solved, banned: Solved | None) -> str:
    if banned is None:
        return NEEDED
    worth = total_of(banned) - total_of(best)
    return BUY if worth > SAME_TOTAL * max(abs(total_of(banned)), 1.0) else LEAVE


def _subject(problem: Problem, thing: Thing, best: Solved) -> tuple[Subject, frozenset[str]]:
    """Return what is argued for by step and name, and the steps that it changes in the plan with it."""
    if thing.kind == PURCHASE:
        return frozenset({(None, thing.name)}), frozenset(problem.scenario.step[i].name for i in users(thing, best))
    name = problem.scenario.step[thing.step].name
    return frozenset({(name, IMPROVE if thing.kind == LAW else thing.name)}), frozenset({name})
