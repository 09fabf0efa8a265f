"""How firm is a capital case: what its worth does when one figure moves, and where the verdict turns."""

from __future__ import annotations

from typing import TYPE_CHECKING

from allocator.errors import RangeError
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
from allocator.results import CapitalCase, CashCase, Lever

if TYPE_CHECKING:
    from matplotlib.axes import Axes

MOST_LEVERS = 12
BAR = 0.6


def sensitivities(case: CapitalCase, against: str | None = None, ax: Axes | None = None) -> Axes:
    """Draw the worth of a capital case at both ends of each figure, changed alone, the largest swing first.

    Parameters
    ----------
    case : CapitalCase
        As given by `capital_case`.
    against : str, optional
        Which of its comparisons; the first without it.
    ax : matplotlib Axes, optional
        Where to draw; a new figure without it.

    Returns
    -------
    matplotlib Axes
        x is the worth [currency/year]; one bar to each end, from the worth as it stands.

    Raises
    ------
    RangeError
        When the case has no such comparison.
    """
    chosen = _comparison(case, against)
    levers = chosen.levers[:MOST_LEVERS]
    ax = new_axes(ax, 8.0, 1.5 + 0.34 * len(levers))
    subject = "the plan" if case.subject is None else f"'{cut(case.subject)}'"
    calm(ax, f"Worth of {subject} against {chosen.against}", f"{cut(case.currency)}/year")
    rows, base = range(len(levers)), chosen.worth_per_year
    ax.barh(
        rows, [lever.worth_low - base for lever in levers], left=base, height=BAR, color=PALE, edgecolor=MID,
        hatch=HATCH, linewidth=0.6, label="figure at its lower end",
    )  # fmt: skip
    ax.barh(
        rows, [lever.worth_high - base for lever in levers], left=base, height=BAR, color=ACCENT,
        label="figure at its upper end",
    )  # fmt: skip
    ax.axvline(base, color=INK, linewidth=1.0)
    ax.axvline(0.0, color=INK, linewidth=1.0, linestyle=(0, (4, 3)))
    ax.set_yticks(list(rows), [_label(lever, case.currency) for lever in levers])
    ax.invert_yaxis()
    money_ticks(ax.xaxis)
    ax.grid(axis="x", color=RULE, linewidth=0.6)
    ax.set_axisbelow(True)
    explain(ax)
    return ax


def _comparison(case: CapitalCase, against: str | None) -> CashCase:
    found = [one for one in case.cases if against in (None, one.against)]
    if not found:
        there = ", ".join(repr(one.against) for one in case.cases) or "none: " + "; ".join(case.left_out)
        raise RangeError(f"the case has no comparison {against or ''!r}; it has {there}")
    return found[0]


def _label(lever: Lever, currency: str) -> str:
    unit = currency if lever.unit == "currency" else lever.unit
    ends = f"{short(lever.figure)}\n{words.number(lever.low)} … {words.number(lever.high)} {short(unit)}"
    return ends if lever.turns_at is None else f"{ends}; turns at {words.number(lever.turns_at)}"
