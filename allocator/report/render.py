"""Which renderer writes which result in which form."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

from allocator.report.case_data import case_csv, case_json
from allocator.report.case_text import case_text
from allocator.report.check_text import check_text
from allocator.report.compare_data import compare_csv, compare_json
from allocator.report.compare_text import compare_text
from allocator.report.csv_out import check_csv, nines_csv, plan_csv, today_csv
from allocator.report.json_out import check_json, nines_json, plan_json, today_json
from allocator.report.measure_data import measure_csv, measure_json
from allocator.report.measure_text import measure_text
from allocator.report.nines_text import nines_text
from allocator.report.paper import LOG_WIDTH
from allocator.report.plain import to_json
from allocator.report.plan_text import plan_text
from allocator.report.rehearsal_data import rehearsal_csv, rehearsal_json
from allocator.report.rehearsal_text import rehearsal_text
from allocator.report.review_data import review_csv, review_json
from allocator.report.review_text import review_text
from allocator.report.sheets_data import sheets_csv, sheets_json
from allocator.report.sheets_text import sheets_text
from allocator.report.today_text import today_text
from allocator.report.weigh_data import weigh_csv, weigh_json
from allocator.report.weigh_text import weigh_text
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

Form = Literal["text", "json", "csv"]


@dataclass(frozen=True)
class _Renderers:
    text: Callable[[Any, int], str]
    json: Callable[[Any], dict[str, Any] | list[dict[str, Any]]]
    csv: Callable[[Any], str]


_RENDERERS: dict[type, _Renderers] = {
    Plan: _Renderers(plan_text, plan_json, plan_csv),
    Nines: _Renderers(nines_text, nines_json, nines_csv),
    Today: _Renderers(today_text, today_json, today_csv),
    Check: _Renderers(check_text, check_json, check_csv),
    CapitalCase: _Renderers(case_text, case_json, case_csv),
    SupplierSheets: _Renderers(sheets_text, sheets_json, sheets_csv),
    Rehearsal: _Renderers(rehearsal_text, rehearsal_json, rehearsal_csv),
    Study: _Renderers(measure_text, measure_json, measure_csv),
    Review: _Renderers(review_text, review_json, review_csv),
    Weighed: _Renderers(weigh_text, weigh_json, weigh_csv),
    Comparison: _Renderers(compare_text, compare_json, compare_csv),
}


def has_renderer(result: object) -> bool:
    return type(result) in _RENDERERS


def render(result: object, form: Form = "text", width: int = LOG_WIDTH) -> str:
    """The result as one text that ends in a line break; `width` counts for the form text only."""
    renderers = _RENDERERS[type(result)]
    if form == "json":
        return to_json(renderers.json(result))
    return renderers.csv(result) if form == "csv" else renderers.text(result, width)
