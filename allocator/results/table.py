"""How records become tables, and columns become records."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import fields, is_dataclass, make_dataclass
from functools import cache
from typing import TYPE_CHECKING, Any, TypeVar, get_args, get_origin, get_type_hints

if TYPE_CHECKING:
    import pandas


PLAIN = ("level", "target", "figures", "money", "yields", "savings")
"""Nested records whose figures need no suffix: those of which the whole row speaks."""


def as_table(kind: type[Any], rows: Sequence[Any]) -> pandas.DataFrame:
    """Return records of a kind as a table, one row each, one column per field.

    The figures of a nested record become columns of their own; those that the row speaks of keep their names (`cpk`),
    those of any other bear its name too (`cpk_today`). Lists of records are tables of their own and left out. Without
    rows the columns are still there.
    """
    import pandas  # here, because only those who ask for a table should wait for it

    columns = dict(_columns(kind))
    return pandas.DataFrame({name: [_get(row, path) for row in rows] for name, path in columns.items()})


def _columns(kind: type[Any], path: tuple[str, ...] = (), suffix: str = "") -> Iterator[tuple[str, tuple[str, ...]]]:
    """Yield the columns of a table, each with the path to its figure."""
    hints = get_type_hints(kind)
    for field in fields(kind):
        hint, here = hints[field.name], (*path, field.name)
        inner: list[type[Any]] = [
            part for part in (hint, *get_args(hint)) if isinstance(part, type) and is_dataclass(part)
        ]
        if not inner:
            yield field.name.rstrip("_") + suffix, here
        elif get_origin(hint) is not tuple:
            yield from _columns(inner[0], here, suffix if field.name in PLAIN else f"{suffix}_{field.name}")


def _get(row: Any, path: tuple[str, ...]) -> Any:
    """Return the figure at a path, None where a record on the way is not there."""
    for name in path:
        row = None if row is None else getattr(row, name)
    return row


Record = TypeVar("Record")


def records(kind: type[Record], columns: dict[str, Sequence[Any]]) -> tuple[Record, ...]:
    """Return one record per row of columns that name every field; quicker than calling the class row by row."""
    wanted = [f.name for f in fields(kind)]  # type: ignore[arg-type]
    assert sorted(columns) == sorted(wanted), "columns and fields are the same"
    assert len({len(values) for values in columns.values()}) <= 1, "one entry per row in every column"
    thawed: type[Any] = _thawed(kind)  # type: ignore[arg-type]
    made = tuple(map(thawed, *(columns[name] for name in wanted)))
    for record in made:
        object.__setattr__(record, "__class__", kind)
    return made


@cache
def _thawed(kind: type[Any]) -> type[Any]:
    """Return a class of the same fields whose records can still be set, which takes a third of the time."""
    return make_dataclass(kind.__name__, [f.name for f in fields(kind)])
