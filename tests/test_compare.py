"""Do scenarios stand side by side, each with its own plan, and is it said where they part and what stays apart?"""

from __future__ import annotations

import csv
import io
import json
import math
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner

from allocator.cli import app
from allocator.compare import compare_scenarios
from allocator.errors import RangeError
from allocator.plan import make_plan
from allocator.report.render import render
from allocator.results import Comparison
from allocator.scenario.read import read_scenario, scenario_from_dict

FOLDER = Path(__file__).parent.parent / "scenarios"
LATCH, BOUGHT = FOLDER / "latch.toml", FOLDER / "latch_bought.toml"
SCRAP, PRICE, BAD, GOOD = 4.0, 10_000.0, 0.10, 0.01
"""One step that loses 4 with each bad piece; a machine of 10,000 over ten years without interest: 1,000 a year."""


def press(volume: float, **tables: Any) -> dict[str, Any]:
    machine = {"name": "press", "price": PRICE, "capability": {"defect_rate": GOOD}}
    step = {"name": "form", "scrap_cost": SCRAP, "capability": {"defect_rate": BAD}, "alternative": [machine]}
    demand = {"shipped_per_year": volume, "years": 10, "discount_rate": 0}
    return {"title": f"{volume:g} a year", "demand": demand, "step": [step], **tables}


def compared(*scenarios: dict[str, Any]) -> Comparison:
    return compare_scenarios([scenario_from_dict(s) for s in scenarios])


BREAK_EVEN = PRICE / 10 / (SCRAP * (BAD / (1 - BAD) - GOOD / (1 - GOOD)))
"""Shipped pieces a year from which the press pays: each saves 4·(p/(1−p) now − p/(1−p) then)."""


def test_two_volumes_on_either_side_of_the_break_even() -> None:
    answer = compared(press(BREAK_EVEN * 0.99), press(BREAK_EVEN * 1.01))
    assert [row.states for row in answer.taken] == [("left", "taken")]
    assert [case.plan.capital for case in answer.cases] == [0.0, PRICE]
    few, many = BREAK_EVEN * 0.99 * SCRAP * BAD / (1 - BAD), 1000 + BREAK_EVEN * 1.01 * SCRAP * GOOD / (1 - GOOD)
    assert answer.cases[1].total_over_first == pytest.approx(many - few, rel=1e-9)
    per_unit = many / (BREAK_EVEN * 1.01) - few / (BREAK_EVEN * 0.99)
    assert answer.cases[1].per_unit_over_first == pytest.approx(per_unit, rel=1e-9)
    assert answer.cheapest == answer.cases[1].label
    assert answer.rows[0].differs


def test_each_column_is_the_plan_of_its_own_file() -> None:
    scenarios = [read_scenario(LATCH), read_scenario(BOUGHT)]
    answer = compare_scenarios(scenarios)
    for case, scenario in zip(answer.cases, scenarios, strict=True):
        alone = make_plan(scenario)
        assert case.plan.money == alone.money
        assert case.plan.rows == alone.rows
    assert [case.label for case in answer.cases] == ["latch", "latch_bought"]
    assert answer.unlike == ()


def test_steps_of_one_file_only_are_shown_as_missing() -> None:
    longer = press(1000)
    longer["step"] = [{"name": "wash", "scrap_cost": 1.0, "capability": {"defect_rate": 0.01}}, *longer["step"]]
    answer = compared(press(1000), longer)
    assert [(step.step, step.differs) for step in answer.rows] == [("form", False), ("wash", True)]
    assert answer.rows[1].targets[0] is None
    assert "wash" in render(answer)


def test_alike_scenarios_do_not_differ() -> None:
    answer = compared(press(1000), press(1000))
    assert not any(step.differs for step in answer.rows)
    assert answer.cases[1].total_over_first == 0.0
    assert [case.label for case in answer.cases] == ["1000 a year", "1000 a year (2)"]
    assert "No step differs" in render(answer)


def test_currencies_are_not_taken_for_each_other() -> None:
    answer = compared(press(1000), press(1000, currency="CHF"))
    assert answer.cases[1].total_over_first is None
    assert answer.cheapest is None
    assert any("currencies" in said for said in answer.unlike)


def test_what_is_not_alike_is_said() -> None:
    dearer = press(2000, target={"final_yield": 0.95, "escape_cost": 3.0})
    dearer["demand"] |= {"years": 5, "discount_rate": 0.1}
    said = " ".join(compared(press(1000), dearer).unlike)
    for words in ("promise", "volumes", "rates", "horizons", "escape"):
        assert words in said


def test_a_promise_out_of_reach_shows_the_best_and_never_wins() -> None:
    answer = compared(press(1000, target={"final_yield": 0.98}), press(1000, target={"final_yield": 0.995}))
    assert [case.plan.reached for case in answer.cases] == [True, False]
    assert answer.cheapest == "1000 a year"
    best = answer.cases[1].plan.best_reachable
    assert best is not None
    assert best.yield_ == pytest.approx(1 - GOOD, rel=1e-12)
    assert "the best reachable final yield is 99.00 %" in " ".join(render(answer).split())


def test_one_scenario_is_no_comparison() -> None:
    with pytest.raises(RangeError, match="two scenarios or more, got 1"):
        compared(press(1000))


def run(*arguments: str) -> Any:
    return CliRunner().invoke(app, ["compare", *arguments])


def test_the_command_in_its_three_forms() -> None:
    text = run(str(LATCH), str(BOUGHT))
    assert text.exit_code == 0, text.output
    assert all(len(row) <= 80 for row in text.stdout.splitlines())
    assert (
        "'latch' keeps its promise at the least cost" in " ".join(text.stdout.split()) or "latch_bought" in text.stdout
    )
    answer = json.loads(run(str(LATCH), str(BOUGHT), "--json").stdout)
    assert [case["label"] for case in answer["scenarios"]] == ["latch", "latch_bought"]
    assert answer["scenarios"][1]["plan"]["annual_cost"]["total"] == pytest.approx(
        answer["scenarios"][0]["plan"]["annual_cost"]["total"] + answer["scenarios"][1]["total_over_first"], rel=1e-12
    )
    rows = list(csv.DictReader(io.StringIO(run(str(LATCH), str(BOUGHT), "--csv").stdout)))
    by_figure = {(row["step"], row["figure"]): row for row in rows}
    assert float(by_figure["", "final_yield"]["latch_bought"]) == pytest.approx(0.992, rel=1e-9)
    assert float(by_figure["stamp", "ppm"]["latch"]) == pytest.approx(
        answer["steps"][0]["levels"]["latch"]["ppm"], rel=1e-12
    )
    assert math.isclose(float(by_figure["", "total_per_year"]["latch"]), 12_930.43, abs_tol=0.01)


def test_the_command_answers_1_when_a_promise_cannot_be_kept(tmp_path: Path) -> None:
    far = tmp_path / "far.toml"
    far.write_text(LATCH.read_text().replace("final_yield = 0.992", "final_yield = 0.9999999"))
    answer = run(str(LATCH), str(far))
    assert answer.exit_code == 1
    assert "'far' cannot keep the promise" in " ".join(answer.stdout.split())


def test_the_command_refuses_one_file_and_names_a_missing_one() -> None:
    assert (run(str(LATCH)).exit_code, run(str(LATCH), "nowhere.toml").exit_code) == (2, 2)
    assert "name two scenario files or more" in run(str(LATCH)).stderr
