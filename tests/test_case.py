"""Is the capital case what a cost engineer would reckon by hand, with cash, capacity and avoidance kept apart?"""

from __future__ import annotations

import csv
import io
import json
import math
from dataclasses import astuple
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from typer.testing import CliRunner

from allocator.case import capital_case
from allocator.cash import npv
from allocator.cli import app
from allocator.errors import RangeError
from allocator.money import capital_recovery
from allocator.plan import make_plan
from allocator.report.render import render
from allocator.results import CapitalCase, CashCase, Lever
from allocator.scenario.read import read_scenario, scenario_from_dict
from allocator.weigh import weigh_purchases
from tests.published.lines import line, step, with_defects
from tests.reference.generate import random_scenario

FOLDER = Path(__file__).parent.parent / "scenarios"
RATE, YEARS, VOLUME = 0.08, 10, 10_000
BAD, GOOD, LOST = 0.10, 0.01, 4.0
"""Ten pieces in a hundred spoilt today, one with the press; 4 lost with each."""
PRESS = {"name": "press", "price": 20_000, "resale": 2_000, "per_year": 300, "capability": {"defect_rate": GOOD}}
DEMAND = {"shipped_per_year": VOLUME, "years": YEARS, "discount_rate": RATE}
SAVED = VOLUME * LOST * (BAD / (1 - BAD) - GOOD / (1 - GOOD))
"""By hand: shipped pieces times p/(1 − p) are thrown away, now and with the press."""
HAND = 1e-9


def form(**keys: Any) -> dict[str, Any]:
    return step("form", {"defect_rate": BAD}, **{"scrap_cost": LOST, "alternative": [PRESS], **keys})


def case_of(scenario: dict[str, Any], name: str | None = None) -> CapitalCase:
    return capital_case(scenario_from_dict(scenario), name)


def only(case: CapitalCase) -> CashCase:
    return case.cases[0]


def test_one_press_by_hand() -> None:
    """Against the line without it: scrap saved less upkeep each year, the price first, the resale last."""
    case = case_of(line(form(), demand=DEMAND), "press")
    assert (case.verdict, case.in_plan, case.step) == ("buy", True, "form")
    for found in case.cases:
        assert found.savings.scrap == pytest.approx(SAVED, rel=HAND)
        assert found.savings.cash == pytest.approx(SAVED - 300, rel=HAND)
        annuity = (1 - (1 + RATE) ** -YEARS) / RATE
        worth = (SAVED - 300) * annuity - 20_000 + 2_000 * (1 + RATE) ** -YEARS
        assert found.npv == pytest.approx(worth, rel=HAND)
        assert found.worth_per_year == pytest.approx(worth / annuity, rel=HAND)
        assert found.equivalent_annual_capital == pytest.approx((20_000 - 2_000) / annuity + 2_000 * RATE, rel=HAND)
        assert found.payback_years == pytest.approx(20_000 / (SAVED - 300), rel=HAND)
        assert found.irr is not None
        assert npv(found.irr, net_of(found)) == pytest.approx(0.0, abs=1e-6)
        assert found.capacity[0].starts_saved == pytest.approx(SAVED / LOST, rel=HAND)
    assert [c.against for c in case.cases] == ["the cheapest plan without it", "today (it alone added)"]


def net_of(case: CashCase) -> Any:
    return np.array([year.net for year in case.years])


SHIPPED_SCENARIOS = [
    ("bracket", None),
    ("bracket", "boring spindle with damped bar"),
    ("bracket", "offset by gauge"),
    pytest.param(("pump", None), marks=pytest.mark.long),
    pytest.param(("pump", "servo press"), marks=pytest.mark.long),
    ("parcels", None),
    ("latch", "orbital riveter"),
    ("latch", "bend: improve"),
]


@pytest.fixture(scope="module", params=SHIPPED_SCENARIOS, ids=lambda p: f"{p[0]}-{p[1]}")
def shipped(request: pytest.FixtureRequest) -> CapitalCase:
    file, name = request.param
    return capital_case(read_scenario(FOLDER / f"{file}.toml"), name)


def test_the_split_adds_up_to_the_difference_of_the_totals(shipped: CapitalCase) -> None:
    for case in shipped.cases:
        split = sum(astuple(case.savings))
        assert split == pytest.approx(case.savings.cash + case.savings.escapes, rel=1e-12, abs=1e-6)
        assert split - case.equivalent_annual_capital == pytest.approx(case.worth_per_year, rel=1e-6, abs=1e-3)
    if shipped.total_without is not None and shipped.total_with is not None:
        worth = shipped.total_without - shipped.total_with
        assert shipped.cases[0].worth_per_year == pytest.approx(worth, rel=1e-9, abs=1e-6)


