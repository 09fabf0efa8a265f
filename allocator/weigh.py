"""Buy or leave: what is every alternative, shared purchase and law worth, all else planned anew, and why?"""

from __future__ import annotations

import itertools
import math
import threading
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

from allocator.abreast import abreast, cores
from allocator.asker import ask, takes, total_of
from allocator.breakeven import (
    FURTHEST_VOLUME,
    break_even_law,
    break_even_level,
    break_even_price,
    break_even_volume,
    plans_at_volumes,
    with_it,
)
from allocator.capability import study_index
from allocator.cautions import cautions_of_input, what_is_assumed
from allocator.cautions.input import is_judged
from allocator.changed import alternative_of, cost_per_price, costs_of, level_of
from allocator.objections import against_alternative, against_law
from allocator.problem import Problem, pose
from allocator.results import BreakEvenLevel, Weighed, Weighing
from allocator.scenario.model import Alternative, Law, Scenario
from allocator.solve.road import Solved, solve
from allocator.variants import ALTERNATIVE, LAW, PURCHASE, Thing, things, without

SAFETY = "it changes a safety characteristic: validate and release it anew; its floor stays whatever is bought"
LONG = 10.0
"""Seconds of work, by the time that the plan took, from which several processes share it."""
Watch = Callable[[int, int], None]


def weigh_purchases(scenario: Scenario, *, watch: Watch | None = None) -> Weighed:
    """Return what everything that could be bought or changed is worth, each by the best plan with it and without it.

    Parameters
    ----------
    scenario : Scenario
        As read by `read_scenario`; without a target the economic optimum is the plan.
    watch : callable, optional
        Told how many things of how many are weighed.

    Returns
    -------
    Weighed
        `reached` is False, and nothing is weighed, when no choice meets the targets.
    """
    problem = pose(scenario)
    plan = None if problem.options.no_way else solve(problem)
    rows: list[Weighing] = []
    if plan is not None and plan.outcome is not None:
        rows = _weigh_all(problem, plan, watch)
    reached = plan is not None and plan.outcome is not None
    volume = scenario.demand.shipped_per_year
    return Weighed(
        title=scenario.title,
        currency=scenario.currency,
        shipped_per_year=volume,
        reached=reached,
        targets={name: math.exp(-budget) for name, budget in problem.budgets.items()},
        target_losses={name: -math.expm1(-budget) for name, budget in problem.budgets.items()},
        split=problem.split,
        total=total_of(plan) if plan is not None and reached else None,
        gap=plan.gap if plan is not None and reached else None,
        rows=tuple(sorted(rows, key=_order)),
        volumes=(volume / FURTHEST_VOLUME, volume * FURTHEST_VOLUME),
        assumed=what_is_assumed(problem),
        cautions=cautions_of_input(problem),
    )


@dataclass(frozen=True)
class _Piece:
    """One piece of the work: a thing to weigh, or (None) the volumes from which each thing pays."""

    problem: Problem
    plan: Solved
    thing: Thing | None


def _weigh_all(problem: Problem, plan: Solved, watch: Watch | None) -> list[Weighing]:
    """Weigh every thing; on several processes where one plan alone takes long."""
    known = things(problem)
    workers = cores() if plan.seconds * len(known) > LONG else 1
    pieces = [_Piece(problem, plan, None), *(_Piece(problem, plan, thing) for thing in known)]
    count = itertools.count(1)
    lock = threading.Lock()

    def done() -> None:
        with lock:
            if watch is not None:
                watch(next(count), len(pieces))

    volumes, *rows = abreast(_worked_out, pieces, workers, done)
    return [_from_volume(row, volume, problem.line.shipped) for row, volume in zip(rows, volumes, strict=True)]


def _worked_out(piece: _Piece) -> Any:
    if piece.thing is not None:
        return _weighed(piece.problem, piece.plan, piece.thing)
    plans = plans_at_volumes(piece.problem, piece.plan)
    return [break_even_volume(plans, thing) for thing in things(piece.problem)]


def _from_volume(row: Weighing, factor: float | None, shipped: float) -> Weighing:
    return replace(
        row,
        break_even_volume=factor * shipped if factor else None,
        pays_from="no volume" if factor is None else "a volume" if factor > 0.0 else "any volume",
    )


def _order(row: Weighing) -> tuple[bool, float]:
    """Order free moves first, then by worth; what is needed leads, what cannot be had comes last."""
    worth = row.worth_per_year
    if worth is None:
        worth = math.inf if row.verdict == "needed" else -math.inf
    return not row.free, -worth


