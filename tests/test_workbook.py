"""Does a workbook say the same as a TOML file, and is what is wrong with one told as clearly?"""

from __future__ import annotations

import re
import zipfile
from collections.abc import Callable
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import openpyxl
import pytest
from hypothesis import given
from hypothesis import strategies as st
from typer.testing import CliRunner

from allocator import make_plan, read_scenario, scenario_from_dict, write_workbook
from allocator.cells import LONGEST
from allocator.cli import app
from allocator.errors import InputError
from allocator.scenario.book import KEYED, ROWED, TOP
from allocator.scenario.book_words import USUAL, meaning
from allocator.scenario.model import Head, Scenario, Target
from allocator.scenario.schema import columns
from tests.strategies import alternatives, inspections, laws, lines, quick, with_target

FOLDER = Path(__file__).parent.parent / "scenarios"
SHIPPED = sorted(FOLDER.glob("*.toml"), key=lambda path: path.name)
SAME = 1e-9
"""A cell keeps 16 digits, a scenario's figures far fewer; measurements, counted to 17, differ in the last one."""
FORMULAS = ("=1+1", "+cmd", "-2 weld", "@SUM(A1)", '=HYPERLINK("http://x")')
Rows = list[list[Any]]


def save(path: Path, sheets: dict[str, Rows]) -> Path:
    book = openpyxl.Workbook()
    book.remove(book.worksheets[0])
    for title, rows in sheets.items():
        sheet = book.create_sheet(title)
        for row in rows:
            sheet.append(row)
    book.save(path)
    return path


def sound(**changes: Rows | None) -> dict[str, Rows]:
    """A sound workbook, with some of its sheets replaced or left out (None)."""
    sheets: dict[str, Rows | None] = {
        "demand": [["key", "value"], ["shipped_per_year", 1000], ["years", 5], ["discount_rate", 0.1]],
        "target": [["key", "value"], ["final_yield", 0.97]],
        "step": [["name", "cost_added", "cp", "improve.law", "improve.price"], ["Weld", 1.0, 0.8, "decade", 500]],
        "alternative": [["step", "name", "price", "cp"], ["Weld", "new welder", 900, 1.4]],
    }
    return {title: rows for title, rows in (sheets | changes).items() if rows is not None}


def faults_of(path: Path) -> list[str]:
    with pytest.raises(InputError) as caught:
        read_scenario(path)
    return [str(fault) for fault in caught.value.faults]


def content(scenario: Scenario) -> dict[str, Any]:
    """Everything but the file and where measurements came from."""
    dumped = scenario.model_dump(exclude={"file"})
    for step in dumped["step"]:
        for table in (step, *step["alternative"]):
            if table["capability"]:
                table["capability"] |= {"data": None, "column": None, "subgroup": None}
    return dumped


# ---------------------------------------------------------------- the same scenario


@pytest.mark.parametrize("path", SHIPPED, ids=lambda path: path.stem)
def test_shipped_scenarios_as_workbooks_give_the_same_plan(path: Path, tmp_path: Path) -> None:
    scenario = read_scenario(path)
    book = tmp_path / f"{path.stem}.xlsx"
    write_workbook(scenario, book)
    again = read_scenario(book)
    assert content(again) == content(scenario)
    first, second = make_plan(scenario), make_plan(again)
    assert first.money is not None
    assert second.money is not None
    assert second.money.total == pytest.approx(first.money.total, rel=SAME)
    assert [row.alternatives for row in second.rows] == [row.alternatives for row in first.rows]
    assert [row.target.sigma_level for row in second.rows] == pytest.approx(
        [row.target.sigma_level for row in first.rows], rel=1e-6  # Where the total is flat, levels are softer than it.
    )  # fmt: skip


@quick(15)
@given(data=lines(law=laws(), offers=alternatives(gates=True)), default=inspections(), loss=st.floats(1e-4, 0.5))
def test_any_scenario_reads_back(data: dict[str, Any], default: dict[str, Any], loss: float) -> None:
    scenario = scenario_from_dict(
        with_target(data, final_yield={"ppm": loss * 1e6}) | {"default": {"inspection": default}}
    )
    with TemporaryDirectory() as folder:
        write_workbook(scenario, Path(folder, "any.xlsx"))
        again = read_scenario(Path(folder, "any.xlsx"))
    assert again.target.losses == pytest.approx(scenario.target.losses, rel=1e-15)
    assert content(again) | {"target": None} == content(scenario) | {"target": None}
    assert again.target.escape_cost == scenario.target.escape_cost


