"""The plan as a workbook: the answer, the steps with their units, and on sheets of their own all that it rests on."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from operator import attrgetter
from pathlib import Path
from typing import TYPE_CHECKING, Any

from allocator.cells import fill_cell, new_book, save_book, width_of, write_head
from allocator.report import blocks, words
from allocator.report.plan_text import answer, choice
from allocator.results import Plan, StepTarget, Yields

if TYPE_CHECKING:
    from openpyxl import Workbook
    from openpyxl.cell.cell import Cell, MergedCell

COUNT, TEXT = "#,##0", "General"
WIDE = 100
"""Width of a column of sentences."""
LONGEST_HEAD = 24
"""Longer heads are broken into lines."""
Column = tuple[str, str, Callable[[StepTarget], Any]]

# Column, unit ({money}: the scenario's currency), and where its figure stands.
STEPS: tuple[Column, ...] = (
    ("step", "", attrgetter("step")),
    ("supplier", "", attrgetter("supplier")),
    ("choice", "", choice),
    ("sigma level today", "σ", attrgetter("today.sigma_level")),
    ("sigma level to reach", "σ", attrgetter("target.sigma_level")),
    ("drift allowance", "σ", attrgetter("target.shift")),
    ("k", "", attrgetter("target.k")),
    ("limits", "sides", attrgetter("target.sides")),
    ("Cp to reach", "", attrgetter("target.cp")),
    ("Cpk today", "", attrgetter("today.cpk")),
    ("Cpk to reach", "as measured", attrgetter("target.cpk")),
    ("Cpk after shift", "", attrgetter("target.cpk_after_shift")),
    ("DPMO today", "per million opportunities", attrgetter("today.dpmo")),
    ("DPMO to reach", "per million opportunities", attrgetter("target.dpmo")),
    ("ppm today", "items per million", attrgetter("today.ppm")),
    ("ppm to reach", "items per million", attrgetter("target.ppm")),
    ("share of the defect budget", "%", attrgetter("budget_share")),
    ("first-pass yield", "%", attrgetter("first_pass_yield")),
    ("starts", "items/year", attrgetter("starts_per_year")),
    ("scrap", "{money}/year", attrgetter("scrap")),
    ("rework", "{money}/year", attrgetter("rework")),
    ("inspection", "{money}/year", attrgetter("inspection")),
    ("improvement", "{money}/year", attrgetter("improvement")),
    ("capital", "{money}", attrgetter("capital")),
    ("floor", "", attrgetter("floor")),
    ("distance to the floor", "", attrgetter("floor_distance")),
    ("at its cap", "", attrgetter("cap")),
    ("safety", "", lambda step: "safety step" if step.safety else None),
)


def write_plan_book(plan: Plan, path: str | Path) -> None:
    """Write a plan to a workbook; an existing file is replaced.

    Raises
    ------
    InputError
        When the name does not end in .xlsx.
    """
    path = Path(path)
    book = new_book(path)
    above = _write_answer(book, plan)
    _sheet(book, "plan", ("figure", "unit", "plan", "today", "target"), _figures(plan), top=above + 1)
    heads = [f"{name} [{unit.format(money=words.clean(plan.currency))}]" if unit else name for name, unit, _ in STEPS]
    _sheet(book, "steps", heads, ([get(step) for _, _, get in STEPS] for step in plan.rows), _percent_columns())
    money = words.clean(plan.currency)
    if plan.purchases:
        bought = [[item.name, item.price, item.per_year_cost] for item in plan.purchases]
        _sheet(book, "purchases", ("purchase", f"price [{money}]", f"cost [{money}/year]"), bought)
    if plan.rules:
        heads = ["rule", f"total [{money}/year]", "yield [%]", "target", f"the plan saves [{money}/year]", "breaks"]
        _sheet(book, "simpler rules", heads, _rules(plan), {3})
    _sheet(
        book, "assumptions", ("assumed",), [[text] for text in (*plan.assumed, blocks.YIELDS_NOTE, blocks.INDEX_NOTE)]
    )
    _sheet(book, "cautions", ("caution", "steps", "why it matters", "what to do"), _cautions(plan))
    _sheet(book, "proof", ("evidence", "value"), _proof(plan))
    save_book(book, path)


def _percent_columns() -> set[int]:
    return {number for number, (_, unit, _) in enumerate(STEPS, start=1) if unit == "%"}


def _write_answer(book: Workbook, plan: Plan) -> int:
    """Put title, answer and last word at the top of the first sheet; return how many rows that takes."""
    from openpyxl.styles import Alignment, Font

    sheet = book.create_sheet("plan")
    safety = words.listed([words.quoted(step.step) for step in plan.rows if step.safety], more="more steps")
    last = blocks.SAFETY_WORD.format(steps=safety) if safety else blocks.LAST_WORD
    above = [words.clean(plan.title) or "Untitled scenario", answer(plan), last]
    for number, text in enumerate(above, start=1):
        cell = sheet.cell(number, 1)
        fill_cell(cell, text, "plan")
        sheet.merge_cells(start_row=number, start_column=1, end_row=number, end_column=5)
        cell.alignment = Alignment(wrap_text=True, vertical="top")
        sheet.row_dimensions[number].height = 16 * (1 + len(text) // WIDE)
    sheet.cell(1, 1).font = Font(bold=True, size=14)
    return len(above)


def _figures(plan: Plan) -> Iterable[Sequence[Any]]:
    money = words.clean(plan.currency)
    for name in words.YIELDS:
        yield from _yield_rows(plan, name)
    yield ["defects per unit", "defects/unit", plan.dpu, plan.today.dpu]
    for kind in (*blocks.MONEY_KINDS, "total"):
        yield [kind, f"{money}/year", *_of((plan.money, plan.today.money), kind)]
    yield ["cost of a shipped unit", f"{money}/unit", plan.cost_per_unit]
    yield ["shipped", "units/year", plan.shipped_per_year]
    yield ["capital", money, plan.capital, None, plan.capital_limit]
    yield ["fall of the total per unit of defect budget", f"{money}/year", plan.price_of_defect_budget]
    yield ["the next nine, on top", f"{money}/year", plan.cost_of_next_nine]
    if plan.restraint is not None:
        yield [f"added by: {'; '.join(plan.restraint.what)}", f"{money}/year", plan.cost_of_restraint]
    best = plan.best_reachable
    if best is not None:
        name = words.yield_name(best.of)
        yield [f"highest reachable {name}", "%", best.yield_]
        yield [f"total at the highest reachable {name}", f"{money}/year", best.total]


def _yield_rows(plan: Plan, name: str) -> Iterable[Sequence[Any]]:
    """One yield as per cent, ppm and nines: of the plan, of today, and as promised."""
    states: tuple[Yields | None, ...] = (plan.yields, plan.today.yields)
    losses = [*_of(states, name.replace("_yield", "_loss")), plan.target_losses.get(name)]
    said = words.yield_name(name)
    yield [said, "%", *_of(states, name), plan.targets.get(name)]
    yield [f"{said}, loss", "units per million", *(None if loss is None else loss * 1e6 for loss in losses)]
    yield [f"{said}, nines", "", *(None if loss is None else words.nines_of(loss) for loss in losses)]


def _of(states: Iterable[object | None], name: str) -> list[float | None]:
    return [None if state is None else getattr(state, name) for state in states]


def _rules(plan: Plan) -> Iterable[Sequence[Any]]:
    for rule in plan.rules:
        met = "met" if rule.meets_target else "missed"
        yield [rule.rule, rule.total, rule.yield_reached, met, rule.saving, "; ".join(rule.broken)]


def _cautions(plan: Plan) -> Iterable[Sequence[Any]]:
    for caution in plan.cautions:
        yield [caution.code.replace("_", " "), ", ".join(caution.steps), caution.reason, caution.fix]


def _proof(plan: Plan) -> Iterable[Sequence[Any]]:
    proof = plan.proof
    if proof is None:
        yield ["no plan", "; ".join(f"{held.step}: {held.reason}" for held in plan.binding)]
        return
    unit = f"[{words.clean(plan.currency)}/year]"
    yield [f"total of the plan, evaluated exactly {unit}", proof.total]
    yield [f"proven lower bound {unit}", proof.lower_bound]
    yield ["gap, as a share of the total", proof.gap]
    yield ["method", proof.method]
    yield ["time [s]", proof.seconds]
    if proof.note:
        yield ["note", proof.note]


def _sheet(
    book: Workbook, title: str, heads: Sequence[str], rows: Iterable[Sequence[Any]], percents: Iterable[int] = (),
    top: int = 0,
) -> None:  # fmt: skip
    """Write a table below `top` rows; `percents` are columns of shares, and "%" beside a figure makes its row one."""
    from openpyxl.utils import get_column_letter

    sheet, shares = book[title] if top else book.create_sheet(title), set(percents)
    table = [[words.clean(value) if isinstance(value, str) else value for value in row] for row in rows]
    write_head(sheet, heads, top + 1)
    for number, row in enumerate(table, start=top + 2):
        for column, value in enumerate(row, start=1):
            _fill(sheet.cell(number, column), value, title, column in shares or "%" in row)
    for column, head in enumerate(heads, start=1):
        texts = [row[column - 1] for row in table if len(row) >= column and isinstance(row[column - 1], str)]
        width = WIDE if len(heads) == 1 else width_of(head[:LONGEST_HEAD], texts)
        sheet.column_dimensions[get_column_letter(column)].width = width
    if table and not top:
        sheet.auto_filter.ref = f"A1:{get_column_letter(len(heads))}{len(table) + 1}"


def _fill(cell: Cell | MergedCell, value: Any, title: str, is_share: bool) -> None:
    from openpyxl.styles import Alignment

    fill_cell(cell, value, title)
    cell.number_format = _format(value, is_share)
    cell.alignment = Alignment(vertical="top", wrap_text=isinstance(value, str))


def _format(value: Any, is_share: bool) -> str:
    """A number format with as many digits as the figure deserves.

    >>> [_format(x, False) for x in (1234567.8, 12.3, 0.0123, 1e-7, "Weld")]
    ['#,##0', '#,##0.00', '0.0000', '0.00E+00', 'General']
    >>> _format(0.99995, True), _format(0.4213, True)
    ('0.0000%', '0.00%')
    """
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not math.isfinite(value):
        return TEXT
    if is_share:
        return f"0.{'0' * _places(value)}%"
    size = abs(value)
    if size == 0.0 or size >= 1000.0 or isinstance(value, int):
        return COUNT
    return "#,##0.00" if size >= 1.0 else "0.0000" if size >= 0.001 else "0.00E+00"


def _places(part: float) -> int:
    """Decimals of a percentage that keep its loss in sight."""
    loss = 1.0 - part
    return 2 if not 0.0 < loss < 0.005 else min(10, max(2, -math.floor(math.log10(loss * 100.0)) + 1))
