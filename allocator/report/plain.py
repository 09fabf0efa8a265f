"""What every answer for programs shares: JSON and CSV at full precision, records picked apart, nothing made up."""

from __future__ import annotations

import csv
import json
import math
from collections.abc import Iterable, Mapping, Sequence
from io import StringIO
from operator import attrgetter
from typing import Any

from allocator.report.blocks import MONEY_KINDS
from allocator.report.words import YIELDS
from allocator.results import BestReachable, Caution, Money, TodayLine, Yields

STRICT = json.JSONEncoder(allow_nan=False)


def to_json(content: dict[str, Any] | list[dict[str, Any]]) -> str:
    """Return the content as JSON, indented but for records in a list: these stand on one line each."""
    if isinstance(content, list):
        return _records(content, "") + "\n"
    parts = (f"  {json.dumps(key)}: {_value(value)}" for key, value in content.items())
    return "{\n" + ",\n".join(parts) + "\n}\n" if content else "{}\n"


def _value(value: Any) -> str:
    if isinstance(value, list | tuple) and value and all(isinstance(item, dict) for item in value):
        return _records(value, "  ")
    return _one_line(value)


def _records(records: Sequence[dict[str, Any]], indent: str) -> str:
    lines = ",\n".join(f"{indent}  {_one_line(record)}" for record in records)
    return f"[\n{lines}\n{indent}]" if records else "[]"


def _one_line(value: Any) -> str:
    try:
        return STRICT.encode(value)
    except ValueError:  # NaN or infinite somewhere
        return STRICT.encode(_finite(value))


def _finite(value: Any) -> Any:
    """The same content with None for NaN and the infinities, which JSON does not know."""
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
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
    lots = [{"lot": size, "bad": bad} for size, bad in line.bad_per_lot]
    return {**yields_json(line.yields), **cost, "dpu": line.dpu, "bad_per_lot": lots}


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
