"""How records become tables, and columns become records."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, fields
from typing import TYPE_CHECKING, Any, TypeVar

if TYPE_CHECKING:
    import pandas


def as_table(rows: Sequence[Any]) -> pandas.DataFrame:
    """Return records as a table, one row each; nested figures become columns such as `target.cpk`."""
    import pandas  # here, because only those who ask for a table should wait for it

    return pandas.json_normalize([asdict(row) for row in rows])


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
