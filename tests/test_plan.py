"""The main job: targets, what is out of reach, money questions, floors, and the figures that a plan carries."""

from __future__ import annotations

import math
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from strategies import Drawn, alternatives, laws, lines, plain_line, quick, rising, with_target

from allocator.choice import Choice, evaluate
from allocator.errors import RangeError
from allocator.plan import make_plan
from allocator.problem import Problem, pose
from allocator.results import Plan
from allocator.scenario.read import scenario_from_dict
from allocator.solve.fixed import solve_fixed
from allocator.ways import Ways

YIELDS = ("final_yield", "rolled_yield", "shipped_yield")
KEPT = 1e-9
"""A budget or limit may be passed by rounding only."""
SAME = 1e-6
"""Two questions that must have the same answer, each solved to 1e-7 or better."""
PRICE = 1e-4
"""A central difference over a thousandth of the room left, against the multiplier."""
SOLVED = 2e-10
"""The gap to which one choice is solved, twice."""


def plan_of(scenario: Drawn, **question: Any) -> Plan:
    return make_plan(scenario_from_dict(scenario), **question)


def total_of(plan: Plan) -> float:
    assert plan.money is not None
    return plan.money.total


def loss_of(plan: Plan, name: str = "final_yield") -> float:
    assert plan.yields is not None
    return float(getattr(plan.yields, name.replace("yield", "loss")))


def load_of(plan: Plan, name: str = "final_yield") -> float:
    return -math.log1p(-loss_of(plan, name))


def shop(**more: Any) -> Drawn:
    """Three steps with inspections that leak, laws, and a machine at the last."""
    look = {"finds": 0.85, "earlier": 0.4, "rejects_good": 0.0002}
    law = {"law": "decade", "price": 90_000.0, "up_to": {"dpmo": 40}}
    scenario = plain_line(0.02, 0.03, 0.01, inspection=look, rework={"share": 0.3, "cost": 1.0}, improve=law)
    for i, step in enumerate(scenario["step"]):
        step["scrap_cost"] = 0.4 * (i + 1)
    machine = {"name": "machine", "capability": {"defect_rate": 0.001}, "price": 30_000.0}
    scenario["step"][2]["alternative"] = [machine]
    return with_target(scenario | more, escape_cost=2.0)


# ---------------------------------------------------------------- targets


@pytest.mark.parametrize(
    "targets",
    [
        {"final_yield": 0.99},
        {"rolled_yield": 0.985},
        {"shipped_yield": 0.9995},
        {"final_yield": 0.99, "shipped_yield": 0.9995},
        {"rolled_yield": 0.98, "shipped_yield": 0.9995},
        {"final_yield": 0.992, "rolled_yield": 0.97, "shipped_yield": 0.999},
    ],
    ids=lambda targets: " ".join(targets),
)
def test_all_targets_are_met_and_no_cheaper_than_any_of_them(targets: dict[str, float]) -> None:
    plan = plan_of(with_target(shop(), **targets))
    assert plan.reached
    assert plan.split == next(name for name in YIELDS if name in targets)
    assert plan.targets == pytest.approx(targets, rel=1e-12)
    for name, target in targets.items():
        assert load_of(plan, name) <= -math.log(target) * (1 + KEPT)
        alone = plan_of(with_target(shop(), **{name: target}))
        assert total_of(plan) >= total_of(alone) * (1 - SAME)


def test_no_target_is_the_economic_optimum_and_cheaper_than_any_target() -> None:
    optimum = plan_of(shop())
    assert (optimum.question, optimum.targets, optimum.cost_of_next_nine) == ("optimum", {}, None)
    assert optimum.price_of_defect_budget == 0.0
    for name in YIELDS:
        tighter = 0.5 * loss_of(optimum, name)
        plan = plan_of(shop(), targets={name: tighter})
        assert plan.reached
        assert total_of(plan) > total_of(optimum) * (1 + 1e-6)
    assert total_of(optimum) <= total_of(plan_of(shop(), targets={"final_yield": 0.5})) * (1 + SAME)


