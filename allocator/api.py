"""The commands as Python functions, gathered in one place; each is loaded when it is asked for."""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from allocator.case import capital_case
    from allocator.check import check_scenario
    from allocator.compare import compare_scenarios
    from allocator.measure import measure_capability
    from allocator.nines import price_nines
    from allocator.option_table import review_table
    from allocator.page import review_page
    from allocator.plan import make_plan
    from allocator.rehearsal import rehearse
    from allocator.scenario.book_out import write_workbook
    from allocator.scenario.read import read_scenario
    from allocator.sheets import supplier_sheets
    from allocator.today import see_today
    from allocator.weigh import weigh_purchases

__all__ = [
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
    "see_today",
    "supplier_sheets",
    "weigh_purchases",
    "write_workbook",
]


def __getattr__(name: str) -> Any:
    """Load one command: nobody who asks for a plan should wait for the review page."""
    return getattr(importlib.import_module("allocator"), name)
