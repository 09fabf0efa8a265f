"""Does Python get what a person in a notebook expects: tables as DataFrames, results that show themselves?"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from html import unescape
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pandas
import pytest

import allocator
from allocator.report.glance import MOST_ROWS
from allocator.report.render import render
from allocator.results import CashCase, Check, Nines, Plan, ReviewRow, StepTarget, Today, as_table
from allocator.shown import shown
from tests.test_report import NAMES, a_check, a_plan, a_today, nothing_possible, some_nines, step_target

FOLDER = Path(__file__).parent.parent / "scenarios"
HOSTILE = ("<script>alert(1)</script>", "\"quotes' & <b>", "\u202eright to left", "x" * 300)


@pytest.fixture(scope="module")
def latch() -> Plan:
    return allocator.make_plan(allocator.read_scenario(FOLDER / "latch.toml"))


def test_steps_are_a_table_with_the_figures_of_the_records(latch: Plan) -> None:
    assert isinstance(latch.steps, pandas.DataFrame)
    assert list(latch.steps["step"]) == [row.step for row in latch.rows]
    assert list(latch.steps["cpk"]) == [row.target.cpk for row in latch.rows]
    assert list(latch.steps["cpk_today"]) == [row.today.cpk for row in latch.rows]
    assert list(latch.steps["improvement"]) == [row.improvement for row in latch.rows]
    assert latch.steps["scrap"].sum() == pytest.approx(latch.money.scrap if latch.money else None)


@pytest.mark.parametrize(
    ("result", "name"), [(a_plan(), "steps"), (a_today(), "steps"), (a_check(), "steps"), (some_nines(), "points")]
)
def test_every_result_with_rows_has_its_table(result: Plan | Today | Check | Nines, name: str) -> None:
    table = getattr(result, name)
    assert len(table) == len(result.rows)
    assert getattr(result, name) is table
    assert not [column for column in table.columns if "." in column or column.endswith("_")]


def test_the_table_is_made_only_when_asked_for() -> None:
    """The command line must not wait for it."""
    plan = a_plan()
    for form in ("text", "json", "csv"):
        render(plan, form)
    assert "steps" not in vars(plan)


def test_a_table_without_rows_keeps_its_columns() -> None:
    assert list(nothing_possible().steps.columns) == list(a_plan().steps.columns)
    assert len(nothing_possible().steps) == 0


def test_replaced_results_do_not_keep_the_old_table() -> None:
    plan = a_plan()
    assert len(plan.steps) == len(NAMES)
    assert len(replace(plan, rows=plan.rows[:1]).steps) == 1
    assert len(as_table(StepTarget, plan.rows[:2])) == 2


def test_repr_says_the_answer(latch: Plan) -> None:
    said = repr(latch)
    assert said.startswith("Cupboard latch, three steps - 100,000 units shipped per year\nFor a final yield of 99.20 %")
    assert "it costs 12,930 EUR/year" in " ".join(said.split())
    assert ".steps as a DataFrame" in said
    assert len(said.splitlines()) <= 8


@pytest.mark.parametrize("result", [a_plan(), nothing_possible(), some_nines(), a_today(), a_check()])
def test_repr_is_short_and_html_well_formed(result: Any) -> None:
    assert 2 <= len(repr(result).splitlines()) <= 30
    assert "---" not in repr(result)
    page = result._repr_html_()
    Balanced().feed(page)
    assert "style" not in page, "no css: the notebook's own look is kept"


def test_scenario_says_what_it_is() -> None:
    scenario = allocator.read_scenario(FOLDER / "latch.toml")
    assert repr(scenario) == "Scenario('Cupboard latch, three steps', 3 steps, from 'latch.toml')"


class Balanced(HTMLParser):
    """Every tag that opens closes, and only plain ones occur."""

    KNOWN = frozenset({"p", "strong", "br", "table", "thead", "tbody", "tr", "th", "td"})

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        assert tag in self.KNOWN
        assert attrs == []
        if tag != "br":
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag


@pytest.mark.parametrize("name", HOSTILE)
def test_hostile_names_stay_text(name: str) -> None:
    page = a_plan(title=name, currency=name, rows=(step_target(name, alternatives=(name,)),))._repr_html_()
    Balanced().feed(page)
    cell = re.search("<td>(.*?)</td>", page)
    assert cell is not None
    assert unescape(cell[1]) == name.replace("\u202e", "")


def test_long_tables_are_cut_and_counted() -> None:
    page = a_plan(rows=tuple(step_target(f"S{i}") for i in range(MOST_ROWS + 7)))._repr_html_()
    assert page.count("<tr>") == MOST_ROWS + 1
    assert "… and 7 more" in page


def test_records_the_reports_do_not_know_keep_their_own_repr() -> None:
    @shown
    @dataclass(frozen=True)
    class Stray:
        figure: float

    assert "Stray(figure=1.5)" in repr(Stray(1.5))
    assert Stray(1.5)._repr_html_() is None


def test_scenarios_compared_have_their_tables() -> None:
    scenario = allocator.read_scenario(FOLDER / "latch.toml")
    both = allocator.compare_scenarios([scenario, scenario])
    assert list(both.totals["total_over_first"]) == [0.0, 0.0]
    assert list(both.steps.columns) == ["step", "latch", "latch (2)", "differs"]
    assert "2 scenarios side by side" in repr(both)
    Balanced().feed(both._repr_html_())


def test_capital_case_and_review_have_their_tables() -> None:
    scenario = allocator.read_scenario(FOLDER / "bracket.toml")
    case, review = allocator.capital_case(scenario, "new shear"), allocator.review_table(scenario)
    first = case.cases[0]
    assert list(case.figures["npv"]) == [one.npv for one in case.cases]
    assert list(case.years["net"])[: len(first.years)] == [year.net for year in first.years]
    assert list(first.sensitivities["worth_low"]) == [lever.worth_low for lever in first.levers]
    totals = [None if row.figures is None else row.figures.total for row in review.rows]
    assert [None if pandas.isna(x) else x for x in review.options["total"]] == totals
    assert review.options["total_alone"].notna().any()
    for result in (case, review):
        assert not re.findall(r"\w+\(\w+=", result._repr_html_()), "records do not show their insides"
        Balanced().feed(result._repr_html_())


def test_records_within_records_become_columns() -> None:
    """A record that is not there leaves its columns empty; a list of records is a table of its own."""
    review = allocator.review_table(allocator.read_scenario(FOLDER / "latch.toml"))
    table = as_table(ReviewRow, review.rows)
    there = [row for row in review.rows if row.figures is not None and row.figures.money is not None]
    assert list(table["scrap"].dropna()) == [row.figures.money.scrap for row in there]
    assert table["final_yield_alone"].isna().sum() == sum(row.alone is None for row in review.rows)
    case = allocator.capital_case(allocator.read_scenario(FOLDER / "latch.toml"))
    assert not {"years", "levers", "assets"} & set(as_table(CashCase, case.cases).columns)
