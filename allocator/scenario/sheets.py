"""What stands on the sheets of a workbook: the cells of each as texts, as if it had been saved as CSV."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Iterator
from datetime import date, time
from pathlib import Path
from typing import Any

from allocator.errors import Fault, InputError
from allocator.scenario.faults import listed

WORKBOOKS = (".xlsx", ".xlsm")
OTHER_SHEETS = (".xls", ".xlsb", ".ods", ".numbers")
WHOLE = 1e15
"""Below it, a whole number written as 120.0 is 120, exactly."""
Cells = list[list[str]]


def is_workbook(name: str | Path) -> bool:
    """Return whether a file's name ends as a workbook's does, readable or not."""
    return Path(name).suffix.lower() in WORKBOOKS + OTHER_SHEETS


def read_sheets(path: Path, name: str, wanted: Callable[[str], bool]) -> dict[str, Cells]:
    """Return the cells of every wanted sheet, by its name, and none of the others; formulas count with the value that
    was stored for them.

    Raises
    ------
    InputError
        When the file is no workbook, or for all cells that hold an error or a formula never calculated.
    """
    if path.suffix.lower() in OTHER_SHEETS:
        raise _refused(name, "another kind of workbook", "save it as .xlsx, or its sheets as CSV (UTF-8)")
    if path.is_dir():
        raise _refused(name, "a folder", "name a file")
    if not path.exists():
        raise _refused(name, "no such file", f"check the name; it was looked for as {path}")
    written = {title: rows if wanted(title) else [] for title, rows in _loaded(path, name, values=False).items()}
    if any(kind == "f" for rows in written.values() for row in rows for _, kind in row):
        stored = _loaded(path, name, values=True)
    else:
        stored = written
    faults = [fault for sheet in written for fault in _unusable(name, sheet, written[sheet], stored[sheet])]
    if faults:
        raise InputError(faults)
    return {
        sheet: [[_text(value) for value, _ in row] for row in stored[sheet]] if written[sheet] else []
        for sheet in written
    }


def place(name: str, sheet: str) -> str:
    """Return how a sheet is named in a message."""
    return f"{name}, sheet '{sheet}'"


def one_sheet(path: Path, name: str, sheet: str) -> Cells:
    """Return the cells of the sheet of that name, or of the only one where none is named."""
    sheets = read_sheets(path, name, lambda title: not sheet or _same(title, sheet))
    fitting = [title for title in sheets if not sheet or _same(title, sheet)]
    if len(fitting) != 1:
        found = f"no sheet '{sheet}'" if sheet else f"{len(sheets)} sheets"
        raise _refused(name, found, f"name one of its sheets {listed(sheets)}, as {name}#{next(iter(sheets), 'steps')}")
    return sheets[fitting[0]]


def _same(title: str, sheet: str) -> bool:
    return title.strip().lower() == sheet.strip().lower()


Typed = list[list[tuple[Any, str]]]


def _loaded(path: Path, name: str, values: bool) -> dict[str, Typed]:
    """Return value and kind of every cell; a formula's value is its text, or with `values` what was stored for it."""
    from openpyxl import load_workbook  # here, because only those who have a workbook should wait for it

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # It warns of what it will not write again: nothing is written here.
            book = load_workbook(path, read_only=True, data_only=values)
            try:
                return {sheet.title: list(_rows(sheet)) for sheet in book.worksheets}
            finally:
                book.close()
    except PermissionError:
        raise _refused(name, "a file that may not be read", "make the file readable") from None
    except Exception as error:  # A damaged workbook fails wherever the reader happens to stand: zip, XML, index, date.
        found = f"bytes that are no workbook ({type(error).__name__})"
        raise _refused(
            name, found, "open it in a spreadsheet program and save it as .xlsx, without a password"
        ) from None


def _rows(sheet: Any) -> Iterator[list[tuple[Any, str]]]:
    sheet.reset_dimensions()  # Some programs write wrong ones; the cells themselves do not lie.
    for row in sheet.iter_rows():
        cells = [(cell.value, cell.data_type) for cell in row]
        while cells and cells[-1][0] in (None, ""):
            cells.pop()
        yield cells


def _unusable(name: str, sheet: str, written: Typed, stored: Typed) -> Iterator[Fault]:
    for i, row in enumerate(written):
        for j, (_, kind) in enumerate(row):
            value, kind_stored = stored[i][j] if i < len(stored) and j < len(stored[i]) else (None, "n")
            where = f"{place(name, sheet)}, cell {_letters(j)}{i + 1}"
            if kind_stored == "e":
                yield Fault(where, "", f"the error {value}", "correct the formula, or put a value in its place")
            elif kind == "f" and value is None:
                allowed = "open the workbook in a spreadsheet program and save it, or put the value in its place"
                yield Fault(where, "", "a formula whose value was never stored", allowed)


def _letters(column: int) -> str:
    """Return a column's letters.

    >>> _letters(0), _letters(25), _letters(26), _letters(701), _letters(702)
    ('A', 'Z', 'AA', 'ZZ', 'AAA')
    """
    before, last = divmod(column, 26)
    return (_letters(before - 1) if before else "") + chr(ord("A") + last)


def _text(value: Any) -> str:
    """Return a cell as a CSV would hold it, numbers at full precision.

    >>> [_text(x) for x in (None, True, 120.0, 0.1, " Weld ")]
    ['', 'true', '120', '0.1', ' Weld ']
    """
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return str(int(value)) if value.is_integer() and abs(value) < WHOLE else repr(value)
    return value.isoformat() if isinstance(value, (date, time)) else str(value)


def _refused(name: str, found: str, allowed: str) -> InputError:
    return InputError([Fault(name, "", found, allowed)])
