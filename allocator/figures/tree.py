"""The line as a picture: who feeds whom, where defects arise, where they are found, where money is lost."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import TYPE_CHECKING, Any, NamedTuple

from allocator.errors import RangeError
from allocator.figures.style import ACCENT, HATCH, INK, MID, PALE, SMALL, SOFT, TEXT, calm, cut, new_axes, plain, short
from allocator.report import words
from allocator.results import Plan, StepTarget, StepToday, Today

if TYPE_CHECKING:
    from matplotlib.axes import Axes

MOST_STEPS = 60
LANE, NAMES, COLUMN, GAP = 0.35, 3.4, 2.0, 1.35
"""Widths: of a lane of the tree, of the names, of the longest bar, and of the figure beside it."""
BAR = 0.55


class Stage(NamedTuple):
    """One step of the picture."""

    name: str
    feeds: str | None
    arises: float
    found: float
    lost: float


def line(answer: Today | Plan, ax: Axes | None = None) -> Axes:
    """Draw the line from its first steps (top) to the last, with what arises, is found and is lost at each.

    Parameters
    ----------
    answer : Today or Plan
        The line as it stands, or as the plan makes it.
    ax : matplotlib Axes, optional
        Where to draw; a new figure without it.

    Returns
    -------
    matplotlib Axes
        One row per step in reading order; three columns of bars, each in shares of its longest: defects per unit that
        arise, that are found, and scrap and rework [currency/year]. Of very many steps the most telling are drawn.

    Raises
    ------
    RangeError
        For a plan without steps.
    """
    stages = _most_telling([_stage(row) for row in answer.rows])
    if not stages:
        raise RangeError("there is no line to draw: no choice keeps the floors and limits")
    order, lanes = _reading_order({stage.name: stage.feeds for stage in stages})
    by_name = {stage.name: stage for stage in stages}
    shown = [by_name[name] for name in order]
    ax = new_axes(ax, 9.5, 1.3 + 0.27 * len(shown))
    state = "today" if isinstance(answer, Today) else "under the plan"
    calm(ax, f"Where defects arise, are found, and cost money, {state}")
    _draw_tree(ax, shown, lanes)
    _draw_columns(ax, shown, max(lanes.values()), cut(answer.currency))
    ax.set_ylim(len(shown) - 0.3, -1.6)
    ax.set_xticks([])
    ax.set_yticks([])
    ax.spines["bottom"].set_visible(False)
    if len(answer.rows) > len(shown):
        said = f"{len(answer.rows) - len(shown):,} steps with smaller figures are not drawn"
        ax.text(0, len(shown) - 0.45, said, fontsize=SMALL, color=SOFT, va="top")
    return ax


def _stage(row: StepTarget | StepToday) -> Stage:
    level = row.target if isinstance(row, StepTarget) else row.level
    return Stage(row.step, row.feeds, level.dpu, row.found, row.scrap + row.rework)


def _most_telling(stages: Sequence[Stage]) -> list[Stage]:
    """Return the steps with the largest figures, each feeding the next one of them down the line."""
    if len(stages) <= MOST_STEPS:
        return list(stages)
    arises, found, lost = (
        max(column) or 1.0 for column in zip(*((s.arises, s.found, s.lost) for s in stages), strict=True)
    )
    weight = {s.name: max(s.arises / arises, s.found / found, s.lost / lost) for s in stages}
    last = next(stage.name for stage in stages if stage.feeds is None)
    kept = {last, *sorted(weight, key=lambda name: -weight[name])[: MOST_STEPS - 1]}
    feeds = {stage.name: stage.feeds for stage in stages}
    return [stage._replace(feeds=_next_of(stage.name, feeds, kept)) for stage in stages if stage.name in kept]


def _next_of(name: str, feeds: Mapping[str, str | None], kept: set[str]) -> str | None:
    fed = feeds[name]
    while fed is not None and fed not in kept:
        fed = feeds[fed]
    return fed


def _reading_order(feeds: Mapping[str, str | None]) -> tuple[list[str], dict[str, int]]:
    """Return the names from top to bottom and the lane of each: the longest branch comes straight down."""
    feeders: dict[str | None, list[str]] = {}
    for name, fed in feeds.items():
        feeders.setdefault(fed, []).append(name)
    order: list[str] = []
    lanes: dict[str, int] = {}

    def place(name: str, lane: int) -> int:
        """Place a branch below what is placed already; return the first lane to its right that is free."""
        lanes[name], free, right = lane, lane + 1, lane + 1
        ranked = sorted(feeders.get(name, ()), key=lambda feeder: -_size(feeder, feeders))
        free = place(ranked[0], lane) if ranked else free
        start, branches = len(order), []
        for feeder in reversed(ranked[1:]):  # The last one drawn ends nearest, so that no branch crosses another.
            right = place(feeder, right)
            branches.append(order[start:])
            del order[start:]
        for branch in reversed(branches):
            order.extend(branch)
        order.append(name)
        return max(free, right)

    for last in feeders.get(None, ()):
        place(last, 0)
    return order, lanes


def _size(name: str, feeders: Mapping[str | None, Sequence[str]]) -> int:
    return 1 + sum(_size(feeder, feeders) for feeder in feeders.get(name, ()))


def _draw_tree(ax: Axes, shown: Sequence[Stage], lanes: Mapping[str, int]) -> None:
    row = {stage.name: number for number, stage in enumerate(shown)}
    for stage in shown:
        x, y = lanes[stage.name] * LANE, row[stage.name]
        if stage.feeds is not None:
            to_x, to_y = lanes[stage.feeds] * LANE, row[stage.feeds]
            ax.plot([x, x, to_x], [y, to_y - 0.45 if to_x != x else to_y, to_y], color=MID, linewidth=1.4, zorder=1)
        ax.plot([x], [y], marker="o", markersize=5, color=INK, zorder=2)
        ax.text((max(lanes.values()) + 1) * LANE, y, short(stage.name), va="center", fontsize=TEXT, color=INK)


def _draw_columns(ax: Axes, shown: Sequence[Stage], last_lane: int, currency: str) -> None:
    start = (last_lane + 1) * LANE + NAMES
    columns: tuple[tuple[str, str, list[float], Callable[[float], str], dict[str, Any]], ...] = (
        ("defects arise", "per unit", [s.arises for s in shown], words.number, {"color": ACCENT}),
        ("are found", "per unit", [s.found for s in shown], words.number, {"color": "white", "edgecolor": ACCENT}),
        ("money is lost", f"{currency}/year", [s.lost for s in shown], words.money,
         {"color": PALE, "edgecolor": MID, "hatch": HATCH}),
    )  # fmt: skip
    for head, unit, values, said, look in columns:
        longest = max(values) or 1.0
        rows = range(len(values))
        ax.barh(rows, [COLUMN * v / longest for v in values], left=start, height=BAR, linewidth=0.8, label=head, **look)
        ax.text(start, -0.75, f"{head}\n{plain(unit)}", fontsize=SMALL, color=SOFT, va="bottom")
        for number, value in enumerate(values):
            where = start + COLUMN * value / longest + 0.08
            ax.text(where, number, said(value), va="center", fontsize=SMALL, color=SOFT)
        start += COLUMN + GAP
    ax.set_xlim(-0.3, start)
