"""What is the capital case of the plan, or of one purchase: against today's line, and against the best without it?"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from allocator.capital import cash_case
from allocator.cautions import cautions_of_input, what_is_assumed
from allocator.errors import RangeError
from allocator.levers import Subject
from allocator.problem import Problem, pose
from allocator.results import CapitalCase, CashCase
from allocator.scenario.model import Scenario
from allocator.solve.road import Solved, solve
from allocator.stands import Stand, stand_of, stand_today, stand_with_only
from allocator.variants import ALTERNATIVE, IMPROVE, LAW, PURCHASE, Thing, find_thing, forced, without
from allocator.ways import Ways

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
    solved = _solve(problem)
    if solved is None:
        return replace(empty, left_out=("no plan keeps the targets, floors and limits: see allocator plan",))
    ours, today = _stand(problem, solved), stand_today(problem)
    found = replace(empty, reached=True, total_with=ours.money.total, total_without=_finite(today.money.total))
    subject = frozenset((asset.step, asset.name) for asset in ours.assets)
    steps = frozenset(asset.step for asset in ours.assets if asset.step is not None)
    return _with_cases(found, [_Argued(problem, TODAY, ours, today, subject, steps)])


def _of_thing(problem: Problem, thing: Thing, empty: CapitalCase) -> CapitalCase:
    answers = [solved for asked in forced(problem, thing) if (solved := _solve(asked)) is not None]
    if not answers:
        return replace(
            empty, verdict=LEAVE, in_plan=False, left_out=("no plan with it keeps the targets, floors and limits",)
        )
    best = min(answers, key=_total)
    ours, banned = _stand(problem, best), _solve(without(problem, thing))
    subject, steps = _subject(problem, thing, best)
    argued = []
    if banned is not None:
        argued.append(_Argued(problem, WITHOUT, ours, _stand(problem, banned), subject, steps))
    alone = _alone(problem, thing, best)
    if alone is not None:
        argued.append(_Argued(problem, ALONE, alone, stand_today(problem), subject, steps))
    verdict = _verdict(best, banned)
    found = replace(
        empty,
        verdict=verdict,
        in_plan=verdict != LEAVE,
        reached=True,
        total_with=_total(best),
        total_without=None if banned is None else _total(banned),
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


def _solve(problem: Problem) -> Solved | None:
    if problem.options.no_way:
        return None
    solved = solve(problem)
    return None if solved.outcome is None else solved


def _total(solved: Solved) -> float:
    assert solved.outcome is not None
    return solved.outcome.money.total


def _finite(total: float) -> float | None:
    return total if math.isfinite(total) else None


def _stand(problem: Problem, solved: Solved) -> Stand:
    assert solved.outcome is not None
    return stand_of(problem, solved.problem.options.ways, solved.outcome)


def _verdict(best: Solved, banned: Solved | None) -> str:
    if banned is None:
        return NEEDED
    worth = _total(banned) - _total(best)
    return BUY if worth > SAME_TOTAL * max(abs(_total(banned)), 1.0) else LEAVE


def _subject(problem: Problem, thing: Thing, best: Solved) -> tuple[Subject, frozenset[str]]:
    """Return what is argued for by step and name, and the steps that it changes in the plan with it."""
    if thing.kind == PURCHASE:
        return frozenset({(None, thing.name)}), frozenset(problem.scenario.step[i].name for i in _users(thing, best))
    name = problem.scenario.step[thing.step].name
    return frozenset({(name, IMPROVE if thing.kind == LAW else thing.name)}), frozenset({name})


def _users(thing: Thing, best: Solved) -> list[int]:
    """Return the steps whose way in the plan uses a shared purchase."""
    assert best.outcome is not None
    uses = best.problem.options.ways.uses[best.outcome.choice.rows, thing.place]
    return [int(i) for i in np.flatnonzero(uses)]


def _alone(problem: Problem, thing: Thing, best: Solved) -> Stand | None:
    """Return today's line with the one thing added and nothing else; None where no way of its step is that alone."""
    ways, rows = problem.options.ways, {}
    for i in _users(thing, best) if thing.kind == PURCHASE else [thing.step]:
        found = _row_alone(problem, thing, i, best)
        if found is None:
            return None
        rows[i] = (ways, *found)
    return stand_with_only(problem, rows) if rows else None


def _row_alone(problem: Problem, thing: Thing, i: int, best: Solved) -> tuple[int, float] | None:
    """Return the way and level of one step that take the thing and nothing else there."""
    ways, names = problem.options.ways, _names_alone(problem, thing, i, best)
    mine = [int(w) for w in np.flatnonzero(ways.step == i) if ways.text[w].alternatives == names]
    if not mine:
        return None
    if thing.kind != LAW:
        return mine[0], float(ways.z_low[mine[0]])
    assert best.outcome is not None
    wanted = float(best.outcome.choice.z[i])
    row = next((w for w in mine if ways.z_low[w] <= wanted <= ways.z_high[w]), mine[-1])
    return row, float(np.clip(wanted, ways.z_low[row], ways.z_high[row]))


def _names_alone(problem: Problem, thing: Thing, i: int, best: Solved) -> tuple[str, ...]:
    if thing.kind == ALTERNATIVE:
        return (thing.name,)
    if thing.kind == LAW:
        return ()
    assert best.outcome is not None
    table: Ways = best.problem.options.ways
    taken = table.text[int(best.outcome.choice.rows[i])].alternatives
    return tuple(a.name for a in problem.scenario.step[i].alternative if a.name in taken and a.uses == thing.name)
