"""Buy or leave as text: what is worth its money, what is not, where that turns, and what speaks against it."""

from __future__ import annotations

from collections.abc import Sequence

from allocator.report import blocks, words
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import Weighed, Weighing

MOST_AGAINST = 40
HOW = (
    "Worth: the best plan without it, less the best plan with it, everything else planned anew. Price: what it may "
    "cost at most to pay (a law: its scale, the equipment of these plans kept; x: all its quotations times this). "
    "Volume: units shipped per year from which it pays, and up to which where something better takes its place. Sigma: "
    "the level that it must really reach to pay."
)
NEEDED = "needed: without it the promise, a floor or a limit cannot be kept."


def weigh_text(weighed: Weighed, width: int = LOG_WIDTH) -> str:
    paper = Paper(width)
    blocks.write_title(paper, weighed.title, weighed.shipped_per_year)
    paper.heading(_answer(weighed))
    if weighed.rows:
        paper.say(HOW)
        _write_rows(paper, weighed)
        _write_against(paper, weighed.rows)
    blocks.write_assumed(paper, weighed.assumed)
    blocks.write_cautions(paper, weighed.cautions)
    blocks.write_last_word(paper, blocks.safety_steps(weighed.cautions))
    return paper.text()


def _answer(weighed: Weighed) -> str:
    wanted = words.targets_in_full(weighed.targets, weighed.target_losses, weighed.split)
    if not weighed.reached:
        return (
            f"The target cannot be met: {wanted or 'what was asked'} is out of reach, so nothing can be weighed. "
            "`allocator plan` shows the best reachable plan and what holds it there."
        )
    total = words.per_year(weighed.total, weighed.currency)
    taken = [row for row in weighed.rows if row.verdict != "leave"]
    aim = f"For {wanted}" if wanted else "No target is set; at the least cost"
    if not weighed.rows:
        return f"{aim}: the plan costs {total}; there is nothing to buy, change or improve."
    return f"{aim}: of {len(weighed.rows):,} things weighed {len(taken):,} are worth it; the plan costs {total}."


def _write_rows(paper: Paper, weighed: Weighed) -> None:
    money = words.clean(weighed.currency)
    free = [row for row in weighed.rows if row.free]
    capital = [row for row in weighed.rows if not row.free]
    if free:
        paper.heading(
            f"What ties up no capital (worth in {money}/year; price in {money} once, unless per year or item)"
        )
        _write_table(paper, free, weighed)
    if capital:
        base = ", measured from the line that the free moves above have already improved" if free else ""
        paper.heading(
            f"What ties up capital{base} (worth in {money}/year; price in {money} once, unless per year or item)"
        )
        _write_table(paper, capital, weighed)
    if any(row.verdict == "needed" for row in weighed.rows):
        paper.say(NEEDED)
    lowest, highest = map(words.number, weighed.volumes)
    paper.say(f"Volumes were looked at from {lowest} to {highest} units a year.")
    gone = [_name(row) for row in weighed.rows if weighed.gives_way(row)]
    if gone:
        now = words.number(weighed.shipped_per_year)
        paper.say(
            f"Pays at a smaller volume than today's {now}, and gives way to something better before it (to <{now}): "
            f"{words.listed(gone)}."
        )


def _write_table(paper: Paper, rows: Sequence[Weighing], weighed: Weighed) -> None:
    figures = ["worth\nper year", "price", "pays up\nto price", "pays at\nvolume", "pays from\nsigma"]
    heads = columns(["what", "verdict"], figures)
    paper.table(heads, (_row(row, weighed) for row in rows), len(rows))


def _row(row: Weighing, weighed: Weighed) -> list[str]:
    level = row.break_even_capability
    return [
        _name(row), row.verdict, "-" if row.worth_per_year is None else words.money(row.worth_per_year),
        _price(row.stated_price, row), _up_to(row), _volume(row, weighed),
        words.fixed(None if level is None else level.sigma_level),
    ]  # fmt: skip


def _name(row: Weighing) -> str:
    own = words.clean(row.alternative)
    return f"{own} (shared)" if row.step is None else f"{words.clean(row.step)}: {own}"


def _price(price: float | None, row: Weighing) -> str:
    if price is None:
        return "-"
    return words.money(price) if row.price_per == "once" else f"{words.money(price)}/{row.price_per}"


def _up_to(row: Weighing) -> str:
    if row.break_even_price is None and row.break_even_price_factor is not None:
        return f"x {words.number(row.break_even_price_factor)}"
    return _price(row.break_even_price, row)


def _volume(row: Weighing, weighed: Weighed) -> str:
    smallest = words.number(weighed.volumes[0])
    start = None if row.break_even_volume is None else words.number(row.break_even_volume)
    if weighed.gives_way(row):
        return f"{start or smallest} to <{words.number(weighed.shipped_per_year)}"
    if start is None:
        return "none" if row.pays_from == "no volume" else f"any from {smallest}"
    return f"from {start}"


def _write_against(paper: Paper, rows: Sequence[Weighing]) -> None:
    said = [f"{_name(row)}: {words.listed(row.against, joint='; ')}" for row in rows if row.against]
    if said:
        paper.heading("What speaks against it, money apart")
        paper.bullets(said, MOST_AGAINST)