@pytest.mark.parametrize("key", ["final_yield", "rolled_yield", "shipped_yield"])
@pytest.mark.parametrize("target", [0.97, 0.9999, {"nines": 5}, {"nines": 7.3}, {"ppm": 500}, {"bad": 1, "per": 2000}])
def test_targets_read_back_to_the_last_nine(key: str, target: Any, tmp_path: Path) -> None:
    step = {"name": "a", "cost_added": 1, "capability": {"cp": 1.0}, "inspection": {"finds": 0.9}}
    data = {"demand": {"shipped_per_year": 10}, "step": [step]}
    scenario = scenario_from_dict({**data, "target": {key: target}})
    write_workbook(scenario, tmp_path / "t.xlsx")
    losses = read_scenario(tmp_path / "t.xlsx").target.losses
    assert losses == pytest.approx(scenario.target.losses, rel=1e-15)


def test_a_workbook_by_hand_is_the_scenario_it_says(tmp_path: Path) -> None:
    """Capitals in sheet names, figures kept as texts, blank rows and the user's own sheets change nothing."""
    sheets = sound(Step=[[], ["name", "cost_added", "cp"], [None], ["Weld", "1.0", "0.8"], [7, 2, 1.5]], step=None)
    sheets["notes on prices"] = [["=1+1", "whatever"]]
    read = read_scenario(save(tmp_path / "Line.xlsx", sheets))
    data: dict[str, Any] = {
        "demand": {"shipped_per_year": 1000, "years": 5, "discount_rate": 0.1},
        "target": {"final_yield": 0.97},
        "step": [
            {"name": "Weld", "cost_added": 1.0, "capability": {"cp": 0.8},
             "alternative": [{"name": "new welder", "price": 900, "capability": {"cp": 1.4}}]},
            {"name": "7", "cost_added": 2, "capability": {"cp": 1.5}},
        ],
    }  # fmt: skip
    assert content(read) == content(scenario_from_dict(data))
    assert read.file == "Line.xlsx"


def test_steps_from_a_sheet(tmp_path: Path) -> None:
    save(tmp_path / "book.xlsx", {"parts": sound()["step"], "machines": sound()["alternative"]})
    (tmp_path / "line.toml").write_text(
        'steps_from = "book.xlsx#parts"\nalternatives_from = "book.xlsx#Machines"\n'
        "[demand]\nshipped_per_year = 1000\nyears = 5\ndiscount_rate = 0.1\n[target]\nfinal_yield = 0.97\n"
    )
    book = read_scenario(save(tmp_path / "line.xlsx", sound()))
    assert content(read_scenario(tmp_path / "line.toml")) == content(book)


def test_a_book_of_one_sheet_needs_no_name(tmp_path: Path) -> None:
    save(tmp_path / "book.xlsx", {"parts": sound()["step"]})
    (tmp_path / "line.toml").write_text(
        'steps_from = "book.xlsx"\n[demand]\nshipped_per_year = 1000\nyears = 5\ndiscount_rate = 0.1\n'
    )
    assert [step.name for step in read_scenario(tmp_path / "line.toml").step] == ["Weld"]


# ---------------------------------------------------------------- texts that look like formulas


def test_text_that_starts_like_a_formula_stays_text(tmp_path: Path) -> None:
    steps = [{"name": name, "cost_added": 1, "capability": {"cp": 1.0}, "note": name} for name in FORMULAS]
    scenario = scenario_from_dict({"title": "=2+2", "demand": {"shipped_per_year": 10}, "step": steps})
    write_workbook(scenario, tmp_path / "book.xlsx")
    assert content(read_scenario(tmp_path / "book.xlsx")) == content(scenario)
    cells = [c for sheet in openpyxl.load_workbook(tmp_path / "book.xlsx") for row in sheet.iter_rows() for c in row]
    suspicious = [cell for cell in cells if isinstance(cell.value, str) and cell.value.startswith(("=", "+", "-", "@"))]
    assert len(suspicious) == 2 * len(FORMULAS) + 1
    assert all(cell.data_type == "s" and cell.quotePrefix for cell in suspicious)


