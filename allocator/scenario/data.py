"""What do measurements in a file say: mean, standard deviation and sample size, filled in beside the limits."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from allocator.errors import InputError
from allocator.scenario.faults import Damage, Finding, Owner, did_you_mean, shown
from allocator.scenario.tables import read_cells, read_text

COUNTED = ("mean", "std", "sample")
"""What the measurements themselves say; stating it as well could only contradict them."""


def fill_from_data(table: Any, owner: Owner, folder: Path | None, findings: list[Finding], damage: Damage) -> Any:
    """Return a step's or alternative's table with mean, std and sample of the file that its capability names.

    Anything else comes back as it is; what is wrong is added to the findings, and the capability to the damage.
    """
    capability = table.get("capability") if isinstance(table, dict) else None
    if not isinstance(capability, dict) or not isinstance(capability.get("data"), str):
        return table
    before = len(findings)
    stated = [key for key in COUNTED if key in capability]
    if stated:
        found = f"{' and '.join(stated)} beside data"
        findings.append(Finding(owner, "capability", found, "leave them out: they are counted from the file"))
    values = _values(capability, owner, folder, findings)
    if len(findings) > before:
        damage.add((owner, "capability"))
        return table
    statistics = {"mean": float(np.mean(values)), "std": float(np.std(values, ddof=1)), "sample": len(values)}
    return {**table, "capability": {**capability, **statistics}}


def _values(capability: dict[str, Any], owner: Owner, folder: Path | None, findings: list[Finding]) -> list[float]:
    """Return the numbers of the column, or [] after reporting why there are none to use."""

    def refuse(key: str, found: str, allowed: str) -> list[float]:
        findings.append(Finding(owner, f"capability.{key}", found, allowed))
        return []

    name = capability["data"]
    if folder is None:
        return refuse("data", shown(name), "no folder is known to look in: give lsl, usl, mean, std and sample instead")
    try:
        cells = [row for row in read_cells(read_text(folder / name, name), name) if any(map(str.strip, row))]
    except InputError as error:
        return refuse("data", f"'{name}': {error.faults[0].found}", error.faults[0].allowed)
    header = [cell.strip() for cell in cells[0]]
    position = _position(capability.get("column"), header, findings, owner)
    if position is None:
        return []
    headless = len(header) == 1 and capability.get("column") is None and _number(header[0]) is not None
    return _checked([row[position] if position < len(row) else "" for row in cells], headless, name, refuse)


def _position(column: object, header: Sequence[str], findings: list[Finding], owner: Owner) -> int | None:
    if column is None and len(header) == 1:
        return 0
    if column in header:
        return header.index(str(column))
    allowed = did_you_mean(str(column or ""), header, f"name one of the columns {', '.join(header)}")
    found = "nothing" if column is None else f"{shown(column)}, which is no column of the file"
    findings.append(Finding(owner, "capability.column", found, allowed))
    return None


def _checked(column: list[str], headless: bool, name: str, refuse: Any) -> list[float]:
    start = 0 if headless else 1
    cells = [(row, cell.strip()) for row, cell in enumerate(column[start:], start=start + 1) if cell.strip()]
    wrong = [(row, cell) for row, cell in cells if _number(cell) is None]
    if wrong:
        more = f" and {len(wrong) - 3:,} more" if len(wrong) > 3 else ""
        found = ", ".join(f"{cell!r} in row {row}" for row, cell in wrong[:3]) + more
        return list(refuse("data", f"'{name}': {found}", "give numbers with a decimal point, or delete the row"))
    values = [float(cell) for _, cell in cells]
    if len(values) < 2:
        found = f"'{name}': {len(values)} measurement" + ("" if len(values) == 1 else "s")
        return list(refuse("data", found, "a spread needs at least 2 measurements"))
    if float(np.std(values)) == 0.0:
        found = f"'{name}': all {len(values)} measurements equal {values[0]:g}"
        return list(refuse("data", found, "a process has some spread: measure with a finer gauge"))
    return values


def _number(cell: str) -> float | None:
    try:
        value = float(cell)
    except ValueError:
        return None
    return value if math.isfinite(value) else None
