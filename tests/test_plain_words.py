"""What the sheets say of their own figures: what a word covers, how large a miss is, what chance alone would give."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from pathlib import Path

import pytest
from test_report import a_plan, step_target
from typer.testing import CliRunner

from allocator.check import check_scenario
from allocator.cli import app
from allocator.compare import compare_scenarios
from allocator.errors import RangeError
from allocator.nines import price_nines
from allocator.option_table import review_table
from allocator.plan import make_plan
from allocator.rehearsal import rehearse
from allocator.report.page.certainty import proof_said
from allocator.report.plan_text import answer
from allocator.report.rehearsal_text import verdict
from allocator.report.render import render
from allocator.report.words import found_by
from allocator.results import Bought, Rehearsal
from allocator.scenario.model import Floor, Scenario
from allocator.scenario.read import read_scenario
from allocator.solve.fixed import AT_AN_END, INTERIOR, PRICE, STILL
from allocator.solve.road import BRANCHED
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


def test_a_review_is_of_one_step_or_of_all() -> None:
    result = CliRunner().invoke(app, ["review", str(SCENARIOS / "latch.toml"), "--step", "stamp", "--step", "bend"])
    assert (result.exit_code, result.stdout) == (2, "")
    assert result.stderr == (
        "allocator: command line, --step: found 2 steps; name one step, or leave it out for all the steps that matter\n"
    )


# ---------------------------------------------------------------- nines, and what is told to be kept


def test_nines_say_that_the_target_lies_beyond_them() -> None:
    beyond = price_nines(shipped("latch"), targets={"final_yield": 1e-9})
    assert beyond.missed_target_loss == pytest.approx(1e-9, rel=1e-6)
    said = "The target, a final yield of 99.9999999 % (0.0010 ppm, 9.00 nines), is out of reach"
    assert said in in_one_line(render(beyond))
    within = price_nines(shipped("latch"))
    assert within.missed_target_loss is None
    assert "out of reach" not in render(within)


def test_nines_without_any_plan_say_where_the_reason_stands() -> None:
    text = in_one_line(render(replace(price_nines(shipped("latch")), rows=(), highest=None, optimum_total=None)))
    assert "there is nothing to price. `allocator plan` says what holds them out of reach" in text
    assert "point nines" not in text


@pytest.mark.parametrize(("ppm", "worse"), [(30_000.0, True), (20_000.0, False), (15_000.0, False)])
def test_a_step_held_below_today_is_cautioned(ppm: float, worse: bool) -> None:
    plan = make_plan(shipped("latch"), hold={"stamp": {"ppm": ppm}})
    held = [caution.steps for caution in plan.cautions if caution.code == "held_below_today"]
    assert held == ([("stamp",)] if worse else [])


# ---------------------------------------------------------------- the rehearsal


def test_more_units_than_anyone_would_wait_for_are_refused() -> None:
    with pytest.raises(RangeError, match=r"100,000,001 units are too many to rehearse: .* give 100,000,000 or fewer"):
        rehearse(shipped("latch"), units=100_000_001)


@cache
def rehearsed(seed: int) -> Rehearsal:
    return rehearse(shipped("latch"), units=2_000, seed=seed)


def test_figures_outside_their_interval_stand_beside_what_chance_gives() -> None:
    lucky = replace(rehearsed(1), missed=())
    assert verdict(lucky) == "All 4 computed yields and amounts that chance moves lie within their 95 % intervals."
    unlucky = verdict(replace(rehearsed(1), missed=("scrap", "total")))
    assert unlucky.startswith("2 of 4 computed yields and amounts that chance moves lie within")
    assert "outside: scrap, total. Chance alone puts one in twenty outside" in unlucky


# ---------------------------------------------------------------- the proof


def test_every_method_of_the_solvers_is_put_plainly() -> None:
    for method in (PRICE, INTERIOR, AT_AN_END, STILL, f"cutting planes and {BRANCHED}"):
        assert method not in found_by(method)
        assert found_by(method).isascii()
    assert found_by(f"all 12 choices, each by {PRICE} or {STILL}") == (
        "all 12 choices of equipment tried; in each, every step set to the same price of a defect or worked out as it "
        "is, since no level can move"
    )
    assert found_by(f"{PRICE}, {BRANCHED} over the 40 ways left").endswith("branch and bound over the 40 ways left")


def test_a_plan_out_of_reach_is_proved_for_what_it_reaches() -> None:
    said = " ".join(proof_said(make_plan(shipped("latch"), targets={"final_yield": 1e-9})))
    assert "No plan that comes as near to what was asked can cost less" in said
    assert "No plan that keeps the same promises" in " ".join(proof_said(make_plan(shipped("latch"))))


# ---------------------------------------------------------------- check and compare


def test_check_says_what_every_law_costs_and_what_ends_it() -> None:
    improves = {row.step: row.improves for row in check_scenario(shipped("bracket")).rows}
    assert improves["deburr"] == (
        "decade, per_year 2,600; up to sigma level 3.06: one tenth of its starting defects (no up_to is given)"
    )
    assert improves["bore"] == "power, exponent 0.8, price 160,000 at cpk = 1.33; up to sigma level 6.12: up_to"
    assert improves["coat"] == "quotes, 3 quotes; up to sigma level 3.12: the best level quoted"
    assert improves["stress relief"] is None


def test_two_plans_a_tenth_of_a_cent_apart_do_not_look_alike() -> None:
    text = in_one_line(render(compare_scenarios([shipped("latch"), shipped("latch_bought")])))
    assert "'latch_bought' keeps its promise at the least cost per shipped unit: 0.1276 EUR a shipped unit." in text
    assert "per shipped unit 0.1293 0.1276" in text


def test_check_says_first_that_no_plan_can_keep_a_floor() -> None:
    scenario = shipped("latch")
    hopeless = scenario.model_copy(
        update={"step": (scenario.step[0].model_copy(update={"at_least": Floor(cpk=3.0)}), *scenario.step[1:])}
    )
    found = check_scenario(hopeless)
    assert found.cautions[0].code == "floor_out_of_reach"
    assert "sound as written, but no plan can keep its floors: 3 steps" in render(found)
    assert "\nsound: 3 steps" in render(check_scenario(scenario))
