"""A scenario as a workbook to be filled in: one sheet per table, with what each key means and takes at its head."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from decimal import Decimal
from pathlib import Path
from typing import TYPE_CHECKING, Any

from allocator.cells import fill_cell, new_book, save_book, width_of, write_head
from allocator.scenario.book import KEY, KEYED, MEANING, ROWED, TOP, VALUE
from allocator.scenario.book_words import USUAL, meaning, validation
from allocator.scenario.data import COUNTED
from allocator.scenario.model import YIELD_NAMES, Head, Scenario, Table, Target
from allocator.scenario.schema import columns
from allocator.scenario.tables import OF_A_STEP

if TYPE_CHECKING:
    from openpyxl.worksheet.worksheet import Worksheet

ROOM = 200
"""Empty rows below the last one that are checked as well while the sheet is filled in."""
FROM_FILE = ("data", "column", "subgroup")
Row = dict[str, Any]


def write_workbook(scenario: Scenario, path: str | Path) -> None:
    """Write a scenario as a workbook that reads back as the same scenario.

    What was counted from a file of measurements is written as mean, std and sample; tables that came from other files
    become rows of the sheets. An existing file is replaced.

    Parameters
    ----------
    scenario : Scenario
    path : str or Path
        Ends in .xlsx.

    Raises
    ------
    InputError
        When the name ends otherwise, or a text has signs that no workbook can hold.
    """
    path = Path(path)
    book = new_book(path)
    for sheet, rows in _keyed(scenario).items():
        _write_keys(book.create_sheet(sheet), () if sheet == TOP else (sheet,), rows, path)
    for sheet, records in _rowed(scenario).items():
        _write_rows(book.create_sheet(sheet), ROWED[sheet], records, path)
    save_book(book, path)


def _keyed(scenario: Scenario) -> dict[str, Row]:
    """Return the keyed sheets: what is given, and the usual keys without a value."""
    dumped = scenario.model_dump(by_alias=True, exclude_unset=True, exclude={"step", "purchase", "target", "file"})
    tables = {name: dumped.pop(name, {}) for name in KEYED if name not in (TOP, "target")}
    given = {TOP: _flat(dumped), **{name: _flat(table) for name, table in tables.items()}, "target": _target(scenario)}
    return {name: dict.fromkeys(USUAL[name]) | given[name] for name in KEYED}


def _target(scenario: Scenario) -> Row:
    remarks = scenario.target.model_dump(exclude_unset=True, exclude={*YIELD_NAMES, "losses"})
    return dict(_yield_cell(name, loss) for name, loss in scenario.target.losses.items()) | remarks


def _yield_cell(name: str, loss: float) -> tuple[str, float]:
    """Return the plainest way to write a target that reads back with the same loss."""
    as_yield = 1.0 - loss
    if len(repr(as_yield)) <= 12 and float(1 - Decimal(repr(as_yield))) == loss:
        return name, as_yield
    ppm = float(f"{loss * 1e6:.12g}")
    return f"{name}.ppm", ppm if ppm * 1e-6 == loss else loss * 1e6


def _rowed(scenario: Scenario) -> dict[str, list[Row]]:
    """Return the sheets of rows; figures of a capability stand without its name wherever that is clear."""
    rows: dict[str, list[Row]] = {sheet: [] for sheet in ROWED}
    rows["purchase"] = [_flat(p.model_dump(by_alias=True, exclude_unset=True)) for p in scenario.purchase]
    for step in scenario.step:
        table = step.model_dump(by_alias=True, exclude_unset=True)
        for alternative in table.pop("alternative", ()):
            rows["alternative"].append({"step": step.name, **_flat(_counted(alternative))})
        for point in table.get("improve", {}).pop("points", ()):
            rows["improve.points"].append({"step": step.name, **_flat(point)})
        rows["step"].append(_flat(_counted(table)))
    return {sheet: _shortened(rows[sheet], ROWED[sheet]) for sheet in ROWED}


def _shortened(rows: list[Row], record: type[Table]) -> list[Row]:
    short = {".".join(path): name for name, path in columns(record).items()}  # The short name comes last, and wins.
    return [{short.get(key, key): value for key, value in row.items()} for row in rows]


def _counted(table: Row) -> Row:
    """Return a table without the name of a file of measurements; what was counted from it stays."""
    capability = table.get("capability", {})
    if "data" not in capability:
        return table
    assert all(key in capability for key in COUNTED)
    return {**table, "capability": {key: value for key, value in capability.items() if key not in FROM_FILE}}


def _flat(table: Mapping[str, Any], before: str = "") -> Row:
    """Return nested keys as dotted ones."""
    flat: Row = {}
    for key, value in table.items():
        if isinstance(value, dict):
            flat |= _flat(value, f"{before}{key}.")
        elif value is not None:
            flat[before + key] = value
    return flat


def _write_keys(sheet: Worksheet, within: tuple[str, ...], rows: Row, path: Path) -> None:
    record: type[Table] = Target if within == ("target",) else Head
    write_head(sheet, [KEY, VALUE, MEANING])
    for number, (key, value) in enumerate(rows.items(), start=2):
        keys = tuple(key.split("."))
        inside = keys if record is Target else (*within, *keys)
        fill_cell(sheet.cell(number, 1), key, path.name)
        fill_cell(sheet.cell(number, 2), value, path.name)
        fill_cell(sheet.cell(number, 3), meaning(record, inside), path.name)
        rule = validation(record, inside)
        if rule is not None:
            rule.add(sheet.cell(number, 2).coordinate)
            sheet.add_data_validation(rule)
    for letter, width in zip("ABC", (30, 22, 90), strict=True):
        sheet.column_dimensions[letter].width = width


def _write_rows(sheet: Worksheet, record: type[Table], records: Sequence[Row], path: Path) -> None:
    from openpyxl.comments import Comment
    from openpyxl.utils import get_column_letter

    owner = ["step"] if record in OF_A_STEP else []
    paths = {**columns(record), **dict.fromkeys(owner, ())}
    names = list(dict.fromkeys((*owner, *USUAL[sheet.title], *(key for row in records for key in row))))
    write_head(sheet, names)
    for number, row in enumerate(records, start=2):
        for column, name in enumerate(names, start=1):
            fill_cell(sheet.cell(number, column), row.get(name), path.name)
    for column, name in enumerate(names, start=1):
        keys = paths[name]
        comment = Comment(meaning(record, keys), "allocator", width=320, height=120)
        letter = get_column_letter(column)
        sheet.cell(1, column).comment = comment
        sheet.column_dimensions[letter].width = width_of(name, (row.get(name) for row in records))
        rule = validation(record, keys) if keys else None
        if rule is not None:
            rule.add(f"{letter}2:{letter}{len(records) + ROOM}")
            sheet.add_data_validation(rule)
