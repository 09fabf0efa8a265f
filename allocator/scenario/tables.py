"""What stands in a table of steps or alternatives: CSV columns to the same nested keys as in the scenario file."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from allocator.errors import Fault, InputError
from allocator.scenario.faults import SHOWN, did_you_mean, hint
from allocator.scenario.misplaced import instead
from allocator.scenario.model import Alternative, Quote, Table
from allocator.scenario.schema import columns, spec
from allocator.scenario.sheets import Cells, is_workbook, one_sheet, place

SEPARATORS = ";,\t"
OF_A_STEP: tuple[type[Table], ...] = (Alternative, Quote)
"""Records of which a step can have several: their rows name it in a column `step`."""
TRUTHS = {"true": True, "yes": True, "false": False, "no": False}


@dataclass
class TableRead:
    """The rows of one table as nested dicts, the row that each was written in, and what is wrong with its columns.

    `lost` are the first keys of columns that could not be used: their absence must not be reported again.
    """

    file: str
    records: list[dict[str, Any]] = field(default_factory=list)
    rows: list[int] = field(default_factory=list)
    owners: list[str] = field(default_factory=list)
    faults: list[Fault] = field(default_factory=list)
    lost: set[str] = field(default_factory=set)


def read_text(path: Path, name: str) -> str:
    """Return a file's text, or say in one fault (InputError) why it cannot be read."""
    try:
        data = path.read_bytes()
    except FileNotFoundError:
        raise _refused(name, "no such file", f"check the name; it was looked for as {path}") from None
    except IsADirectoryError:
        raise _refused(name, "a folder", "name a file") from None
    except OSError as error:
        raise _refused(name, error.strerror or "an error", "make the file readable") from None
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise _refused(name, f"bytes on line {line} that are no UTF-8", "save the file as UTF-8") from None
    if not text.strip():
        raise _refused(name, "an empty file", "write it, or name another file")
    return text


def _refused(name: str, found: str, allowed: str) -> InputError:
    return InputError([Fault(name, "", found, allowed)])


def read_cells(text: str, name: str) -> Cells:
    """Return header and rows; the separator is the one that the header line has most of.

    Raises
    ------
    InputError
        When the text is no table.
    """
    header = text.lstrip("\r\n").splitlines()[0]
    separator = max(SEPARATORS, key=header.count) if any(s in header for s in SEPARATORS) else ","
    try:
        return list(csv.reader(io.StringIO(text, newline=""), delimiter=separator))
    except csv.Error as error:
        raise _refused(name, f"a table that cannot be read ({error})", "save the sheet as CSV (UTF-8)") from None


def read_table(folder: Path, name: str, record: type[Table]) -> TableRead:
    """Return the rows of a table of steps, or of alternatives: a CSV file, or one sheet of a workbook.

    Parameters
    ----------
    folder : Path
        Where the file lies.
    name : str
        The file's name, for a workbook with the sheet's, as ``"book.xlsx#steps"``.

    Raises
    ------
    InputError
        When the file cannot be read as a table at all.
    """
    file, _, sheet = name.partition("#")
    if not is_workbook(file):
        return table_of(read_cells(read_text(folder / name, name), name), name, record)
    where = place(file, sheet) if sheet else file
    cells = one_sheet(folder / file, file, sheet)
    if not any(any(map(str.strip, row)) for row in cells):
        raise _refused(where, "an empty sheet", "write it, or name another sheet")
    return table_of(cells, where, record)


def table_of(cells: Cells, name: str, record: type[Table]) -> TableRead:
    """Return the rows of a table whose header names keys of a record; some cell is not blank.

    Rows that belong to a step say so in a column `step`. Values that do not convert stay texts, for the check of the
    keys to report with their row.
    """
    table = TableRead(name)
    written = [(number, row) for number, row in enumerate(cells, start=1) if row and any(map(str.strip, row))]
    header, body = [cell.strip() for cell in written[0][1]], written[1:]
    table.rows = [number for number, _ in body]
    _refuse_long_rows(table, body, len(header))
    used = _usable_columns(table, header, record)
    width = len(header)
    full = [row if len(row) == width else (row + [""] * width)[:width] for _, row in body]
    if record in OF_A_STEP:
        at = header.index("step") if "step" in header else None
        table.owners = [row[at].strip() if at is not None else "" for row in full]
    filled = {keys: _converted([row[i] for row in full], record, keys) for i, keys in used.items()}
    table.records = _nested(filled, len(body))
    return table


def _refuse_long_rows(table: TableRead, body: Sequence[tuple[int, list[str]]], width: int) -> None:
    long = [number for number, row in body if len(row) > width and any(map(str.strip, row[width:]))]
    if long:
        more = f" and {len(long) - SHOWN:,} more" if len(long) > SHOWN else ""
        places = ", ".join(f"row {number}" for number in long[:SHOWN]) + more
        allowed = f"the header names {width} columns; put a text that holds the separator in quotes"
        table.faults.append(Fault(f"{table.file}, {places}", "", "more cells than columns", allowed))


