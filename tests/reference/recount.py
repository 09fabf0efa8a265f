"""What exactly happens, and what does it cost, when the line runs with a given choice?

The items are followed step by step: how many must be started so that one unit ships, how many are thrown away at each
gate, what each thrown item had cost. The closed formulas of the program (net cost added, exp(S) − 1) are not used here.

A choice is {step name: {"alternatives": [names], "z": sigma level after the law, or None}}; a step left out stays as it
is.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from tests.reference.laws import Law, law_of
from tests.reference.line import (
    YIELDS,
    capital_of,
    children,
    downstream_first,
    feeds,
    items_per_unit,
    lost_per_scrapped_item,
    purchases_used,
    split_target,
    target_yields,
    yearly_cost,
)
from tests.reference.states import State, floor_level, named_alternatives, state_with

LEVEL_SLACK = 1e-9
"""A level this close to the one expected counts as equal."""


@dataclass
class Counted:
    """What one step does, per shipped unit."""

    state: State
    law: Law | None
    z: float
    delta: float
    found: float = 0.0
    hidden: float = 0.0
    pass_probability: float = 1.0
    started: float = 1.0
    scrapped: float = 0.0
    passed: float = 1.0


def recount(scenario: dict, choice: dict, of: str | None = None) -> dict:
    """Yields, losses, money, capital and step figures of any choice, by following the items."""
    steps = [_chosen(scenario, step, choice) for step in scenario["step"]]
    _let_defects_travel(scenario, steps)
    _let_items_travel(scenario, steps)
    exponents = _exponents(scenario, steps)
    picked = [named_alternatives(step, _names(choice, step)) for step in scenario["step"]]
    bought = purchases_used(scenario, [a for chosen in picked for a in chosen])
    improvement = [_improvement(scenario, i, steps[i], picked[i]) for i in range(len(steps))]
    result = {name: math.exp(-exponents[name]) for name in YIELDS}
    result["loss"] = {name: -math.expm1(-exponents[name]) for name in YIELDS}
    if all(counted.state.inspection is None for counted in steps):
        result["shipped_yield"] = result["loss"]["shipped_yield"] = None
    money = _money(scenario, steps, exponents["shipped_yield"], sum(year for year, _ in improvement))
    money["improvement"] += sum(yearly_cost(purchase, scenario, 0.0) for purchase in bought)
    money["total"] = math.fsum(money.values())
    result |= {
        "annual_cost": money,
        "cost_per_unit": money["total"] / scenario["demand"]["shipped_per_year"],
        "capital": sum(cash for _, cash in improvement) + sum(capital_of(purchase) for purchase in bought),
        "purchases": [{"name": p["name"], "per_year_cost": yearly_cost(p, scenario, 0.0)} for p in bought],
        "exponents": exponents,
        "expected_defects": sum(
            q * c.state.n * c.state.p(c.z) for q, c in zip(items_per_unit(scenario), steps, strict=True)
        ),
        "steps": _step_figures(scenario, choice, steps, improvement, of or split_target(scenario)),
        "counted": steps,
    }
    return result


def _names(choice: dict, step: dict) -> list[str]:
    return list(choice.get(step["name"], {}).get("alternatives", []))


def _chosen(scenario: dict, step: dict, choice: dict) -> Counted:
    state = state_with(scenario, step, named_alternatives(step, _names(choice, step)))
    law = law_of(scenario, step, state, 1.0)
    wanted = choice.get(step["name"], {}).get("z")
    z = state.z if wanted is None else wanted
    highest = state.z if law is None else law.z_cap
    slack = LEVEL_SLACK * max(1.0, abs(state.z))
    if not state.z - slack <= z <= highest + slack:
        raise ValueError(f"{step['name']}: level {z} outside {state.z} to {highest}")
    # at the ends the exact end is meant: a law costs exactly nothing at its start
    z = min(max(z, state.z), highest)
    return Counted(state, law, z, state.delta(z))


def _let_defects_travel(scenario: dict, steps: list[Counted]) -> None:
    """From the first steps to the customer: what each gate finds and what passes it unseen."""
    into = children(scenario)
    for i in reversed(downstream_first(scenario)):
        counted, gate = steps[i], steps[i].state.gate()
        inherited = sum(scenario["step"][c].get("per_unit", 1) * steps[c].hidden for c in into[i])
        counted.found = gate["finds"] * counted.delta + gate["earlier"] * inherited
        counted.hidden = (1 - gate["finds"]) * counted.delta + (1 - gate["earlier"]) * inherited
        no_fatal_defect = math.exp(-(1 - gate["reworked"]) * counted.found)
        counted.pass_probability = no_fatal_defect * (1 - gate["rejects"] * gate["lost"])


def _let_items_travel(scenario: dict, steps: list[Counted]) -> None:
    """From the customer to the first steps: what must be started so that one unit ships."""
    target = feeds(scenario)
    for i in downstream_first(scenario):
        counted = steps[i]
        if target[i] is not None:
            counted.passed = scenario["step"][i].get("per_unit", 1) * steps[target[i]].started
        counted.started = counted.passed / counted.pass_probability
        counted.scrapped = counted.started * _fail_probability(counted)


def _fail_probability(counted: Counted) -> float:
    gate = counted.state.gate()
    return -math.expm1(-(1 - gate["reworked"]) * counted.found + math.log1p(-gate["rejects"] * gate["lost"]))


def _exponents(scenario: dict, steps: list[Counted]) -> dict[str, float]:
    """−ln of the three yields: a whole unit's worth of items must pass everywhere."""
    q = items_per_unit(scenario)
    escapes = steps[-1].hidden
    lost = sum(q[i] * -math.log1p(-_fail_probability(c)) for i, c in enumerate(steps))
    return {
        "final_yield": lost + escapes,
        "rolled_yield": sum(q[i] * c.delta for i, c in enumerate(steps)),
        "shipped_yield": escapes,
    }


