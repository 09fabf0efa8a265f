"""Is the scenario sound, what was understood of it, and which cautions apply."""

from __future__ import annotations

import math

import numpy as np

from allocator.cautions import cautions_of_input, what_is_assumed
from allocator.picks import combinations
from allocator.problem import Problem, pose
from allocator.results import Check, Understood
from allocator.scenario.model import Capability, Inspection, Law, Scenario, Step
from allocator.standing import levels_today

REMARKS = ("source", "evidence", "note")


def check_scenario(scenario: Scenario) -> Check:
    """Return what was understood of a scenario that was read without faults, and the cautions that apply.

    Parameters
    ----------
    scenario : Scenario
        As read by `read_scenario`, which refuses what is wrong.
    """
    problem = pose(scenario)
    levels, ways = levels_today(problem), problem.options.ways
    highest, unchanged = ways.highest_unchanged(len(scenario.step)), np.flatnonzero(ways.text.unchanged)
    caps = {int(ways.step[w]): ways.text[w].cap for w in unchanged}
    return Check(
        title=scenario.title,
        currency=scenario.currency,
        shipped_per_year=problem.line.shipped,
        file=scenario.file,
        rows=tuple(
            Understood(
                step=step.name,
                supplier=step.supplier,
                feeds=_feeds(problem, i),
                items_per_unit=float(problem.line.per_finished[i]),
                opportunities=step.opportunities,
                level=levels[i],
                given=given_as(step.capability),
                lost_when_scrapped=float(problem.line.lost[i]),
                net_cost_added=float(problem.line.net_cost[i]),
                ways=len(combinations(step)),
                improves=_law_words(step, float(highest[i]), caps.get(i)),
                inspection=_inspection_words(problem.options.today.inspection[i]),
            )
            for i, step in enumerate(scenario.step)
        ),
        targets={name: math.exp(-budget) for name, budget in problem.budgets.items()},
        target_losses={name: -math.expm1(-budget) for name, budget in problem.budgets.items()},
        assumed=what_is_assumed(problem),
        cautions=cautions_of_input(problem),
    )


def _feeds(problem: Problem, i: int) -> str | None:
    following = int(problem.line.feeds[i])
    return None if following < 0 else problem.scenario.step[following].name


def given_as(capability: Capability) -> str:
    """Return a capability as the user wrote it, keys and figures only."""
    stated = capability.model_dump(exclude_none=True, by_alias=True, exclude=set(REMARKS))
    return ", ".join(
        f"{key} = {value:g}" if isinstance(value, float) else f"{key} = {value}" for key, value in stated.items()
    )


def _law_words(step: Step, highest: float, words: str | None) -> str | None:
    law = step.improve
    if law is None:
        return None
    why = (words or "").split(" (sigma level")[0]  # The level stands before it already.
    cap = f"; up to sigma level {highest:.3g}: {why}" if why else ""
    return f"{law.law}{_parameter(law)}{_amount(law)}{cap}"


def _amount(law: Law) -> str:
    """Return what the law states that improving costs; quotes state theirs one by one."""
    keys = ("price", "per_year", "per_item")
    stated = [f", {key} {amount:,.12g}" for key in keys if (amount := getattr(law, key)) is not None]
    at = "" if law.at is None else f" at {given_as(law.at)}"
    return "".join(stated) + at


def _parameter(law: Law) -> str:
    if law.exponent is not None:
        return f", exponent {law.exponent:g}"
    if law.rate is not None:
        return f", rate {law.rate:g} per sigma"
    return f", {len(law.points)} quotes" if law.points else ""


def _inspection_words(inspection: Inspection | None) -> str:
    if inspection is None:
        return "assumed"
    share = "" if inspection.share_inspected == 1.0 else f" of {inspection.share_inspected:.0%} inspected"
    words = f"finds {inspection.finds:.4g} own, {inspection.earlier:.4g} earlier{share}"
    return words + (f", rejects {inspection.rejects_good:.3g} good" if inspection.rejects_good else "")
