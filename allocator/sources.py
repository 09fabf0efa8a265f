"""Where does each figure of a scenario come from, in the words of whoever wrote it down."""

from __future__ import annotations

from collections.abc import Iterator

from allocator.results import Sources, Stated
from allocator.scenario.model import Alternative, Scenario, Step, Table

NOT_STATED = "not stated"
REMARKS = {"source", "evidence", "note"}
MOST_LISTED = 240
"""Tables listed; a page that holds every table of a thousand steps would not be read."""


def sources_of(scenario: Scenario) -> Sources:
    """Return every table that holds figures, with source, evidence and note; those that state any come first.

    A table without remarks of its own takes those of the step it belongs to.
    """
    tables = list(_tables(scenario))
    by_evidence: dict[str, int] = {}
    for stated in tables:
        kind = stated.evidence or NOT_STATED
        by_evidence[kind] = by_evidence.get(kind, 0) + 1
    listed = tables
    if len(tables) > MOST_LISTED:
        listed = [t for t in tables if t.evidence or t.source or t.note][:MOST_LISTED]
    return Sources(tuple(listed), by_evidence, len(tables) - len(listed))


def _tables(scenario: Scenario) -> Iterator[Stated]:
    yield _stated("the line", "demand", scenario.demand, scenario)
    if scenario.target.losses or scenario.target.escape_cost:
        yield _stated("the line", "target", scenario.target, scenario)
    if scenario.limits.capital is not None:
        yield _stated("the line", "limits", scenario.limits, scenario)
    for name in ("inspection", "rework"):
        table = getattr(scenario.default, name)
        if table is not None:
            yield _stated("the line", f"default {name}", table, scenario.default)
    for purchase in scenario.purchase:
        yield _stated("shared purchase", purchase.name, purchase, purchase)
    for step in scenario.step:
        yield from _of_step(step)


def _of_step(step: Step) -> Iterator[Stated]:
    yield _stated(step.name, "capability", step.capability, step)
    for name in ("inspection", "rework", "at_least", "improve"):
        table = getattr(step, name)
        if table is not None:
            yield _stated(step.name, "floor" if name == "at_least" else name, table, step)
    for alternative in step.alternative:
        yield _stated(step.name, alternative.name, alternative, step)


def _stated(where: str, what: str, table: Table, outer: Table) -> Stated:
    quoted = table.capability if isinstance(table, Alternative) else None
    remarks = [_remark(name, table, quoted, outer) for name in ("evidence", "source", "note")]
    return Stated(where, what, _given(table), remarks[0], remarks[1], remarks[2])


def _remark(name: str, *tables: Table | None) -> str | None:
    return next((found for table in tables if table is not None and (found := getattr(table, name))), None)


def _given(table: Table) -> str:
    """Return the figures of a table as written, keys and values."""
    written = table.model_dump(exclude_unset=True, by_alias=True, exclude=REMARKS | {"name", "group", "losses"})
    return _words(written)


def _words(written: dict[str, object]) -> str:
    parts = []
    for key, value in written.items():
        if isinstance(value, dict):
            parts.append(f"{key} ({_words({k: v for k, v in value.items() if k not in REMARKS})})")
        elif isinstance(value, (list, tuple)):
            parts.append(f"{len(value)} {key}")
        elif value is not None:
            parts.append(f"{key} {value:.6g}" if isinstance(value, float) else f"{key} {value}")
    return ", ".join(parts)