def _usable_columns(table: TableRead, header: list[str], record: type[Table]) -> dict[int, tuple[str, ...]]:
    """Return the path of keys of every column that can be used; the others are reported once each."""
    known = columns(record)
    if record in OF_A_STEP:
        known["step"] = ("step",)
    used: dict[int, tuple[str, ...]] = {}
    for i, name in enumerate(header):
        path = known.get(name)
        if path == ("step",) and "step" not in header[:i]:
            continue
        if path is None:
            _report_column(table, name, i, record, known)
        elif path in used.values() or path == ("step",):
            table.faults.append(Fault(table.file, f"column '{name}'", "the same column twice", "keep one of the two"))
        else:
            used[i] = path
    if record in OF_A_STEP and "step" not in header and "step" not in table.lost:
        table.lost.add("step")
        allowed = "add a column `step` with the name of the step that each row belongs to"
        table.faults.append(Fault(table.file, "column 'step'", "nothing", allowed))
    return used


def _report_column(
    table: TableRead, name: str, position: int, record: type[Table], known: dict[str, tuple[str, ...]]
) -> None:
    if not name:
        allowed = "name the column, or delete it"
        table.faults.append(Fault(table.file, f"column {position + 1}", "a column without a name", allowed))
        return
    if "array" in spec(record, name.split(".")).kinds:
        allowed = "leave it out: a list does not fit into a cell; write that step as [[step]] in the scenario file"
        table.faults.append(Fault(table.file, f"column '{name}'", "a column for a list", allowed))
        table.lost.add(name.split(".")[0])
        return
    otherwise = "a column bears the name of a key, as name, cost_added, cp, inspection.finds, improve.law"
    allowed = instead(record, (name,)) or did_you_mean(name, known, otherwise)
    table.faults.append(Fault(table.file, f"column '{name}'", "an unknown column", allowed))
    near = hint(name, known)
    table.lost.add(known[near][0] if near else name)


def value_of(text: str, record: type[Table], path: tuple[str, ...]) -> Any:
    """Return one text as the kind of value that stands at a path of keys; what does not convert stays text."""
    return _converted([text], record, path)[0]


def number_of(text: str) -> float | str:
    """Return a number where the text is one."""
    number: float | str = _one(text, _whole)
    return number


def _converted(cells: Sequence[str], record: type[Table], path: tuple[str, ...]) -> list[Any]:
    kinds = spec(record, path).kinds if path else ()
    if "number" in kinds:
        return _each(cells, float)
    if "integer" in kinds:
        return _each(cells, _whole)
    if "boolean" in kinds:
        return _each(cells, lambda cell: TRUTHS[cell.strip().lower()])
    return [cell.strip() or None for cell in cells]


def _each(cells: Sequence[str], convert: Callable[[str], Any]) -> list[Any]:
    """Convert a column at once; only where that fails look at every cell, and leave as text what does not convert."""
    try:
        return [convert(cell) if cell else None for cell in cells]
    except (ValueError, KeyError):
        return [_one(cell.strip(), convert) for cell in cells]


def _one(cell: str, convert: Callable[[str], Any]) -> Any:
    try:
        return convert(cell) if cell else None
    except (ValueError, KeyError):
        return cell


def _whole(cell: str) -> int | float:
    """Return a whole number; 120.0, as sheets write it, is 120, and 120.5 stays for the check to refuse."""
    try:
        return int(cell)
    except ValueError:
        number = float(cell)
        return int(number) if number.is_integer() else number


def _nested(filled: dict[tuple[str, ...], list[Any]], count: int) -> list[dict[str, Any]]:
    """Return one nested dict per row; cells that are empty, and tables all empty, are left out."""
    inner: dict[str, dict[tuple[str, ...], list[Any]]] = {}
    for path, values in filled.items():
        if len(path) > 1:
            inner.setdefault(path[0], {})[path[1:]] = values
    merged = {path[0]: values for path, values in filled.items() if len(path) == 1}
    for key, deeper in inner.items():
        tables = [table or None for table in _nested(deeper, count)]
        merged[key] = list(map(_number_or_table, merged[key], tables)) if key in merged else tables
    if not merged:
        return [{} for _ in range(count)]
    keys = tuple(merged)
    if not any(None in values for values in merged.values()):
        return [dict(zip(keys, row, strict=True)) for row in zip(*merged.values(), strict=True)]
    return [
        {key: value for key, value in zip(keys, row, strict=True) if value is not None}
        for row in zip(*merged.values(), strict=True)
    ]


def _number_or_table(number: Any, table: dict[str, Any] | None) -> Any:
    """Return the one that is given; both together stay a list, for the check of the keys to refuse."""
    if number is not None and table is not None:
        return [number, table]
    return table if number is None else number
