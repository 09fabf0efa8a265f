"""Several scenarios as JSON and as one table with a column per scenario."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from allocator.report.blocks import MONEY_KINDS
from allocator.report.json_out import plan_json
from allocator.report.plain import pick, sheet
from allocator.report.words import YIELDS
from allocator.results import Compared, Comparison, StepAcross, TakenAcross

_LEVELS = ("sigma_level", "cpk", "cpk_after_shift", "dpmo", "ppm")
_MONEY = ("improvement", "scrap", "rework", "inspection", "capital", "starts_per_year", "budget_share")


def compare_json(answer: Comparison) -> dict[str, Any]:
    return {
        "cheapest": answer.cheapest,
        "unlike": answer.unlike,
        "scenarios": [
            {**pick(case, ("label", "file", "total_over_first", "per_unit_over_first", "capital_over_first")),
             "plan": plan_json(case.plan)}
            for case in answer.cases
        ],
        "taken": [_taken(row, answer) for row in answer.taken],
        "steps": [_step(step, answer) for step in answer.rows],
    }  # fmt: skip


def _taken(row: TakenAcross, answer: Comparison) -> dict[str, Any]:
    return {**pick(row, ("step", "what")), "states": _by_label(answer, row.states)}


def _step(step: StepAcross, answer: Comparison) -> dict[str, Any]:
    levels = [None if t is None else pick(t.target, _LEVELS) for t in step.targets]
    return {**pick(step, ("step", "differs")), "levels": _by_label(answer, levels)}


def _by_label(answer: Comparison, values: Any) -> dict[str, Any]:
    return {case.label: value for case, value in zip(answer.cases, values, strict=True)}


def compare_csv(answer: Comparison) -> str:
    """One row per figure and one column per scenario, so that the sheet reads as the comparison does."""
    header = ["step", "figure", *(case.label for case in answer.cases)]
    return sheet([header, *_rows(answer)])


def _rows(answer: Comparison) -> Iterator[list[object]]:
    for name in _LINE:
        yield ["", name, *(_LINE[name](case) for case in answer.cases)]
    for row in answer.taken:
        yield [row.step, row.what, *row.states]
    for step in answer.rows:
        for name in _LEVELS:
            yield [step.step, name, *(None if t is None else getattr(t.target, name) for t in step.targets)]
        for name in _MONEY:
            yield [step.step, name, *(None if t is None else getattr(t, name) for t in step.targets)]


def _of(part: str, name: str) -> Any:
    def figure(case: Compared) -> object:
        owner = getattr(case.plan, part)
        return None if owner is None else getattr(owner, name)

    return figure


_LINE: dict[str, Any] = {
    "currency": lambda case: case.plan.currency,
    "shipped_per_year": lambda case: case.plan.shipped_per_year,
    "reached": lambda case: case.plan.reached,
    **{f"target_{name}": lambda case, name=name: case.plan.targets.get(name) for name in YIELDS},
    **{name: _of("yields", name) for name in YIELDS},
    **{name.replace("_yield", "_loss"): _of("yields", name.replace("_yield", "_loss")) for name in YIELDS},
    **{f"{kind}_per_year": _of("money", kind) for kind in (*MONEY_KINDS, "total")},
    "cost_per_unit": lambda case: case.plan.cost_per_unit,
    "capital": lambda case: case.plan.capital,
    "total_over_first": lambda case: case.total_over_first,
    "per_unit_over_first": lambda case: case.per_unit_over_first,
    "capital_over_first": lambda case: case.capital_over_first,
    "best_reachable_yield": _of("best_reachable", "yield_"),
    "best_reachable_total": _of("best_reachable", "total"),
}
