"""What every answer for programs shares: JSON and CSV at full precision, records picked apart, nothing made up."""

from __future__ import annotations

import csv
import json
import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from io import StringIO
from itertools import islice
from json.encoder import encode_basestring_ascii
from operator import attrgetter
from types import NoneType
from typing import Any

from allocator.report.blocks import MONEY_KINDS
from allocator.report.words import YIELDS
from allocator.results import BestReachable, Caution, Money, TodayLine, Yields

MANY = 500
"""Records written at a time: they, and what is written of them, stay within reach of the processor."""


@dataclass(frozen=True)
class Told:
    """Records to be told of by the same keys (key -> where the figure stands); made into text a few at a time."""

    records: Sequence[Any]
    keys: dict[str, str]

    def __iter__(self) -> Iterator[dict[str, Any]]:
        return (dict(zip(self.keys, row, strict=True)) for row in self._rows())

    def lines(self) -> Iterator[str]:
        """Yield every record as JSON on one line, written column by column: long lines spend their time here."""
        form = ", ".join(f"{json.dumps(key)}: %s" for key in self.keys)
        rows = self._rows()
        while some := list(islice(rows, MANY)):
            yield from map(f"{{{form}}}".__mod__, zip(*map(_column, zip(*some, strict=True)), strict=True))

    def _rows(self) -> Iterator[tuple[Any, ...]]:
        return map(attrgetter(*self.keys.values()), self.records)


STRICT = json.JSONEncoder(allow_nan=False, default=list)


def to_json(content: dict[str, Any] | list[dict[str, Any]]) -> str:
    """Return the content as JSON, indented but for records in a list: these stand on one line each."""
    if isinstance(content, list):
        return _records(content, "") + "\n"
    parts = (f"  {json.dumps(key)}: {_value(value)}" for key, value in content.items())
    return "{\n" + ",\n".join(parts) + "\n}\n" if content else "{}\n"


def _value(value: Any) -> str:
    if isinstance(value, list | tuple) and value and all(isinstance(item, dict) for item in value):
        return _records(value, "  ")
    return _records(value, "  ") if isinstance(value, Told) else _one_line(value)


def _records(records: Told | Sequence[dict[str, Any]], indent: str) -> str:
    start = f"\n{indent}  "
    lines = f",{start}".join(records.lines() if isinstance(records, Told) else map(_one_line, records))
    return f"[{start}{lines}\n{indent}]" if lines else "[]"


def _column(values: tuple[Any, ...]) -> list[str]:
    kinds = set(map(type, values))
    if kinds == {NoneType}:
        return ["null"] * len(values)
    if kinds == {str}:
        return list(map(encode_basestring_ascii, values))
    if kinds == {float} and math.isfinite(sum(map(abs, values))):
        return list(map(repr, values))
    if kinds <= {float, NoneType}:
        return ["null" if v is None or not math.isfinite(v) else repr(v) for v in values]
    return ["true" if v else "false" for v in values] if kinds == {bool} else [_one_line(v) for v in values]


def _one_line(value: Any) -> str:
    if value is None or value == ():
        return "null" if value is None else "[]"
    try:
        return STRICT.encode(value)
    except ValueError:  # NaN or infinite somewhere
        return STRICT.encode(_finite(value))


def _finite(value: Any) -> Any:
    """The same content with None for NaN and the infinities, which JSON does not know."""
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple | Told):
        return [_finite(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def pick(record: object, keys: Sequence[str]) -> dict[str, Any]:
    return {key: getattr(record, key) for key in keys}


def yields_json(yields: Yields | None) -> dict[str, Any]:
    """The three yields and, apart, their losses (1 - yield loses its digits where the yield is very good)."""
    if yields is None:
        return {**dict.fromkeys(YIELDS), "loss": dict.fromkeys(YIELDS)}
    losses = (yields.rolled_loss, yields.final_loss, yields.shipped_loss)
    return {**pick(yields, YIELDS), "loss": dict(zip(YIELDS, losses, strict=True))}


def cost_json(money: Money | None) -> dict[str, Any] | None:
    return None if money is None else pick(money, ("total", *MONEY_KINDS))


def today_line_json(line: TodayLine) -> dict[str, Any]:
    cost = {"annual_cost": cost_json(line.money), "annual_cost_reason": line.money_reason}
    per_lot = {
        name: [{"lot": size, "bad": bad} for size, bad in getattr(line, name)]
        for name in ("bad_per_lot", "escaped_per_lot")
    }
    return {**yields_json(line.yields), **cost, "dpu": line.dpu, **per_lot}


def best_json(best: BestReachable | None) -> dict[str, Any] | None:
    return None if best is None else {"of": best.of, "yield": best.yield_, "loss": best.loss, "total": best.total}


def cautions_json(cautions: Sequence[Caution]) -> list[dict[str, Any]]:
    return [pick(caution, ("code", "steps", "reason", "fix")) for caution in cautions]


def cell(value: object) -> str:
    """One cell; unknown figures are empty, several names are parted by '; '."""
    if value is None or (isinstance(value, float) and not math.isfinite(value)):
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return repr(float(value))
    return "; ".join(value) if isinstance(value, tuple) else str(value)


def sheet(rows: Iterable[Iterable[object]]) -> str:
    """Rows, the first of them the header, as CSV."""
    text = StringIO()
    csv.writer(text, lineterminator="\n").writerows([cell(value) for value in row] for row in rows)
    return text.getvalue()


def record_table(columns: Mapping[str, str], currency: str, records: Iterable[object]) -> str:
    """One row per record: header name -> where the figure stands in it, {money} being the scenario's currency."""
    money = "_".join(currency.split()) or "money"
    getters = [attrgetter(path) for path in columns.values()]
    header = [name.format(money=money) for name in columns]
    return sheet([header, *([get(record) for get in getters] for record in records)])
