"""The capital case as JSON, and its cash by year as CSV."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

from allocator.report.plain import cautions_json, pick, sheet
from allocator.results import CapitalCase, CashCase

_YEAR = ("year", "paid", "resale", "saving", "net", "discounted", "cumulative", "cumulative_discounted")
_HEAD = (
    "title", "currency", "shipped_per_year", "horizon_years", "discount_rate", "subject", "step", "verdict", "in_plan",
    "reached", "total_with", "total_without", "left_out", "assumed",
)  # fmt: skip


def case_json(case: CapitalCase) -> dict[str, Any]:
    return {
        **pick(case, _HEAD),
        "cases": [_case(one) for one in case.cases],
        "cautions": cautions_json(case.cautions),
    }


def _case(case: CashCase) -> dict[str, Any]:
    """Every figure of one comparison, the sum of its cash savings beside them."""
    return {**asdict(case), "savings": {**asdict(case.savings), "cash": case.savings.cash}}


def case_csv(case: CapitalCase) -> str:
    """One row per year and comparison."""
    money = "_".join(case.currency.split()) or "money"
    header = ["against", "year", *(f"{name}_{money}" for name in _YEAR[1:])]
    return sheet([header, *([one.against, *pick(year, _YEAR).values()] for one in case.cases for year in one.years)])
