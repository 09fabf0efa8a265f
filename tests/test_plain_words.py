"""What the sheets say of their own figures: what a word covers, how large a miss is, what chance alone would give."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from pathlib import Path

import pytest
from test_report import a_plan, step_target

from allocator.option_table import review_table
from allocator.plan import make_plan
from allocator.rehearsal import rehearse
from allocator.report.plan_text import answer
from allocator.report.rehearsal_text import verdict
from allocator.report.render import render
from allocator.results import Bought, Rehearsal
from allocator.scenario.model import Scenario
from allocator.scenario.read import read_scenario
from allocator.today import see_today

SCENARIOS = Path(__file__).parent.parent / "scenarios"


@cache
def shipped(name: str) -> Scenario:
    return read_scenario(SCENARIOS / f"{name}.toml")


def in_one_line(text: str) -> str:
    return " ".join(text.split())


# ---------------------------------------------------------------- the plan


def test_the_headline_names_the_dearest_change_first() -> None:
    costs = {"cheap": 10.0, "dear": 900.0, "between": 500.0}
    rows = tuple(step_target(name, law="decade", improvement=cost) for name, cost in costs.items())
    said = answer(a_plan(rows=rows, purchases=(Bought("cell", 2_000.0, 600.0),)))
    assert sorted(("dear", "cell", "between", "cheap"), key=said.index) == ["dear", "cell", "between", "cheap"]


@pytest.mark.parametrize(
    ("loss", "met", "said"),
    [
        (0.005, True, "5,000 met"),
        (0.005 * (1.0 + 1e-10), True, "5,000 met"),
        (0.004, True, "4,000 met by 1,000 ppm"),
        (0.00500002, False, "5,000 missed by 0.020 ppm"),
        (0.0062, False, "6,200 missed by 1,200 ppm"),
    ],
)
def test_a_simpler_rule_says_by_how_much_it_meets_or_misses(loss: float, met: bool, said: str) -> None:
    rule = replace(a_plan().rules[0], loss_reached=loss, yield_reached=1.0 - loss, meets_target=met, broken=())
    text = render(a_plan(rules=(rule,)), width=200)
    assert said in in_one_line(text)
    assert "ppm lost of" in text


# ---------------------------------------------------------------- today and the review


def test_units_to_expect_name_the_yield_they_are_counted_by() -> None:
    text = in_one_line(render(see_today(shipped("bracket"))))
    assert "do not come out good (final yield): of 100 started about 7.10" in text
    assert "with a defect that escaped (shipped yield): of 100 shipped about 0.039" in text
    assert "(shipped yield): of" not in in_one_line(render(see_today(shipped("latch"))))


def test_lost_money_says_what_it_covers() -> None:
    for seen in (see_today(shipped("bracket")), review_table(shipped("latch"))):
        assert "scrap, rework and inspection there. What escapes" in in_one_line(render(seen))


def test_a_law_that_pays_at_no_level_is_no_improvement() -> None:
    """The coater's quotes cost more than they save: the plan leaves that step as it is."""
    review = review_table(shipped("bracket"), "coat")
    assert make_plan(shipped("bracket")).rows[10].law is None
    as_it_is, law = (row for row in review.rows if row.step == "coat")
    assert (as_it_is.idle, law.idle, law.alone) == (False, True, None)
    assert law.figures is not None
    assert as_it_is.figures is not None
    assert law.figures.total == pytest.approx(as_it_is.figures.total, rel=1e-9)
    assert "improve what is there: pays at no level, so as it is" in render(review, width=200)
    used = next(row for row in review_table(shipped("bracket"), "pierce").rows if "improve" in row.kinds[0])
    assert not used.idle
    assert used.alone is not None


# ---------------------------------------------------------------- the rehearsal


@cache
def rehearsed(seed: int) -> Rehearsal:
    return rehearse(shipped("latch"), units=2_000, seed=seed)


def test_figures_outside_their_interval_stand_beside_what_chance_gives() -> None:
    lucky = replace(rehearsed(1), missed=())
    assert verdict(lucky) == "All 4 computed yields and amounts that chance moves lie within their 95 % intervals."
    unlucky = verdict(replace(rehearsed(1), missed=("scrap", "total")))
    assert unlucky.startswith("2 of 4 computed yields and amounts that chance moves lie within")
    assert "outside: scrap, total. Chance alone puts one in twenty outside" in unlucky
