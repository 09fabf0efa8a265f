"""Which measurements stand in a file: one column of numbers, with the subgroup of each where a column names it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from allocator.errors import InputError
from allocator.scenario.faults import did_you_mean, shown
from allocator.scenario.model import LARGEST
from allocator.scenario.tables import read_cells, read_text

FEWEST = 2
"""A spread needs two measurements."""


class UnusableError(Exception):
    """A file gives no measurements to work with: which key is at fault, what was found, what is allowed."""

    def __init__(self, key: str, found: str, allowed: str):
        self.key, self.found, self.allowed = key, found, allowed
        super().__init__(found)


@dataclass(frozen=True)
class Measurements:
    """The measurements of one column in the order of the file, with the row of each and its subgroup, if any."""

    column: str
    values: tuple[float, ...]
    rows: tuple[int, ...]
    subgroups: tuple[str, ...] | None


def read_measurements(path: Path, name: str, column: str | None, subgroup: str | None = None) -> Measurements:
    """Return the measurements in a column of a CSV file; rows with an empty cell there are left out.

    Parameters
    ----------
    path : Path
    name : str
        The file as the user wrote it.
    column, subgroup : str, optional
        Names in the header; a file of one column needs none, and may have no header either.

    Raises
    ------
    UnusableError
        When the file, a column or a value cannot be used.
    """
    try:
        cells = [
            (i, row) for i, row in enumerate(read_cells(read_text(path, name), name), 1) if any(map(str.strip, row))
        ]
    except InputError as error:
        raise UnusableError("data", f"'{name}': {error.faults[0].found}", error.faults[0].allowed) from None
    header = [cell.strip() for cell in cells[0][1]]
    position = 0 if column is None and len(header) == 1 else _position("column", column, header)
    headless = len(header) == 1 and column is None and _number(header[0]) is not None
    body = cells if headless else cells[1:]
    filled = [(row, of.strip()) for row, of in _column(body, position) if of.strip()]
    values = _numbers(filled, name)
    rows = tuple(row for row, _ in filled)
    groups = None if subgroup is None else _subgroups(body, rows, _position("subgroup", subgroup, header), name)
    return Measurements(header[position] if not headless else "", values, rows, groups)


def _position(key: str, column: str | None, header: Sequence[str]) -> int:
    if column in header:
        if header.count(column) > 1:
            raise UnusableError(key, f"{shown(column)}, which the file has twice", "give every column its own name")
        return header.index(column)
    found = "nothing" if column is None else f"{shown(column)}, which is no column of the file"
    allowed = did_you_mean(column or "", header, f"name one of the columns {', '.join(header)}")
    raise UnusableError(key, found, allowed)


def _column(body: Sequence[tuple[int, list[str]]], position: int) -> list[tuple[int, str]]:
    return [(row, of[position] if position < len(of) else "") for row, of in body]


def _numbers(cells: Sequence[tuple[int, str]], name: str) -> tuple[float, ...]:
    wrong = [(row, cell) for row, cell in cells if _number(cell) is None]
    if wrong:
        more = f" and {len(wrong) - 3:,} more" if len(wrong) > 3 else ""
        found = ", ".join(f"{shown(cell)} in row {row}" for row, cell in wrong[:3]) + more
        raise UnusableError("data", f"'{name}': {found}", "give numbers with a decimal point, or delete the row")
    values = tuple(float(cell) for _, cell in cells)
    if len(values) < FEWEST:
        found = f"'{name}': {len(values)} measurement" + ("" if len(values) == 1 else "s")
        raise UnusableError("data", found, f"a spread needs at least {FEWEST} measurements")
    if min(values) == max(values):
        found = f"'{name}': all {len(values)} measurements equal {values[0]:g}"
        raise UnusableError("data", found, "a process has some spread: measure with a finer gauge")
    return values


def _number(cell: str) -> float | None:
    try:
        value = float(cell)
    except ValueError:
        return None
    return value if math.isfinite(value) and abs(value) <= LARGEST else None


def _subgroups(body: Sequence[tuple[int, list[str]]], rows: Sequence[int], position: int, name: str) -> tuple[str, ...]:
    label = {row: cell.strip() for row, cell in _column(body, position)}
    empty = [row for row in rows if not label[row]]
    if empty:
        allowed = "name the subgroup of every measurement, or leave out --subgroup"
        raise UnusableError("subgroup", f"'{name}': nothing in row {empty[0]}", allowed)
    labels = tuple(label[row] for row in rows)
    if len(set(labels)) == len(labels):
        found = f"'{name}': {len(labels)} subgroups of one part each"
        raise UnusableError(
            "subgroup", found, "a subgroup needs two parts or more to show a spread within; leave it out"
        )
    return labels
