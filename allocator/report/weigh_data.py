"""Buy or leave as JSON (a list) and as CSV, at full precision."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

from allocator.report.plain import pick, record_table
from allocator.results import Weighed, Weighing

_BEFORE = ("step", "alternative", "in_plan", "total_without", "total_with", "worth_per_year", "break_even_price")
_COLUMNS = {
    "step": "step",
    "alternative": "alternative",
    "kind": "kind",
    "verdict": "verdict",
    "in_plan": "in_plan",
    "total_without_{money}_per_year": "total_without",
    "total_with_{money}_per_year": "total_with",
    "worth_{money}_per_year": "worth_per_year",
    "capital_{money}": "capital",
    "stated_price": "stated_price",
    "break_even_price": "break_even_price",
    "price_unit": "price_unit",
    "break_even_price_as_multiple_of_stated": "break_even_price_factor",
    "pays_from_volume_units_per_year": "break_even_volume",
    "pays": "pays",
    "break_even_sigma_level": "break_even_sigma_level",
    "break_even_cpk": "break_even_cpk",
    "break_even_dpmo": "break_even_dpmo",
    "against": "against",
}


def weigh_json(weighed: Weighed) -> list[dict[str, Any]]:
    return [_thing(row) for row in weighed.rows]


def _thing(row: Weighing) -> dict[str, Any]:
    level = row.break_even_capability
    return {
        **pick(row, _BEFORE),
        "break_even_volume": row.break_even_volume,
        "break_even_capability": None if level is None else pick(level, ("sigma_level", "cpk", "dpmo")),
        "verdict": row.verdict,
    }


def weigh_csv(weighed: Weighed) -> str:
    rows = (SimpleNamespace(**_columns(weighed, row)) for row in weighed.rows)
    return record_table(_COLUMNS, weighed.currency, rows)


def _columns(weighed: Weighed, row: Weighing) -> dict[str, Any]:
    level = row.break_even_capability
    figures = {f"break_even_{name}": getattr(level, name, None) for name in ("sigma_level", "cpk", "dpmo")}
    return {**vars(row), **figures, "price_unit": _unit(weighed, row), "pays": _pays(weighed, row)}


def _unit(weighed: Weighed, row: Weighing) -> str:
    return weighed.currency if row.price_per == "once" else f"{weighed.currency}/{row.price_per}"


def _pays(weighed: Weighed, row: Weighing) -> str:
    """At which volumes, in words that do not need the figure beside them."""
    if row.pays_from == "no volume":
        return "at no volume looked at"
    start = "from the volume" if row.pays_from == "a volume" else "from the smallest volume looked at"
    return f"{start} up to one below today's" if weighed.gives_way(row) else start
