"""What lies on the table of a design review: every option for the steps that matter, on the same yearly basis?"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from allocator.alone import answer, line_alone, stand, with_only
from allocator.asker import takes
from allocator.cautions import cautions_of_input, what_is_assumed
from allocator.flow import loads
from allocator.objections import against_alternative, against_law
from allocator.problem import Problem, pose, within
from allocator.results import LineFigures, Review, ReviewedStep, ReviewRow
from allocator.scenario.model import Alternative, Scenario, Step
from allocator.solve.road import Solved
from allocator.stands import Stand, stand_today
from allocator.state import floor_words
from allocator.states import floor_sigmas
from allocator.today import see_today
from allocator.variants import ALTERNATIVE, LAW, PURCHASE, Thing, find_step, things

LIVING, CHEAPEST, AS_IT_IS = "live with the scrap", "the cheapest plan", "as it is"
RECENTRE, STEADY, DESIGN, WIDEN = "recentre", "hold the mean steadier", "fewer opportunities", "widen the spec"
INSPECT, LATER, REWORK, COPIES = "inspect here", "inspect later", "rework instead of scrap", "second unit in parallel"
IMPROVE, SUPPLIER, MACHINE = "improve what is there", "another supplier", "better machine"
KINDS = (RECENTRE, STEADY, WIDEN, DESIGN, INSPECT, LATER, REWORK, COPIES, IMPROVE, SUPPLIER, MACHINE)
"""What an option can be, the cheap ones first: free moves before inspection, and capital last."""
EXPECTED = tuple(kind for kind in KINDS if kind != STEADY)
MOST_BY_SHARE = 3
"""Steps with the most money, and with the most defects, that are in the table whatever they offer."""
FLOOR_ROUNDING = 1e-9

Watch = Callable[[int, int], None]


def review_table(scenario: Scenario, step: str | None = None, *, watch: Watch | None = None) -> Review:
    """Return the options of the steps that matter in one table: each alone at its step, the rest planned anew.

    Parameters
    ----------
    scenario : Scenario
    step : str, optional
        One step alone, with the inspections of the steps after it that would find its defects; without it, all steps
        that offer an alternative and those where most money and most defects are lost.
    watch : callable, optional
        Told how many options of how many are done.

    Raises
    ------
    RangeError
        When there is no such step.
    SolverError
        When a solver stops without an answer.
    """
    problem = pose(scenario)
    shares = _shares(scenario)
    wanted = _steps_that_matter(problem, shares) if step is None else [find_step(problem, step)]
    table = _Table(problem, stand_today(problem), answer(problem))
    offers = [offer for i in wanted for offer in _offered(problem, i, step is not None)]
    rows = [table.living()]
    if table.best is not None:
        rows.append(table.cheapest(table.best))
    for done, offer in enumerate(offers):
        rows.append(table.option(offer))
        if watch is not None:
            watch(done + 1, len(offers))
    seen = {kind for offer in offers for kind in offer.kinds}
    return Review(
        title=scenario.title, currency=scenario.currency, shipped_per_year=problem.line.shipped, split=problem.split,
        targets={name: math.exp(-budget) for name, budget in problem.budgets.items()},
        target_losses={name: -math.expm1(-budget) for name, budget in problem.budgets.items()},
        reached=table.best is not None, steps=tuple(shares[i] for i in wanted), rows=tuple(rows),
        not_offered=tuple(kind for kind in EXPECTED if kind not in seen),
        left_out=_left_out(problem, wanted) if step is None else (), assumed=what_is_assumed(problem),
        cautions=cautions_of_input(problem),
    )  # fmt: skip


def _shares(scenario: Scenario) -> list[ReviewedStep]:
    return [ReviewedStep(row.step, row.money_share, row.defect_share) for row in see_today(scenario).rows]


def _steps_that_matter(problem: Problem, shares: list[ReviewedStep]) -> list[int]:
    """Return the steps that offer an alternative, and those with the largest shares, the most money first."""
    by_money = sorted(range(len(shares)), key=lambda i: -shares[i].money_share)
    by_defects = sorted(range(len(shares)), key=lambda i: -shares[i].defect_share)
    wanted = {i for i, step in enumerate(problem.scenario.step) if step.alternative}
    wanted |= {*by_money[:MOST_BY_SHARE], *by_defects[:MOST_BY_SHARE]}
    return [i for i in by_money if i in wanted]


def _left_out(problem: Problem, wanted: list[int]) -> tuple[str, ...]:
    """Return the steps that only their law could improve and that are not among those looked at."""
    steps = problem.scenario.step
    return tuple(s.name for i, s in enumerate(steps) if i not in wanted and s.improve is not None and not s.fixed)


@dataclass(frozen=True)
class _Offer:
    """One row to be worked out: at a step (by index) one thing and nothing else, or None for the step as it is."""

    step: int
    thing: Thing | None
    kinds: tuple[str, ...]


def _offered(problem: Problem, i: int, with_later: bool) -> Iterator[_Offer]:
    """Yield what a step can do, as it is first, then the cheap kinds; where asked the later inspections too."""
    known = [thing for thing in things(problem) if thing.kind != PURCHASE]
    mine = [_Offer(i, thing, _kinds(problem, thing)) for thing in known if thing.step == i]
    if with_later:
        mine += [_Offer(i, thing, (LATER,)) for thing in known if _finds_later(problem, thing, i)]
    yield _Offer(i, None, (AS_IT_IS,))
    yield from sorted(mine, key=lambda offer: KINDS.index(offer.kinds[0]))


def _alternative(problem: Problem, thing: Thing) -> Alternative:
    offers = problem.scenario.step[thing.step].alternative
    return next(alternative for alternative in offers if alternative.name == thing.name)


def _kinds(problem: Problem, thing: Thing) -> tuple[str, ...]:
    """Return what a thing changes, in the order of `KINDS`."""
    if thing.kind == LAW:
        return (IMPROVE,)
    step, own = problem.scenario.step[thing.step], _alternative(problem, thing)
    now = step.inspection or problem.scenario.default.inspection
    catches_more = own.inspection is not None and own.inspection.earlier > (0.0 if now is None else now.earlier)
    changes = {
        RECENTRE: own.k is not None and own.capability is None,
        STEADY: own.shift is not None and own.capability is None,
        WIDEN: own.widen is not None,
        DESIGN: own.opportunities is not None,
        INSPECT: own.inspection is not None,
        LATER: catches_more,
        REWORK: own.rework is not None,
        COPIES: own.copies is not None,
        SUPPLIER: own.capability is not None and _is_bought(step, own),
        MACHINE: own.capability is not None and not _is_bought(step, own),
    }
    return tuple(kind for kind in KINDS if changes.get(kind)) or (MACHINE,)


def _is_bought(step: Step, own: Alternative) -> bool:
    return step.supplier is not None or "suppl" in own.group.lower()


def _finds_later(problem: Problem, thing: Thing, i: int) -> bool:
    """Return whether a thing is an inspection at a later step, on the way from step i, that finds earlier defects."""
    if thing.kind != ALTERNATIVE or thing.step <= i:
        return False
    inspection = _alternative(problem, thing).inspection
    return inspection is not None and inspection.earlier > 0.0 and thing.step in _path(problem, i)


def _path(problem: Problem, i: int) -> set[int]:
    found, feeds = set(), problem.line.feeds
    while feeds[i] >= 0:
        i = int(feeds[i])
        found.add(i)
    return found


@dataclass(frozen=True)
class _Table:
    """The line as it stands and the cheapest plan, against which every option is held."""

    problem: Problem
    today: Stand
    best: Solved | None

    def living(self) -> ReviewRow:
        line, exponent = self.problem.line, self.today.flow.exponent
        most = int(np.argmax(exponent))
        with np.errstate(over="ignore"):
            more = float(line.shipped * line.per_finished[most] * np.expm1(exponent[most]))
        name = self.problem.scenario.step[most].name
        starts = f"up to {more:,.0f} more starts a year (at '{name}') than are shipped" if math.isfinite(more) else ""
        figures = self._figures(self.today, frozenset())
        return ReviewRow(None, "", (LIVING,), False, figures, None, tuple(text for text in (starts,) if text))

    def cheapest(self, best: Solved) -> ReviewRow:
        everywhere = frozenset(range(self.problem.line.n_steps))
        return ReviewRow(None, "", (CHEAPEST,), True, self._figures(stand(self.problem, best), everywhere), None, ())

    def option(self, offer: _Offer) -> ReviewRow:
        problem, thing = self.problem, offer.thing
        solved = None if self.best is None else answer(self._asked(offer), self.best)
        idle = thing is not None and thing.kind == LAW and solved is not None and not takes(solved, thing)
        alone = None if thing is None or idle else line_alone(problem, thing, solved)
        everywhere = frozenset(range(problem.line.n_steps))
        return ReviewRow(
            step=problem.scenario.step[offer.step].name,
            option="" if thing is None else self._name(offer.step, thing),
            kinds=offer.kinds,
            in_plan=self.best is not None and _takes(problem, self.best, offer),
            figures=None if solved is None else self._figures(stand(problem, solved), everywhere),
            alone=None if alone is None or thing is None else self._figures(alone, frozenset({thing.step})),
            against=() if idle else self._against(offer),
            idle=idle,
        )

    def _asked(self, offer: _Offer) -> Problem:
        """Return the question with the step run that way alone; for a check at a later step, this one as it is."""
        if offer.thing is None or offer.thing.step == offer.step:
            return with_only(self.problem, offer.step, offer.thing)
        return with_only(with_only(self.problem, offer.step, None), offer.thing.step, offer.thing)

    def _name(self, at: int, thing: Thing) -> str:
        if thing.kind == LAW:
            return ""
        return thing.name if thing.step == at else f"{thing.name}, at {self.problem.scenario.step[thing.step].name}"

    def _against(self, offer: _Offer) -> tuple[str, ...]:
        if offer.thing is None:
            below = offer.step in _below_their_floor(self.problem)
            return (_floor_missed(self.problem, offer.step),) if below else ()
        step = self.problem.scenario.step[offer.thing.step]
        if offer.thing.kind == LAW:
            return against_law(step)
        return against_alternative(step, _alternative(self.problem, offer.thing), self._off_centre(offer.thing.step))

    def _off_centre(self, i: int) -> bool:
        return bool(self.problem.options.today.levels.k[i] > 0.0)

    def _figures(self, line: Stand, planned: frozenset[int]) -> LineFigures:
        """Return the figures of a line whose planned steps keep their floors (all others stand as today)."""
        total = line.money.total if math.isfinite(line.money.total) else None
        below = [i for i in _below_their_floor(self.problem) if i not in planned]
        return LineFigures(
            total=total,
            money=None if total is None else line.money,
            over_living=_less(total, self.today.money.total),
            over_plan=None if self.best is None or self.best.outcome is None
            else _less(total, self.best.outcome.money.total),
            yields=line.yields,
            capital=line.capital,
            misses=(*self._missed_targets(line), *(_floor_missed(self.problem, i) for i in below)),
            allowed=not any(self.problem.scenario.step[i].safety for i in below),
        )  # fmt: skip

    def _missed_targets(self, line: Stand) -> Iterator[str]:
        used = loads(line.line, line.flow)
        for name, budget in self.problem.budgets.items():
            if not within(used[name], budget):
                yield f"misses the {name.replace('_', ' ')} target"


def _less(total: float | None, than: float) -> float | None:
    return None if total is None or not math.isfinite(than) else total - than


def _takes(problem: Problem, best: Solved, offer: _Offer) -> bool:
    """Return whether the cheapest plan takes it, with others or alone; a step as it is takes nothing."""
    if offer.thing is not None:
        return takes(best, offer.thing)
    return not any(takes(best, thing) for thing in things(problem) if thing.step == offer.step)


def _below_their_floor(problem: Problem) -> list[int]:
    today, steps = problem.options.today, problem.scenario.step
    least = floor_sigmas([step.at_least for step in steps], today, np.arange(len(steps)))
    return [int(i) for i in np.flatnonzero(today.levels.sigma_level < least * (1.0 - FLOOR_ROUNDING))]


def _floor_missed(problem: Problem, i: int) -> str:
    step = problem.scenario.step[i]
    kind = "safety floor" if step.safety else "floor"
    refused = "not allowed: " if step.safety else ""
    return f"{refused}'{step.name}' is below the {kind} ({floor_words(step.at_least)})"
