"""A result at a glance, for whoever types Python: its title and answer, and in a notebook its table as well."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import fields, is_dataclass
from html import escape
from itertools import islice
from typing import Any

from allocator.report import nines_text, plan_text, today_text, words
from allocator.report.render import has_renderer, render
from allocator.results import Check, Nines, Plan, Review, ReviewRow, StepTarget, Today, Understood

MOST_ROWS = 40
TABLES = ("steps", "points", "options", "things", "figures")
"""Names under which results give a DataFrame."""
OPENING = 2
"""Paragraphs of the sheet that say the answer: its title, and the sentences below."""
_RULE = re.compile(r"^-+( -+)* *$", re.MULTILINE)
"""The line of dashes below a table's head."""

Table = tuple[Sequence[str], Callable[[Any], Sequence[str]]]


def glance_text(result: object) -> str | None:
    """The opening of the result's sheet, and where its figures are to be found; None without a sheet."""
    if not has_renderer(result):
        return None
    return "\n".join((*_opening(result), *_whereabouts(result)))


def glance_html(result: object) -> str | None:
    """The same with the result's table; whatever a user wrote stays text."""
    if not has_renderer(result):
        return None
    first, *rest = _opening(result)
    paragraphs = [f"<strong>{'<br>'.join(map(escape, first.splitlines()))}</strong>"]
    paragraphs += [escape(" ".join(paragraph.splitlines())) for paragraph in rest]
    after = [escape(line) for line in _whereabouts(result)]
    return "\n".join(
        (*(f"<p>{said}</p>" for said in paragraphs), _table(result), *(f"<p>{said}</p>" for said in after))
    )


def _opening(result: object) -> list[str]:
    paragraphs = render(result).rstrip("\n").split("\n\n")
    kept = [paragraphs[0]]
    for paragraph in paragraphs[1:OPENING]:
        if _RULE.search(paragraph):
            break
        kept.append(paragraph)
    return kept if len(kept) > 1 or len(paragraphs) == 1 else [*kept, paragraphs[-1]]


def _whereabouts(result: object) -> list[str]:
    rows = getattr(result, "rows", getattr(result, "cases", None))
    if rows is None:
        return []
    kind = "rows" if hasattr(result, "rows") else "cases"
    name = next((name for name in TABLES if hasattr(type(result), name)), None)
    return [f"{len(rows):,} {kind}: .{kind} as records" + (f", .{name} as a DataFrame" if name else "")]


def _table(result: object) -> str:
    rows: Sequence[object] = getattr(result, "rows", ())
    if not rows:
        return ""
    heads, cells = _TABLES.get(type(result)) or _any_table(rows)
    head = "".join(f"<th>{escape(title)}</th>" for title in heads)
    body = "\n".join(f"<tr>{''.join(map(_cell, cells(row)))}</tr>" for row in islice(rows, MOST_ROWS))
    rest = f"<p>… and {len(rows) - MOST_ROWS:,} more</p>" if len(rows) > MOST_ROWS else ""
    return f"<table>\n<thead><tr>{head}</tr></thead>\n<tbody>\n{body}\n</tbody>\n</table>{rest}"


def _cell(text: str) -> str:
    return f"<td>{escape(words.clean(text))}</td>"


def _any_table(rows: Sequence[Any]) -> Table:
    """The plain figures of records that have no table of their own here."""
    names = [f.name for f in fields(rows[0]) if all(_is_plain(getattr(row, f.name)) for row in rows[:MOST_ROWS])]
    return [name.replace("_", " ").strip() for name in names], lambda row: [_plain(getattr(row, n)) for n in names]


def _is_plain(value: object) -> bool:
    return not any(map(is_dataclass, value)) if isinstance(value, tuple) else not is_dataclass(value)


def _plain(value: object) -> str:
    if value is None:
        return "-"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return words.number(value)
    return ", ".join(map(str, value)) if isinstance(value, tuple) else str(value)


def _plan_row(step: StepTarget) -> list[str]:
    return [
        step.step, plan_text.choice(step), *plan_text.level_row(step)[1:],
        words.share(step.budget_share), words.money(step.improvement), words.money(step.scrap),
    ]  # fmt: skip


def _check_row(step: Understood) -> list[str]:
    level = step.level
    return [
        step.step, step.given, words.fixed(level.sigma_level), words.fixed(level.cpk), words.number(level.ppm),
        words.money(step.lost_when_scrapped), f"{step.ways:,}", step.improves or "-", step.inspection,
    ]  # fmt: skip


def _review_row(row: ReviewRow) -> list[str]:
    figures = row.figures
    money = (
        ("-",) * 3
        if figures is None
        else tuple(map(words.money, (figures.total, figures.over_living, figures.capital)))
    )
    taken = "in the plan" if row.in_plan else ""
    return [row.step or "(whole line)", row.option or ", ".join(row.kinds), *money, taken, "; ".join(row.against)]


_REVIEW = (
    "step",
    "option",
    "total per year",
    "more than living with the scrap",
    "capital",
    "",
    "what speaks against it",
)
_PLAN = (
    "step", "choice", "sigma today", "sigma target", "Cpk today", "Cpk target", "Cpk after shift", "ppm today",
    "ppm target", "share of budget", "improvement per year", "scrap per year",
)  # fmt: skip
_NINES = ("point", "nines", "yield needed", "total per year", "extra over the point before", "price of defect budget")
_TODAY = ("step", "sigma level", "Cpk", "Cpk after shift", "first-pass yield", "DPU", "ppm")
_CHECK = ("step", "given as", "sigma level", "Cpk", "ppm", "lost when scrapped", "ways", "improves", "inspection")
_TABLES: dict[type, Table] = {
    Plan: (_PLAN, _plan_row),
    Nines: (_NINES, nines_text.point_row),
    Today: (_TODAY, today_text.level_row),
    Check: (_CHECK, _check_row),
    Review: (_REVIEW, _review_row),
}
