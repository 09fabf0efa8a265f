"""Target sheets as JSON, a list by supplier, and as one table."""

from __future__ import annotations

from operator import attrgetter
from typing import Any

from allocator.report.plain import pick, sheet
from allocator.results import Sheet, SupplierSheets

_COLUMNS = {
    "supplier": "supplier",
    "step": "step",
    "alternatives": "alternatives",
    "ppm_items_today": "today.ppm",
    "ppm_items": "target.ppm",
    "dpmo": "target.dpmo",
    "sigma_level": "target.sigma_level",
    "shift_sigma": "target.shift",
    "cpk": "target.cpk",
    "floor": "floor",
    "safety": "safety",
    "counted": "counted",
    "items_per_year": "items_per_year",
    "volume_allows": "volume_allows",
    "worth_{money}_per_ppm_per_year": "worth_per_ppm_year",
    "worth_{money}_per_ppm_per_item": "worth_per_ppm_item",
    "largest_price_rise_{money}_per_item": "largest_price_rise",
    "cost_of_refusal_{money}_per_year": "cost_of_refusal",
    "refusal_reason": "refusal_reason",
}


def sheets_json(answer: SupplierSheets) -> list[dict[str, Any]]:
    return [
        {"supplier": supplier.supplier, "sheets": [_sheet(row) for row in supplier.rows]}
        for supplier in answer.suppliers
    ]


def _sheet(row: Sheet) -> dict[str, Any]:
    worth = ("worth_per_ppm_year", "worth_per_ppm_item", "worth_has_target", "largest_price_rise")
    return {
        "step": row.step,
        "alternatives": row.alternatives,
        "today_ppm": row.today.ppm,
        "target_ppm": row.target.ppm,
        "target_dpmo": row.target.dpmo,
        "target_sigma_level": row.target.sigma_level,
        "target_shift": row.target.shift,
        "target_cpk": row.target.cpk,
        **pick(row, ("floor", "safety", "counted", "items_per_year", "parts_for_90", "parts_for_95")),
        "parts_with_bad": [
            {"bad": bad, "parts_for_90": for_90, "parts_for_95": for_95} for bad, for_90, for_95 in row.parts_with_bad
        ],
        "volume_allows": row.volume_allows,
        "observed_cpk_needed": {str(n): cpk for n, cpk in row.observed_cpk_needed},
        **pick(row, (*worth, "improvement", "cost_of_refusal", "refusal_reason")),
    }


def sheets_csv(answer: SupplierSheets) -> str:
    """One row per part, its evidence in columns of their own at the end."""
    money = "_".join(answer.currency.split()) or "money"
    heads = [name.format(money=money) for name in _COLUMNS]
    getters = [attrgetter(path) for path in _COLUMNS.values()]
    rows = [[*(get(row) for get in getters), *_evidence(row).values()] for row in answer.rows]
    return sheet([[*heads, *_evidence(answer.rows[0])], *rows])


def _evidence(row: Sheet) -> dict[str, float | None]:
    parts: dict[str, float | None] = {}
    for bad, for_90, for_95 in row.parts_with_bad:
        parts |= {f"parts_for_90_with_{bad}_bad": for_90, f"parts_for_95_with_{bad}_bad": for_95}
    return parts | {f"observed_cpk_needed_on_{n}": cpk for n, cpk in row.observed_cpk_needed}
