"""Buy or leave: what each thing is worth a year, as one drawing around nothing, and where its verdict turns."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from allocator.report import words
from allocator.report.page.scale import Scale
from allocator.results import Weighed, Weighing

MOST_SHOWN = 60
LAW = "law"


@dataclass(frozen=True)
class Choice:
    """One thing weighed; the bar runs from nothing to its worth, in per cent of the drawing."""

    name: str
    where: str
    verdict: str
    worth: str
    capital: str
    start: float
    width: float
    gains: bool
    turns: list[str]
    against: list[str]


@dataclass(frozen=True)
class ChoicesSaid:
    said: list[str]
    zero: float
    groups: list[tuple[str, list[Choice]]]
    laws: list[Choice]
    """Steady improvement, step by step: there is nothing to buy, so it stands apart."""
    notes: list[str]


def choices_said(weighed: Weighed | None) -> ChoicesSaid | None:
    """Everything weighed, in the order of the record; None where nothing was."""
    if weighed is None or not weighed.rows:
        return None
    shown = weighed.rows[:MOST_SHOWN]
    worths = [row.worth_per_year for row in shown if row.worth_per_year is not None]
    scale = Scale(min([0.0, *worths]), max([0.0, *worths]))
    more = len(weighed.rows) - len(shown)
    things, laws = [row for row in shown if row.kind != LAW], [row for row in shown if row.kind == LAW]
    groups = [
        (head, [_choice(row, scale, weighed) for row in things if row.free == free])
        for head, free in (("What ties up no capital", True), ("What ties up capital, the free moves made", False))
    ]
    return ChoicesSaid(
        said=_said(weighed),
        zero=scale.at(0.0),
        groups=[(head, rows) for head, rows in groups if rows],
        laws=[_choice(row, scale, weighed) for row in laws],
        notes=_notes(shown, more),
    )


def _said(weighed: Weighed) -> list[str]:
    counts = {verdict: sum(row.verdict == verdict for row in weighed.rows) for verdict in ("buy", "leave", "needed")}
    needed = f" {counts['needed']:,} cannot be left: nothing else keeps the promise." if counts["needed"] else ""
    looked = f"Of {len(weighed.rows):,} things that could be bought or changed, {counts['buy']:,} are worth it"
    return [
        f"{looked} and {counts['leave']:,} are better left.{needed}",
        "Worth a year: the cost of the best plan without it, less that of the best plan with it, all else planned anew "
        "both times. Worths do not add up: one thing makes another worth more or less.",
    ]


def _notes(shown: Sequence[Weighing], more: int) -> list[str]:
    """What speaks against every law is said once."""
    of_laws = list(dict.fromkeys(text for row in shown if row.kind == LAW for text in row.against))
    notes = [f"Steady improvement, here or there: {words.listed(of_laws, joint='; ')}."] if of_laws else []
    return [*notes, f"{more:,} more are in the answer of: allocator weigh."] if more else notes


def _opened(text: str) -> str:
    said = words.clean(text)
    return said[:1].upper() + said[1:]


def _choice(row: Weighing, scale: Scale, weighed: Weighed) -> Choice:
    worth = row.worth_per_year
    low, high = sorted((scale.at(0.0), scale.at(worth or 0.0)))
    name = "steady improvement" if row.kind == LAW else words.clean(row.alternative)
    return Choice(
        name=name,
        where="shared" if row.step is None else words.clean(row.step),
        verdict=row.verdict,
        worth="" if worth is None else words.money(worth),
        capital=words.money(row.capital) if row.capital else "",
        start=low,
        width=round(high - low, 2),
        gains=worth is None or worth >= 0.0,
        turns=_turns(row, weighed),
        against=[] if row.kind == LAW else [_opened(text) for text in row.against],
    )


def _turns(row: Weighing, weighed: Weighed) -> list[str]:
    """Where the verdict turns: price, volume, and how good it must really be."""
    texts = []
    pays = "would pay" if row.verdict == "leave" else "pays"
    if row.kind == LAW:
        if row.break_even_price_factor is not None:
            texts.append(f"{pays} up to {words.number(row.break_even_price_factor)} times its cost")
    elif row.break_even_price is not None:
        texts.append(f"{pays} up to a price of {words.money(row.break_even_price)} {words.clean(weighed.currency)}")
    if weighed.gives_way(row):
        texts.append("pays at smaller volumes, then gives way to something better")
    elif row.break_even_volume is not None:
        texts.append(f"{pays} from {words.number(row.break_even_volume)} units a year")
    elif row.verdict != "needed":
        texts.append(f"{pays} {_where_no_volume_turns(row, weighed)}")
    level = row.break_even_capability
    if level is not None:
        texts.append(f"{pays} if it reaches {words.fixed(level.sigma_level)} sigma (Cpk {words.fixed(level.cpk)})")
    return texts


def _where_no_volume_turns(row: Weighing, weighed: Weighed) -> str:
    lowest, highest = map(words.number, weighed.volumes)
    return (
        f"at no volume up to {highest} a year"
        if row.pays_from == "no volume"
        else f"from {lowest} units a year or fewer"
    )
