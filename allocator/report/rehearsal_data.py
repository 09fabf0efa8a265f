"""A rehearsal as JSON and as a table of its steps."""

from __future__ import annotations

from typing import Any

from allocator.report.plain import cautions_json, pick, record_table
from allocator.results import Rehearsal, Rehearsed, StepRehearsed

_FIGURE = ("computed", "simulated", "lower", "upper")
_COLUMNS = {
    "step": "step",
    **{f"starts_per_year_{name}": f"starts_per_year.{name}" for name in _FIGURE},
    **{f"scrap_{{money}}_per_year_{name}": f"scrap.{name}" for name in _FIGURE},
    "clustering": "clustering",
    "item_yield_poisson": "poisson_item_yield",
    "item_yield_clustered": "clustered_item_yield",
    "capability_drawn": "drawn",
}


def rehearsal_json(answer: Rehearsal) -> dict[str, Any]:
    return {
        **pick(answer, ("title", "currency", "shipped_per_year", "line", "units", "seed", "uncertain", "items_made")),
        "yields": {name: _yield(loss) for name, loss in answer.losses.items()},
        "loss": {name: _figure(loss) for name, loss in answer.losses.items()},
        "annual_cost": {kind: _figure(amount) for kind, amount in answer.money.items()},
        "every_item_met": {
            **{kind: _figure(amount) for kind, amount in answer.every_item.items()},
            "difference": _figure(answer.difference),
        },
        "rolled_yield_closed_form": {
            "poisson": answer.poisson_rolled_yield,
            "clustered": answer.clustered_rolled_yield,
        },
        "missed": answer.missed,
        "steps": [_step(row) for row in answer.rows],
        "assumed": answer.assumed,
        "cautions": cautions_json(answer.cautions),
    }


def _figure(figure: Rehearsed) -> dict[str, Any]:
    return {**pick(figure, _FIGURE), "holds": figure.holds}


def _yield(loss: Rehearsed) -> dict[str, Any]:
    computed = None if loss.computed is None else 1.0 - loss.computed
    bounds = {"simulated": 1.0 - loss.simulated, "lower": 1.0 - loss.upper, "upper": 1.0 - loss.lower}
    return {"computed": computed, **bounds, "holds": loss.holds}


def _step(row: StepRehearsed) -> dict[str, Any]:
    return {
        "step": row.step,
        "starts_per_year": _figure(row.starts_per_year),
        "scrap": _figure(row.scrap),
        **pick(row, ("clustering", "poisson_item_yield", "clustered_item_yield", "drawn")),
    }


def rehearsal_csv(answer: Rehearsal) -> str:
    return record_table(_COLUMNS, answer.currency, answer.rows)
