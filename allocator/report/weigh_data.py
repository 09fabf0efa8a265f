"""Buy or leave as JSON (a list) and as CSV, at full precision."""

from __future__ import annotations

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
    "stated_price_{money}": "stated_price",
    "break_even_price_{money}": "break_even_price",
    "break_even_price_factor": "break_even_price_factor",
    "break_even_volume_units_per_year": "break_even_volume",
    "pays_from": "pays_from",
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
    return record_table(_COLUMNS, weighed.currency, weighed.rows)
