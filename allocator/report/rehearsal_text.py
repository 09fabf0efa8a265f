"""A rehearsal as text: what was counted beside what was worked out, what charging every item adds, what clusters."""

from __future__ import annotations

from collections.abc import Callable

from allocator.report import blocks, words
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import Rehearsal, Rehearsed, StepRehearsed

INTERVAL = ["computed", "simulated", "95 %\nfrom", "95 %\nto"]
METHOD = (
    "Intervals: Jeffreys' for yields; Student's t over batches for money and starts, and Jeffreys' for the count where "
    "fewer than 30 events lie behind a figure. One interval in twenty misses by chance."
)
UNCERTAIN_METHOD = (
    "Intervals: the middle 95 % of 200 lines, each with capabilities drawn anew (spread by its chi-square law, mean by "
    "its normal law, counts by Beta); the chance within a line is taken off. Computed: with the estimates as they are."
)
CHARGED = (
    "The plan charges inspection and rework on the items in shipped units. On every item met, those that are scrapped "
    "further on were looked at and mended too (a defect on an item that its own gate scraps is not mended)."
)


def rehearsal_text(answer: Rehearsal, width: int = LOG_WIDTH) -> str:
    paper = Paper(width)
    blocks.write_title(paper, answer.title, answer.shipped_per_year)
    paper.heading(played(answer))
    paper.say(verdict(answer))
    _write_yields(paper, answer)
    _write_money(paper, answer)
    _write_steps(paper, answer)
    _write_clusters(paper, answer)
    paper.heading(UNCERTAIN_METHOD if answer.uncertain else METHOD)
    blocks.write_assumed(paper, answer.assumed)
    blocks.write_cautions(paper, answer.cautions)
    blocks.write_last_word(paper, blocks.safety_steps(answer.cautions))
    return paper.text()


def played(answer: Rehearsal) -> str:
    line = "The plan" if answer.line == "plan" else "The line as it stands"
    drawn = sum(row.drawn for row in answer.rows)
    softly = f", the capabilities of {drawn} steps drawn anew for each of 200 lines" if answer.uncertain else ""
    return (
        f"{line}, played through: {answer.units:,} units shipped, {words.count(answer.items_made)} items made, "
        f"seed {answer.seed}{softly}."
    )


def verdict(answer: Rehearsal) -> str:
    said = _compared(answer)
    if answer.uncertain and not any(row.drawn for row in answer.rows):
        return f"{said} No step states a `sample` (or counts), so nothing could be drawn: every line is the same."
    if any(row.clustering is not None for row in answer.rows):
        return f"{said} Defects cluster here, and the computed figures are Poisson: a difference is expected."
    return said


def _compared(answer: Rehearsal) -> str:
    """How many figures lie outside, beside what chance alone gives; amounts without any chance are left out."""
    figures = {**answer.losses, **answer.money}
    moved = [name for name, figure in figures.items() if figure.upper > figure.lower or name in answer.missed]
    missed = [words.yield_name(name) for name in answer.missed]
    if not missed:
        return f"All {len(moved)} computed yields and amounts that chance moves lie within their 95 % intervals."
    return (
        f"{len(moved) - len(missed)} of {len(moved)} computed yields and amounts that chance moves lie within their "
        f"95 % intervals; outside: {words.listed(missed)}. Chance alone puts one in twenty outside, and figures that "
        "hang together go outside together: play it again with another --seed, which moves chance but no error."
    )


def _cells(figure: Rehearsed, show: Callable[[float], str]) -> list[str]:
    computed = "-" if figure.computed is None else show(figure.computed)
    return [computed, show(figure.simulated), show(figure.lower), show(figure.upper)]


def _yield(loss: float) -> str:
    return words.percent(1.0 - loss, loss)


def _write_yields(paper: Paper, answer: Rehearsal) -> None:
    paper.heading("Yields")
    paper.say(blocks.YIELDS_NOTE)
    rows = []
    for name, loss in answer.losses.items():
        turned = Rehearsed(loss.computed, loss.simulated, loss.upper, loss.lower)
        rows.append([words.yield_name(name), *_cells(turned, _yield)])
        rows.append(["  loss, ppm", *_cells(loss, words.ppm)])
    paper.table(columns(["yield"], INTERVAL), rows, len(rows))


def _write_money(paper: Paper, answer: Rehearsal) -> None:
    paper.heading(f"Money ({words.clean(answer.currency)}/year), charged as the plan does")
    rows = [[kind, *_cells(figure, words.money)] for kind, figure in answer.money.items()]
    paper.table(columns(["kind"], INTERVAL), rows, len(rows))
    paper.heading(f"The same charged on every item met ({words.clean(answer.currency)}/year)")
    rows = [[kind, *_cells(figure, words.money)[1:]] for kind, figure in answer.every_item.items()]
    rows.append(["difference", *_cells(answer.difference, words.money)[1:]])
    paper.table(columns(["kind"], INTERVAL[1:]), rows, len(rows))
    paper.say(CHARGED)


def _write_steps(paper: Paper, answer: Rehearsal) -> None:
    paper.heading("Steps: starts per year")
    rows = [[row.step, *_cells(row.starts_per_year, words.number)] for row in answer.rows]
    paper.table(columns(["step"], INTERVAL), rows, len(rows))
    paper.heading(f"Steps: scrap at each gate ({words.clean(answer.currency)}/year)")
    rows = [[row.step, *_cells(row.scrap, words.money)] for row in answer.rows]
    paper.table(columns(["step"], INTERVAL), rows, len(rows))


def _write_clusters(paper: Paper, answer: Rehearsal) -> None:
    clustered = [row for row in answer.rows if row.clustering is not None]
    if not clustered:
        return
    paper.heading("Clustering: items free of defects of the step, by the closed forms")
    heads = columns(["step"], ["alpha", "Poisson", "clustered", "difference,\npoints"])
    rows = [_cluster_row(row) for row in clustered]
    rows.append(["rolled yield", "-", *_points(answer.poisson_rolled_yield, answer.clustered_rolled_yield)])
    paper.table(heads, rows, len(rows))


def _cluster_row(row: StepRehearsed) -> list[str]:
    return [row.step, words.count(row.clustering), *_points(row.poisson_item_yield, row.clustered_item_yield)]


def _points(poisson: float, clustered: float) -> list[str]:
    return [
        words.percent(poisson, 1.0 - poisson),
        words.percent(clustered, 1.0 - clustered),
        words.number(100.0 * (clustered - poisson)),
    ]