@quick(8)
@given(lines(most=4, law=laws(), offers=alternatives(gates=True)), st.floats(0.05, 0.95))
def test_a_tighter_target_is_never_cheaper(scenario: Drawn, share: float) -> None:
    loose = plan_of(scenario, targets={"final_yield": 0.1})
    assume(loose.reached)
    loss = loss_of(loose)
    totals = [total_of(loose)]
    for tighter in (0.9, 0.9 * share + 0.05):
        plan = plan_of(scenario, targets={"final_yield": loss * tighter})
        if not plan.reached:
            assert plan.best_reachable is not None
            assert plan.best_reachable.loss > loss * tighter * (1 - KEPT)
            return
        assert load_of(plan) <= -math.log1p(-loss * tighter) * (1 + KEPT)
        totals.append(total_of(plan))
    assert rising([round(t, 9) for t in np.array(totals) + SAME * np.arange(3) * max(map(abs, totals))])


def test_targets_given_to_the_function_win_over_the_file() -> None:
    asked = plan_of(with_target(shop(), final_yield=0.9), targets={"final_yield": 0.01})
    assert asked.target_losses == pytest.approx({"final_yield": 0.01})
    assert total_of(asked) == pytest.approx(total_of(plan_of(with_target(shop(), final_yield=0.99))), rel=SAME)


def test_questions_that_make_no_sense_are_refused() -> None:
    with pytest.raises(RangeError, match="not a yield"):
        plan_of(shop(), of="best_yield")
    with pytest.raises(RangeError, match="not both"):
        plan_of(shop(), spend=1.0, capital=1.0)
    with pytest.raises(RangeError, match="shipped yield is unknown"):
        plan_of(plain_line(0.01), of="shipped_yield")


# ---------------------------------------------------------------- out of reach


def test_an_unreachable_target_gives_the_best_reachable_and_what_holds_it() -> None:
    """One step fixed at 1 % bad, one that reaches 0.2 %: no better than 0.99·0.998, and the fixed one alone binds."""
    scenario = plain_line(0.01, 0.02)
    scenario["step"][0] |= {"fixed": True, "name": "old oven"}
    scenario["step"][1]["improve"] = {"law": "decade", "per_year": 50.0}
    plan = plan_of(with_target(scenario, final_yield=0.995))
    assert not plan.reached
    assert plan.best_reachable is not None
    assert plan.best_reachable.yield_ == pytest.approx(0.99 * 0.998, rel=1e-9)
    assert loss_of(plan) == pytest.approx(1 - 0.99 * 0.998, rel=1e-9)
    assert plan.best_reachable.total == pytest.approx(total_of(plan), rel=SAME)
    assert [held.step for held in plan.binding] == ["old oven"]
    assert "fixed" in plan.binding[0].reason


def test_a_step_at_the_end_of_its_law_is_named_with_its_cap() -> None:
    law = {"law": "decade", "per_year": 50.0, "up_to": {"dpmo": 3_000}}
    plan = plan_of(with_target(plain_line(0.02, improve=law), final_yield=0.999))
    assert not plan.reached
    assert [held.step for held in plan.binding] == ["s0"]
    assert "up_to" in plan.binding[0].reason
    assert plan.rows[0].at_cap
    assert plan.rows[0].target.dpmo == pytest.approx(3_000, rel=1e-9)


@pytest.mark.parametrize("beside", [{}, {"more": plain_line(0.01, 0.01)["step"][1]}], ids=["alone", "beside another"])
def test_a_floor_above_every_cap_leaves_no_plan(beside: Drawn) -> None:
    step = {"name": "bore", "scrap_cost": 1.0, "capability": {"cp": 1.2}, "at_least": {"cpk": 1.67}, "fixed": True}
    plan = plan_of(with_target(plain_line(0.01) | {"step": [step, *beside.values()]}, final_yield=0.5))
    assert not plan.reached
    assert (plan.yields, plan.money, plan.proof, plan.rows) == (None, None, None, ())
    assert [held.step for held in plan.binding] == ["bore"]
    assert "Cpk at least 1.67" in plan.binding[0].reason