def test_cash_by_year_runs_up_to_the_present_value(shipped: CapitalCase) -> None:
    for case in shipped.cases:
        assert case.years[-1].cumulative_discounted == pytest.approx(case.npv, rel=1e-9, abs=1e-6)
        assert case.capital == pytest.approx(case.years[0].paid, abs=1e-9)


def test_the_yearly_worth_times_the_annuity_is_the_present_value(shipped: CapitalCase) -> None:
    """Whatever the lives, once the life left at the end counts (a trade-in is received once, so it must not recur)."""
    annuity = 1 / capital_recovery(shipped.discount_rate, shipped.horizon_years)
    for case in shipped.cases:
        if any(asset.trade_in and asset.life_years < shipped.horizon_years for asset in case.assets):
            continue
        whole = case.npv_with_escapes + case.life_left
        assert whole == pytest.approx(case.worth_per_year * annuity, rel=1e-6, abs=1e-2)


def test_the_sensitivity_starts_from_the_case_itself(shipped: CapitalCase) -> None:
    for case in shipped.cases:
        assert {lever.figure for lever in case.levers} >= {"volume shipped", "cost of scrap"}
        for lever in case.levers:
            assert lever.worth_base == pytest.approx(case.worth_per_year, rel=1e-9, abs=1e-6)
            assert lever.low <= lever.base <= lever.high


def test_the_plan_is_argued_against_today() -> None:
    scenario = read_scenario(FOLDER / "bracket.toml")
    plan, case = make_plan(scenario), capital_case(scenario)
    assert plan.money is not None
    assert plan.today.money is not None
    assert case.total_with == pytest.approx(plan.money.total, rel=1e-12)
    assert case.total_without == pytest.approx(plan.today.money.total, rel=1e-12)
    assert only(case).capital == pytest.approx(plan.capital, rel=1e-12)
    assert (case.subject, case.verdict, only(case).against) == (None, None, "today")


@pytest.mark.parametrize("seed", range(0, 40, 4))
def test_on_random_lines_the_money_adds_up_both_ways(seed: int) -> None:
    """The split less the yearly capital is the difference of the totals, and the cash by year its present value."""
    scenario = scenario_from_dict(random_scenario(seed))
    if scenario.demand.years is None or scenario.demand.discount_rate is None:
        pytest.skip("nothing has a price")
    case = capital_case(scenario)
    for found in case.cases:
        allowed = 1e-9 * max(abs(case.total_with or 0.0), abs(case.total_without or 0.0), 1.0)
        split = found.savings.cash + found.savings.escapes - found.equivalent_annual_capital
        assert split == pytest.approx(found.worth_per_year, rel=0, abs=allowed)
        assert npv(case.discount_rate, net_of(found)) == pytest.approx(found.npv, rel=1e-12, abs=allowed)
        assert all(one.worth_base == pytest.approx(found.worth_per_year, rel=0, abs=allowed) for one in found.levers)


SHARED = {"name": "cell", "price": 10_000, "life_years": 5}
ON_CELL = {"name": "on the cell", "uses": "cell", "capability": {"defect_rate": GOOD}}


def two_on_a_cell() -> dict[str, Any]:
    """Two steps that may share a cell, the first of which has the press to choose from too."""
    trim = {**form(alternative=[ON_CELL]), "name": "trim"}
    return line(form(alternative=[PRESS, ON_CELL]), trim, demand=DEMAND, purchase=[SHARED])


@pytest.mark.parametrize("file", ["latch", "two on a cell"])
def test_the_case_and_the_weighing_say_the_same(file: str) -> None:
    """Two roads to the same plans: `weigh` starts from the plan, the case solves with it and without it afresh."""
    scenario = read_scenario(FOLDER / "latch.toml") if file == "latch" else scenario_from_dict(two_on_a_cell())
    for row in weigh_purchases(scenario).rows:
        name = f"{row.step or 'purchase'}: {row.alternative}"
        case = capital_case(scenario, name)
        assert case.verdict == row.verdict, name
        if row.total_with is not None and row.total_without is not None:
            assert case.total_with == pytest.approx(row.total_with, rel=1e-6)
            assert case.total_without == pytest.approx(row.total_without, rel=1e-6)


# ---------------------------------------------------------------- what the verdict rests on


def lever(case: CashCase, figure: str) -> Lever:
    return next(found for found in case.levers if found.figure == figure)


def changed(figure: str, value: float) -> dict[str, Any]:
    """The scenario with one figure at which the sensitivity says that the worth is nothing."""
    press, demand, lost, good = dict(PRESS), dict(DEMAND), LOST, GOOD
    if figure == "volume shipped":
        demand["shipped_per_year"] = value
    elif figure == "cost of scrap":
        lost *= value
    elif figure == "price":
        press["price"] = value
    elif figure == "life":
        press["life_years"] = value
    elif figure == "discount rate":
        demand["discount_rate"] = value
    else:
        good = -math.expm1(value * math.log1p(-GOOD))
    press["capability"] = {"defect_rate": good}
    return line(form(scrap_cost=lost, alternative=[press]), demand=demand)


