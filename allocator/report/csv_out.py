"""Results as plain tables: one header row with the units in the names, figures at machine precision."""

from __future__ import annotations

from allocator.report.plain import record_table
from allocator.results import Check, Nines, Plan, Today

# Header name -> where the figure stands in the record; {money} becomes the scenario's currency.
_PLAN = {
    "step": "step",
    "supplier": "supplier",
    "alternatives": "alternatives",
    "law": "law",
    "sigma_level_today": "today.sigma_level",
    "sigma_level": "target.sigma_level",
    "shift_sigma": "target.shift",
    "k": "target.k",
    "sides": "target.sides",
    "cp": "target.cp",
    "cpk_today": "today.cpk",
    "cpk": "target.cpk",
    "cpk_after_shift": "target.cpk_after_shift",
    "dpmo_today": "today.dpmo",
    "dpmo": "target.dpmo",
    "ppm_items_today": "today.ppm",
    "ppm_items": "target.ppm",
    "defects_per_unit": "target.dpu",
    "first_pass_yield": "first_pass_yield",
    "budget_share": "budget_share",
    "starts_per_year": "starts_per_year",
    "scrap_{money}_per_year": "scrap",
    "rework_{money}_per_year": "rework",
    "inspection_{money}_per_year": "inspection",
    "improvement_{money}_per_year": "improvement",
    "capital_{money}": "capital",
    "at_cap": "at_cap",
    "cap": "cap",
    "floor": "floor",
    "floor_binds": "floor_binds",
    "safety": "safety",
}
_NINES = {
    "point": "label",
    "nines": "nines",
    "target_yield": "target_yield",
    "target_loss": "target_loss",
    "yield": "yield_",
    "loss": "loss",
    "total_{money}_per_year": "total",
    "extra_{money}_per_year": "extra",
    "price_{money}_per_year_per_unit_of_defect_budget": "price_of_defect_budget",
    "gap": "gap",
    "changes": "changes",
}
_LEVEL = {
    "sigma_level": "level.sigma_level",
    "shift_sigma": "level.shift",
    "k": "level.k",
    "sides": "level.sides",
    "cp": "level.cp",
    "cpk": "level.cpk",
    "cpk_after_shift": "level.cpk_after_shift",
    "dpmo": "level.dpmo",
    "ppm_items": "level.ppm",
    "defects_per_unit": "level.dpu",
}
_TODAY = {
    "step": "step",
    "supplier": "supplier",
    **_LEVEL,
    "first_pass_yield": "first_pass_yield",
    "starts_per_year": "starts_per_year",
    "scrap_{money}_per_year": "scrap",
    "rework_{money}_per_year": "rework",
    "inspection_{money}_per_year": "inspection",
    "defect_share": "defect_share",
    "money_share": "money_share",
}
_CHECK = {
    "step": "step",
    "supplier": "supplier",
    "feeds": "feeds",
    "items_per_unit": "items_per_unit",
    "opportunities_per_item": "opportunities",
    "given": "given",
    **_LEVEL,
    "lost_when_scrapped_{money}_per_item": "lost_when_scrapped",
    "net_cost_added_{money}_per_item": "net_cost_added",
    "ways": "ways",
    "improves": "improves",
    "inspection": "inspection",
}


def plan_csv(plan: Plan) -> str:
    return record_table(_PLAN, plan.currency, plan.rows)


def nines_csv(nines: Nines) -> str:
    return record_table(_NINES, nines.currency, nines.rows)


def today_csv(today: Today) -> str:
    return record_table(_TODAY, today.currency, today.rows)


def check_csv(check: Check) -> str:
    return record_table(_CHECK, check.currency, check.rows)
