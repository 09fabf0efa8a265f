"""Does the plan's workbook hold what the plan holds, with units, and nothing that runs?"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import openpyxl
import pytest
from openpyxl.worksheet.worksheet import Worksheet
from typer.testing import CliRunner

from allocator import make_plan, read_scenario
from allocator.cli import app
from allocator.report.plan_book import STEPS, write_plan_book
from allocator.results import Plan
from tests.test_report import RESULTS, a_plan, step_target

FOLDER = Path(__file__).parent.parent / "scenarios"
PLANS = {name: result for name, result in RESULTS.items() if isinstance(result, Plan)}
DIGITS = 1e-12
"""A cell keeps 16 digits."""


@pytest.fixture(scope="module")
def plan() -> Plan:
    return make_plan(read_scenario(FOLDER / "pump.toml"))


@pytest.fixture(scope="module")
def book(plan: Plan, tmp_path_factory: pytest.TempPathFactory) -> openpyxl.Workbook:
    path = tmp_path_factory.mktemp("book") / "plan.xlsx"
    write_plan_book(plan, path)
    return openpyxl.load_workbook(path)


def column(sheet: Worksheet, head: str) -> list[Any]:
    position = next(cell.column for cell in sheet[1] if str(cell.value).split(" [")[0] == head)
    return [row[position - 1].value for row in sheet.iter_rows(min_row=2)]


def figures(sheet: Worksheet) -> dict[str, tuple[Any, ...]]:
    """The figures of the first sheet: unit, plan, today, target by name."""
    return {row[0].value: tuple(cell.value for cell in row[1:5]) for row in sheet.iter_rows(min_row=5)}


def test_every_step_with_its_figures(plan: Plan, book: openpyxl.Workbook) -> None:
    sheet = book["steps"]
    assert column(sheet, "step") == [row.step for row in plan.rows]
    for head, figure in (
        ("sigma level to reach", lambda row: row.target.sigma_level),
        ("Cpk today", lambda row: row.today.cpk),
        ("ppm to reach", lambda row: row.target.ppm),
        ("scrap", lambda row: row.scrap),
        ("improvement", lambda row: row.improvement),
        ("share of the defect budget", lambda row: row.budget_share),
    ):
        assert column(sheet, head) == pytest.approx([figure(row) for row in plan.rows], rel=DIGITS)
    assert plan.money is not None
    assert sum(column(sheet, "scrap")) == pytest.approx(plan.money.scrap, rel=1e-9)


def test_the_first_sheet_says_the_answer(plan: Plan, book: openpyxl.Workbook) -> None:
    sheet, money = book["plan"], plan.money
    assert money is not None
    assert plan.yields is not None
    assert sheet["A1"].value == plan.title
    assert "it costs" in sheet["A2"].value
    assert "qualified" in sheet["A3"].value
    said = figures(sheet)
    assert said["total"] == ("EUR/year", pytest.approx(money.total), pytest.approx(plan.today.money.total), None)  # type: ignore[union-attr]
    assert said["final yield"][1:] == pytest.approx(
        (plan.yields.final_yield, plan.today.yields.final_yield, plan.targets["final_yield"])
    )
    unit, *losses = said["shipped yield, loss"]
    assert unit == "units per million"
    shipped = (plan.yields.shipped_loss, plan.today.yields.shipped_loss, 500e-6)
    assert losses == pytest.approx([1e6 * loss for loss in shipped if loss is not None])
    assert sum(said[kind][1] for kind in ("scrap", "rework", "escapes", "inspection", "improvement")) == pytest.approx(
        money.total
    )


def test_money_bears_its_unit_and_every_head_stays_in_sight(book: openpyxl.Workbook) -> None:
    heads = [cell.value for cell in book["steps"][1]]
    assert len(heads) == len(STEPS)
    assert {"scrap [EUR/year]", "capital [EUR]", "starts [items/year]"} <= set(heads)
    assert {sheet.title: sheet.freeze_panes for sheet in book} == {
        sheet.title: "B6" if sheet.title == "plan" else "B2" for sheet in book
    }


def test_numbers_are_numbers_with_formats(book: openpyxl.Workbook) -> None:
    sheet = book["steps"]
    for head in ("scrap", "share of the defect budget", "sigma level today"):
        assert all(isinstance(value, (int, float)) for value in column(sheet, head))
    formats = {
        cell.number_format for row in sheet.iter_rows(min_row=2) for cell in row if isinstance(cell.value, float)
    }
    assert formats <= {"#,##0", "#,##0.00", "0.0000", "0.00E+00"} | {f"0.{'0' * n}%" for n in range(2, 11)}
    assert "General" not in formats


def test_what_it_rests_on_has_sheets_of_its_own(plan: Plan, book: openpyxl.Workbook) -> None:
    assert book.sheetnames == ["plan", "steps", "purchases", "simpler rules", "assumptions", "cautions", "proof"]
    assert column(book["assumptions"], "assumed")[: len(plan.assumed)] == list(plan.assumed)
    assert len(column(book["cautions"], "caution")) == len(plan.cautions)
    proof = dict(zip(column(book["proof"], "evidence"), column(book["proof"], "value"), strict=True))
    assert plan.proof is not None
    assert proof["proven lower bound [EUR/year]"] == pytest.approx(plan.proof.lower_bound)
    assert proof["gap, as a share of the total"] == pytest.approx(plan.proof.gap)
    assert column(book["purchases"], "purchase") == [bought.name for bought in plan.purchases]


@pytest.mark.parametrize("name", PLANS)
def test_plans_of_every_kind_are_written(name: str, tmp_path: Path) -> None:
    write_plan_book(PLANS[name], tmp_path / "plan.xlsx")
    book = openpyxl.load_workbook(tmp_path / "plan.xlsx")
    values = [cell.value for sheet in book for row in sheet.iter_rows() for cell in row]
    assert not {"None", "nan", "inf", "not known"} & {value for value in values if isinstance(value, str)}


@pytest.mark.parametrize("text", ["=1+1", "+cmd|' /C calc'!A0", "-2", "@SUM(1)", "<b>&\"'", "\u202eevil\x07"])
def test_names_that_look_like_formulas_stay_text(text: str, tmp_path: Path) -> None:
    write_plan_book(a_plan(title=text, currency=text, rows=(step_target(text, supplier=text),)), tmp_path / "p.xlsx")
    book = openpyxl.load_workbook(tmp_path / "p.xlsx")
    cells = [cell for sheet in book for row in sheet.iter_rows() for cell in row if isinstance(cell.value, str)]
    assert not [cell.value for cell in cells if cell.data_type == "f"]
    assert all(cell.quotePrefix for cell in cells if cell.value.startswith(("=", "+", "-", "@")))
    assert book["steps"]["A2"].value == text.replace("\u202e", "").replace("\x07", "")


def test_the_command_writes_it_beside_its_text(tmp_path: Path) -> None:
    file, target = str(FOLDER / "latch.toml"), tmp_path / "plan.xlsx"
    answer = CliRunner().invoke(app, ["plan", file, "--xlsx", str(target), "--json"])
    assert answer.exit_code == 0, answer.output
    assert answer.stdout.startswith("{")
    assert answer.stderr == f"Wrote {target}\n"
    assert openpyxl.load_workbook(target)["plan"]["A1"].value == "Cupboard latch, three steps"
    assert [path.name for path in tmp_path.iterdir()] == ["plan.xlsx"]


@pytest.mark.parametrize(
    ("name", "said"), [("plan.csv", "name a workbook, as plan.xlsx"), ("no/plan.xlsx", "found no folder")]
)
def test_names_that_cannot_be_written_are_refused(name: str, said: str, tmp_path: Path) -> None:
    answer = CliRunner().invoke(app, ["plan", str(FOLDER / "latch.toml"), "--xlsx", str(tmp_path / name)])
    assert answer.exit_code == 2
    assert said in answer.stderr
    assert "Traceback" not in answer.stderr


def test_what_the_plan_was_told_to_keep_to_and_what_that_costs(tmp_path: Path) -> None:
    held = make_plan(read_scenario(FOLDER / "latch.toml"), hold={"stamp": {"ppm": 1_500}})
    write_plan_book(held, tmp_path / "held.xlsx")
    said = figures(openpyxl.load_workbook(tmp_path / "held.xlsx")["plan"])
    added = next(values for name, values in said.items() if str(name).startswith("added by: "))
    assert held.cost_of_restraint is not None
    assert added[:2] == ("EUR/year", pytest.approx(held.cost_of_restraint))