@pytest.mark.parametrize(
    "figure", ["volume shipped", "cost of scrap", "price", "life", "discount rate", "defects after"]
)
def test_where_the_verdict_turns_a_new_scenario_is_worth_nothing(figure: str) -> None:
    """Written as a scenario of its own and planned anew: worth nothing there, and of either sign on the two sides."""
    turn = lever(only(case_of(line(form(), demand=DEMAND), "press")), figure).turns_at
    assert turn is not None
    at, *sides = (only(case_of(changed(figure, turn * factor), "press")).worth_per_year for factor in (1.0, 0.99, 1.01))
    assert at == pytest.approx(0.0, abs=1e-6)
    assert min(sides) < 0.0 < max(sides)


def test_twice_the_defects_can_break_the_promise() -> None:
    promised = line(form(), demand=DEMAND, target={"final_yield": 0.985})
    case = case_of(promised, "press")
    assert case.verdict == "needed"
    assert only(case).against == "today (it alone added)"
    assert lever(only(case), "defects after").misses_promise
    assert "needed" in render(case)


def test_a_hundredfold_of_defects_that_leaves_hardly_a_good_unit_is_still_a_verdict() -> None:
    """10,000 chances to fail: a hundred times the defects would need e^1000 starts, yet the turn lies far below."""
    fine = {"name": "press", "price": 20_000, "capability": {"dpmo": 1_000}}
    many = {**form(opportunities=10_000, alternative=[fine]), "capability": {"dpmo": 1_200}}
    found = only(case_of(line(many, demand=DEMAND), "press"))
    turn = lever(found, "defects after").turns_at
    assert turn is not None
    as_many_as_today = math.log1p(-1_200e-6) / math.log1p(-1_000e-6)
    assert turn == pytest.approx(as_many_as_today, rel=1e-6)  # the price is nothing beside this scrap


def test_prices_do_not_matter_where_nothing_has_a_price() -> None:
    trained = {"name": "training", "per_year": 100, "capability": {"defect_rate": 0.05}}
    case = case_of(line(form(alternative=[trained]), demand=DEMAND), "training")
    assert {found.figure for found in only(case).levers} == {"volume shipped", "cost of scrap", "defects after"}
    assert (only(case).irr, only(case).irr_note) == (None, "nothing is paid first")
    assert only(case).payback_years == 0.0


# ---------------------------------------------------------------- what is kept apart


def test_escapes_avoided_are_no_cash() -> None:
    check = {"name": "check", "inspection": {"finds": 1.0, "per_item": 0.4}, "rework": {"share": 1.0, "cost": 0.0}}
    unit = step("unit", with_defects(0.03), inspection={"finds": 0.0}, alternative=[check])
    case = only(case_of(line(unit, demand=DEMAND, target={"escape_cost": 25.0}), "check"))
    assert case.savings.escapes == pytest.approx(VOLUME * 0.75, rel=HAND)
    assert case.savings.cash == pytest.approx(-VOLUME * 0.4, rel=HAND)
    assert case.npv < 0.0 < case.npv_with_escapes
    assert case.worth_per_year == pytest.approx(VOLUME * 0.35, rel=HAND)


def test_three_valuations_of_scrap_by_hand() -> None:
    """Castings of 5 are machined for 3 more and painted for 2: a spoilt one at machining loses 8, 5 or 10."""
    machine = {"name": "lathe", "price": 1_000, "capability": {"defect_rate": 0.01}}
    scenario = line(
        step("cast", {"defect_rate": 1e-9}, scrap_cost=5.0),
        step("machine", {"defect_rate": 0.10}, scrap_cost=8.0, alternative=[machine]),
        step("paint", {"defect_rate": 1e-9}, scrap_cost=10.0),
        demand=DEMAND,
    )
    case = only(case_of(scenario, "lathe"))
    fewer = VOLUME * (0.10 / 0.90 - 0.01 / 0.99)
    saved = {view.valuation: view.scrap_saving for view in case.scrap_views}
    assert saved == {
        "accumulated": pytest.approx(8.0 * fewer, rel=1e-6),
        "material only": pytest.approx(5.0 * fewer, rel=1e-6),
        "full unit": pytest.approx(10.0 * fewer, rel=1e-6),
    }
    as_entered = next(view for view in case.scrap_views if view.valuation == "accumulated")
    assert (as_entered.npv, as_entered.worth_per_year) == pytest.approx((case.npv, case.worth_per_year), rel=1e-12)
    annuity = 1 / capital_recovery(RATE, YEARS)
    for view in case.scrap_views:
        assert view.npv - case.npv == pytest.approx(annuity * (view.scrap_saving - saved["accumulated"]), rel=1e-9)


