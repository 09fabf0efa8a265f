"""Who shares what: the defect budget and the money of a plan over its steps."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING, NamedTuple

from allocator.figures.style import ACCENT, HATCH, MID, PALE, RULE, calm, cut, explain, money_ticks, new_row, short
from allocator.report import words
from allocator.results import Plan

if TYPE_CHECKING:
    from matplotlib.axes import Axes

MOST_STEPS = 16
BAR = 0.62


class Part(NamedTuple):
    """One bar of each kind."""

    name: str
    budget: float
    improvement: float
    lost: float


def division(plan: Plan, axes: Sequence[Axes] | None = None) -> tuple[Axes, Axes]:
    """Draw how the defect budget (left) and the money (right) divide over the steps, the largest share first.

    Parameters
    ----------
    plan : Plan
    axes : two matplotlib Axes, optional
        Where to draw; a new figure without them.

    Returns
    -------
    two matplotlib Axes
        Bars of the share of the used budget [1], and of improvement, then scrap and rework [currency/year].
    """
    parts = _parts(plan)
    left, right = axes if axes is not None else new_row(2, 9.0, 1.4 + 0.3 * len(parts), (1.0, 1.25))
    rows = range(len(parts))
    calm(left, f"Share of the defect budget of {words.yield_name(plan.split)}", "part of the budget used")
    left.barh(rows, [p.budget for p in parts], height=BAR, color=ACCENT, label="share of the budget")
    left.xaxis.set_major_formatter(lambda value, _: f"{value * 100:.3g} %")
    left.set_yticks(list(rows), [short(part.name) for part in parts])
    left.invert_yaxis()
    calm(right, "Money", f"{cut(plan.currency)}/year")
    improvement = [p.improvement for p in parts]
    right.barh(rows, improvement, height=BAR, color=ACCENT, label="improvement")
    right.barh(
        rows, [p.lost for p in parts], left=[max(spent, 0.0) for spent in improvement], height=BAR, color=PALE,
        edgecolor=MID, hatch=HATCH, linewidth=0.6, label="scrap and rework",
    )  # fmt: skip
    money_ticks(right.xaxis)
    for ax in (left, right):
        ax.grid(axis="x", color=RULE, linewidth=0.6)
        ax.set_axisbelow(True)
        ax.locator_params(axis="x", nbins=5)
    explain(right)
    return left, right


def _parts(plan: Plan) -> list[Part]:
    """Return the parts to draw, shared purchases among them, the smallest added up."""
    parts = [Part(row.step, row.budget_share, row.improvement, row.scrap + row.rework) for row in plan.rows]
    parts += [Part(f"{bought.name} (shared)", 0.0, bought.per_year_cost, 0.0) for bought in plan.purchases]
    parts.sort(key=lambda part: (-part.budget, -part.improvement))
    if len(parts) <= MOST_STEPS:
        return parts
    telling = set(sorted(parts, key=_weight(parts))[: MOST_STEPS - 1])
    rest = [part for part in parts if part not in telling]
    others = [sum(values) for values in zip(*(part[1:] for part in rest), strict=True)]
    return [*(part for part in parts if part in telling), Part(f"{len(rest):,} others", *others)]


def _weight(parts: Sequence[Part]) -> Callable[[Part], float]:
    """Return what ranks parts by the largest share that they have of anything."""
    whole = [
        sum(max(value, 0.0) for value in values) or 1.0 for values in zip(*(part[1:] for part in parts), strict=True)
    ]
    return lambda part: -max(part.budget / whole[0], part.improvement / whole[1], part.lost / whole[2])
