"""How sure a plan is, as text: what it costs to be sure, what other plans would risk, what to measure next."""

from __future__ import annotations

from allocator.report import words
from allocator.report.paper import Paper, columns
from allocator.results import Confidence, Plan, Trial

SAME_SHARE = 1e-6
"""Savings below this share of the total are nothing."""


def write_confidence(paper: Paper, plan: Plan, sure: Confidence) -> None:
    """Everything about the confidence that was asked for; the plan itself stands in the tables."""
    asked, currency = f"{sure.confidence * 100:g} %", words.clean(plan.currency)
    paper.heading(f"How sure ({asked} asked for; money in {currency}/year)")
    rows = [_row("this plan", sure.trial), _row("estimates taken as exact", sure.plain)]
    if sure.own_bounds is not None:
        rows.append(_row(f"each estimate on its own {asked} bound", sure.own_bounds))
    paper.table(columns(["plan"], ["total", "meets the targets\nin", "95 % limits"]), rows, len(rows))
    paper.say(f"Tried on {sure.draws:,} fresh draws of what the true figures may be.")
    if sure.reached:
        paper.say(f"Being this sure costs {words.per_year(sure.price, plan.currency)} over the plan on the estimates.")
    paper.say(_own_bounds(sure, plan.currency))
    paper.say(f"The law of the errors: {words.clean(sure.law)}.")
    _write_exact(paper, sure)
    _write_costs(paper, plan, sure)
    _write_studies(paper, plan, sure)


def _row(name: str, trial: Trial) -> list[str]:
    limits = f"{_percent(trial.holds_low)} to {_percent(trial.holds_high)}"
    return [name, words.money(trial.total), _percent(trial.holds), limits]


def _percent(share: float) -> str:
    return f"{share * 100:.2f} %"


def _own_bounds(sure: Confidence, currency: str) -> str:
    own = sure.own_bounds
    if own is None:
        return "No plan takes every estimate at its own bound and still meets the targets."
    less = own.total - sure.trial.total
    if less >= 0.0:
        return f"Every estimate at its own bound would cost {words.per_year(less, currency)} more than this plan."
    short = _percent(sure.confidence - own.holds)
    return (
        f"Every estimate at its own bound would cost {words.per_year(-less, currency)} less, and fall short of the "
        f"confidence asked for by {short}."
    )


def _write_exact(paper: Paper, sure: Confidence) -> None:
    paper.say(f"In doubt: {words.listed([words.quoted(step) for step in sure.in_doubt], more='more steps')}.")
    if sure.exact:
        named = words.listed([words.quoted(step) for step in sure.exact], more="more steps")
        paper.say(
            f"Without a sample as the plan runs them, and so taken as exact: {named}. What is not known there, "
            "the plan does not allow for."
        )


def _write_costs(paper: Paper, plan: Plan, sure: Confidence) -> None:
    low, high = words.money(sure.cost_low), words.money(sure.cost_high)
    share, ranges = f"{sure.cost_share:.0%}".replace("%", " %"), sure.ranges
    prices = (
        f"{ranges} of its amounts drawn between their low and high (triangular)"
        if ranges
        else "every price as stated (no amount of this plan has a low or high)"
    )
    paper.heading(f"Yearly total in {share} of cases: {low} to {high}, with the defects as they may be and {prices}.")
    if ranges:
        least, most = words.money(sure.improvement_low), words.money(sure.improvement_high)
        paper.say(f"Improvement alone: {least} to {most}.")


def _write_studies(paper: Paper, plan: Plan, sure: Confidence) -> None:
    if not sure.studies:
        return
    paper.heading(f"What to measure next (saved per year, {words.clean(plan.currency)})")
    rows = [
        [
            study.step,
            study.alternative or "as it stands",
            f"{study.sample:,}",
            f"{study.sample_then:,}",
            _saving(study.saving, sure),
        ]
        for study in sure.studies
    ]
    paper.table(columns(["step", "estimate of"], ["parts now", "parts then", "saves"]), rows, len(rows))
    if sure.studies_left_out:
        paper.say(f"{sure.studies_left_out} estimates of less weight were not looked at.")
    paper.say(f"Method: {words.clean(sure.studies_method)}.")


def _saving(saving: float, sure: Confidence) -> str:
    return words.money(saving) if saving > SAME_SHARE * abs(sure.trial.total) else "nothing"
