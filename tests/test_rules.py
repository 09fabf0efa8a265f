"""The simpler rules: parts that add up, the handbook's own procedure, what they break, and that they never win."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from strategies import Drawn, alternatives, laws, lines, plain_line, quick, with_target

from allocator.plan import make_plan
from allocator.problem import Problem, pose
from allocator.results import Plan, RuleOutcome
from allocator.rules import RULES
from allocator.scenario.read import scenario_from_dict

EXACT = 1e-12
NAMES = ("equal split", "equal per opportunity", "pro rata to today", "raise the worst")
SPLITS = {name: split for name, _, split in RULES}


def some_problem(size: int) -> Problem:
    return pose(scenario_from_dict(plain_line(*[0.01] * size)))


def parts_of(name: str, today: list[float], free: float) -> np.ndarray:
    """The parts of a serial line whose steps use `today` of the budget."""
    problem = some_problem(len(today))
    return SPLITS[name](problem, np.ones(len(today)), np.array(today), free)


TODAY = st.lists(st.floats(1e-6, 0.5), min_size=1, max_size=7)


@pytest.mark.parametrize("name", NAMES)
@quick(60)
@given(TODAY, st.floats(0.01, 1.5))
def test_parts_add_to_the_budget(name: str, today: list[float], share: float) -> None:
    """Raising the worst asks nothing of a line that is good enough as it stands."""
    free = share * sum(today)
    parts = parts_of(name, today, free)
    assert np.all(parts >= 0.0)
    enough = name == "raise the worst" and share >= 1.0
    assert parts.sum() == pytest.approx(sum(today) if enough else free, rel=1e-11)


def handbook(reliabilities: list[float], goal: float) -> list[float]:
    """MIL-HDBK-338B, 6.3.5, as written: sort upwards, raise the K0 lowest to the common r(K0), leave the others.

    r_j = (R*/Π_{i>j} R_i)^(1/j) with R_{n+1} = 1; K0 is the largest j with R_j < r_j.
    """
    order = sorted(range(len(reliabilities)), key=lambda i: reliabilities[i])
    rising = [reliabilities[i] for i in order]
    levels = [(goal / math.prod(rising[j:])) ** (1 / j) for j in range(1, len(rising) + 1)]
    raised = max((j for j in range(1, len(rising) + 1) if rising[j - 1] < levels[j - 1]), default=0)
    result = list(reliabilities)
    for i in order[:raised]:
        result[i] = levels[raised - 1]
    return result


@quick(200)
@given(TODAY, st.floats(0.01, 0.99))
def test_raise_the_worst_is_the_handbooks_procedure(today: list[float], share: float) -> None:
    free = share * sum(today)
    wanted = handbook([math.exp(-load) for load in today], math.exp(-free))
    assert np.exp(-parts_of("raise the worst", today, free)) == pytest.approx(wanted, rel=1e-10)


def test_raise_the_worst_on_a_small_case() -> None:
    """Loads 0.5, 0.2, 0.1 and a budget of 0.6: the worst alone goes to 0.3; of 0.4: two go to 0.15."""
    assert parts_of("raise the worst", [0.5, 0.2, 0.1], 0.6) == pytest.approx([0.3, 0.2, 0.1])
    assert parts_of("raise the worst", [0.5, 0.2, 0.1], 0.4) == pytest.approx([0.15, 0.15, 0.1])
    assert parts_of("raise the worst", [0.5, 0.2, 0.1], 0.24) == pytest.approx([0.08, 0.08, 0.08])


def test_pro_rata_and_per_opportunity_by_hand() -> None:
    assert parts_of("pro rata to today", [0.3, 0.1], 0.2) == pytest.approx([0.15, 0.05])
    scenario = plain_line(0.01, 0.01, opportunities=3)
    scenario["step"][0] |= {"per_unit": 2, "opportunities": 1, "scrap_cost": 0.1}
    problem = pose(scenario_from_dict(scenario))
    parts = SPLITS["equal per opportunity"](problem, np.ones(2), np.ones(2), 0.5)
    assert parts == pytest.approx([0.5 * 2 / 5, 0.5 * 3 / 5])


# ---------------------------------------------------------------- on whole scenarios


def decades(*costs: float, up_to: float = 10.0, **step: Any) -> Drawn:
    scenario = plain_line(*[0.02] * len(costs))
    for each, cost in zip(scenario["step"], costs, strict=True):
        each |= {"improve": {"law": "decade", "per_year": cost, "up_to": {"dpmo": up_to}}} | step
    return scenario


def rules_of(scenario: Drawn) -> tuple[Plan, dict[str, RuleOutcome]]:
    plan = make_plan(scenario_from_dict(scenario))
    return plan, {rule.rule: rule for rule in plan.rules}


def test_the_total_of_an_equal_split_by_hand() -> None:
    """Each of three steps at a third of the budget: scrap of 1 per item at every gate, and log10(p0/p) decades."""
    plan, rules = rules_of(with_target(decades(2e3, 4e3, 1e4), final_yield=0.99))
    assert tuple(rules) == NAMES
    p = -math.expm1(math.log(0.99) / 3)
    wanted = 1e5 * (1 / 0.99 - 1) + (2e3 + 4e3 + 1e4) * math.log10(0.02 / p)
    equal = rules["equal split"]
    assert equal.total == pytest.approx(wanted, rel=1e-9)
    assert equal.yield_reached == pytest.approx(0.99, rel=1e-10)
    assert equal.meets_target
    assert equal.broken == ()
    assert plan.money is not None
    assert equal.saving == pytest.approx(equal.total - plan.money.total)
    assert equal.saving is not None
    assert equal.saving > 0.0


def test_equal_steps_leave_nothing_to_save() -> None:
    _, rules = rules_of(with_target(decades(3e3, 3e3, 3e3), final_yield=0.99))
    for rule in rules.values():
        assert rule.saving == pytest.approx(0.0, abs=1e-5 * rule.total)


def test_a_step_that_cannot_get_there_is_named_and_the_target_missed() -> None:
    """Three equal parts of 0.001 each, but the law ends at 0.005."""
    scenario = decades(2e3, 2e3, 2e3)
    scenario["step"][1]["improve"]["up_to"] = {"dpmo": 5_000}
    plan, rules = rules_of(with_target(scenario, final_yield=0.993))
    assert plan.reached
    equal = rules["equal split"]
    assert (equal.meets_target, equal.saving) == (False, None)
    assert len(equal.broken) == 1
    assert "'s1' cannot get there" in equal.broken[0]


def test_a_floor_that_a_part_would_break_is_named_and_kept() -> None:
    """Half of a budget of 3 % asks for 1.5 % only; the floor asks for 0.2 %."""
    scenario = decades(2e3, 2e3)
    scenario["step"][0]["at_least"] = {"dpmo": 2_000}
    _, rules = rules_of(with_target(scenario, final_yield=0.97))
    equal = rules["equal split"]
    assert any("'s0'" in remark and "floor" in remark for remark in equal.broken)
    assert equal.meets_target
    part = -math.log(0.97) / 2
    assert equal.loss_reached == pytest.approx(-math.expm1(-part + math.log1p(-2e-3)), rel=1e-9)


def test_a_floor_that_a_part_keeps_anyway_is_not_named() -> None:
    scenario = decades(2e3, 2e3)
    scenario["step"][0]["at_least"] = {"dpmo": 15_000}
    _, rules = rules_of(with_target(scenario, final_yield=0.99))
    assert rules["equal split"].broken == ()


def test_a_capital_limit_and_another_target_that_a_rule_breaks_are_named() -> None:
    """The machine at the dear step frees the cheap one, but only the plan sees it: the rule buys laws for both."""
    scenario = plain_line(0.02, 0.02, inspection={"finds": 0.9})
    for step, price in zip(scenario["step"], (1_000.0, 100_000.0), strict=True):
        step["improve"] = {"law": "decade", "price": price, "up_to": {"dpmo": 10}}
    scenario |= {"limits": {"capital": 30_000.0}}
    plan, rules = rules_of(with_target(scenario, final_yield=0.98, shipped_yield=0.9985))
    assert plan.reached
    assert any("capital" in remark for remark in rules["equal split"].broken)
    _, rules = rules_of(with_target(scenario | {"limits": {}}, final_yield=0.97, shipped_yield=0.9985))
    assert any("shipped yield" in remark for remark in rules["equal split"].broken)


def test_without_a_target_or_a_budget_left_there_are_no_rules() -> None:
    plan, rules = rules_of(decades(2e3, 2e3))
    assert rules == {}
    assert "without a target" in plan.rules_note
    scenario = plain_line(0.02, inspection={"finds": 1.0, "rejects_good": 0.05})
    scenario["step"][0]["alternative"] = [
        {"name": "careful", "inspection": {"finds": 1.0}, "capability": {"dpmo": 10}, "per_year": 1.0}
    ]
    plan, rules = rules_of(with_target(scenario, final_yield=0.96))
    assert plan.reached
    assert rules == {}
    assert "false rejects" in plan.rules_note


@quick(15)
@given(lines(most=4, law=laws(), offers=alternatives(gates=True)), st.floats(0.2, 0.95), st.booleans())
def test_no_rule_that_keeps_everything_is_cheaper_than_the_plan(scenario: Drawn, share: float, limited: bool) -> None:
    free = make_plan(scenario_from_dict(scenario))
    assert free.yields is not None
    asked = with_target(scenario, final_yield=1.0 - share * free.yields.final_loss)
    if limited:
        asked |= {"limits": {"capital": 2.0 * (free.capital or 100.0)}}
    plan, rules = rules_of(asked)
    if not plan.reached:
        assert rules == {}
        return
    assert plan.money is not None
    assert plan.proof is not None
    assert plan.proof.gap is not None
    for rule in rules.values():
        assert (rule.saving is not None) == rule.meets_target
        if rule.meets_target and not rule.broken:
            assert rule.total >= plan.money.total - plan.proof.gap * abs(plan.money.total) - 1e-8 * abs(rule.total)
        if not any("cannot get there" in remark for remark in rule.broken):
            assert rule.meets_target
