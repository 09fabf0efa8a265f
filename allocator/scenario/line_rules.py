"""Do the steps make one line: whom they feed, and what a scrapped item costs along the way."""

from __future__ import annotations

from allocator.scenario.faults import Finding, did_you_mean
from allocator.scenario.model import Scenario, Step

ROUNDING = 1e-9
"""Net cost below 0 by this share of the figures it is the difference of is rounding."""


def feeds_findings(scenario: Scenario, names_complete: bool) -> list[Finding]:
    """Return what is wrong with `feeds`: each step feeds one later step, the last one the customer.

    Parameters
    ----------
    scenario : Scenario
    names_complete : bool
        False where a name could not be read: an unknown one may then be that one.
    """
    index = first_positions(scenario)
    last = len(scenario.step) - 1
    findings: list[Finding] = []
    for i, step in enumerate(scenario.step):
        if step.feeds is None:
            continue
        if i == last:
            allowed = "leave it out: the last step feeds the customer (put the step that ends the line last)"
            findings.append(Finding(("step", i), "feeds", f"'{step.feeds}'", allowed))
        elif step.feeds not in index:
            if names_complete:
                otherwise = "name a later step of this file"
                allowed = did_you_mean(step.feeds, index, otherwise)
                findings.append(Finding(("step", i), "feeds", f"'{step.feeds}', which is no step", allowed))
        elif index[step.feeds] <= i:
            findings.append(_loop(i, step.feeds, index[step.feeds] == i))
    if scenario.step[last].per_unit != 1.0:
        found = f"{scenario.step[last].per_unit:g} on the last step"
        findings.append(Finding(("step", last), "per_unit", found, "leave it out: its item is the unit"))
    return findings


def _loop(i: int, feeds: str, itself: bool) -> Finding:
    found = "the step itself" if itself else f"'{feeds}', which stands before it"
    allowed = "a step feeds a later step, anything else makes a loop: change feeds, or the order of the steps"
    return Finding(("step", i), "feeds", found, allowed)


def first_positions(scenario: Scenario) -> dict[str, int]:
    """Return where each name stands first."""
    index: dict[str, int] = {}
    for i, step in enumerate(scenario.step):
        index.setdefault(step.name, i)
    return index


def cost_key_findings(i: int, step: Step) -> list[Finding]:
    """Return what is wrong with which of scrap_cost, cost_added and salvage a step gives."""
    owner = ("step", i)
    if step.scrap_cost is None and step.cost_added is None:
        allowed = "give scrap_cost (lost when one item is scrapped here) or cost_added (what this step adds to an item)"
        return [Finding(owner, "scrap_cost", "neither scrap_cost nor cost_added", allowed)]
    if step.scrap_cost is None:
        return []
    findings = []
    if step.cost_added is not None:
        both = "scrap_cost and cost_added"
        findings.append(Finding(owner, "scrap_cost", both, "give one of the two: scrap_cost already is the sum"))
    if "salvage" in step.model_fields_set:
        allowed = "leave it out: scrap_cost is what is lost, salvage already taken off (salvage goes with cost_added)"
        findings.append(Finding(owner, "salvage", f"{step.salvage:g} beside scrap_cost", allowed))
    return findings


def net_cost_findings(scenario: Scenario) -> list[Finding]:
    """Return the steps at which scrapping an item would lose less than its parts were worth.

    Expects `feeds` and the cost keys to be sound. With w the loss per scrapped item, κ = w − Σ per_unit·w over the
    steps that feed it must not be negative.
    """
    n = len(scenario.step)
    index = first_positions(scenario)
    cost_in, loss_in, size_in = [0.0] * n, [0.0] * n, [0.0] * n
    findings: list[Finding] = []
    for i, step in enumerate(scenario.step):
        accumulated = step.scrap_cost if step.scrap_cost is not None else cost_in[i] + (step.cost_added or 0.0)
        lost = accumulated - (0.0 if step.scrap_cost is not None else step.salvage)
        size = max(accumulated, step.salvage, size_in[i])
        if lost - loss_in[i] < -ROUNDING * size:
            findings.append(_net_cost_finding(i, step, lost, loss_in[i]))
        if i < n - 1:
            fed = index[step.feeds] if step.feeds is not None else i + 1
            cost_in[fed] += step.per_unit * accumulated
            loss_in[fed] += step.per_unit * lost
            size_in[fed] += step.per_unit * size
    return findings


def _net_cost_finding(i: int, step: Step, lost: float, put_in: float) -> Finding:
    found = f"{lost:.6g} lost per item scrapped here, but {put_in:.6g} lost if its parts were scrapped before"
    second_grade = "enter a second-grade sale as rework at the price given up"
    if step.scrap_cost is not None:
        return Finding(("step", i), "scrap_cost", found, f"raise it to what the parts put in cost, or {second_grade}")
    return Finding(("step", i), "salvage", found, f"lower it, or {second_grade}")