def _weighed(problem: Problem, plan: Solved, thing: Thing) -> Weighing:
    """Weigh one thing; from which volume it pays is filled in later, since that is the same work for all."""
    in_plan = takes(plan, thing)
    banned = ask(without(problem, thing), plan) if in_plan else plan
    taken = plan if in_plan or thing.kind == LAW else with_it(problem, thing, plan)
    worth = None if banned is None or taken is None else total_of(banned) - total_of(taken)
    price, even, factor = _prices(problem, thing, banned, taken)
    return Weighing(
        step=None if thing.kind == PURCHASE else problem.scenario.step[thing.step].name,
        alternative=thing.name,
        kind=thing.kind,
        verdict="needed" if banned is None else "buy" if in_plan else "leave",
        in_plan=in_plan,
        total_without=None if banned is None else total_of(banned),
        total_with=None if taken is None else total_of(taken),
        worth_per_year=worth,
        free=_is_free(problem, thing),
        capital=_capital(problem, thing, plan),
        stated_price=price,
        price_per=_price_per(problem, thing),
        break_even_price=even,
        break_even_price_factor=factor,
        break_even_volume=None,
        pays_from="no volume",
        break_even_capability=_level(problem, thing, banned, taken),
        against=_against(problem, thing),
    )


def _prices(
    problem: Problem, thing: Thing, banned: Solved | None, taken: Solved | None
) -> tuple[float | None, float | None, float | None]:
    """Return the stated price, the price at which the thing is worth nothing, and for a law the factor to get there."""
    if thing.kind == LAW:
        law = problem.scenario.step[thing.step].improve
        assert law is not None
        stated = next((x for x in (law.price, law.per_year, law.per_item) if x is not None), None)
        factor = None if banned is None or taken is None else break_even_law(problem, taken, banned, thing)
        return stated, None if stated is None or factor is None else stated * factor, factor
    price, per_price = costs_of(problem, thing).price, cost_per_price(problem, thing)
    if banned is None or taken is None or per_price is None:
        return price, None, None
    return price, break_even_price(problem, thing, price, per_price, total_of(banned), taken), None


def _price_per(problem: Problem, thing: Thing) -> str:
    law = problem.scenario.step[thing.step].improve if thing.kind == LAW else None
    if law is None:
        return "once"
    amount = law.points[0] if law.points else law
    return "year" if amount.per_year is not None else "item" if amount.per_item is not None else "once"


def _level(problem: Problem, thing: Thing, banned: Solved | None, taken: Solved | None) -> BreakEvenLevel | None:
    if (
        thing.kind != ALTERNATIVE
        or alternative_of(problem, thing).capability is None
        or banned is None
        or taken is None
    ):
        return None
    level = break_even_level(problem, thing, total_of(banned), taken)
    if level is None:
        return None
    index = float(study_index(level.sigma_level, level.k))
    return BreakEvenLevel(level.sigma_level, index, 1e6 * math.exp(level.log_p))


def _capital(problem: Problem, thing: Thing, plan: Solved) -> float:
    """Return what a thing ties up: price less trade-in, shared purchase included; a law, what the plan spends on it."""
    if thing.kind == LAW:
        assert plan.outcome is not None
        row, ways = plan.outcome.choice.rows[thing.step], plan.problem.options.ways
        own = float(ways.capital[row])
        return max(float(plan.outcome.capital_by_step[thing.step]) - own, 0.0)
    return _capital_stated(problem, thing)


def _capital_stated(problem: Problem, thing: Thing) -> float:
    costs = costs_of(problem, thing)
    shared = 0.0
    if isinstance(costs, Alternative) and costs.uses is not None:
        shared = float(problem.options.purchase_capital[problem.options.purchase_names.index(costs.uses)])
    return max(costs.price - costs.trade_in + shared, 0.0)


def _is_free(problem: Problem, thing: Thing) -> bool:
    if thing.kind != LAW:
        return _capital_stated(problem, thing) == 0.0
    law = problem.scenario.step[thing.step].improve
    return law is None or not _is_priced(law)


def _is_priced(law: Law) -> bool:
    return law.price is not None or any(point.price is not None for point in law.points)


def _against(problem: Problem, thing: Thing) -> tuple[str, ...]:
    """Say what speaks against a thing, money apart."""
    if thing.kind == PURCHASE:
        return ("its price rests on a judged figure",) if is_judged(costs_of(problem, thing)) else ()
    step = problem.scenario.step[thing.step]
    if thing.kind == LAW:
        said = against_law(step)
    else:
        own = alternative_of(problem, thing)
        said = against_alternative(step, own, own.capability is not None and _off_centre(problem, thing))
    return (*said, SAFETY) if step.safety else said


def _off_centre(problem: Problem, thing: Thing) -> bool:
    """Return whether a better machine leaves the mean where it is, beside the middle."""
    level = level_of(problem, thing)[0]
    today = problem.options.today.levels[thing.step]
    return level.k == today.k > 0.0 and not level.attribute
