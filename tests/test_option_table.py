"""Is every option of a design review in one table, on one basis, and is no safety floor ever for sale?"""

from __future__ import annotations

import csv
import io
import json
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner

from allocator.cli import app
from allocator.errors import RangeError
from allocator.option_table import review_table
from allocator.plan import make_plan
from allocator.report.render import render
from allocator.results import Review, ReviewRow
from allocator.scenario.read import read_scenario, scenario_from_dict
from allocator.today import see_today
from tests.published.lines import line, step

FOLDER = Path(__file__).parent.parent / "scenarios"
DEMAND = {"shipped_per_year": 10_000, "years": 10, "discount_rate": 0.0}
PROMISED = 0.992
EVERY_KIND = [
    {"name": "shim", "group": "setting", "k": 0.0, "price": 500, "evidence": "judged"},
    {"name": "looser fit", "group": "drawing", "widen": 1.2, "price_allowance": 0.01, "evidence": "measured"},
    {"name": "one pin less", "group": "design", "opportunities": 1, "price": 4_000},
    {"name": "gauge each", "group": "gate", "inspection": {"finds": 1.0, "per_item": 0.02}},
    {"name": "mend", "group": "bench", "rework": {"share": 0.8, "cost": 0.5}, "price": 1_000},
    {"name": "two pins", "group": "spare", "copies": {"installed": 2, "needed": 1}, "per_item": 0.3},
    {"name": "new bore", "group": "machine", "capability": {"cp": 1.6}, "price": 30_000},
]
KINDS = [
    "recentre", "widen the spec", "fewer opportunities", "inspect here", "rework instead of scrap",
    "second unit in parallel", "improve what is there", "better machine",
]  # fmt: skip


LAW = {"law": "power", "exponent": 1.0, "price": 40_000, "up_to": 4.5}


def bore(**keys: Any) -> dict[str, Any]:
    own = {"opportunities": 2, "scrap_cost": 3.0, "alternative": EVERY_KIND, "improve": LAW, **keys}
    return step("bore", {"lsl": -1.0, "usl": 1.0, "mean": 0.2, "std": 0.3}, **own)


def whole_line(**tables: Any) -> dict[str, Any]:
    test = {"name": "final test", "group": "gate", "inspection": {"finds": 0.9, "earlier": 0.8, "per_item": 0.05}}
    pack = step("pack", {"defect_rate": 0.001}, scrap_cost=5.0, alternative=[test], inspection={"finds": 0.5})
    pin = step("pin", {"ppm": 3000}, supplier="Holmsted", scrap_cost=1.0,
               alternative=[{"name": "Varnes", "capability": {"ppm": 800}, "per_item": 0.02}])  # fmt: skip
    return line(pin, bore(), pack, demand=DEMAND, **tables)


def reviewed(scenario: dict[str, Any], step: str | None = None) -> Review:
    return review_table(scenario_from_dict(scenario), step)


def option(review: Review, name: str) -> ReviewRow:
    return next(row for row in review.rows if row.option.startswith(name))


@pytest.fixture(scope="module")
def review() -> Review:
    return reviewed(whole_line(target={"final_yield": PROMISED, "escape_cost": 2.0}))


def test_every_kind_of_option_is_in_one_table_the_cheap_ones_first(review: Review) -> None:
    at_bore = [row.kinds for row in review.rows if row.step == "bore"]
    assert [kinds[0] for kinds in at_bore] == ["as it is", *KINDS]
    assert [row.kinds for row in review.rows if row.step == "pin"] == [("as it is",), ("another supplier",)]
    assert option(review, "final test").kinds == ("inspect here", "inspect later")
    assert [row.kinds for row in review.rows[:2]] == [("live with the scrap",), ("the cheapest plan",)]
    assert review.not_offered == ()


def test_living_with_the_scrap_is_today_s_line(review: Review) -> None:
    seen, living = see_today(scenario_from_dict(whole_line(target={"escape_cost": 2.0}))).line, review.rows[0].figures
    assert living is not None
    assert seen.money is not None
    assert living.total == pytest.approx(seen.money.total, rel=1e-12)
    assert (living.over_living, living.capital, living.yields) == (0.0, 0.0, seen.yields)
    assert living.misses == ("misses the final yield target",)
    assert "more starts a year" in review.rows[0].against[0]


def test_the_cheapest_plan_is_the_plan_and_nothing_beats_it(review: Review) -> None:
    plan = make_plan(scenario_from_dict(whole_line(target={"final_yield": PROMISED, "escape_cost": 2.0})))
    assert plan.money is not None
    cheapest = review.rows[1].figures
    assert cheapest is not None
    assert cheapest.total == pytest.approx(plan.money.total, rel=1e-6)
    for row in review.rows[2:]:
        if row.figures is not None:
            assert row.figures.over_plan is not None
            assert row.figures.over_plan >= -1e-6 * plan.money.total
            assert row.figures.misses == ()
            assert row.figures.yields.final_yield >= PROMISED - 1e-9


def test_each_row_is_what_a_scenario_with_that_option_alone_at_the_step_costs() -> None:
    """Written out as a scenario of its own, in which the step can be nothing else."""
    asked = {"target": {"final_yield": 0.9, "escape_cost": 2.0}}
    review = reviewed(whole_line(**asked))
    for own in EVERY_KIND:
        row = option(review, own["name"])
        scenario = whole_line(**asked)
        scenario["step"][1]["alternative"] = [own]
        plan = make_plan(scenario_from_dict(scenario), with_=[own["name"]])
        assert plan.money is not None
        assert row.figures is not None
        assert row.figures.total == pytest.approx(plan.money.total, rel=1e-6), own["name"]


