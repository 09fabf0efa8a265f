"""The price of nines as text: what each point costs, what changes there, and where it ends."""

from __future__ import annotations

from allocator.report import blocks, words
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import Nines, NinesPoint

MOST_CHANGES = 8
NO_CHOICE = (
    "No choice at all keeps the floors, the limits and the other targets, so there is nothing to price. "
    "`allocator plan` says what holds them out of reach, and what comes nearest."
)


def nines_text(nines: Nines, width: int = LOG_WIDTH) -> str:
    paper = Paper(width)
    name = words.yield_name(nines.split)
    blocks.write_title(paper, nines.title)
    paper.heading(
        f"What each nine of {name} costs; today the line stands at {words.fixed(nines.today_nines)} nines. One nine "
        "more means ten times fewer losses."
    )
    missed = nines.missed_target_loss
    if missed is not None:
        target = words.yield_in_full(1.0 - missed, missed)
        paper.heading(f"The target, a {name} of {target}, is out of reach: the points end below it.")
    if nines.rows:
        _write_points(paper, nines)
    _write_changes(paper, nines)
    _write_ends(paper, nines, name)
    blocks.write_assumed(paper, nines.assumed)
    blocks.write_cautions(paper, nines.cautions)
    blocks.write_last_word(paper, blocks.safety_steps(nines.cautions))
    return paper.text()


def _write_points(paper: Paper, nines: Nines) -> None:
    currency = words.clean(nines.currency)
    paper.heading(f"Least cost of reaching at least each yield ({currency}/year)")
    extra, price = "extra over\nthe point\nbefore", "price per\nunit of\ndefect budget"
    heads = columns(["point"], ["nines", "yield\nneeded", "total", extra, price])
    paper.table(heads, (point_row(point) for point in nines.rows), len(nines.rows))
    if any(point.price_of_defect_budget is not None for point in nines.rows):
        paper.say(
            "The price per unit of defect budget (budget = -ln of the yield) holds near its point only; for a whole "
            "nine read the extra cost."
        )


def point_row(point: NinesPoint) -> list[str]:
    extra = "-" if point.extra is None else words.money(point.extra)
    price = "-" if point.price_of_defect_budget is None else words.money(point.price_of_defect_budget)
    needed = words.percent(point.target_yield, point.target_loss)
    return [point.label, words.fixed(point.nines), needed, words.money(point.total), extra, price]


def _write_changes(paper: Paper, nines: Nines) -> None:
    said = [
        f"{point.label}, {words.fixed(point.nines)} nines: "
        + words.listed([words.clean(change) for change in point.changes], MOST_CHANGES, "more changes", "; ")
        for point in nines.rows
        if point.changes
    ]
    if said:
        paper.heading("What changes at each point, against the point before")
        paper.bullets(said)


def _write_ends(paper: Paper, nines: Nines, name: str) -> None:
    if nines.highest is None:
        paper.heading(NO_CHOICE)
    else:
        paper.heading(f"Highest reachable {name}: {blocks.best_in_words(nines.highest, nines.currency)}.")
        if nines.highest.binding:
            paper.say("What holds it there:")
            blocks.write_binding(paper, nines.highest.binding)
    if nines.optimum_total is not None:
        best = words.yield_in_full(nines.optimum_yield, nines.optimum_loss)
        cost = words.per_year(nines.optimum_total, nines.currency)
        paper.heading(f"Economic optimum, were no {name} promised: {best}, at {cost}.")
