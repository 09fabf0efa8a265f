"""What each nine costs: where the points are, how totals and prices hang together, where the road ends."""

from __future__ import annotations

import math
from functools import cache
from itertools import pairwise
from typing import Any

import pytest
from hypothesis import given
from strategies import Drawn, alternatives, laws, lines, plain_line, quick, with_target

from allocator.nines import nines_of, price_nines
from allocator.plan import make_plan
from allocator.results import Nines, NinesPoint
from allocator.scenario.read import scenario_from_dict

SAME = 1e-6
"""Totals of two questions with one answer, each solved to 1e-7 or better."""
KEPT = 1e-9
SLOPE = 0.01
"""Difference of two totals against the mean of the prices at both, which are no further apart than twice this."""


def shop(**target: Any) -> Drawn:
    """Three steps with laws and one machine; 1.2 nines today, some 3.4 at the end."""
    law = {"law": "decade", "price": 90_000.0, "up_to": {"dpmo": 100}}
    scenario = plain_line(0.02, 0.03, 0.01, improve=law)
    machine = {"name": "machine", "capability": {"defect_rate": 0.001}, "price": 60_000.0}
    scenario["step"][2]["alternative"] = [machine]
    return with_target(scenario, **target)


def nines(scenario: Drawn, **question: Any) -> Nines:
    return price_nines(scenario_from_dict(scenario), **question)


@cache
def priced() -> Nines:
    return nines(shop(final_yield=0.992), points=80)


def budget(point: NinesPoint) -> float:
    return -math.log1p(-point.target_loss)


# ---------------------------------------------------------------- where the points are


def test_points_at_today_every_whole_nine_the_target_and_the_end() -> None:
    """Today 1 − 0.98·0.97·0.99 (1.23 nines); the end is 1 − 0.9999³ (3.52 nines)."""
    answer = nines(shop(final_yield=0.992))
    assert [point.label for point in answer.rows] == [
        "today's yield", "whole nine", "target", "whole nine", "highest reachable",
    ]  # fmt: skip
    assert [point.nines for point in answer.rows] == pytest.approx(
        [nines_of(1 - 0.98 * 0.97 * 0.99), 2.0, nines_of(0.008), 3.0, nines_of(1 - 0.9999**3)], rel=1e-9
    )
    assert answer.today_nines == answer.rows[0].nines


def test_a_grid_is_added_between_today_and_the_end() -> None:
    grid = [point.nines for point in priced().rows if point.label == "grid"]
    assert len(grid) == 80
    gaps = [after - before for before, after in pairwise(grid)]
    assert gaps == pytest.approx([gaps[0]] * 79, rel=1e-9)


def test_a_target_at_a_whole_nine_is_one_point() -> None:
    points = nines(shop(final_yield={"nines": 3})).rows
    assert [point.nines for point in points].count(points[2].nines) == 1
    assert len(points) == 4


def test_a_target_out_of_reach_is_no_point() -> None:
    answer = nines(shop(final_yield={"nines": 6}))
    assert "target" not in {point.label for point in answer.rows}


def test_nothing_lies_beyond_the_highest_reachable() -> None:
    answer = priced()
    assert answer.highest is not None
    assert answer.highest.loss == pytest.approx(1 - 0.9999**3, rel=1e-9)
    assert all(point.target_loss >= answer.highest.loss * (1 - KEPT) for point in answer.rows)
    assert answer.rows[-1].label == "highest reachable"
    beyond = make_plan(scenario_from_dict(shop()), targets={"final_yield": answer.highest.loss * (1 - 1e-6)})
    assert not beyond.reached
    assert {held.step for held in answer.highest.binding} == {"s0", "s1", "s2"}


# ---------------------------------------------------------------- totals and prices


def test_totals_rise_and_extras_are_their_differences() -> None:
    points = priced().rows
    assert points[0].extra is None
    for before, after in pairwise(points):
        assert after.total >= before.total * (1 - SAME)
        assert after.extra == pytest.approx(after.total - before.total, abs=1e-9)
    assert all(point.loss <= point.target_loss * (1 + KEPT) for point in points)


def test_a_point_is_the_plan_for_that_yield() -> None:
    for point in nines(shop(final_yield=0.992)).rows:
        plan = make_plan(scenario_from_dict(shop()), targets={"final_yield": point.target_loss * (1 + 1e-12)})
        assert plan.reached
        assert plan.money is not None
        assert point.total == pytest.approx(plan.money.total, rel=SAME)
        if point.label not in ("today's yield", "highest reachable"):  # at both ends the price is one-sided
            assert point.price_of_defect_budget == pytest.approx(plan.price_of_defect_budget, rel=1e-4)


