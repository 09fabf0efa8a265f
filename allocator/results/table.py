"""How records become tables, and columns become records."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import fields, is_dataclass
from operator import attrgetter
from typing import TYPE_CHECKING, Any, TypeVar, get_type_hints

if TYPE_CHECKING:
    import pandas


PLAIN = ("level", "target")
"""Nested records whose figures need no suffix: the level of which the whole row speaks."""


def as_table(kind: type[Any], rows: Sequence[Any]) -> pandas.DataFrame:
    """Return records of a kind as a table, one row each, one column per field.

    The figures of a nested record become columns of their own; those of the level that the row speaks of keep their
    names (`cpk`), those of any other bear its name too (`cpk_today`). Without rows the columns are still there.
    """
    import pandas  # here, because only those who ask for a table should wait for it

    getters = {name: attrgetter(path) for name, path in _columns(kind).items()}
    return pandas.DataFrame({name: [get(row) for row in rows] for name, get in getters.items()})


def _columns(kind: type[Any]) -> dict[str, str]:
    """Return the columns of a table, each with the path to its figure."""
    hints, found = get_type_hints(kind), {}
    for field in fields(kind):
        if not is_dataclass(hints[field.name]):
            found[field.name.rstrip("_")] = field.name
            continue
        suffix = "" if field.name in PLAIN else f"_{field.name}"
        found |= {f"{inner.name}{suffix}": f"{field.name}.{inner.name}" for inner in fields(hints[field.name])}
    return found


Record = TypeVar("Record")


def records(kind: type[Record], columns: dict[str, Sequence[Any]]) -> tuple[Record, ...]:
    """Return one record per row of columns that name every field; quicker than calling the class row by row."""
    wanted = [f.name for f in fields(kind)]  # type: ignore[arg-type]
    assert sorted(columns) == sorted(wanted), "columns and fields are the same"
    made = []
    for row in zip(*(columns[name] for name in wanted), strict=True):
        record = object.__new__(kind)
        record.__dict__.update(zip(wanted, row, strict=True))
        made.append(record)
    return tuple(made)
