"""The capital case as text: the verdict, the money both ways, cash by year, and how firmly it stands."""

from __future__ import annotations

from collections.abc import Callable

from allocator.report import blocks, words
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import Asset, CapitalCase, CashCase, CashYear, Lever

NOT_ADVICE = "Financial outputs are pre-decision estimates, not accounting, tax or investment advice."
NOT_BY_PAYBACK = (
    "Where a law, a contract or a safety floor asks for it, payback is no ground to refuse it: such reasons are judged "
    "on their own."
)
NEVER = "never"
MOST_CAPACITY = 10


def case_text(case: CapitalCase, width: int = LOG_WIDTH) -> str:
    paper = Paper(width)
    blocks.write_title(paper, case.title, case.shipped_per_year)
    paper.heading(_verdict(case))
    paper.say(
        f"Discounted at {words.share(case.discount_rate)} a year over {words.count(case.horizon_years)} years. "
        f"{NOT_ADVICE}"
    )
    paper.say(NOT_BY_PAYBACK)
    paper.bullets([f"Left out: {said}." for said in case.left_out])
    if case.cases:
        _write_cases(paper, case)
    blocks.write_assumed(paper, case.assumed)
    blocks.write_cautions(paper, case.cautions)
    blocks.write_last_word(paper, blocks.safety_steps(case.cautions))
    return paper.text()


def _verdict(case: CapitalCase) -> str:
    if not case.reached:
        what = "The plan" if case.subject is None else f"A plan with {words.quoted(case.subject)}"
        return f"There is no case: {what[0].lower()}{what[1:]} cannot keep the targets, floors and limits."
    if case.subject is None:
        now = words.money(case.total_without)
        return f"The whole plan: {words.per_year(case.total_with, case.currency)} in all; today's line {now}."
    place = "shared" if case.step is None else f"at {words.quoted(case.step)}"
    name = f"{words.quoted(case.subject)} ({place})"
    if case.verdict == "needed":
        return f"{name}: needed. Without it no plan keeps the targets, floors and limits."
    worth = (case.total_without or 0.0) - (case.total_with or 0.0)
    totals = f"{words.money(case.total_with)} with it, {words.money(case.total_without)} without, all else planned anew"
    return f"{name}: {case.verdict}. It is worth {words.per_year(worth, case.currency)} ({totals})."


def _write_cases(paper: Paper, case: CapitalCase) -> None:
    money = words.clean(case.currency)
    _write_table(paper, f"What it earns ({money})", case, EARNED)
    notes = [f"No rate of return against {c.against}: {c.irr_note}" for c in case.cases if c.irr is None]
    paper.bullets(notes)
    _write_table(paper, f"Saved per year, negative where it costs more ({money}/year)", case, SAVED)
    main = case.cases[0]
    _write_years(paper, main, money)
    _write_assets(paper, main, money)
    _write_scrap(paper, case, money)
    _write_capacity(paper, main)
    _write_levers(paper, main, money)


Figure = tuple[str, Callable[[CashCase], str]]
EARNED: tuple[Figure, ...] = (
    ("keeps the promise", lambda c: "yes" if c.keeps_promise else "no"),
    ("paid today, less trade-in", lambda c: words.money(c.capital)),
    ("the same per year, over its life", lambda c: words.money(c.equivalent_annual_capital)),
    ("worth per year, escapes counted", lambda c: words.money(c.worth_per_year)),
    ("present value, cash alone", lambda c: words.money(c.npv)),
    ("present value, escapes counted", lambda c: words.money(c.npv_with_escapes)),
    ("life left at the end, no cash", lambda c: words.money(c.life_left)),
    ("internal rate of return", lambda c: "-" if c.irr is None else words.share(c.irr)),
    ("payback, years", lambda c: years_in_words(c.payback_years)),
    ("payback discounted, years", lambda c: years_in_words(c.discounted_payback_years)),
)
SAVED: tuple[Figure, ...] = (
    ("scrap", lambda c: words.money(c.savings.scrap)),
    ("rework", lambda c: words.money(c.savings.rework)),
    ("inspection", lambda c: words.money(c.savings.inspection)),
    ("running cost", lambda c: words.money(c.savings.running)),
    ("cost per item", lambda c: words.money(c.savings.per_item)),
    ("price allowance", lambda c: words.money(c.savings.price_allowance)),
    ("cash", lambda c: words.money(c.savings.cash)),
    ("avoided, not cash: escapes", lambda c: words.money(c.savings.escapes)),
)


_NARROW = {
    "the cheapest plan without it": "the cheapest plan\nwithout it",
    "today (it alone added)": "today\n(it alone added)",
}
"""How a long name stands over a column."""


