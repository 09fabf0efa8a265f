"""The table of a design review as JSON and CSV."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

from allocator.report.plain import cautions_json, cost_json, pick, sheet, yields_json
from allocator.results import LineFigures, Review, ReviewRow

_FIGURES = ("total", "over_living", "over_plan", "capital", "misses", "allowed")
_YIELDS = ("rolled_yield", "final_yield", "shipped_yield", "rolled_loss", "final_loss", "shipped_loss")


def review_json(review: Review) -> dict[str, Any]:
    return {
        **pick(review, ("title", "currency", "shipped_per_year")),
        "split_yield": review.split,
        **pick(review, ("targets", "reached")),
        "steps": [asdict(step) for step in review.steps],
        "options": [_option(row) for row in review.rows],
        **pick(review, ("not_offered", "left_out", "assumed")),
        "cautions": cautions_json(review.cautions),
    }


def _option(row: ReviewRow) -> dict[str, Any]:
    return {
        **pick(row, ("step", "option", "kinds", "in_plan", "idle")),
        "figures": _figures(row.figures),
        "alone": _figures(row.alone),
        "against": row.against,
    }


def _figures(figures: LineFigures | None) -> dict[str, Any] | None:
    if figures is None:
        return None
    return {**pick(figures, _FIGURES), "annual_cost": cost_json(figures.money), **yields_json(figures.yields)}


def review_csv(review: Review) -> str:
    """One row per option: with the best plan that uses it, then alone."""
    money = "_".join(review.currency.split()) or "money"
    names = [
        f"total_{money}_per_year", f"over_living_{money}_per_year", f"over_plan_{money}_per_year", f"capital_{money}",
        "misses", "allowed", *_YIELDS,
    ]  # fmt: skip
    header = ["step", "option", "kinds", "in_plan", "idle", *names, *(f"alone_{name}" for name in names), "against"]
    rows = [
        [row.step, row.option, row.kinds, row.in_plan, row.idle, *_cells(row.figures), *_cells(row.alone), row.against]
        for row in review.rows
    ]
    return sheet([header, *rows])


def _cells(figures: LineFigures | None) -> list[object]:
    if figures is None:
        return [None] * (len(_FIGURES) + len(_YIELDS))
    return [*pick(figures, _FIGURES).values(), *pick(figures.yields, _YIELDS).values()]
