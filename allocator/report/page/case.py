"""Does the money come back: the capital case of the plan in sentences, tables and one drawing of what moves it."""

from __future__ import annotations

from dataclasses import dataclass

from allocator.report import words
from allocator.report.case_text import NOT_ADVICE, NOT_BY_PAYBACK, SAVED, years_in_words
from allocator.report.page.scale import Scale
from allocator.results import Asset, CapitalCase, CashCase, Lever


@dataclass(frozen=True)
class LeverBar:
    """One figure changed alone, and the worth at its two ends, in per cent of the drawing."""

    name: str
    ends: str
    start: float
    width: float
    worths: str
    turns: str


@dataclass(frozen=True)
class CaseSaid:
    said: list[str]
    figures: list[tuple[str, str, str]]
    saved: list[list[str]]
    levers: list[LeverBar]
    zero: float
    zero_side: str
    """Which way its name runs: 'left', 'middle' or 'right' of it."""
    base: float
    base_words: str
    views: list[list[str]]
    years: list[list[str]]
    assets: list[list[str]]
    notes: list[str]


def case_said(case: CapitalCase | None) -> CaseSaid | None:
    """The case of the whole plan against today; None where there is none."""
    if case is None or not case.cases:
        return None
    main, money = case.cases[0], words.clean(case.currency)
    worths = [0.0, *(w for v in main.levers for w in (v.worth_low, v.worth_base, v.worth_high))]
    scale = Scale(min(worths), max(worths))
    return CaseSaid(
        said=[_paid(main, money), _back(case, main)],
        figures=_figures(case, main),
        saved=[[name.strip(), figure(main)] for name, figure in SAVED],
        levers=[_lever(lever, scale, money) for lever in main.levers],
        zero=scale.at(0.0),
        zero_side="right" if scale.at(0.0) < 25.0 else "left" if scale.at(0.0) > 75.0 else "middle",
        base=scale.at(main.worth_per_year),
        base_words=words.money(main.worth_per_year),
        views=[
            [v.valuation, v.meaning, words.money(v.scrap_saving), words.money(v.worth_per_year), words.money(v.npv)]
            for v in main.scrap_views
        ],
        years=[
            [str(y.year), *map(words.money, (y.paid, y.resale, y.saving, y.net, y.cumulative_discounted))]
            for y in main.years
        ],
        assets=[_asset(asset) for asset in main.assets],
        notes=[*_notes(case, main), NOT_BY_PAYBACK, NOT_ADVICE],
    )


def _paid(main: CashCase, money: str) -> str:
    saves = "saves" if main.savings.cash >= 0.0 else "costs another"
    escapes = main.savings.escapes
    avoided = f" and avoids escapes worth {words.money(escapes)}" if escapes > 0.0 else ""
    worth = words.money(abs(main.worth_per_year))
    in_all = f"is worth {worth} {money}" if main.worth_per_year >= 0.0 else f"costs {worth} {money} more than it saves"
    return (
        f"Against today, {words.money(main.capital)} {money} is paid at once, less trade-ins. It {saves} "
        f"{words.money(abs(main.savings.cash))} {money} of cash a year{avoided}. After the equal yearly cost of what "
        f"is paid, the plan {in_all} a year."
    )


def _back(case: CapitalCase, main: CashCase) -> str:
    over = f"over {words.count(case.horizon_years)} years at {words.share(case.discount_rate)}"
    if main.payback_years is None:
        return f"On cash alone it does not earn back what is paid {over}."
    discounted = main.discounted_payback_years
    late = "not within that time" if discounted is None else f"{words.fixed(discounted)} years"
    return f"On cash alone it is earned back in {words.fixed(main.payback_years)} years; discounted {over}: {late}."


def _figures(case: CapitalCase, main: CashCase) -> list[tuple[str, str, str]]:
    money = words.clean(case.currency)
    irr = "none" if main.irr is None else words.share(main.irr)
    return [
        (f"present value, {money}", words.money(main.npv), "of cash alone"),
        (f"present value, {money}", words.money(main.npv_with_escapes), "escapes avoided counted"),
        ("rate of return", irr, "of cash alone"),
        ("payback, years", years_in_words(main.payback_years), f"discounted {_discounted(main)}"),
    ]


def _discounted(main: CashCase) -> str:
    return years_in_words(main.discounted_payback_years)


def _lever(lever: Lever, scale: Scale, money: str) -> LeverBar:
    unit = money if lever.unit == "currency" else words.clean(lever.unit)
    per_cent = lever.figure == "discount rate"

    def figure(value: float) -> str:
        return words.share(value) if per_cent else words.number(value)

    ends = f"{figure(lever.low)} to {figure(lever.high)}" + ("" if per_cent else f" {unit}")
    low, high = sorted((scale.at(lever.worth_low), scale.at(lever.worth_high)))
    nothing = "worth nothing at" if lever.turns_at is not None else "never worth nothing in the range searched"
    at = "" if lever.turns_at is None else f" {figure(lever.turns_at)}" + ("" if per_cent else f" {unit}")
    return LeverBar(
        name=lever.figure,
        ends=ends,
        start=low,
        width=round(high - low, 2),
        worths=f"{words.money(lever.worth_low)} to {words.money(lever.worth_high)}",
        turns=nothing + at,
    )


def _asset(asset: Asset) -> list[str]:
    where = "shared" if asset.step is None else words.clean(asset.step)
    life = words.count(asset.life_years) if asset.price > 0.0 else "-"
    running = asset.per_year + asset.per_item + asset.price_allowance
    return [
        words.clean(asset.name), where, words.money(asset.price), words.money(asset.trade_in), life,
        words.money(asset.equivalent_annual_cost), words.money(running),
    ]  # fmt: skip


def _notes(case: CapitalCase, main: CashCase) -> list[str]:
    notes = [f"Left out: {words.clean(text)}." for text in case.left_out]
    if main.irr is None and main.irr_note:
        notes.append(f"No rate of return: {words.clean(main.irr_note)}.")
    if any(lever.misses_promise for lever in main.levers):
        notes.append("With twice the defects the promise is missed: the plan would have to change.")
    return notes