def with_formula(path: Path, stored: str) -> Path:
    """A sound workbook whose price is a formula, with what a spreadsheet program would have stored for it."""
    save(path.with_suffix(".raw.xlsx"), sound(alternative=[["step", "name", "price"], ["Weld", "new", "=400+500"]]))
    with zipfile.ZipFile(path.with_suffix(".raw.xlsx")) as raw, zipfile.ZipFile(path, "w") as book:
        for name in raw.namelist():
            text = raw.read(name)
            if b"400+500" in text:
                text, count = re.subn(rb"<f>400\+500</f><v\s*/>|<f>400\+500</f><v></v>", stored.encode(), text)
                assert count == 1
            book.writestr(name, text)
    return path


def test_a_formula_counts_with_its_stored_value(tmp_path: Path) -> None:
    path = with_formula(tmp_path / "book.xlsx", "<f>400+500</f><v>900</v>")
    assert read_scenario(path).step[0].alternative[0].price == 900


def test_a_formula_never_calculated_is_told(tmp_path: Path) -> None:
    path = with_formula(tmp_path / "book.xlsx", "<f>400+500</f><v></v>")
    assert faults_of(path) == [
        "book.xlsx, sheet 'alternative', cell C2: found a formula whose value was never stored; open the workbook in a "
        "spreadsheet program and save it, or put the value in its place"
    ]


def test_a_cell_in_error_is_told(tmp_path: Path) -> None:
    path = save(tmp_path / "book.xlsx", sound(target=[["key", "value"], ["final_yield", "#DIV/0!"]]))
    assert faults_of(path) == [
        "book.xlsx, sheet 'target', cell B2: found the error #DIV/0!; correct the formula, or put a value in its place"
    ]


# ---------------------------------------------------------------- what is wrong

