"""Which cautions does an answer call for, beside those of its scenario."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from allocator.cautions.input import cautions_of_input, is_judged
from allocator.problem import Problem
from allocator.results import Caution, Plan, StepTarget
from allocator.scenario.model import Step

PROMISED_GAP = 1e-4
ROUNDING = 1e-9
"""A level held as the one of today is the one of today."""
DEMONSTRATED_BY = 3.0
"""−ln(1 − 0.95): expected defects at which none seen shows the rate with 95 % confidence."""


def cautions_of_plan(problem: Problem, plan: Plan) -> tuple[Caution, ...]:
    """Return the cautions of a plan and of the scenario behind it."""
    return (*_of_answer(problem, plan), *cautions_of_input(problem))


def cautions_of_held(plan: Plan, held: Iterable[str]) -> tuple[Caution, ...]:
    """Return the caution where a step is held at a level below the one at which it stands today."""
    names = {name.strip() for name in held}
    worse = tuple(
        row.step for row in plan.rows if row.step in names and row.target.dpmo > row.today.dpmo * (1.0 + ROUNDING)
    )
    if not worse:
        return ()
    said = Caution(
        "held_below_today", worse, "the level that is held is worse than the one of today, and the plan counts on no better",
        "hold the step at today's level or above, unless it really is to get worse",
    )  # fmt: skip
    return (said,)


def _of_answer(problem: Problem, plan: Plan) -> Iterator[Caution]:
    capped = tuple(s.step for s in plan.rows if s.at_cap)
    if capped:
        yield Caution(
            "at_cap", capped, "the plan sits at the end of what was demonstrated or quoted: the true optimum may lie beyond",
            "ask for a quotation, or demonstrate a better level, and raise up_to",
        )  # fmt: skip
    rests = tuple(
        row.step for step, row in zip(problem.scenario.step, plan.rows, strict=False) if _bought_on_judgement(step, row)
    )
    if rests:
        yield Caution(
            "plan_rests_on_judgement", rests, "what the plan does here rests on judged figures",
            "get quotations or trials for these before money is committed",
        )  # fmt: skip
    unseen = tuple(
        s.step for s in plan.rows if s.target.dpmo > 0.0 and _cannot_be_shown(s.target.ppm, s.starts_per_year)
    )
    if unseen:
        yield Caution(
            "cannot_be_demonstrated", unseen, "a year's items would not show this target with 95 % confidence, even with none bad",
            "agree on an index (Cpk with its sample) instead of a ppm figure",
        )  # fmt: skip
    if plan.reached and plan.price_of_defect_budget and plan.cost_of_next_nine is None and plan.targets:
        yield Caution(
            "price_is_local", (), "the price of the defect budget holds near this plan only: the next nine is out of reach",
            "read the price of nines, and where it ends, before promising more",
        )  # fmt: skip
    if plan.proof is not None and plan.proof.gap is not None and plan.proof.gap > PROMISED_GAP:
        yield Caution(
            "wide_gap", (), f"the proven gap is {plan.proof.gap:.1e} after {plan.proof.seconds:.0f} s: a plan up to that much cheaper may exist",
            "fewer alternatives per step, or accept the gap",
        )  # fmt: skip


def _bought_on_judgement(step: Step, row: StepTarget) -> bool:
    if row.law is not None and step.improve is not None and is_judged(step.improve):
        return True
    return bool(row.alternatives) and any(is_judged(a) for a in step.alternative if a.name in row.alternatives)


def _cannot_be_shown(ppm: float, items: float) -> bool:
    return ppm * 1e-6 * items < DEMONSTRATED_BY