def test_another_target_that_cannot_be_kept_is_the_one_that_is_reported() -> None:
    """Nothing is inspected but the end, which lets half through: the shipped target is the hopeless one."""
    scenario = plain_line(0.01, 0.01, inspection={"finds": 0.5})
    plan = plan_of(with_target(scenario, final_yield=0.9, shipped_yield=0.9999))
    assert not plan.reached
    assert plan.best_reachable is not None
    by_hand = math.exp(0.5 * math.log(0.99) + 0.5 * math.log(0.99))
    assert plan.best_reachable.yield_ == pytest.approx(by_hand, rel=1e-9)
    assert {held.step for held in plan.binding} == {"s0", "s1"}


def test_a_capital_limit_keeps_a_target_out_of_reach_and_is_named() -> None:
    target = {"final_yield": 0.995}
    assert plan_of(with_target(shop(), **target)).reached
    plan = plan_of(with_target(shop(limits={"capital": 1_000.0}), **target))
    assert not plan.reached
    assert plan.capital is not None
    assert plan.capital <= 1_000.0 * (1 + KEPT)
    assert any("capital" in held.reason for held in plan.binding)


# ---------------------------------------------------------------- money questions


@pytest.mark.parametrize("kind", ["spend", "capital"])
def test_more_money_never_gives_a_lower_yield(kind: str) -> None:
    cheapest = total_of(plan_of(shop()))
    amounts = [cheapest * x for x in (1.0001, 1.02, 1.1, 1.5)] if kind == "spend" else [0.0, 2e4, 6e4, 2e5, 1e6]
    plans = [plan_of(shop(), **{kind: amount}) for amount in amounts]
    assert all(plan.reached for plan in plans)
    loads = [load_of(plan) for plan in plans]
    assert all(after <= before * (1 + SAME) for before, after in pairwise(loads))
    for plan, amount in zip(plans, amounts, strict=True):
        used = total_of(plan) if kind == "spend" else plan.capital
        assert used is not None
        assert used <= amount * (1 + KEPT) + 1e-9


@pytest.mark.parametrize("more", [1.01, 1.1, 1.4])
def test_the_plan_for_the_yield_that_money_buys_costs_no_more_than_the_money(more: float) -> None:
    spend = more * total_of(plan_of(shop()))
    bought = plan_of(shop(), spend=spend)
    assert (bought.question, bought.spend_limit) == ("best yield", spend)
    back = plan_of(shop(), targets={"final_yield": loss_of(bought) * (1 + 1e-9)})
    assert total_of(back) <= spend * (1 + SAME)


@pytest.mark.parametrize("capital", [20_000.0, 120_000.0])
def test_the_plan_for_the_yield_that_capital_buys_needs_no_more_than_the_capital(capital: float) -> None:
    bought = plan_of(shop(), capital=capital)
    back = plan_of(shop(limits={"capital": capital}), targets={"final_yield": loss_of(bought) * (1 + 1e-8)})
    assert back.reached
    better = plan_of(shop(limits={"capital": capital}), targets={"final_yield": loss_of(bought) * (1 - 1e-3)})
    assert not better.reached


def test_too_little_money_for_any_plan_shows_the_cheapest_there_is() -> None:
    least = plan_of(shop())
    plan = plan_of(shop(), spend=0.5 * total_of(least))
    assert not plan.reached
    assert total_of(plan) == pytest.approx(total_of(least), rel=SAME)
    assert "yearly total" in plan.binding[0].reason
    assert plan.least_needed is not None
    assert (plan.least_needed.of, plan.least_needed.limit) == ("total", 0.5 * total_of(least))
    assert plan_of(shop(), spend=plan.least_needed.without_targets * (1 + SAME)).reached