WRONG: dict[str, tuple[dict[str, Rows], list[str]]] = {
    "an unknown sheet": (
        sound(stepps=[["name"]]),
        ["book.xlsx, sheet 'stepps': found an unknown sheet; did you mean 'step'?"],
    ),
    "a value out of range": (
        sound(step=[["name", "cost_added", "cp"], ["Weld", 1.0, 0.8], ["Pack", 1.0, -2]]),
        ["book.xlsx, sheet 'step', row 3, step 'Pack', capability.cp: found -2.0; give a number above 0"],
    ),
    "an unknown column": (
        sound(alternative=[["step", "name", "prise"], ["Weld", "new", 900]]),
        ["book.xlsx, sheet 'alternative', column 'prise': found an unknown column; did you mean 'price'?"],
    ),
    "an unknown step": (
        sound(alternative=[["step", "name", "price"], ["Wled", "new", 900]]),
        ["book.xlsx, sheet 'alternative', row 2, step: found 'Wled', which is no step; did you mean 'Weld'?"],
    ),
    "a misspelled key": (
        sound(demand=[["key", "value"], ["shiped_per_year", 1000], ["years", 5], ["discount_rate", 0.1]]),
        ["book.xlsx, sheet 'demand', shiped_per_year: found an unknown key; did you mean 'shipped_per_year'?"],
    ),
    "no head on a sheet of keys": (
        sound(target=[["final_yield", 0.97]]),
        ["book.xlsx, sheet 'target', row 1: found a first row of 'final_yield', '0.97'; "
         "head the columns `key` and `value`"],
    ),
    "a key twice": (
        sound(target=[["key", "value"], ["final_yield", 0.97], ["final_yield.nines", 2]]),
        ["book.xlsx, sheet 'target', row 3, final_yield.nines: found the same key twice; a key stands once, and is "
         "either a value or a table: keep one of the two"],
    ),
    "a text for a number": (
        sound(demand=[["key", "value"], ["shipped_per_year", "1.000,5"], ["years", 5], ["discount_rate", 0.1]]),
        ["book.xlsx, sheet 'demand', shipped_per_year: found '1.000,5'; give a number above 0, with a decimal point "
         "and no thousands separator, as 1.5"],
    ),
    "a purchase without a name": (
        sound(purchase=[["name", "price"], [None, 5]]),
        ["book.xlsx, sheet 'purchase', row 2, purchase '?', name: found nothing; give it a name, a text in quotes"],
    ),
    "offers of no step": (
        sound(**{"improve.points": [["step", "dpmo", "price"], ["Press", 5, 100]]}),
        ["book.xlsx, sheet 'improve.points', row 2, step: found 'Press', which is no step; name a step of this "
         "scenario"],
    ),
    "no step": (
        sound(step=None, alternative=None),
        ["book.xlsx, step: found no step; add a row on the sheet `step` for every step of the line, in its order"],
    ),
    "a certain target": (
        sound(target=[["key", "value"], ["final_yield", 1]]),
        ["book.xlsx, sheet 'target', final_yield: found 1; no finite spend buys certainty; give e.g. { nines = 6 }"],
    ),
    "nothing of a scenario": (
        {"notes": [["hello"]]},
        ["book.xlsx: found no sheet of a scenario; name its sheets scenario, demand, target, limits, default, "
         "purchase, step, alternative, improve.points; `allocator new --xlsx` writes an example"],
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", WRONG)
def test_what_is_wrong_is_told_exactly_so(case: str, tmp_path: Path) -> None:
    sheets, expected = WRONG[case]
    assert faults_of(save(tmp_path / "book.xlsx", sheets)) == expected


def test_all_faults_at_once(tmp_path: Path) -> None:
    sheets = sound(
        target=[["key", "value"], ["final_yield", 2]],
        step=[["name", "cost_added", "cp", "colour"], ["Weld", -1.0, 0.8, "red"]],
        alternative=[["step", "name"], ["Wled", "new"]],
    )
    said = "\n".join(faults_of(save(tmp_path / "book.xlsx", sheets)))
    for part in ("colour", "final_yield", "row 2, step 'Weld', cost_added", "'Wled', which is no step"):
        assert part in said


def not_a_zip(path: Path) -> None:
    path.write_bytes(b"\xd0\xcf\x11\xe0 an old or a locked one")


def cut_short(path: Path) -> None:
    whole = save(path.with_suffix(".whole.xlsx"), sound()).read_bytes()
    path.write_bytes(whole[: len(whole) // 2])


def broken_xml(path: Path) -> None:
    save(path.with_suffix(".whole.xlsx"), sound())
    with zipfile.ZipFile(path.with_suffix(".whole.xlsx")) as raw, zipfile.ZipFile(path, "w") as book:
        for name in raw.namelist():
            text = raw.read(name)
            book.writestr(name, text[: len(text) // 2] if "sheet1" in name else text)


def empty_zip(path: Path) -> None:
    with zipfile.ZipFile(path, "w"):
        pass


@pytest.mark.parametrize("spoil", [not_a_zip, cut_short, broken_xml, empty_zip, Path.touch])
def test_damaged_workbooks_are_refused_without_a_traceback(spoil: Callable[[Path], None], tmp_path: Path) -> None:
    path = tmp_path / "book.xlsx"
    spoil(path)
    answer = CliRunner().invoke(app, ["plan", str(path)])
    assert answer.exit_code == 2
    assert "allocator: book.xlsx: found bytes that are no workbook" in answer.stderr
    assert len(answer.stderr.splitlines()) == 1


@pytest.mark.parametrize(
    ("name", "words"),
    [("none.xlsx", "no such file"), ("old.xls", "another kind of workbook"), ("folder.xlsx", "a folder")],
)
def test_what_is_no_workbook_here(name: str, words: str, tmp_path: Path) -> None:
    (tmp_path / "old.xls").write_bytes(b"x")
    (tmp_path / "folder.xlsx").mkdir()
    assert words in faults_of(tmp_path / name)[0]


def test_sheets_that_steps_from_cannot_use(tmp_path: Path) -> None:
    save(tmp_path / "book.xlsx", {"parts": sound()["step"], "blank": []})
    head = "\n[demand]\nshipped_per_year = 1000\nyears = 5\ndiscount_rate = 0.1\n"
    expected = {
        "book.xlsx": "book.xlsx: found 2 sheets; name one of its sheets 'parts', 'blank', as book.xlsx#parts",
        "book.xlsx#x": "book.xlsx: found no sheet 'x'; name one of its sheets 'parts', 'blank', as book.xlsx#parts",
        "book.xlsx#blank": "book.xlsx, sheet 'blank': found an empty sheet; write it, or name another sheet",
    }
    for name, said in expected.items():
        (tmp_path / "line.toml").write_text(f'steps_from = "{name}"{head}')
        assert faults_of(tmp_path / "line.toml") == [said]


# ---------------------------------------------------------------- writing


def test_new_writes_a_workbook_that_plans_like_the_toml(tmp_path: Path) -> None:
    run = CliRunner()
    assert run.invoke(app, ["new", str(tmp_path / "line.toml")]).exit_code == 0
    assert run.invoke(app, ["new", "--xlsx", str(tmp_path / "line.xlsx")]).exit_code == 0
    text, book = read_scenario(tmp_path / "line.toml"), read_scenario(tmp_path / "line.xlsx")
    assert content(book) == content(text)
    again = run.invoke(app, ["new", "--xlsx", str(tmp_path / "line.xlsx")])
    assert again.exit_code == 2
    assert "nothing was overwritten" in again.stderr
    assert "end it in .xlsx" in run.invoke(app, ["new", "--xlsx", str(tmp_path / "other.toml")]).stderr


def test_the_new_workbook_explains_and_checks(tmp_path: Path) -> None:
    CliRunner().invoke(app, ["new", "--xlsx", str(tmp_path / "line.xlsx")])
    book = openpyxl.load_workbook(tmp_path / "line.xlsx")
    assert book.sheetnames == [*KEYED, *ROWED]
    for title in ROWED:
        head = book[title][1]
        assert all(cell.comment is not None and len(cell.comment.text) > 10 for cell in head)
        assert book[title].freeze_panes == "B2"
    for title in KEYED:
        assert [cell.value for cell in book[title][1]] == ["key", "value", "meaning"]
        assert all(row[2].value for row in book[title].iter_rows(min_row=2))
    rules = {str(rule.sqref): rule for rule in book["step"].data_validations.dataValidation}
    kinds = {
        head.value: rules[area].type
        for head in book["step"][1]
        for area in rules
        if area.startswith(f"{head.column_letter}2:")
    }
    assert kinds["improve.law"] == "list"
    assert kinds["cost_added"] == kinds["at_least.cpk"] == "decimal"
    assert "name" not in kinds


def test_every_key_has_its_meaning() -> None:
    for record in ROWED.values():
        for path in columns(record).values():
            assert meaning(record, path)
    for sheet in KEYED:
        record = Target if sheet == "target" else Head
        for key in USUAL[sheet]:
            inside = key.split(".") if sheet in (TOP, "target") else [sheet, *key.split(".")]
            assert meaning(record, tuple(inside))


def test_a_failed_write_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    scenario = scenario_from_dict(
        {"demand": {"shipped_per_year": 10}, "step": [{"name": "a", "cost_added": 1, "capability": {"cp": 1.0}}]}
    )
    path = tmp_path / "book.xlsx"
    write_workbook(scenario, path)
    before = path.read_bytes()

    def fail(*_: object) -> None:
        raise OSError("the disk is full")

    monkeypatch.setattr(openpyxl.Workbook, "save", fail)
    with pytest.raises(OSError, match="disk is full"):
        write_workbook(scenario, path)
    assert path.read_bytes() == before
    assert [file.name for file in tmp_path.iterdir()] == ["book.xlsx"]


@pytest.mark.parametrize("title", ["bell \x07", "x" * (LONGEST + 1)], ids=["control sign", "too long"])
def test_texts_that_no_cell_can_hold_are_refused(title: str, tmp_path: Path) -> None:
    data = {"demand": {"shipped_per_year": 10}, "step": [{"name": "a", "cost_added": 1, "capability": {"cp": 1.0}}]}
    with pytest.raises(InputError, match="32,767 printable characters"):
        write_workbook(scenario_from_dict({**data, "title": title}), tmp_path / "book.xlsx")
    assert list(tmp_path.iterdir()) == []
