"""Limits on money that leave no plan, or none that meets the target: how much would do, and what stands nearest."""

from __future__ import annotations

from typing import Any

import pytest
from strategies import Drawn, plain_line, with_target

from allocator.plan import make_plan
from allocator.report.plan_text import answer
from allocator.report.render import render
from allocator.results import LeastNeeded, Plan
from allocator.scenario.read import scenario_from_dict


def plan_of(scenario: Drawn, **question: Any) -> Plan:
    return make_plan(scenario_from_dict(scenario), **question)


def loss_of(plan: Plan) -> float:
    assert plan.yields is not None
    return plan.yields.final_loss


LIMITED = plain_line(0.05, 0.01) | {"limits": {"capital": 50_000.0}}
LIMITED["step"][0]["alternative"] = [
    {"name": "machine", "capability": {"defect_rate": 0.005}, "price": 60_000.0},
    {"name": "small machine", "capability": {"defect_rate": 0.035}, "price": 20_000.0},
]
LIMITED["step"][1] |= {
    "at_least": {"dpmo": 5_000.0},
    "alternative": [{"name": "tool", "capability": {"defect_rate": 0.004}, "price": 20_000.0}],
}


def test_capital_that_keeps_the_target_out_of_reach_says_how_much_would_do() -> None:
    """By hand: only the machine (0.5 %) and the tool (0.4 %) together lose less than 3 %, for 80,000."""
    plan = plan_of(with_target(LIMITED, final_yield=0.97))
    assert (plan.reached, plan.capital) == (False, 40_000.0)
    assert plan.least_needed == LeastNeeded("capital", 50_000.0, None, 80_000.0)
    beyond = plan_of(with_target(LIMITED, final_yield=0.999)).least_needed
    assert beyond == LeastNeeded("capital", 50_000.0, None, None)


def test_capital_too_small_for_the_floors_shows_the_plan_of_the_least() -> None:
    """By hand: the floor of the second step takes the tool, 20,000."""
    plan = plan_of(with_target(LIMITED | {"limits": {"capital": 10_000.0}}, final_yield=0.97))
    assert plan.least_needed == LeastNeeded("capital", 10_000.0, 20_000.0, 80_000.0)
    assert (plan.reached, plan.capital) == (False, 20_000.0)
    assert [row.alternatives for row in plan.rows] == [(), ("tool",)]


@pytest.mark.parametrize("capital", [0.0, 1e-9, 1e-6])
def test_laws_that_tie_up_capital_stay_where_they_are_when_there_is_none(capital: float) -> None:
    """The best yield is then what the yearly laws alone reach: each at its cap of a tenth of its defects."""
    scenario = plain_line(0.02, 0.03, 0.01)
    scenario["step"][0]["improve"] = {"law": "decade", "price": 50_000.0}
    scenario["step"][1]["improve"] = {"law": "decade", "per_year": 500.0}
    scenario["step"][2]["improve"] = {"law": "power", "exponent": 0.8, "price": 90_000.0}
    plan = plan_of(scenario, capital=capital)
    assert plan.reached
    assert plan.capital == pytest.approx(0.0, abs=1e-5)
    assert loss_of(plan) == pytest.approx(1.0 - 0.98 * 0.997 * 0.99, rel=1e-6)
    least = plan_of(scenario | {"limits": {"capital": capital}})
    assert least.reached
    assert (least.rows[0].law, least.rows[2].law) == (None, None)


def test_the_sheet_says_how_much_money_would_do() -> None:
    short = LIMITED | {"limits": {"capital": 10_000.0}}
    said = answer(plan_of(with_target(short, final_yield=0.97)))
    assert said == (
        "No plan keeps the floors with 10,000 EUR of capital: the least is 20,000 EUR, and 80,000 EUR to meet the "
        "target as well."
    )
    assert answer(plan_of(short)).endswith("the least is 20,000 EUR.")
    assert answer(plan_of(with_target(short, final_yield=0.999))).endswith(
        "the target is out of reach with any capital."
    )
    assert "With 80,000 EUR of capital, above the limit of 50,000 EUR, it can be met." in in_one_line(LIMITED, 0.97)
    assert "No capital would do: beyond the limit of 50,000 EUR too" in in_one_line(LIMITED, 0.999)
    cheap = plan_of(plain_line(0.02), spend=1.0)
    assert answer(cheap).startswith("No plan costs as little as 1.00 EUR/year: the least is ")
    assert "The nearest plan: buy nothing and change nothing" in render(cheap)
    assert "for at most 0 EUR of capital is" in answer(plan_of(plain_line(0.02), capital=0.0))


def in_one_line(scenario: Drawn, final_yield: float) -> str:
    return " ".join(render(plan_of(with_target(scenario, final_yield=final_yield))).split())
