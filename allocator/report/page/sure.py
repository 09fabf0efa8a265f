"""How sure is it: how often, of what the true figures may be, each plan keeps its promise; what to measure next."""

from __future__ import annotations

from dataclasses import dataclass

from allocator.report import words
from allocator.results import Confidence, Plan, StudyWorth, Trial

MOST_STUDIES = 6
SAME_SHARE = 1e-6
"""Savings below this share of the total are nothing."""


@dataclass(frozen=True)
class Chance:
    """One plan: how often it keeps the promise (in per cent, with its limits), and what it costs."""

    name: str
    low: float
    at: float
    high: float
    holds: str
    total: str


@dataclass(frozen=True)
class SureSaid:
    said: list[str]
    asked: float
    asked_words: str
    chances: list[Chance]
    studies: list[list[str]]
    notes: list[str]


def sure_said(sure: Confidence | None, plan: Plan) -> SureSaid | None:
    """The plan under the error of its estimates; None where no estimate states its sample."""
    if sure is None:
        return None
    currency, asked = words.clean(plan.currency), f"{sure.confidence * 100:g} %"
    chances = [_chance("this plan, estimates taken as exact", sure.plain), _chance(f"the plan for {asked}", sure.trial)]
    if sure.own_bounds is not None:
        chances.append(_chance("every estimate at its own bound", sure.own_bounds))
    exact = words.listed([words.clean(step) for step in sure.exact])
    return SureSaid(
        said=_said(sure, currency, asked),
        asked=round(100.0 * sure.confidence, 2),
        asked_words=asked,
        chances=chances,
        studies=[_study(study, sure) for study in sure.studies[:MOST_STUDIES]],
        notes=[
            f"Tried on {sure.draws:,} fresh draws of what the true figures may be. {words.clean(sure.law)}.",
            *([f"Without a sample as that plan runs them, and so taken as exact: {exact}."] if exact else []),
        ],
    )


def _said(sure: Confidence, currency: str, asked: str) -> list[str]:
    doubt = words.listed([words.clean(step) for step in sure.in_doubt])
    first = (
        f"Capabilities known from samples are soft: {doubt}. With the estimates taken as exact, the plan keeps its "
        f"promise in {_percent(sure.plain.holds)} of what the true figures may be."
    )
    if not sure.reached:
        return [first, f"No plan that was found keeps it in {asked}; the surest comes to {_percent(sure.trial.holds)}."]
    return [
        first,
        f"To keep it in {asked} costs {words.money(sure.price)} {currency} a year more: "
        f"{words.money(sure.trial.total)} in all.",
    ]


def _chance(name: str, trial: Trial) -> Chance:
    low, at, high = (round(100.0 * share, 2) for share in (trial.holds_low, trial.holds, trial.holds_high))
    return Chance(name, low, at, high, _percent(trial.holds), words.money(trial.total))


def _percent(share: float) -> str:
    return f"{share * 100:.1f} %"


def _study(study: StudyWorth, sure: Confidence) -> list[str]:
    saves = words.money(study.saving) if study.saving > SAME_SHARE * abs(sure.trial.total) else "nothing"
    where = words.clean(study.alternative) if study.alternative else "as it stands"
    return [words.clean(study.step), where, f"{study.sample:,}", f"{study.sample_then:,}", saves]
