"""Buy or leave: what everything that could be bought or changed is worth a year."""

from __future__ import annotations

from typing import TYPE_CHECKING

from allocator.figures.style import (
    ACCENT,
    HATCH,
    INK,
    MID,
    PALE,
    RULE,
    calm,
    cut,
    explain,
    money_ticks,
    new_axes,
    short,
)
from allocator.report import words
from allocator.results import Weighed, Weighing

if TYPE_CHECKING:
    from matplotlib.axes import Axes

MOST_THINGS = 24
BAR = 0.62


def worth(weighed: Weighed, ax: Axes | None = None) -> Axes:
    """Draw what each thing weighed is worth, the best first, with the verdict and the price that would turn it.

    Parameters
    ----------
    weighed : Weighed
        As given by `weigh_purchases`; things without a figure (needed, or out of reach) are left out.
    ax : matplotlib Axes, optional
        Where to draw; a new figure without it.

    Returns
    -------
    matplotlib Axes
        x is the worth [currency/year]; of very many things those with the largest worth or loss are drawn.
    """
    things = _telling(weighed)
    ax = new_axes(ax, 9.0, 1.5 + 0.36 * len(things))
    calm(ax, "Worth of what could be bought or changed", f"{cut(weighed.currency)}/year")
    amounts = [(thing.verdict, thing.worth_per_year or 0.0) for thing in things]
    taken = [amount if verdict == "buy" else 0.0 for verdict, amount in amounts]
    left = [amount if verdict != "buy" else 0.0 for verdict, amount in amounts]
    rows = range(len(things))
    ax.barh(rows, taken, height=BAR, color=ACCENT, label="buy")
    ax.barh(rows, left, height=BAR, color=PALE, edgecolor=MID, hatch=HATCH, linewidth=0.6, label="leave")
    ax.axvline(0.0, color=INK, linewidth=1.0)
    ax.set_yticks(list(rows), [_name(thing) for thing in things])
    ax.invert_yaxis()
    money_ticks(ax.xaxis)
    ax.grid(axis="x", color=RULE, linewidth=0.6)
    ax.set_axisbelow(True)
    explain(ax)
    return ax


def _telling(weighed: Weighed) -> list[Weighing]:
    known = [thing for thing in weighed.rows if thing.worth_per_year is not None]
    telling = sorted(known, key=lambda thing: -abs(thing.worth_per_year or 0.0))[:MOST_THINGS]
    return sorted(telling, key=lambda thing: -(thing.worth_per_year or 0.0))


def _name(thing: Weighing) -> str:
    """Its name, and below it the worth with the price that turns the verdict."""
    name = short(thing.alternative if thing.step is None else f"{thing.step}: {thing.alternative}")
    said = f"{name}\n{words.money(thing.worth_per_year)} a year"
    if thing.break_even_price is None or thing.stated_price is None:
        return said
    return f"{said}; pays up to {words.money(thing.break_even_price)}, asked {words.money(thing.stated_price)}"