def test_nothing_binds_at_the_yield_of_the_optimum() -> None:
    """Here the optimum is to leave the line as it is, so today's yield comes for nothing."""
    first = nines(shop()).rows[0]
    assert first.label == "today's yield"
    assert first.price_of_defect_budget == 0.0


def test_totals_follow_the_prices_where_the_same_is_bought() -> None:
    """Between close points the total falls by the price per unit of budget: trapezium in ln D of price·D."""
    compared = 0
    for before, after in pairwise(priced().rows):
        prices = (before.price_of_defect_budget, after.price_of_defect_budget)
        if after.changes or not all(prices) or {before.label, after.label} & {"today's yield", "highest reachable"}:
            continue
        low, high = budget(after), budget(before)
        left, right = (price * width for price, width in zip(prices, (high, low), strict=True) if price is not None)
        if max(left, right) > (1 + 2 * SLOPE) * min(left, right):
            continue  # not close: here a law has just begun to be used and the price rises steeply
        fall = 0.5 * (left + right) * math.log(high / low)
        assert after.total - before.total == pytest.approx(fall, rel=SLOPE)
        compared += 1
    assert compared >= 50


def test_prices_bracket_the_fall_of_the_total_where_the_same_is_bought() -> None:
    """The total is convex in the budget as long as nothing else is bought."""
    for before, after in pairwise(priced().rows):
        cheap, dear = before.price_of_defect_budget, after.price_of_defect_budget
        if after.changes or cheap is None or dear is None or after.label == "highest reachable":
            continue
        fall = (after.total - before.total) / (budget(before) - budget(after))
        assert cheap * (1 - 1e-5) <= fall <= dear * (1 + 1e-5)


def test_what_is_bought_on_the_way_is_said_once() -> None:
    """The machine saves two thirds of what its law would cost for the first decade, so it comes with the first nine."""
    changes = [change for point in priced().rows for change in point.changes]
    assert changes == ["s2: take machine"]


def test_the_economic_optimum_is_below_all_points() -> None:
    answer = priced()
    plan = make_plan(scenario_from_dict(shop()))
    assert plan.money is not None
    assert answer.optimum_total == pytest.approx(plan.money.total, rel=SAME)
    assert answer.optimum_total is not None
    assert all(answer.optimum_total <= point.total * (1 + SAME) for point in answer.rows)


@quick(6)
@given(lines(most=3, law=laws(), offers=alternatives(gates=True)))
def test_on_random_lines_totals_rise_from_the_optimum_to_the_end(scenario: Drawn) -> None:
    answer = nines(scenario)
    assert answer.highest is not None
    assert answer.optimum_total is not None
    unit = max(abs(point.total) for point in answer.rows) + 1.0
    assert all(after.total >= before.total - SAME * unit for before, after in pairwise(answer.rows))
    assert all(answer.optimum_total <= point.total + SAME * unit for point in answer.rows)
    assert all(point.loss <= point.target_loss * (1 + KEPT) + 1e-15 for point in answer.rows)
    assert all(point.target_loss >= answer.highest.loss * (1 - KEPT) for point in answer.rows)
    assert answer.rows[-1].total == pytest.approx(answer.highest.total, abs=SAME * unit)


# ---------------------------------------------------------------- other yields, other limits


@pytest.mark.parametrize("of", ["rolled_yield", "shipped_yield"])
def test_the_nines_of_another_yield_keep_the_targets_of_the_others(of: str) -> None:
    look = {"finds": 0.8, "earlier": 0.3}
    scenario = shop(final_yield=0.97)
    scenario = scenario | {"step": [step | {"inspection": look} for step in scenario["step"]]}
    free, held = nines(scenario | {"target": {}}, of=of), nines(scenario, of=of)
    assert held.split == of
    assert held.highest is not None
    wanted = make_plan(scenario_from_dict(scenario))
    assert wanted.money is not None
    assert all(point.total >= wanted.money.total * (1 - SAME) for point in held.rows)
    assert held.rows[0].total > free.rows[0].total


def test_a_capital_limit_ends_the_road_earlier() -> None:
    scenario = shop() | {"limits": {"capital": 100_000.0}}
    highest, free = nines(scenario).highest, priced().highest
    assert highest is not None
    assert free is not None
    assert highest.loss > 1.5 * free.loss
    assert any("capital" in held.reason for held in highest.binding)


def test_a_line_with_nothing_to_choose_has_one_point() -> None:
    answer = nines(plain_line(0.02, 0.01))
    assert len(answer.rows) == 1
    assert answer.highest is not None
    assert answer.highest.loss == pytest.approx(1 - 0.98 * 0.99)
    assert answer.optimum_total == answer.rows[0].total
