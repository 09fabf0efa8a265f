"""Which of the things on offer cannot be meant as written: quotes, alternatives and purchases to no purpose, floors."""

from __future__ import annotations

from collections.abc import Collection, Iterator
from dataclasses import fields

import numpy as np
from numpy.typing import NDArray

from allocator.flow import GATE_FIELDS
from allocator.problem import Problem
from allocator.results import Caution
from allocator.scenario.model import Alternative, Quote
from allocator.states import States, sigmas_meant

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
Flags = NDArray[np.bool_]
MOST = 3
"""So many things are named, the rest counted."""
SAME = 1e-9
"""Relative difference up to which two sigma levels are one: the same quality stated in two forms."""


def cautions_of_floors(problem: Problem) -> Iterator[Caution]:
    """Caution where no way to run a step keeps its floor: no plan can exist."""
    steps = tuple(step for step, _ in problem.options.no_way)
    if steps:
        yield Caution(
            "floor_out_of_reach", steps, "no alternative, law or quote brings the step up to its at_least, so no plan can be found",
            "offer a way that reaches the floor, raise up_to where more was demonstrated, or correct at_least",
        )  # fmt: skip


def cautions_of_quotes(problem: Problem) -> Iterator[Caution]:
    """Caution where a quotation buys nothing: no better than today, or no better than one as cheap."""
    steps = problem.scenario.step
    owner = np.array([i for i, step in enumerate(steps) if step.improve for _ in step.improve.points], dtype=np.int64)
    if len(owner) == 0:
        return
    points = [point for step in steps if step.improve for point in step.improve.points]
    levels, today = sigmas_meant(points, problem.options.today.take(owner)), problem.options.today.levels.sigma_level
    numbers = np.arange(len(owner)) - np.searchsorted(owner, owner) + 1
    idle = levels <= today[owner] * (1.0 + SAME)
    yield from _about_quotes(
        problem, "quote_no_better_than_today", owner[idle], numbers[idle], "no better than the step stands today, so it buys nothing",
        "check that its level and the capability are stated in the same terms, or leave it out",
    )  # fmt: skip
    beaten = ~idle & _beaten(owner, levels, np.array([_amount(point) for point in points]))
    yield from _about_quotes(
        problem, "quote_beaten_by_another", owner[beaten], numbers[beaten], "no better than another that costs no more, so it is never used",
        "check its price and its level, or leave it out",
    )  # fmt: skip


def _about_quotes(
    problem: Problem, code: str, owner: Indices, numbers: Indices, reason: str, fix: str
) -> Iterator[Caution]:
    if len(owner) == 0:
        return
    names = [problem.scenario.step[i].name for i in owner.tolist()]
    places = [f"quote {number} of '{name}'" for number, name in zip(numbers.tolist(), names, strict=True)]
    are = "is" if len(places) == 1 else "are each"
    yield Caution(code, tuple(dict.fromkeys(names)), f"{_first_of(places)} {are} {reason}", fix)


def _amount(point: Quote) -> float:
    return next((amount for amount in (point.price, point.per_year, point.per_item) if amount is not None), 0.0)


def _beaten(owner: Indices, levels: Array, amounts: Array) -> Flags:
    """Return where a quote of the same step is as good and costs no more; of two alike the later one is beaten."""
    beaten = np.zeros(len(owner), dtype=bool)
    step, best = -1, -np.inf
    for j in np.lexsort((-levels, amounts, owner)).tolist():
        if owner[j] != step:
            step, best = owner[j], -np.inf
        beaten[j] = levels[j] <= best + SAME * abs(best) if best > -np.inf else False
        best = max(best, levels[j])
    return beaten


def _first_of(names: list[str]) -> str:
    return ", ".join(names[:MOST]) + (f" and {len(names) - MOST:,} more" if len(names) > MOST else "")


def cautions_of_purchases(problem: Problem) -> Iterator[Caution]:
    """Caution where a shared purchase is used by no alternative: it can never be bought."""
    used = {a.uses for step in problem.scenario.step for a in step.alternative}
    idle = [f"'{purchase.name}'" for purchase in problem.scenario.purchase if purchase.name not in used]
    if idle:
        yield Caution(
            "purchase_without_use", (), f"no alternative needs the shared purchase {_first_of(idle)}, so it is never bought",
            "name it in `uses` of the alternatives that need it, or leave it out",
        )  # fmt: skip