@pytest.mark.parametrize("question", [{}, {"spend": 7_000.0}, {"capital": 12_000.0}])
def test_a_safety_floor_is_kept_whatever_money_says(question: dict[str, float]) -> None:
    """Scrap costs next to nothing, so money alone would leave every step where it is."""
    law = {"law": "power", "exponent": 1.0, "price": 40_000.0, "up_to": {"cpk": 2.0}}
    scenario = plain_line(0.01, 0.01)
    scenario["step"][0] |= {"capability": {"cp": 1.2}, "improve": law}
    free = plan_of(scenario)
    assert free.rows[0].target.cpk == pytest.approx(1.2, rel=1e-6)
    scenario["step"][0] |= {"at_least": {"cpk": 1.5}, "safety": True}
    plan = plan_of(scenario, **question)
    assert plan.reached
    assert plan.rows[0].safety
    assert plan.rows[0].target.cpk >= 1.5 * (1 - KEPT)
    assert plan.rows[0].floor_binds == (not question)
    assert "safety" in {caution.code for caution in plan.cautions}
    # a power law of exponent 1: 40,000 over ten years for each doubling of the sigma level
    if not question:
        assert plan.rows[0].improvement == pytest.approx(4_000.0 * (1.5 / 1.2 - 1), rel=1e-6)


# ---------------------------------------------------------------- figures of a plan


@quick(20)
@given(lines(most=4, law=laws(), offers=alternatives(gates=True)), st.sampled_from(["final_yield", "rolled_yield"]))
def test_shares_and_sums_of_a_plan(scenario: Drawn, split: str) -> None:
    plan = plan_of(scenario, of=split)
    money = plan.money
    assert money is not None
    assert plan.proof is not None
    assert plan.proof.lower_bound is not None
    assert sum(step.budget_share for step in plan.rows) == pytest.approx(1.0, rel=1e-9)
    assert sum(step.scrap for step in plan.rows) == pytest.approx(money.scrap, rel=1e-9, abs=1e-9)
    assert sum(step.rework for step in plan.rows) == pytest.approx(money.rework, rel=1e-9, abs=1e-9)
    assert sum(step.improvement for step in plan.rows) == pytest.approx(money.improvement, rel=1e-9, abs=1e-9)
    assert sum(step.capital for step in plan.rows) == pytest.approx(plan.capital, rel=1e-9, abs=1e-9)
    assert plan.dpu == pytest.approx(sum(step.target.dpu for step in plan.rows))
    assert plan.proof.lower_bound <= money.total
    assert plan.cost_per_unit == money.total / 10_000


def test_a_step_at_its_cap_says_so_and_one_below_does_not() -> None:
    cheap, dear = ({"law": "decade", "per_year": cost, "up_to": {"dpmo": 100}} for cost in (1.0, 3_000.0))
    scenario = plain_line(0.01, 0.01)
    scenario["step"][0]["improve"], scenario["step"][1]["improve"] = cheap, dear
    plan = plan_of(with_target(scenario, final_yield=0.995))
    assert [step.at_cap for step in plan.rows] == [True, False]
    assert "up_to" in (plan.rows[0].cap or "")
    assert plan.rows[1].cap is None
    caution = next(c for c in plan.cautions if c.code == "at_cap")
    assert caution.steps == ("s0",)


# ---------------------------------------------------------------- the price of the budget, and the next nine


def rows_chosen(problem: Problem, plan: Plan) -> np.ndarray:
    """The plan's ways in the full table, by alternatives and level."""
    ways: Ways = problem.options.ways

    def fits(w: int, i: int) -> bool:
        z, step = plan.rows[i].target.sigma_level, plan.rows[i]
        inside = ways.z_low[w] * (1 - 1e-9) <= z <= ways.z_high[w] * (1 + 1e-9)
        return bool(ways.step[w] == i and ways.text[w].alternatives == step.alternatives and inside)

    return np.array([next(w for w in range(len(ways)) if fits(w, i)) for i in range(len(plan.rows))])


