"""The look of every figure: one accent, greys that differ in lightness alone, quiet axes, and names that stay names."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from allocator.report.words import clean

if TYPE_CHECKING:
    from matplotlib.axes import Axes

# Told apart by lightness, and by hatching where they touch: so they are in grey print and by every kind of eye.
INK, SOFT, RULE = "#1c2326", "#536066", "#d3d9da"
ACCENT, MID, PALE = "#0c5868", "#79aebb", "#e3e8e8"
HATCH = "////"
TITLE, TEXT, SMALL = 12, 9.5, 8.5
"""Sizes of letters [pt]."""
LONGEST_NAME = 34


def new_axes(ax: Axes | None, width: float, height: float) -> Axes:
    """Return the axes given, or those of a new figure [inches]."""
    return ax if ax is not None else new_row(1, width, height)[0]


def new_row(count: int, width: float, height: float, widths: Sequence[float] | None = None) -> list[Axes]:
    """Return axes side by side in a new figure."""
    from matplotlib import pyplot  # here, because only those who draw should wait for it

    ratios = {"width_ratios": widths} if widths is not None else {}
    figure, axes = pyplot.subplots(
        1, count, figsize=(width, height), squeeze=False, sharey=count > 1, layout="constrained", gridspec_kw=ratios
    )
    figure.set_facecolor("white")
    return list(axes[0])


def calm(ax: Axes, title: str, x: str = "", y: str = "") -> None:
    """Give axes the look: a title at the left, only the lines that carry something."""
    ax.set_title(plain(title), loc="left", fontsize=TITLE, color=INK, pad=12)
    ax.set_xlabel(plain(x), fontsize=TEXT, color=SOFT, loc="left")
    ax.set_ylabel(plain(y), fontsize=TEXT, color=SOFT)
    ax.tick_params(colors=SOFT, labelsize=SMALL, length=0)
    ax.set_facecolor("white")
    for side, spine in ax.spines.items():
        spine.set_visible(side == "bottom")
        spine.set_color(RULE)


def explain(ax: Axes) -> None:
    """Put the key below the axes, where no bar can be."""
    ax.legend(
        frameon=False, fontsize=SMALL, labelcolor=SOFT, loc="upper right", bbox_to_anchor=(1.0, 0.0), borderaxespad=2.4,
        ncols=2,
    )  # fmt: skip


def plain(text: str) -> str:
    """Return a text as it is to be read: one line, and a dollar sign is a dollar sign, no formula.

    >>> plain("$\\\\frac")
    '\\\\$\\\\frac'
    """
    return clean(text).replace("$", r"\$")


def cut(name: str) -> str:
    """Return a name no longer than fits."""
    kept = clean(name)
    return kept if len(kept) <= LONGEST_NAME else f"{kept[: LONGEST_NAME - 1]}…"


def short(name: str) -> str:
    """Return a name as it is to be read beside a bar."""
    return plain(cut(name))


def money_ticks(axis: object) -> None:
    """Write money with thousands separators."""
    from matplotlib.axis import Axis
    from matplotlib.ticker import FuncFormatter

    assert isinstance(axis, Axis)
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.0f}" if abs(value) >= 10 else f"{value:,.4g}"))
