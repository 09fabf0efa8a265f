"""From one promised yield to the cheapest quality target for every step and supplier.

>>> import allocator
>>> scenario = allocator.read_scenario("scenarios/latch.toml")  # doctest: +SKIP
>>> plan = allocator.make_plan(scenario)  # doctest: +SKIP
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from allocator.shown import Speaker, speaks_for_results

if TYPE_CHECKING:
    from allocator.case import capital_case
    from allocator.check import check_scenario
    from allocator.compare import compare_scenarios
    from allocator.errors import AllocatorError, InputError
    from allocator.measure import measure_capability
    from allocator.nines import price_nines
    from allocator.option_table import review_table
    from allocator.page import review_page
    from allocator.plan import make_plan
    from allocator.rehearsal import rehearse
    from allocator.results import (
        CapitalCase,
        Check,
        Comparison,
        Nines,
        Plan,
        Rehearsal,
        Review,
        Study,
        SupplierSheets,
        Today,
        Weighed,
    )
    from allocator.scenario.book_out import write_workbook
    from allocator.scenario.model import Scenario
    from allocator.scenario.read import read_scenario, scenario_from_dict
    from allocator.sheets import supplier_sheets
    from allocator.today import see_today
    from allocator.weigh import weigh_purchases

_HOMES = {
    "AllocatorError": "errors",
    "CapitalCase": "results",
    "Check": "results",
    "Comparison": "results",
    "InputError": "errors",
    "Nines": "results",
    "Plan": "results",
    "Rehearsal": "results",
    "Review": "results",
    "Scenario": "scenario.model",
    "Study": "results",
    "SupplierSheets": "results",
    "Today": "results",
    "Weighed": "results",
    "capital_case": "case",
    "check_scenario": "check",
    "compare_scenarios": "compare",
    "make_plan": "plan",
    "measure_capability": "measure",
    "price_nines": "nines",
    "read_scenario": "scenario.read",
    "rehearse": "rehearsal",
    "review_page": "page",
    "review_table": "option_table",
    "scenario_from_dict": "scenario.read",
    "see_today": "today",
    "supplier_sheets": "sheets",
    "weigh_purchases": "weigh",
    "write_workbook": "scenario.book_out",
}

__all__ = [
    "AllocatorError",
    "CapitalCase",
    "Check",
    "Comparison",
    "InputError",
    "Nines",
    "Plan",
    "Rehearsal",
    "Review",
    "Scenario",
    "Study",
    "SupplierSheets",
    "Today",
    "Weighed",
    "capital_case",
    "check_scenario",
    "compare_scenarios",
    "make_plan",
    "measure_capability",
    "price_nines",
    "read_scenario",
    "rehearse",
    "review_page",
    "review_table",
    "scenario_from_dict",
    "see_today",
    "supplier_sheets",
    "weigh_purchases",
    "write_workbook",
]
__version__ = "0.1.0"


def __getattr__(name: str) -> Any:
    """Import a public name when it is first asked for, so that `import allocator` and `--help` stay light."""
    if name not in _HOMES:
        raise AttributeError(f"module 'allocator' has no attribute '{name}'")
    return getattr(importlib.import_module(f"allocator.{_HOMES[name]}"), name)


def _speaker() -> Speaker:
    """Results are shown in the words of the reports, which only those who look at one should wait for."""
    from allocator.report import glance

    return glance


speaks_for_results(_speaker)
