"""What does a scenario file say: read it with its tables, check it twice, and report everything wrong at once.

Rows of `steps_from` stand before the [[step]] tables (in a workbook, the sheet `step`), as that key itself does in the
file (TOML has its plain keys first); rows of `alternatives_from` stand after a step's own [[step.alternative]] tables.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from allocator.errors import Fault, InputError
from allocator.scenario.book import read_book
from allocator.scenario.cross import cross_findings
from allocator.scenario.data import fill_from_data
from allocator.scenario.faults import Damage, Finding, Owner, Places, did_you_mean, hint, shown, to_faults
from allocator.scenario.keys import bulk, read_record, read_steps
from allocator.scenario.model import Alternative, Head, Purchase, Quote, Scenario, Step, Table
from allocator.scenario.sheets import is_workbook
from allocator.scenario.tables import TableRead, read_table, read_text
from allocator.scenario.target import read_target

OUTSIDE_HEAD = ("step", "target", "steps_from", "alternatives_from")


@dataclass
class _Reading:
    """A scenario being read: its raw steps, where they were written, and what was found wrong so far."""

    places: Places
    folder: Path | None
    steps: list[Any] = field(default_factory=list)
    faults: list[Fault] = field(default_factory=list)
    findings: list[Finding] = field(default_factory=list)
    damage: Damage = field(default_factory=set)
    tables: dict[type[Table], TableRead] = field(default_factory=dict)
    """Sheets of rows, when the scenario is a workbook."""


def read_scenario(path: str | Path) -> Scenario:
    """Return the scenario in a TOML file or a workbook (.xlsx), its tables read and everything checked.

    Parameters
    ----------
    path : str or Path
        Files that it names (tables, measurements) are looked for beside it.

    Raises
    ------
    InputError
        With every fault found, not only the first.
    """
    path = Path(path)
    if is_workbook(path):
        return _read_workbook(path)
    if path.suffix.lower() == ".csv":
        allowed = 'give the scenario file (TOML or .xlsx); it names its tables by steps_from = "steps.csv"'
        raise InputError([Fault(path.name, "", "a table", allowed)])
    text = read_text(path, path.name or str(path))  # "." has no name
    try:
        data = tomllib.loads(text)
    except ValueError as error:  # Also for a whole number of thousands of digits.
        raise InputError([_syntax_fault(path.name, text, str(error))]) from None
    except RecursionError:
        raise InputError([Fault(path.name, "", "brackets nested without end", "close them")]) from None
    with bulk():
        return _read(data, _Reading(Places(path.name), path.parent))


def _read_workbook(path: Path) -> Scenario:
    book = read_book(path)
    reading = _Reading(Places(path.name, sheets=True), path.parent, faults=book.faults, tables=book.tables)
    purchases = book.tables.get(Purchase)
    if purchases is not None:
        book.data["purchase"] = purchases.records
        for i, row in enumerate(purchases.rows):
            reading.places.rows[("purchase", i)] = (purchases.file, row)
            reading.damage.update((("purchase", i), topic) for topic in purchases.lost)
    with bulk():
        return _read(book.data, reading)


def _syntax_fault(name: str, text: str, message: str) -> Fault:
    """Return the place of a TOML error as line and column, with the line itself."""
    place = re.search(r" \(at line (\d+), column (\d+)\)$", message)
    if place is None:
        return Fault(name, "", f"text that is not TOML ({message})", "complete it, quotes and brackets closed")
    line, column = int(place[1]), int(place[2])
    written = text.split("\n")[line - 1].strip()
    where = f"{name}, line {line}, column {column}"
    return Fault(where, "", f"{shown(written)}, which is not TOML", _syntax_remedy(message[: place.start()], written))


def _syntax_remedy(said: str, written: str) -> str:
    """Return what to do about a TOML error, in the words of someone who never heard of a parser where possible."""
    if said == "Cannot overwrite a value":
        return "a key stands once in a table: keep one of the two"
    if re.search(r"=\s*-?\d+,\d", written):
        return "a number has a decimal point, as 1.5"
    if said == "Invalid value":
        return 'a text stands in quotes, as "Weld"'
    return f"correct it: {said}"


def scenario_from_dict(data: dict[str, Any], file: str = "scenario", folder: Path | None = None) -> Scenario:
    """Return the scenario in nested dicts, as a TOML file would hold it (None = not given).

    Parameters
    ----------
    data : dict
    file : str
        Its name in messages.
    folder : Path, optional
        Where files named by it are looked for; without one, it may name none.

    Raises
    ------
    InputError
        With every fault found, not only the first.
    """
    with bulk():
        return _read(_without_none(data), _Reading(Places(file), folder))


def _without_none(value: Any) -> Any:
    """Return a copy of nested dicts and lists without keys whose value is None: that is how Python says "not given"."""
    if isinstance(value, dict):
        return {key: _without_none(inner) for key, inner in value.items() if inner is not None}
    return [_without_none(inner) for inner in value] if isinstance(value, (list, tuple)) else value


def _read(data: dict[str, Any], reading: _Reading) -> Scenario:
    data = _with_known_keys(data, reading)
    _collect_steps(data, reading)
    _collect_alternatives(data, reading)
    _collect_points(reading)
    _name_places(reading)
    _fill_measurements(reading)
    head = _read_head(data, reading)
    target = read_target(data.get("target", {}), reading.findings, reading.damage)
    steps = read_steps(reading.steps, reading.findings, reading.damage)
    reading.steps = []  # Of a long table, the records are enough to hold in memory.
    for i, purchase in enumerate(head.purchase):
        reading.places.names[("purchase", i)] = purchase.name
    scenario = Scenario.model_construct(
        **{name: getattr(head, name) for name in head.model_fields_set}, target=target, step=tuple(steps),
        file=reading.places.file,
    )  # fmt: skip
    if steps:
        reading.findings += cross_findings(scenario, reading.damage)
    faults = [*reading.faults, *to_faults(reading.findings, reading.places)]
    if faults:
        raise InputError(faults)
    return scenario


def _with_known_keys(data: dict[str, Any], reading: _Reading) -> dict[str, Any]:
    """Return the top level without its unknown keys; a misspelled one is read on under the name that was meant."""
    known = [*Head.model_fields, *OUTSIDE_HEAD]
    sound = {key: value for key, value in data.items() if key in known}
    for key in [key for key in data if key not in known]:
        otherwise = f"the keys known here are {', '.join(known)}"
        reading.findings.append(Finding((), key, "an unknown key", did_you_mean(key, known, otherwise)))
        meant = hint(key, known)
        if meant is not None:
            sound.setdefault(meant, data[key])
    return sound


def _read_head(data: dict[str, Any], reading: _Reading) -> Head:
    """Return everything but steps and target."""
    raw = {key: value for key, value in data.items() if key not in OUTSIDE_HEAD}
    return read_record(Head, raw, (), reading.findings, reading.damage)


def _collect_steps(data: dict[str, Any], reading: _Reading) -> None:
    named = _table(data, "steps_from", Step, reading)
    for table in filter(None, (named, reading.tables.get(Step))):
        before = len(reading.steps)
        reading.steps += table.records
        owners: list[Owner] = [("step", i) for i in range(before, len(reading.steps))]
        reading.places.rows.update(zip(owners, [(table.file, row) for row in table.rows], strict=True))
        reading.damage.update((owner, topic) for topic in table.lost for owner in owners)
    own = data.get("step", [])
    if not isinstance(own, list):
        reading.findings.append(Finding((), "step", shown(own), "write every step as [[step]], in double brackets"))
        own = []
    reading.steps += own
    unreadable = "steps_from" in data and named is None
    if unreadable:
        reading.damage.update({(("step", -1), topic) for topic in ("name", "cost", "inspection")})
    elif not reading.steps and not any(finding.key == "step" for finding in reading.findings):
        form = "a row on the sheet `step`" if reading.places.sheets else "a [[step]]"
        reading.findings.append(Finding((), "step", "no step", f"add {form} for every step of the line, in its order"))


def _table(data: dict[str, Any], key: str, record: type[Table], reading: _Reading) -> TableRead | None:
    """Return the table that a key names, None without one or after reporting why it cannot be read."""
    if key not in data:
        return None
    name = data[key]
    if not isinstance(name, str) or not name:
        allowed = f'name a CSV file or a sheet, as {key} = "table.csv" or "book.xlsx#table"'
        reading.findings.append(Finding((), key, shown(name), allowed))
        return None
    if reading.folder is None:
        allowed = "no folder is known to look in: give the rows as step tables"
        reading.findings.append(Finding((), key, shown(name), allowed))
        return None
    try:
        table = read_table(reading.folder, name, record)
    except InputError as error:
        reading.faults += error.faults
        return None
    reading.faults += table.faults
    return table


def _collect_alternatives(data: dict[str, Any], reading: _Reading) -> None:
    named = _table(data, "alternatives_from", Alternative, reading)
    for table in filter(None, (reading.tables.get(Alternative), named)):
        for i, record, row in _of_steps(table, reading):
            own = reading.steps[i].get("alternative", [])
            if not isinstance(own, list):
                continue
            reading.steps[i] = {**reading.steps[i], "alternative": [*own, record]}
            owner = ("alternative", i, len(own))
            reading.places.rows[owner] = (table.file, row)
            reading.damage.update((owner, topic) for topic in table.lost)


def _collect_points(reading: _Reading) -> None:
    """Give the offers on their own sheet to the laws of their steps."""
    table = reading.tables.get(Quote)
    if table is None:
        return
    for i, record, _ in _of_steps(table, reading):
        law = reading.steps[i].get("improve", {})
        if isinstance(law, dict):
            reading.steps[i] = {**reading.steps[i], "improve": {**law, "points": [*law.get("points", []), record]}}
            reading.damage.update((("step", i), "improve") for _ in table.lost)


def _of_steps(table: TableRead, reading: _Reading) -> Iterator[tuple[int, Any, int]]:
    """Yield the rows of a table that belong to steps: the step's position, the record, its row; report the others."""
    index: dict[str, int] = {}
    for i, step in enumerate(reading.steps):
        if isinstance(step, dict) and isinstance(step.get("name"), str):
            index.setdefault(step["name"], i)
    for record, row, name in zip(table.records, table.rows, table.owners, strict=True):
        if name in index:
            yield index[name], record, row
        else:
            _unknown_owner(name, row, table, index, reading)


