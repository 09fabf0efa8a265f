"""A scenario written as a workbook: its sheets bear the names of the tables, and mean what these mean in TOML.

Sheets of keys (`scenario`, `demand`, `target`, `limits`, `default`) have a column `key` and a column `value`; sheets of
rows (`purchase`, `step`, `alternative`) have the keys as columns. What TOML puts deeper stands behind a dot, as
`inspection.finds`; the offers of a law of quotes, a list, are the rows of the sheet `improve.points`.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from allocator.errors import Fault, InputError
from allocator.scenario.faults import SHOWN, did_you_mean
from allocator.scenario.model import YIELD_NAMES, Alternative, Head, Purchase, Quote, Step, Table, Target
from allocator.scenario.sheets import Cells, place, read_sheets
from allocator.scenario.tables import TableRead, number_of, table_of, value_of

TOP = "scenario"
KEYED = (TOP, "demand", "target", "limits", "default")
ROWED: dict[str, type[Table]] = {
    "purchase": Purchase,
    "step": Step,
    "alternative": Alternative,
    "improve.points": Quote,
}
OWN = "notes"
"""Sheets whose names begin so are the user's own."""
KEY, VALUE, MEANING = "key", "value", "meaning"


@dataclass
class Book:
    """A workbook as the nested keys of its keyed sheets, the tables of the others, and what is wrong so far."""

    data: dict[str, Any] = field(default_factory=dict)
    tables: dict[type[Table], TableRead] = field(default_factory=dict)
    faults: list[Fault] = field(default_factory=list)


def read_book(path: Path) -> Book:
    """Return a workbook's sheets as tables of a scenario.

    Raises
    ------
    InputError
        When the file cannot be read as a workbook at all.
    """
    book = Book()
    known = (*KEYED, *ROWED)
    for title, cells in read_sheets(path, path.name, lambda title: _key_of(title) in known).items():
        sheet, where = _key_of(title), place(path.name, title)
        if sheet.startswith(OWN):
            continue
        if sheet not in known:
            otherwise = f"the sheets known here are {', '.join(known)}; one of your own is named '{OWN} …'"
            book.faults.append(Fault(where, "", "an unknown sheet", did_you_mean(sheet, known, otherwise)))
        elif sheet in KEYED:
            _read_keys(cells, () if sheet == TOP else (sheet,), where, book)
        elif any(any(map(str.strip, row)) for row in cells):
            book.tables[ROWED[sheet]] = table_of(cells, where, ROWED[sheet])
    for table in book.tables.values():
        book.faults += table.faults
    if not book.data and not book.tables and not book.faults:
        allowed = f"name its sheets {', '.join(known)}; `allocator new --xlsx` writes an example"
        raise InputError([Fault(path.name, "", "no sheet of a scenario", allowed)])
    return book


def _key_of(title: str) -> str:
    return title.strip().lower()


def _read_keys(cells: Cells, within: tuple[str, ...], where: str, book: Book) -> None:
    written = [(number, [cell.strip() for cell in row]) for number, row in enumerate(cells, start=1)]
    written = [(number, row) for number, row in written if any(row)]
    if not written:
        return
    header = [name.lower() for name in written[0][1]]
    if KEY not in header or VALUE not in header:
        found = f"a first row of {', '.join(map(repr, written[0][1][:SHOWN]))}"
        book.faults.append(Fault(f"{where}, row {written[0][0]}", "", found, f"head the columns `{KEY}` and `{VALUE}`"))
        return
    at_key, at_value = header.index(KEY), header.index(VALUE)
    for number, row in written[1:]:
        padded = [*row, *([""] * len(header))]
        key, text = padded[at_key], padded[at_value]
        if not text:
            continue
        if not key:
            book.faults.append(Fault(f"{where}, row {number}", "", f"the value {text!r} without a key", "name its key"))
            continue
        path = (*within, *key.split("."))
        if not _put(book.data, path, _value(path, text)):
            allowed = "a key stands once, and is either a value or a table: keep one of the two"
            book.faults.append(Fault(f"{where}, row {number}", key, "the same key twice", allowed))


def _value(path: tuple[str, ...], text: str) -> Any:
    """Return a text as the kind of value that its key takes; what does not convert stays text, for the check."""
    if path[0] != "target":
        return value_of(text, Head, path)
    return number_of(text) if path[1:2] and path[1] in YIELD_NAMES else value_of(text, Target, path[1:])


def _put(data: dict[str, Any], path: tuple[str, ...], value: Any) -> bool:
    """Set a value at a path of keys; False where something already stands there, or on the way there."""
    *parents, last = path
    for parent in parents:
        data = data.setdefault(parent, {})
        if not isinstance(data, dict):
            return False
    if last in data:
        return False
    data[last] = value
    return True
