"""The table of a design review as text: every option on one yearly basis, and what speaks against each."""

from __future__ import annotations

from allocator.report import blocks, words
from allocator.report.case_text import NOT_ADVICE
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import LineFigures, Review, ReviewRow

BASIS = (
    "The first row is today's line as it stands. Below, each row runs one step by that option and no other (improved "
    "further where its law pays), the rest of the line planned anew around it to keep the promise; the cheapest plan "
    "may combine several (*). The yearly cost is all of it: scrap, rework, escapes, inspection and what is bought, "
    "prices spread over their lives."
)
NO_PLAN = "no plan"
NOTHING = "-"
UNMET = "no plan with it alone at its step keeps the targets, floors and limits"
MOST_NAMED = 4


def review_text(review: Review, width: int = LOG_WIDTH) -> str:
    paper = Paper(width)
    blocks.write_title(paper, review.title, review.shipped_per_year)
    wanted = words.targets_in_full(review.targets, review.target_losses, review.split)
    paper.heading(f"The options for {wanted or 'the least cost'}. {NOT_ADVICE}")
    if not review.reached:
        paper.say("No plan keeps the targets, floors and limits: options are shown added to today's line alone.")
    _write_steps(paper, review)
    _write_options(paper, review)
    _write_alone(paper, review)
    _write_against(paper, review)
    if review.left_out:
        names = words.listed([words.clean(name) for name in review.left_out])
        paper.heading(f"Not on this table, since only their law of improvement could change them: {names}.")
        paper.say("See `allocator weigh` for what each is worth, or ask for one with --step.")
    if review.not_offered:
        paper.heading(f"Nobody has offered here: {', '.join(review.not_offered)}.")
    blocks.write_assumed(paper, review.assumed)
    blocks.write_cautions(paper, review.cautions)
    blocks.write_last_word(paper, blocks.safety_steps(review.cautions))
    return paper.text()


def _write_steps(paper: Paper, review: Review) -> None:
    paper.heading("The steps, with their part of today's losses")
    rows = [[step.step, words.share(step.money_share), words.share(step.defect_share)] for step in review.steps]
    paper.table(columns(["step"], ["of the money", "of the defects"]), rows, len(rows))
    paper.say(blocks.LOST_NOTE)


def _write_options(paper: Paper, review: Review) -> None:
    paper.heading(f"The options ({words.clean(review.currency)}/year; capital once)")
    paper.say(BASIS)
    paper.say(blocks.YIELDS_NOTE)
    figures = (
        "cost per\nyear",
        "against\nliving so",
        "over the\ncheapest",
        "final\nyield",
        "ppm\nlost",
        "ppm\nshipped",
        "capital",
    )
    rows, before = [], None
    for row in review.rows:
        if row.step is not None and row.step != before:
            rows.append([f"{row.step}:", *[""] * len(figures)])
        rows.append(_row(row, row.figures))
        before = row.step
    paper.table(columns(["option"], figures), rows, len(rows))
    paper.say("* in the cheapest plan, alone or with others")


def _row(row: ReviewRow, figures: LineFigures | None) -> list[str]:
    name = _name(row)
    if figures is None:
        return [name, NO_PLAN, *[NOTHING] * 6]
    yields = figures.yields
    return [
        name, words.money(figures.total), _signed(figures.over_living), _signed(figures.over_plan),
        words.percent(yields.final_yield, yields.final_loss), words.ppm(yields.final_loss),
        words.ppm(yields.shipped_loss) if yields.shipped_loss is not None else NOTHING, words.money(figures.capital),
    ]  # fmt: skip


def _name(row: ReviewRow) -> str:
    if row.step is None:
        refused = row.figures is not None and not row.figures.allowed
        return f"{row.kinds[0]} (not allowed: below a safety floor)" if refused else row.kinds[0]
    return f"{'*' if row.in_plan else '-'} {_option(row)}"


def _option(row: ReviewRow) -> str:
    if row.idle:
        return f"{row.kinds[0]}: pays at no level, so as it is"
    kind = " and ".join(row.kinds)
    return f"{kind}: {words.clean(row.option)}" if row.option else kind


def _signed(value: float | None) -> str:
    if value is None:
        return NOTHING
    return f"+{words.money(value)}" if value >= 0.005 else words.money(value)


def _write_alone(paper: Paper, review: Review) -> None:
    rows = [(row, row.alone) for row in review.rows if row.alone is not None]
    if not rows:
        return
    paper.heading(f"The same options alone, added to today's line ({words.clean(review.currency)}/year; capital once)")
    figures = ["cost per\nyear", "against\nliving so", "final\nyield", "ppm\nlost", "ppm\nshipped", "capital"]
    cells = [[f"{row.step}, {_option(row)}", *_row(row, alone)[1:]] for row, alone in rows]
    paper.table(columns(["option"], figures), [[*c[:3], *c[4:]] for c in cells], len(cells))
    by_miss = _grouped([(miss, f"{row.step}, {_option(row)}") for row, alone in rows for miss in alone.misses])
    for miss, names in by_miss.items():
        who = "All of them" if len(names) == len(rows) else words.listed(names, MOST_NAMED, "more", "; ")
        paper.say(f"{who} alone: {words.clean(miss)}.")


def _grouped(pairs: list[tuple[str, str]]) -> dict[str, list[str]]:
    found: dict[str, list[str]] = {}
    for key, value in pairs:
        found.setdefault(key, []).append(value)
    return found


def _write_against(paper: Paper, review: Review) -> None:
    """One bullet per reason, with the options that it speaks against."""
    paper.heading("What speaks against them")
    pairs = []
    for row in review.rows:
        name = row.kinds[0] if row.step is None else f"{words.clean(row.step)}, {_option(row)}"
        unmet = (UNMET,) if row.figures is None and review.reached else ()
        misses = unmet if row.figures is None else row.figures.misses
        pairs += [(reason, name) for reason in (*misses, *row.against)]
    said = [f"{words.clean(reason)}: {'; '.join(names)}" for reason, names in _grouped(pairs).items()]
    paper.bullets(said, most=len(said))