def _unknown_owner(name: str, row: int, table: TableRead, index: dict[str, int], reading: _Reading) -> None:
    if "step" in table.lost:
        return
    owner: Owner = ("row", row)
    reading.places.rows[owner] = (table.file, row)
    found = f"'{name}', which is no step" if name else "nothing"
    allowed = did_you_mean(name, index, "name a step of this scenario")
    reading.findings.append(Finding(owner, "step", found, allowed))


def _name_places(reading: _Reading) -> None:
    names = reading.places.names
    for i, step in enumerate(reading.steps):
        if not isinstance(step, dict):
            continue
        if isinstance(step.get("name"), str) and step["name"]:
            names[("step", i)] = step["name"]
        alternatives = step.get("alternative")
        for j, alternative in enumerate(alternatives if isinstance(alternatives, list) else ()):
            if isinstance(alternative, dict) and isinstance(alternative.get("name"), str) and alternative["name"]:
                names[("alternative", i, j)] = alternative["name"]


def _fill_measurements(reading: _Reading) -> None:
    """Put mean, std and sample in place of every file of measurements that a capability names."""

    def filled(table: Any, owner: Owner) -> Any:
        return fill_from_data(table, owner, reading.folder, reading.findings, reading.damage)

    for i, step in enumerate(reading.steps):
        if not isinstance(step, dict):
            continue
        step = filled(step, ("step", i))
        own = step.get("alternative")
        if isinstance(own, list) and own:
            step = {**step, "alternative": [filled(a, ("alternative", i, j)) for j, a in enumerate(own)]}
        reading.steps[i] = step