def years_in_words(value: float | None) -> str:
    return NEVER if value is None else words.fixed(value)


def _write_table(paper: Paper, heading: str, case: CapitalCase, figures: tuple[Figure, ...]) -> None:
    paper.heading(heading)
    heads = columns(
        ["against"], [c.against.replace(" (", "\n(").replace("plan without", "plan\nwithout") for c in case.cases]
    )
    rows = [[name.strip(), *(figure(c) for c in case.cases)] for name, figure in figures]
    paper.table(heads, rows, len(rows))


def _write_years(paper: Paper, main: CashCase, money: str) -> None:
    paper.heading(f"Cash by year against {main.against} ({money})")
    heads = columns([], ["year", "paid", "resale", "saving", "net", "worth\ntoday", "in all", "in all,\nworth today"])
    paper.table(heads, [_year_row(year) for year in main.years], len(main.years))


def _year_row(year: CashYear) -> list[str]:
    amounts = (
        year.paid, year.resale, year.saving, year.net, year.discounted, year.cumulative, year.cumulative_discounted,
    )  # fmt: skip
    return [str(year.year), *(words.money(amount) for amount in amounts)]


def _write_assets(paper: Paper, main: CashCase, money: str) -> None:
    if not (main.assets or main.avoided):
        return
    instead = f", and what {main.against} would pay for instead" if main.avoided else ""
    paper.heading(f"What is paid for{instead} ({money})")
    figures = ["price", "trade-in", "life,\nyears", "resale", "owning it,\nper year", "running,\nper year"]
    rows = [_asset_row("", asset) for asset in main.assets] + [_asset_row("instead of: ", a) for a in main.avoided]
    paper.table(columns(["what"], figures), rows, len(rows))


def _asset_row(lead: str, asset: Asset) -> list[str]:
    where = "" if asset.step is None else f" at {words.clean(asset.step)}"
    running = asset.per_year + asset.per_item + asset.price_allowance
    amounts = (asset.price, asset.trade_in, asset.resale, asset.equivalent_annual_cost, running)
    price, trade_in, resale, owning, running_ = (words.money(amount) for amount in amounts)
    life = words.count(asset.life_years) if asset.price > 0.0 else "-"
    return [f"{lead}{words.clean(asset.name)}{where}", price, trade_in, life, resale, owning, running_]


def _write_scrap(paper: Paper, case: CapitalCase, money: str) -> None:
    paper.heading(f"Three ways to value scrap, side by side ({money}; against {case.cases[0].against})")
    views = case.cases[0].scrap_views
    rows = [
        [v.valuation, words.money(v.scrap_saving), words.money(v.worth_per_year), words.money(v.npv)] for v in views
    ]
    paper.table(columns(["scrap valued at"], ["saved per\nyear", "worth per\nyear", "present value"]), rows, len(rows))
    paper.bullets([f"{view.valuation}: {view.meaning}" for view in views])
    paper.say("All else here counts scrap as accumulated.")


def _write_capacity(paper: Paper, main: CashCase) -> None:
    if main.capacity:
        ranked = sorted(main.capacity, key=lambda c: -abs(c.starts_saved))
        said = [f"{words.quoted(c.step)} {words.number(c.starts_saved)}" for c in ranked]
        paper.heading(f"Capacity freed, starts a year and no money: {words.listed(said, MOST_CAPACITY, 'more steps')}.")


def _write_levers(paper: Paper, main: CashCase, money: str) -> None:
    paper.heading(f"How firmly: worth per year against {main.against}, one figure changed alone ({money}/year)")
    heads = columns(["figure"], ["from", "to", "worth\nfrom", "worth\nas is", "worth\nto", "worth is 0 at"])
    paper.table(heads, [_lever_row(lever, money) for lever in main.levers], len(main.levers))
    paper.say(
        "Both lines are kept as planned and priced anew; nothing is planned anew. 'defects after' multiplies what the "
        "steps that it changes are planned to make."
    )
    if any(lever.misses_promise for lever in main.levers):
        paper.say("With twice the defects the promise is missed: the plan would have to change.")


def _lever_row(lever: Lever, money: str) -> list[str]:
    unit = money if lever.unit == "currency" else lever.unit
    per_cent = lever.figure == "discount rate"

    def figure(value: float | None) -> str:
        if value is None:
            return "nowhere"
        return words.share(value) if per_cent else words.number(value)

    name = lever.figure if per_cent else f"{lever.figure} ({unit})"
    worths = (words.money(worth) for worth in (lever.worth_low, lever.worth_base, lever.worth_high))
    return [name, figure(lever.low), figure(lever.high), *worths, figure(lever.turns_at)]