def test_alone_is_today_s_line_with_one_thing_changed(review: Review) -> None:
    """The same changed by hand in the scenario: the new bore costs 3,000 a year for ten years."""
    scenario = whole_line(target={"escape_cost": 2.0})
    scenario["step"][1]["capability"] = {"cp": 1.6, "k": 0.2}
    seen = see_today(scenario_from_dict(scenario)).line.money
    alone = option(review, "new bore").alone
    assert alone is not None
    assert seen is not None
    assert alone.total == pytest.approx(seen.total + 3_000, rel=1e-9)
    assert alone.capital == 30_000


def test_what_speaks_against_each(review: Review) -> None:
    said = {row.option: " ".join(row.against) for row in review.rows}
    assert "judged" in said["shim"]
    assert "functional evidence" in said["looser fit"]
    assert "design authority" in said["looser fit"]
    assert "where its figures come from" not in said["looser fit"]
    assert "every defect" in said["gauge each"]
    assert "independent" in said["final test"]
    assert "no common cause is assumed" in said["two pins"]
    assert "does not centre" in said["new bore"]
    assert "new source" in said["Varnes"]
    assert "reworked items are taken as good" in said["mend"]


def test_a_safety_characteristic_is_never_left_below_its_floor() -> None:
    """The machine is left out by money alone, but no row of the table leaves the safety step where it stands."""
    safe = [own for own in EVERY_KIND if "widen" not in own]
    scenario = line(bore(safety=True, at_least={"cpk": 1.1}, alternative=safe), demand=DEMAND)
    review = reviewed(scenario)
    living, as_it_is = review.rows[0], review.rows[2]
    assert living.figures is not None
    assert not living.figures.allowed
    assert living.figures.misses == ("not allowed: 'bore' is below the safety floor (Cpk at least 1.1)",)
    assert (as_it_is.kinds, as_it_is.figures) == (("as it is",), None)
    assert as_it_is.against == living.figures.misses
    floor = make_plan(scenario_from_dict(scenario)).rows[0].target.cpk
    assert floor >= 1.1 - 1e-9
    for row in review.rows[1:]:
        assert row.figures is None or row.figures.allowed
    assert "not allowed: below a safety floor" in " ".join(render(review).split())


def test_one_step_shows_later_checks_that_would_find_its_defects() -> None:
    review = reviewed(whole_line(target={"escape_cost": 2.0}), "pin")
    assert [row.kinds for row in review.rows[2:]] == [("as it is",), ("inspect later",), ("another supplier",)]
    assert review.rows[3].option == "final test, at pack"
    assert {"recentre", "better machine"} <= set(review.not_offered)
    assert [step.step for step in review.steps] == ["pin"]


def test_out_of_reach_options_are_shown_alone() -> None:
    review = reviewed(whole_line(target={"final_yield": 0.9999999}))
    assert not review.reached
    assert [row.kinds for row in review.rows[:2]] == [("live with the scrap",), ("as it is",)]
    assert all(row.figures is None for row in review.rows[1:])
    assert option(review, "new bore").alone is not None
    assert "No plan keeps the targets" in render(review)


def test_an_unknown_step_is_refused() -> None:
    with pytest.raises(RangeError, match="bore"):
        reviewed(whole_line(), "bored")


def test_progress_is_told() -> None:
    told: list[tuple[int, int]] = []
    scenario = scenario_from_dict(whole_line(target={"escape_cost": 2.0}))
    review_table(scenario, "pin", watch=lambda done, parts: told.append((done, parts)))
    assert told == [(1, 3), (2, 3), (3, 3)]


def test_a_table_for_python(review: Review) -> None:
    table = review.options
    assert len(table) == len(review.rows)
    assert table["over_living"][0] == 0.0
    assert table.loc[table["option"] == "new bore", "capital_alone"].tolist() == [30_000]
    assert ".rows as records" in repr(review)


def run(*arguments: str) -> Any:
    return CliRunner().invoke(app, ["review", *arguments])


def test_the_command_in_its_three_forms() -> None:
    file = str(FOLDER / "bracket.toml")
    text = run(file, "--step", "bore")
    assert text.exit_code == 0, text.output
    assert all(len(row) <= 80 for row in text.stdout.splitlines())
    assert "Nobody has offered here" in text.stdout
    assert "not accounting, tax or investment advice" in " ".join(text.stdout.split())
    answer = json.loads(run(file, "--step", "bore", "--json").stdout)
    rows = list(csv.DictReader(io.StringIO(run(file, "--step", "bore", "--csv").stdout)))
    assert len(rows) == len(answer["options"])
    for row, told in zip(rows, answer["options"], strict=True):
        assert float(row["total_EUR_per_year"]) == pytest.approx(told["figures"]["total"], rel=1e-12)
    assert run(file, "--step", "bored").exit_code == 2


def test_a_shipped_scenario_s_rows_are_no_better_than_its_plan() -> None:
    review = review_table(read_scenario(FOLDER / "bracket.toml"))
    assert {row.kinds[0] for row in review.rows} >= {"recentre", "better machine", "improve what is there"}
    for row in review.rows[2:]:
        assert row.figures is not None
        assert row.figures.over_plan is not None
        assert row.figures.over_plan >= -0.01
    for reviewed_step in review.steps:
        assert any(row.in_plan for row in review.rows if row.step == reviewed_step.step)
