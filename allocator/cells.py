"""How figures and texts stand on the sheets of a workbook: text stays text, heads stay in sight."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from allocator.errors import Fault, InputError
from allocator.files import written_aside

if TYPE_CHECKING:
    from openpyxl import Workbook
    from openpyxl.cell.cell import Cell, MergedCell
    from openpyxl.worksheet.worksheet import Worksheet

FORMULA_SIGNS = ("=", "+", "-", "@")
LONGEST = 32_767
"""Characters that a cell can hold."""
HEAD_FILL, HEAD_INK = "FF1F3A4D", "FFFFFFFF"
NARROWEST, WIDEST = 10, 44


def new_book(path: Path) -> Workbook:
    """Return a workbook without sheets, or say (InputError) that the name is none of a workbook."""
    if path.suffix.lower() != ".xlsx":
        raise InputError([Fault(path.name, "", f"a name that ends in {path.suffix or 'nothing'}", "end it in .xlsx")])
    from openpyxl import Workbook  # here, because only those who want a workbook should wait for it

    book = Workbook()
    book.remove(book.worksheets[0])
    return book


def save_book(book: Workbook, path: Path) -> None:
    with written_aside(path) as aside:
        book.save(aside)


def write_head(sheet: Worksheet, names: Sequence[str], row: int = 1) -> None:
    """Write the names of the columns, which stay in sight with the first column when the sheet is scrolled."""
    from openpyxl.styles import Alignment, Font, PatternFill

    for column, name in enumerate(names, start=1):
        cell = sheet.cell(row, column)
        fill_cell(cell, name, sheet.title)
        cell.font, cell.fill = Font(bold=True, color=HEAD_INK), PatternFill("solid", fgColor=HEAD_FILL)
        cell.alignment = Alignment(wrap_text=True, vertical="top")
    sheet.freeze_panes = f"B{row + 1}"


def fill_cell(cell: Cell | MergedCell, value: Any, where: str) -> None:
    """Write a value; None and what is no number leave the cell empty.

    A text that starts like a formula stays text, also when somebody edits it.

    Raises
    ------
    InputError
        When no cell can hold the text.
    """
    from openpyxl.utils.exceptions import IllegalCharacterError

    if value is None or (isinstance(value, float) and not math.isfinite(value)):
        return
    if isinstance(value, str) and len(value) > LONGEST:
        raise _no_cell(where, f"{len(value):,} characters in", value)
    try:
        cell.value = value
    except IllegalCharacterError:
        raise _no_cell(where, "a control sign in", value) from None
    if isinstance(value, str):
        cell.data_type = "s"
        cell.quotePrefix = value.startswith(FORMULA_SIGNS)


def _no_cell(where: str, what: str, value: str) -> InputError:
    allowed = "a cell takes up to 32,767 printable characters: shorten the text or rewrite it"
    return InputError([Fault(where, "", f"{what} {value[:40]!r}", allowed)])


def width_of(name: str, values: Iterable[Any]) -> int:
    """Return a width that shows the name and the values, within reason."""
    longest = max((len(str(value)) for value in values if value is not None), default=0)
    return min(max(len(name), longest, NARROWEST - 3) + 3, WIDEST)
