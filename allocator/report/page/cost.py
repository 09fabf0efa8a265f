"""The drawing of cost against the promise: where the curve runs and where its marks stand."""

from __future__ import annotations

from dataclasses import dataclass

from allocator.report import words
from allocator.report.page.control import nines_axis
from allocator.report.page.scale import Scale, widest
from allocator.results import ReviewPage, Stop

NAMES = {
    "today": "today",
    "economic optimum": "least cost",
    "target": "the target",
    "highest reachable": "highest within reach",
}


@dataclass(frozen=True)
class Mark:
    """A named point, in per cent from the left and from the bottom."""

    name: str
    amount: str
    x: float
    y: float
    row: int
    """Which line of labels it is written on, from the top."""
    to_left: bool
    kind: str


@dataclass(frozen=True)
class CostDrawing:
    """Paths in a square of 100 by 100, bottom up already turned over."""

    lost: str
    spent: str
    total: str
    before: str
    marks: list[Mark]
    ticks: list[tuple[float, str, str]]
    beyond: str
    """The target in words, where it is out of reach."""
    end: float
    """Where the highest reachable stands."""
    ys: list[float | None]
    """Height of the total at every stop."""


def cost_drawing(review: ReviewPage) -> CostDrawing | None:
    """The drawing, for a review with a plan to draw."""
    plans = [stop for stop in review.stops if stop.label != "today" and stop.money is not None]
    if not plans:
        return None
    axis = nines_axis(review)
    totals = [stop.money.total for stop in review.stops if stop.money is not None]
    heights = Scale(0.0, 1.02 * widest(totals))
    x, total = [axis.at(stop.nines) for stop in plans], [_height(stop, heights) for stop in plans]
    lost = [heights.at(stop.money.total - stop.money.improvement) for stop in plans if stop.money is not None]
    top = list(zip(x, total, strict=True))
    below = list(zip(x, lost, strict=True))
    floor = [(x[-1], 0.0), (x[0], 0.0)]
    beyond = not review.plan.reached and review.plan.split in review.plan.target_losses
    return CostDrawing(
        lost=_path([*below, *floor]) + "Z",
        spent=_path([*top, *reversed(below)]) + "Z",
        total=_path(top),
        before=_path([(0.0, total[0]), (x[0], total[0])]) if x[0] > 0.0 else "",
        marks=_marks(review, axis, heights),
        ticks=[_tick(axis, mark) for mark in axis.marks(6)],
        beyond=_target_words(review) if beyond else "",
        end=x[-1],
        ys=[None if stop.money is None else _height(stop, heights) for stop in review.stops],
    )


def _height(stop: Stop, heights: Scale) -> float:
    assert stop.money is not None
    return heights.at(stop.money.total)


def _path(points: list[tuple[float, float]]) -> str:
    return "M" + "L".join(f"{x:g} {100.0 - y:.4g}" for x, y in points)


def _tick(axis: Scale, mark: float) -> tuple[float, str, str]:
    loss = 10.0**-mark
    return axis.at(mark), f"{mark:g} nines", words.percent(1.0 - loss, loss)


def _target_words(review: ReviewPage) -> str:
    loss = review.plan.target_losses[review.plan.split]
    return f"target {words.percent(1.0 - loss, loss)} ({words.nines(loss)} nines): out of reach"


def _marks(review: ReviewPage, axis: Scale, heights: Scale) -> list[Mark]:
    """The named stops: the highest reachable on the first line of labels, the others from left to right below it."""
    named = [stop for stop in review.stops if stop.label in NAMES and stop.money is not None]
    named.sort(key=lambda stop: (stop.label != "highest reachable", stop.nines))
    first = 0 if named and named[0].label == "highest reachable" else 1
    marks = []
    for row, stop in enumerate(named):
        assert stop.money is not None
        x = axis.at(stop.nines)
        marks.append(
            Mark(
                NAMES[stop.label],
                words.money(stop.money.total),
                x,
                _height(stop, heights),
                row + first,
                x > 55.0,
                stop.label.replace(" ", "-"),
            )
        )
    return marks
