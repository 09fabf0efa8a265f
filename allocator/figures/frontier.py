"""What does each nine cost: the least total against nines, its local price, and where it ends."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

from allocator.figures.style import ACCENT, INK, MID, PALE, RULE, SMALL, SOFT, calm, cut, money_ticks, new_axes, plain
from allocator.report import words
from allocator.results import Nines, NinesPoint

if TYPE_CHECKING:
    from matplotlib.axes import Axes

REACH = 0.18
"""Half-length of the line that shows a local price [nines]."""
ROOM = 0.22
"""Room above and below the curve, for the names of its points."""
BETWEEN = "between two points"
NAMED = ("today's yield", "target", "highest reachable")


def frontier(nines: Nines, ax: Axes | None = None) -> Axes:
    """Draw the least total against nines, with the local price at the points and the highest reachable.

    Parameters
    ----------
    nines : Nines
        As given by `price_nines`; with `points` the curve between the whole nines is followed too. Between two points
        only a field is drawn, within which the least total lies.
    ax : matplotlib Axes, optional
        Where to draw; a new figure without it.

    Returns
    -------
    matplotlib Axes
        x is nines of the split yield, y the total [currency/year].
    """
    ax = new_axes(ax, 7.5, 4.4)
    yield_name, currency = words.yield_name(nines.split), cut(nines.currency)
    below = f"nines of {yield_name} (grey: range of the least total between points; bar: local price)"
    calm(ax, f"What each nine of {yield_name} costs", below, f"least total, {currency}/year")
    money_ticks(ax.yaxis)
    ax.grid(axis="y", color=RULE, linewidth=0.6)
    ax.set_axisbelow(True)
    if not nines.rows:
        ax.text(0.5, 0.5, "no choice keeps the floors and limits", transform=ax.transAxes, ha="center", color=SOFT)
        return ax
    x, y = [point.nines for point in nines.rows], [point.total for point in nines.rows]
    _draw_between(ax, x, y)
    ax.plot(x, y, linestyle="", marker="o", markersize=2.5, color=ACCENT, label="least total")
    whole = [point for point in nines.rows if point.label != "grid"]
    ax.plot(
        [p.nines for p in whole], [p.total for p in whole], linestyle="", marker="o", markersize=5, color=ACCENT,
        label="points",
    )  # fmt: skip
    for point in whole:
        _draw_price(ax, point, min(REACH, max(x) - point.nines))
    _name_points(ax, nines, currency)
    _mark_end(ax, nines)
    ax.margins(y=ROOM)
    return ax


def _draw_between(ax: Axes, x: list[float], y: list[float]) -> None:
    """Draw what is known between points: a better yield costs no less, so the least total stays within each field."""
    for (x0, y0), (x1, y1) in pairwise(zip(x, y, strict=True)):
        ax.fill_between([x0, x1], min(y0, y1), max(y0, y1), color=PALE, linewidth=0.0, zorder=0, label=BETWEEN)


def _draw_price(ax: Axes, point: NinesPoint, reach: float) -> None:
    """Draw the slope of the total at a point with its choices kept, over no more nines than can be reached."""
    slope = point.price_per_nine
    if slope and reach > 0.0:
        ends = (point.nines - reach, point.nines + reach)
        rise = (point.total - reach * slope, point.total + reach * slope)
        ax.plot(ends, rise, color=MID, linewidth=5, alpha=0.55, solid_capstyle="butt", zorder=1, label="local price")


def _name_points(ax: Axes, nines: Nines, currency: str) -> None:
    """Name the points that matter: below the curve, which rises, and the last one above it."""
    for point in nines.rows:
        if point.label not in NAMED:
            continue
        said = f"{point.label}\n{words.percent(point.target_yield, point.target_loss)}\n{words.money(point.total)}"
        if point.label == "target" and point.price_per_nine:
            said += f"\nhere {words.money(point.price_per_nine)} {currency}/year per nine"
        at_end = point.label == "highest reachable"
        ax.annotate(
            plain_lines(said), (point.nines, point.total), xytext=(-8, 6) if at_end else (8, -4), color=INK,
            textcoords="offset points", ha="right" if at_end else "left", va="bottom" if at_end else "top",
            fontsize=SMALL,
        )  # fmt: skip


def plain_lines(text: str) -> str:
    return "\n".join(map(plain, text.split("\n")))


def _mark_end(ax: Axes, nines: Nines) -> None:
    end = None if nines.highest is None else words.nines_of(nines.highest.loss)
    if end is not None:
        ax.axvline(end, color=INK, linewidth=1.0, linestyle=(0, (4, 3)), label="highest reachable")