def central_price(scenario: Drawn, plan: Plan, loss: float) -> tuple[float, float]:
    """Fall of the total per unit of budget from two solves with the choices kept, and the noise of this difference.

    The step is a thousandth of the room between the budget and the least load that these choices reach.
    """
    problem = pose(scenario_from_dict(scenario), None, {"final_yield": loss})
    rows, budget = rows_chosen(problem, plan), -math.log1p(-loss)
    best = evaluate(problem.line, problem.options, Choice(rows, problem.options.ways.z_high[rows]))
    step = 1e-3 * (budget - best.loads["final_yield"])
    totals = []
    for side in (-1, 1):
        answer = solve_fixed(problem.with_budget("final_yield", budget + side * step), rows)
        assert answer is not None
        totals.append(answer.outcome.money.total)
    return (totals[0] - totals[1]) / (2 * step), SOLVED * abs(totals[0]) / step


@pytest.mark.parametrize("loss", [0.02, 0.008, 0.003])
def test_the_price_is_the_slope_of_the_total(loss: float) -> None:
    plan = plan_of(shop(), targets={"final_yield": loss})
    assert plan.price_of_defect_budget is not None
    assert plan.price_of_defect_budget > 0.0
    assert plan.price_of_defect_budget == pytest.approx(central_price(shop(), plan, loss)[0], rel=PRICE)


@quick(8)
@given(lines(most=4, law=laws(("decade", "exponential")), offers=alternatives()), st.floats(0.3, 0.9))
def test_the_price_is_the_slope_of_the_total_on_random_lines(scenario: Drawn, tighter: float) -> None:
    loss = tighter * loss_of(plan_of(scenario))
    plan = plan_of(scenario, targets={"final_yield": loss})
    assume(plan.reached and plan.price_of_defect_budget)
    assume(not any(step.at_cap for step in plan.rows))  # a step that reaches or leaves its cap bends the total
    assert plan.price_of_defect_budget is not None
    wanted, noise = central_price(scenario, plan, loss)
    assert plan.price_of_defect_budget == pytest.approx(wanted, rel=PRICE, abs=noise)


def test_the_price_is_zero_where_the_target_does_not_bind() -> None:
    plan = plan_of(shop(), targets={"final_yield": 0.4})
    assert plan.price_of_defect_budget == 0.0


def test_there_is_no_price_where_nothing_continuous_can_move() -> None:
    scenario = plain_line(0.02, 0.01)
    scenario["step"][0]["alternative"] = [{"name": "new", "capability": {"defect_rate": 0.001}, "price": 9e6}]
    plan = plan_of(scenario, targets={"final_yield": 0.0115})
    assert plan.rows[0].alternatives == ("new",)
    assert plan.price_of_defect_budget is None


def test_the_next_nine_costs_what_the_plan_for_it_costs_more() -> None:
    plan = plan_of(shop(), targets={"final_yield": 0.02})
    assert plan.cost_of_next_nine is not None
    further = plan_of(shop(), targets={"final_yield": 0.002})
    assert further.reached
    assert plan.cost_of_next_nine == pytest.approx(total_of(further) - total_of(plan), rel=1e-5)


def test_a_next_nine_out_of_reach_has_no_cost_but_the_end_is_told() -> None:
    plan = plan_of(with_target(plain_line(0.02, improve={"law": "decade", "per_year": 9.0}), final_yield=0.99))
    assert plan.reached
    assert plan.cost_of_next_nine is None
    assert plan.best_reachable is not None
    assert plan.best_reachable.loss == pytest.approx(0.002, rel=1e-9)
