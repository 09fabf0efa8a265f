"""Blocks of text that several reports share: yields, money, Cpk notes, what is assumed, cautions, the last word."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import zip_longest

from allocator.report import words
from allocator.report.paper import Paper, columns
from allocator.results import BestReachable, Binding, Caution, Money, TodayLine, Yields

MONEY_KINDS = ("scrap", "rework", "escapes", "inspection", "improvement")
YIELDS_NOTE = "(final yield here subtracts escapes; the common shop-floor figure does not)"
LOST_NOTE = (
    "Money lost at a step is the scrap, rework and inspection there. What escapes costs the line as a whole and is in "
    "no step's share."
)
SAFETY_CODE = "safety"
INDEX_NOTE = (
    "Cpk is the study index, as measured on parts, without the drift allowance; Cpk after shift is what is left of it "
    "once the mean has drifted by the allowance. ppm counts defective items of the step."
)
LAST_WORD = (
    "These targets are planning figures, worked out from the costs and capabilities that were entered. Governing "
    "codes, standards and contracts come first, and qualified practitioners decide."
)
SAFETY_WORD = (
    "Safety: people can be hurt where {steps} fails. Cost lowers no floor there, and no figure on this sheet releases "
    "such a step: follow the governing code, and let a qualified (where the law asks for it, licensed) practitioner "
    "decide and sign. All targets here are planning figures, and defer to codes, contracts and that judgement."
)


def write_title(paper: Paper, title: str, shipped_per_year: float | None = None) -> None:
    name = words.clean(title) or "Untitled scenario"
    volume = "" if shipped_per_year is None else f" - {words.number(shipped_per_year)} units shipped per year"
    paper.say(name + volume)


def _yield_cells(yields: Yields | None, name: str) -> tuple[str, str, str]:
    yield_ = None if yields is None else getattr(yields, name)
    loss = None if yields is None else getattr(yields, name.replace("_yield", "_loss"))
    return words.percent(yield_, loss), words.ppm(loss), words.nines(loss)


def write_yields(paper: Paper, losses: Mapping[str, float], states: Sequence[tuple[str, Yields | None]]) -> None:
    """The three yields together, each as per cent, ppm and nines, beside the targets set for them."""
    paper.heading("Yields")
    paper.say(YIELDS_NOTE)
    figures = [f"{label}{unit}" for label, _ in states for unit in ("", "\nppm", "\nnines")]
    rows = []
    for name in words.YIELDS:
        cells = [cell for _, yields in states for cell in _yield_cells(yields, name)]
        target = words.percent(1.0 - losses[name], losses[name]) if name in losses else "-"
        rows.append([name.removesuffix("_yield"), target, *cells])
    paper.table(columns(["yield"], ["target", *figures]), rows, len(rows))
    if any(yields is not None and yields.shipped_yield is None for _, yields in states):
        paper.say("Shipped yield is not known: no inspection stated, so nobody has said what the gates let through.")


def write_money(paper: Paper, currency: str, states: Sequence[tuple[str, Money | None]]) -> None:
    """Cost per year by kind, one column per state of the line."""
    paper.heading(f"Money ({words.clean(currency)}/year)")
    rows = [
        [kind, *(words.money(None if money is None else getattr(money, kind)) for _, money in states)]
        for kind in (*MONEY_KINDS, "total")
    ]
    paper.table(columns(["kind"], [label for label, _ in states]), rows, len(rows))


def write_money_reason(paper: Paper, today: TodayLine) -> None:
    if today.money is None:
        paper.say(f"Today's cost is not known: {today.money_reason or 'no reason given'}.")


def write_shares(paper: Paper, left: Sequence[tuple[str, float]], right: Sequence[tuple[str, float]]) -> None:
    """Two ranked lists side by side, the largest shares first."""
    most = 10
    ranked = [sorted(side, key=lambda pair: -pair[1])[:most] for side in (left, right)]
    heads = [*columns(["defects arise at"], ["share"]), *columns(["money is lost at"], ["share"])]
    rows = [
        [cell for pair in pairs for cell in ((pair[0], words.share(pair[1])) if pair else ("", ""))]
        for pairs in zip_longest(*ranked)
    ]
    paper.table(heads, rows, len(rows))


def write_binding(paper: Paper, binding: Sequence[Binding]) -> None:
    paper.bullets([f"{words.quoted(held.step)}: {words.clean(held.reason)}" for held in binding])


def best_in_words(best: BestReachable, currency: str) -> str:
    reached = words.yield_in_full(best.yield_, best.loss)
    return f"{reached}, at {words.per_year(best.total, currency)}"


def write_assumed(paper: Paper, assumed: Sequence[str]) -> None:
    if assumed:
        paper.heading("Assumed")
        paper.bullets(assumed)


def caution_in_words(caution: Caution) -> str:
    what = words.clean(caution.code.replace("_", " "))
    where = words.listed([words.quoted(step) for step in caution.steps], more="more steps")
    head = f"{what} ({where})" if where else what
    return f"{head}: {sentence(caution.reason)} What to do: {sentence(caution.fix)}"


def sentence(text: str) -> str:
    said = words.clean(text)
    return said if said.endswith((".", "!", "?")) else f"{said}."


def write_cautions(paper: Paper, cautions: Sequence[Caution]) -> None:
    if cautions:
        paper.heading("Cautions")
        paper.bullets([caution_in_words(caution) for caution in cautions])


def safety_steps(cautions: Sequence[Caution]) -> list[str]:
    """The safety steps that the cautions name (a result without a list of steps knows them only from there)."""
    return [step for caution in cautions if caution.code == SAFETY_CODE for step in caution.steps]


def write_last_word(paper: Paper, safety_steps: Sequence[str] = ()) -> None:
    """Always the end of a sheet with targets; in stronger words where a step is a safety step."""
    named = words.listed([words.quoted(step) for step in safety_steps], more="more steps")
    paper.heading(SAFETY_WORD.format(steps=named) if named else LAST_WORD)