def test_a_case_has_no_place_for_sunk_cost_or_book_value() -> None:
    told = json.dumps(json.loads(render(case_of(line(form(), demand=DEMAND), "press"), "json"))["cases"])
    assert not {"sunk", "book"} & set(told.replace("_", " ").replace('"', " ").split())


def test_a_shared_purchase_counts_once_and_changes_the_steps_that_use_it() -> None:
    trim = {**form(alternative=[ON_CELL]), "name": "trim"}
    scenario = line(form(alternative=[ON_CELL]), trim, demand=DEMAND, purchase=[SHARED])
    case = case_of(scenario, "cell")
    assert (case.verdict, case.step) == ("buy", None)
    assert only(case).capital == 10_000
    assert only(case).years[5].paid == 10_000
    assert [asset.name for asset in only(case).assets] == ["cell", "on the cell", "on the cell"]
    assert lever(only(case), "defects after").worth_high < only(case).worth_per_year


def test_what_the_other_plan_would_buy_is_credited() -> None:
    """Without the press the rival is bought for the promise: the press is charged only what it costs more."""
    rival = {"name": "rival", "price": 15_000, "per_year": 2_000, "capability": {"defect_rate": 0.011}}
    promised = line(form(alternative=[PRESS, rival]), demand=DEMAND, target={"final_yield": 0.98})
    case = only(case_of(promised, "press"))
    assert case.capital == 5_000
    assert case.savings.running == pytest.approx(1_700)
    assert [asset.name for asset in case.avoided] == ["rival"]


# ---------------------------------------------------------------- when there is none


def test_out_of_reach_there_is_no_case() -> None:
    case = case_of(line(form(), demand=DEMAND, target={"final_yield": 0.999}))
    assert (case.reached, case.cases) == (False, ())
    assert "There is no case" in render(case)
    case = case_of(line(form(), demand=DEMAND, target={"final_yield": 0.999}), "press")
    assert (case.reached, case.verdict) == (False, "leave")


def test_a_line_beyond_numbers_is_left_out_with_the_reason() -> None:
    fine = {"name": "press", "price": 20_000, "capability": {"dpmo": 1}}
    many = form(opportunities=10_000, alternative=[fine])
    case = case_of(line(many, demand=DEMAND, target={"final_yield": 0.95}))
    assert (case.reached, case.total_without) == (True, None)
    assert case.cases == ()
    assert any("beyond any number" in said for said in case.left_out)


def test_without_horizon_or_with_an_unknown_name_it_is_refused() -> None:
    with pytest.raises(RangeError, match=r"demand\.years"):
        case_of(line(form(alternative=[]), demand={"shipped_per_year": 1}))
    with pytest.raises(RangeError, match="press"):
        case_of(line(form(), demand=DEMAND), "pres")


def test_tables_for_python(shipped: CapitalCase) -> None:
    assert shipped.figures["npv"].tolist() == [case.npv for case in shipped.cases]
    last = shipped.years.groupby("against", sort=False)["cumulative_discounted"].last()
    assert last.tolist() == pytest.approx(shipped.figures["npv"].tolist(), rel=1e-9, abs=1e-6)
    assert shipped.title in repr(shipped)


def run(*arguments: str) -> Any:
    return CliRunner().invoke(app, ["case", *arguments])


def test_the_command_in_its_three_forms() -> None:
    file = str(FOLDER / "bracket.toml")
    for name in ([], ["offset by gauge"]):
        text = run(file, *name)
        assert text.exit_code == 0, text.output
        assert all(len(row) <= 80 for row in text.stdout.splitlines())
        assert "not accounting, tax or investment advice" in " ".join(text.stdout.split())
        assert "Discounted at 10.00 % a year over 7 years" in text.stdout
        answer = json.loads(run(file, *name, "--json").stdout)
        rows = list(csv.DictReader(io.StringIO(run(file, *name, "--csv").stdout)))
        assert len(rows) == sum(len(case["years"]) for case in answer["cases"])
        assert float(rows[7]["cumulative_discounted_EUR"]) == pytest.approx(answer["cases"][0]["npv"], rel=1e-9)


def test_the_command_s_exit_codes(tmp_path: Path) -> None:
    far = tmp_path / "far.toml"
    far.write_text((FOLDER / "latch.toml").read_text().replace("final_yield = 0.992", "final_yield = 0.9999999"))
    assert run(str(far)).exit_code == 1
    assert run(str(far), "orbital").exit_code == 2
    assert "orbital riveter" in run(str(far), "orbital").stderr
