"""Long lines with figures drawn over decades: the same line as columns of a table, as nested dicts and as a file."""

from __future__ import annotations

import csv
import json
from pathlib import Path
from typing import Any

import numpy as np

Columns = dict[str, list[Any]]


def long_steps(steps: int, *, tree: bool = False, defects: float = 0.2, seed: int = 5) -> Columns:
    """Steps that together make about `defects` per unit today, each with a law of its own; columns as in a table."""
    draw = np.random.default_rng(seed)
    rate = 10.0 ** draw.uniform(-1.5, 1.0, steps)
    rate *= defects / rate.sum()
    power = draw.random(steps) < 0.4
    columns: Columns = {
        "name": [f"c{i}" for i in range(steps)],
        "supplier": [f"firm {i % 37}" if i % 2 else None for i in range(steps)],
        "cost_added": [float(f"{cost:.4g}") for cost in 10.0 ** draw.uniform(0.0, 2.0, steps) / steps],
        "defect_rate": [float(f"{p:.6g}") for p in rate],
        "improve.law": ["power" if is_power else "decade" for is_power in power],
        "improve.per_year": [float(f"{y:.4g}") for y in 10.0 ** draw.uniform(2.0, 5.0, steps) / steps],
        "improve.exponent": [
            float(a) if is_power else None
            for a, is_power in zip(draw.choice([0.8, 1.0, 1.5], steps), power, strict=True)
        ],
    }
    if tree:
        fed = np.minimum(np.arange(steps) + draw.integers(1, 6, steps), steps - 1)
        columns["feeds"] = [*(f"c{i}" for i in fed[:-1]), None]
    return columns


def long_alternatives(columns: Columns, offers: int, seed: int = 6) -> Columns:
    """Machines for every step, the better the dearer."""
    draw, steps = np.random.default_rng(seed), len(columns["name"])
    gain = np.sort(10.0 ** -draw.uniform(0.05, 1.6, (steps, offers)), axis=1)[:, ::-1]
    price = np.sort(10.0 ** draw.uniform(3.0, 6.0, (steps, offers)), axis=1) / steps
    rate = np.array(columns["defect_rate"])[:, None] * gain
    return {
        "step": [name for name in columns["name"] for _ in range(offers)],
        "name": [f"machine {j}" for _ in range(steps) for j in range(offers)],
        "defect_rate": [float(f"{p:.6g}") for p in rate.ravel()],
        "price": [float(f"{p:.5g}") for p in price.ravel()],
    }


def head(target: float | None) -> dict[str, Any]:
    """All that is said of the line as a whole."""
    return {
        "title": "Long line",
        "currency": "EUR",
        "demand": {"shipped_per_year": 50_000, "years": 8, "discount_rate": 0.08},
        "target": {} if target is None else {"final_yield": target},
        "default": {"inspection": {"finds": 0.9, "earlier": 0.3}, "rework": {"share": 0.4, "cost": 1.0}},
    }


def as_scenario(columns: Columns, target: float | None, alternatives: Columns | None = None) -> dict[str, Any]:
    """The line in nested dicts, as a scenario file would hold it."""
    steps = [_nested(row) for row in _rows(columns)]
    if alternatives is not None:
        offered: dict[str, list[dict[str, Any]]] = {}
        for row in _rows(alternatives):
            offered.setdefault(row.pop("step"), []).append(_nested(row))
        for step in steps:
            step["alternative"] = offered[step["name"]]
    return head(target) | {"step": steps}


def _rows(columns: Columns) -> list[dict[str, Any]]:
    return [dict(zip(columns, row, strict=True)) for row in zip(*columns.values(), strict=True)]


def _nested(row: dict[str, Any]) -> dict[str, Any]:
    record: dict[str, Any] = {"capability": {"defect_rate": row.pop("defect_rate")}}
    for key, value in row.items():
        outer, _, inner = key.rpartition(".")
        if value is not None:
            (record.setdefault(outer, {}) if outer else record)[inner] = value
    return record


def write_line(folder: Path, columns: Columns, target: float | None, alternatives: Columns | None = None) -> Path:
    """Write the line as a scenario with its tables beside it, and return the scenario's path."""
    lines = ['steps_from = "steps.csv"']
    tables = {"steps.csv": columns}
    if alternatives is not None:
        lines.append('alternatives_from = "offers.csv"')
        tables["offers.csv"] = alternatives
    for name, table in tables.items():
        with open(folder / name, "w", newline="", encoding="utf-8") as file:
            writer = csv.writer(file)
            writer.writerow(table)
            writer.writerows(zip(*table.values(), strict=True))
    for key, value in head(target).items():
        lines.append(f"{key} = {_toml(value)}")
    path = folder / "line.toml"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def _toml(value: Any) -> str:
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{key} = {_toml(inner)}" for key, inner in value.items()) + " }"
    return json.dumps(value)