def _money(scenario: dict, steps: list[Counted], escapes: float, improvement: float) -> dict[str, float]:
    units = scenario["demand"]["shipped_per_year"]
    q, lost = items_per_unit(scenario), lost_per_scrapped_item(scenario)
    gates = [counted.state.gate() for counted in steps]
    return {
        "scrap": units * sum(c.scrapped * lost[i] for i, c in enumerate(steps)),
        "rework": units
        * sum(
            q[i] * g["rework_cost"] * g["reworked"] * c.found for i, (c, g) in enumerate(zip(steps, gates, strict=True))
        ),
        "escapes": units * scenario.get("target", {}).get("escape_cost", 0.0) * escapes,
        "inspection": units * sum(q[i] * g["per_item"] for i, g in enumerate(gates)),
        "improvement": improvement,
    }


def _improvement(scenario: dict, i: int, counted: Counted, picked: list[dict]) -> tuple[float, float]:
    """Yearly cost and capital of what this step buys, shared purchases apart."""
    q = items_per_unit(scenario)[i]
    yearly = sum(yearly_cost(alternative, scenario, q) for alternative in picked)
    capital = sum(capital_of(alternative) for alternative in picked)
    law = law_of(scenario, scenario["step"][i], counted.state, q)
    if law is not None:
        shape = law.shape(counted.z)
        yearly, capital = yearly + law.yearly * shape, capital + law.capital * shape
    return yearly, capital


def _step_figures(
    scenario: dict, choice: dict, steps: list[Counted], improvement: list[tuple[float, float]], of: str
) -> list[dict]:
    q, units, shares = (
        items_per_unit(scenario),
        scenario["demand"]["shipped_per_year"],
        budget_shares(scenario, steps, of),
    )
    lost = lost_per_scrapped_item(scenario)
    figures = []
    for i, (step, counted) in enumerate(zip(scenario["step"], steps, strict=True)):
        state, z = counted.state, counted.z
        gate = state.gate()
        figures.append(
            {
                "step": step["name"],
                "alternatives": _names(choice, step),
                "sigma_level": z,
                "shift": state.s,
                "k": state.k,
                "cp": None if state.attribute or state.sides == 1 else z / 3,
                "cpk": z * (1 - state.k) / 3,
                "cpk_after_shift": (z * (1 - state.k) - state.s) / 3,
                "dpmo": 1e6 * state.p(z),
                "ppm": -1e6 * math.expm1(-counted.delta),
                "budget_share": shares[i],
                "starts_per_year": units * counted.started,
                "scrap": units * counted.scrapped * lost[i],
                "rework": units * q[i] * gate["rework_cost"] * gate["reworked"] * counted.found,
                "improvement": improvement[i][0],
                "capital": improvement[i][1],
                "at_cap": counted.law is not None and z >= counted.law.z_cap - LEVEL_SLACK,
                "first_pass_yield": math.exp(-counted.found) * (1 - gate["rejects"]),
            }
        )
    return figures


def budget_shares(scenario: dict, steps: list[Counted], of: str) -> list[float]:
    """Part of the used budget due to the defects made in each step, wherever found, and to its gate's false rejects."""
    q, target = items_per_unit(scenario), feeds(scenario)
    used = []
    for i, counted in enumerate(steps):
        if of == "rolled_yield":
            used.append(q[i] * counted.delta)
            continue
        # follow one step's own defects through all later gates
        amount, at, own, hidden = 0.0, i, True, counted.delta
        while at is not None:
            gate = steps[at].state.gate()
            caught = gate["finds"] if own else gate["earlier"]
            amount += (1 - gate["reworked"]) * caught * hidden
            hidden *= 1 - caught
            at, own = target[at], False
        gate = counted.state.gate()
        false_rejects = -math.log1p(-gate["rejects"] * gate["lost"])
        used.append(q[i] * (amount + hidden + false_rejects if of == "final_yield" else hidden))
    total = sum(used)
    return [part / total if total else math.nan for part in used]


def violations(scenario: dict, choice: dict, targets: dict | None = None) -> dict[str, float]:
    """How far a choice misses targets (relative to the budget), floors (in σ) and the capital limit (relative)."""
    counted = recount(scenario, choice)
    missed = {}
    for name, goal in target_yields(scenario, targets).items():
        budget = -math.log(goal)
        missed[name] = max(0.0, counted["exponents"][name] / budget - 1)
    for step, figures in zip(scenario["step"], counted["counted"], strict=True):
        missed[f"floor of {step['name']}"] = max(0.0, floor_level(step, figures.state) - figures.z)
    limit = scenario.get("limits", {}).get("capital")
    if limit is not None:
        missed["capital"] = max(0.0, (counted["capital"] - limit) / max(1.0, abs(limit)))
    return missed
