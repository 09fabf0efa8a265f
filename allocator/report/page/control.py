"""What the control shows at each stop, every text ready: the page's script only puts it in its place."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from allocator.report import words
from allocator.report.page.scale import Scale
from allocator.results import ReviewPage, Row, RowAt, Stop

LABELS = {
    "today": "The line as it stands, nothing bought",
    "economic optimum": "The least cost, were nothing promised",
    "target": "The target",
    "highest reachable": "The highest within reach",
    "whole nine": "A whole nine",
    "": "",
}


@dataclass(frozen=True)
class RowLine:
    """The parts of a row that no stop changes."""

    name: str
    supplier: str
    floor: str
    safety: bool
    today: str
    today_from: float
    today_to: float


@dataclass(frozen=True)
class Control:
    """Everything around the control."""

    rows: list[RowLine]
    stops: list[dict[str, Any]]
    texts: list[str]
    """What is done at a row, each text once: the rows of a stop name it by its place."""
    shown: int
    left: float
    right: float
    """Where on the drawing of the cost the control begins and ends, in per cent."""
    marks: list[tuple[float, str]]
    """Round sigma levels of the scale and where they stand."""
    table: list[dict[str, Any]]
    """The named stops, and a few between, for paper."""


def control(review: ReviewPage) -> Control | None:
    """The control of a review that has more than today to show."""
    if len(review.stops) < 2:
        return None
    scale = sigma_scale(review)
    axis = nines_axis(review)
    texts: dict[str, int] = {}
    stops = [stop_texts(review, stop, scale, axis, texts) for stop in review.stops]
    named = [i for i, stop in enumerate(review.stops) if stop.label]
    between = range(0, len(stops), 4)
    return Control(
        rows=[_row_line(row, scale) for row in review.rows],
        stops=stops,
        texts=list(texts),
        shown=review.shown,
        left=stops[0]["x"],
        right=stops[-1]["x"],
        marks=[(scale.at(mark), f"{mark:g}") for mark in scale.marks(7)],
        table=[stops[i] for i in sorted({*named, *between})],
    )


def nines_axis(review: ReviewPage) -> Scale:
    """The axis of the promise: from today or the optimum to the highest reachable, or further to a target beyond it."""
    nines = [stop.nines for stop in review.stops]
    low, high = min(nines), max(nines)
    if not review.plan.reached and review.plan.split in review.plan.target_losses:
        return Scale(low, high + 0.22 * (high - low))
    return Scale(low, high)


def sigma_scale(review: ReviewPage) -> Scale:
    low = min(at.sigma_low for stop in review.stops for at in stop.rows)
    high = max(at.sigma_high for stop in review.stops for at in stop.rows)
    room = 0.04 * (high - low) or 0.5
    return Scale(low - room, high + room)


def sigma_words(low: float, high: float) -> str:
    """One level, or a range where a row has several."""
    first, last = words.fixed(low), words.fixed(high)
    return first if first == last else f"{first} to {last}"


def row_name(row: Row) -> str:
    if len(row.steps) == 1:
        return words.clean(row.steps[0])
    return f"{words.clean(row.steps[0])} … {words.clean(row.steps[-1])} ({len(row.steps):,} steps)"


def _row_line(row: Row, scale: Scale) -> RowLine:
    return RowLine(
        name=row_name(row),
        supplier=words.clean(row.supplier or ""),
        floor="" if row.floor is None else words.clean(row.floor),
        safety=row.safety,
        today=sigma_words(row.sigma_low, row.sigma_high),
        today_from=scale.at(row.sigma_low),
        today_to=scale.at(row.sigma_high),
    )


def stop_texts(review: ReviewPage, stop: Stop, scale: Scale, axis: Scale, texts: dict[str, int]) -> dict[str, Any]:
    """All texts and places of one stop; what is done at its rows goes into `texts`."""
    money, currency = stop.money, words.clean(review.plan.currency)
    return {
        "label": LABELS[stop.label],
        "x": axis.at(stop.nines),
        "yield": words.percent(stop.asked_yield, stop.asked_loss),
        "ppm": f"{words.ppm(stop.asked_loss)} ppm",
        "nines": f"{words.nines(stop.asked_loss)} nines",
        "total": words.UNKNOWN if money is None else words.money(money.total),
        "against": against_today(stop, currency),
        "capital": words.money(stop.capital),
        "unit": words.UNKNOWN if stop.cost_per_unit is None else words.unit_cost(stop.cost_per_unit),
        "lost": words.UNKNOWN if money is None else words.money(money.total - money.improvement),
        "spent": words.UNKNOWN if money is None else words.money(money.improvement),
        "price": price_words(stop, currency),
        "bought": bought_words(review, stop),
        "rows": [_row_texts(at, row, scale, texts) for at, row in zip(stop.rows, review.rows, strict=True)],
    }


def against_today(stop: Stop, currency: str) -> str:
    """How the cost compares with today's, in words."""
    if stop.label == "today":
        return "what the line costs today"
    if stop.against_today is None:
        return "today's cost is not known"
    if abs(stop.against_today) < 0.5:
        return "as much as today"
    more = "more" if stop.against_today > 0.0 else "less"
    return f"{words.money(abs(stop.against_today))} {currency} {more} than today"


def price_words(stop: Stop, currency: str) -> str:
    """The local price of the promise, in words."""
    if stop.label == "today":
        return "Nothing is bought and nothing improved."
    if stop.label == "highest reachable":
        return "Nothing better can be reached with what the scenario offers."
    if stop.price_per_ppm is None:
        return "With these purchases nothing more can be gained step by step; the next gain is a purchase."
    if stop.price_per_ppm == 0.0:
        return "Here the promise costs nothing extra: the cheapest plan keeps it anyway."
    return f"Here, one defective unit per million less costs {words.money(stop.price_per_ppm)} {currency} a year more."


def bought_words(review: ReviewPage, stop: Stop) -> list[str]:
    """What is bought or taken, shared purchases first."""
    things = [f"{words.clean(name)} (shared)" for name in stop.purchases]
    for row, at in zip(review.rows, stop.rows, strict=True):
        things += [f"{words.clean(name)}, at {row_name(row)}" for name in at.alternatives]
    return things


def _row_texts(at: RowAt, row: Row, scale: Scale, texts: dict[str, int]) -> list[Any]:
    """Sigma level, where it stands (from, to), what is chosen, cost a year, how far above the floor."""
    floor = "" if at.floor_distance is None else words.clean(at.floor_distance)
    return [
        sigma_words(at.sigma_low, at.sigma_high), scale.at(at.sigma_low), scale.at(at.sigma_high),
        texts.setdefault(chosen_words(at, row), len(texts)), words.money(at.improvement), floor,
    ]  # fmt: skip


def chosen_words(at: RowAt, row: Row) -> str:
    """What is done at a row."""
    judged = ", on a judged figure" if at.judged else ""
    if len(row.steps) > 1:
        return f"{at.changed:,} of {len(row.steps):,} steps changed{judged}" if at.changed else "as today"
    parts = [words.clean(name) for name in at.alternatives]
    if at.law:
        parts.append("improved further" if parts else f"improved ({words.clean(at.law)})")
    return " + ".join(parts) + judged if parts else "as today"