def cautions_of_alternatives(problem: Problem) -> Iterator[Caution]:
    """Caution where an alternative changes nothing, and where one that does is entered as costing nothing."""
    ways = problem.options.ways
    idle = _changing_nothing(problem)
    to_no_purpose = [a for a, w in idle.items() if ways.fixed_cost[w] >= 0.0]
    if to_no_purpose:
        picks = ways.text.picks
        names = [f"'{picks.alternatives[a].name}'" for a in to_no_purpose]
        steps = dict.fromkeys(problem.scenario.step[int(picks.owner[a])].name for a in to_no_purpose)
        yield Caution(
            "alternative_changes_nothing", tuple(steps), f"{_first_of(names)} leaves the step exactly as it stands today, so choosing it changes nothing",
            "state what it changes (capability, k, shift, widen, opportunities, copies, inspection or rework), or leave it out",
        )  # fmt: skip
    worse = _worse_for_nothing(problem, idle)
    if worse:
        picks = ways.text.picks
        names = [f"'{picks.alternatives[a].name}'" for a in worse]
        steps = dict.fromkeys(problem.scenario.step[int(picks.owner[a])].name for a in worse)
        yield Caution(
            "alternative_worse_than_today", tuple(steps),
            f"{_first_of(names)} makes no fewer defects than the step does today and saves nothing, so by itself it is never worth taking",
            "check that its level and the capability are stated in the same terms, or state what it saves (a negative per_item)",
        )  # fmt: skip
    free = _free(problem, {*idle, *worse})
    if free:
        yield Caution(
            "free_alternative", tuple(free), "an alternative is entered as costing nothing: it will be taken wherever it helps",
            "enter its price, per_year or per_item, or note why it is free (recentring may be)",
        )  # fmt: skip


def _free(problem: Problem, idle: set[int]) -> dict[str, None]:
    picks = problem.options.ways.text.picks
    free = (a for a, offered in enumerate(picks.alternatives) if a not in idle and _costs_nothing(offered))
    return dict.fromkeys(problem.scenario.step[int(picks.owner[a])].name for a in free)


def _costs_nothing(a: Alternative) -> bool:
    money = (a.price, a.per_year, a.per_item, a.price_allowance)
    dearer_gate = a.inspection is not None and a.inspection.per_item > 0.0
    return not any(money) and a.uses is None and not dearer_gate and not (a.rework is not None and a.rework.cost > 0.0)


def _changing_nothing(problem: Problem) -> dict[int, int]:
    """Return the alternatives that leave their step as it stands, each with the way in which it is chosen alone."""
    ways = problem.options.ways
    picks = ways.text.picks
    alone = np.flatnonzero(((picks.members >= 0).sum(axis=1) == 1)[ways.text.pick])
    same = alone[_as_today(ways.states.take(alone), problem.options.today.take(ways.step[alone]))]
    return dict(zip(picks.members[ways.text.pick[same]].max(axis=1, initial=-1).tolist(), same.tolist(), strict=True))


def _worse_for_nothing(problem: Problem, idle: Collection[int]) -> list[int]:
    """Return the alternatives that cost something, make no fewer defects than today, and leave gate and rework alone."""
    ways = problem.options.ways
    picks = ways.text.picks
    alone = np.flatnonzero(((picks.members >= 0).sum(axis=1) == 1)[ways.text.pick] & (ways.fixed_cost >= 0.0))
    mine, now = ways.states.take(alone), problem.options.today.take(ways.step[alone])
    more = (mine.intensity() >= now.intensity() * (1.0 - SAME)) & ~_reaches_further(problem, alone)
    gates = (mine.gates(), now.gates())
    for name in GATE_FIELDS:
        more &= getattr(gates[0], name) == getattr(gates[1], name)
    found = picks.members[ways.text.pick[alone[more]]].max(axis=1, initial=-1).tolist()
    return [a for a in dict.fromkeys(found) if a not in idle]


def _reaches_further(problem: Problem, rows: Indices) -> Flags:
    """Return where a law takes a way beyond all that the step reaches without it."""
    ways = problem.options.ways
    unchanged = np.full(problem.line.n_steps, np.inf)
    still = np.flatnonzero(ways.text.unchanged)
    np.minimum.at(unchanged, ways.step[still], ways.delta_low[still])
    return np.asarray(ways.delta_low[rows] < unchanged[ways.step[rows]] * (1.0 - SAME))


def _as_today(states: States, today: States) -> Flags:
    """Return where every figure of a state is today's, shape (n_states,)."""
    same = np.ones(len(states), dtype=bool)
    for one, other in ((states.levels, today.levels), (states, today)):
        figures = (f.name for f in fields(one) if f.name not in ("levels", "inspection", "rework"))
        for name in figures:
            same &= getattr(one, name) == getattr(other, name)
    for i in np.flatnonzero(same).tolist():
        same[i] = states.inspection[i] == today.inspection[i] and states.rework[i] == today.rework[i]
    return same
