"""The answer to a capital request: what is paid, what it saves, year by year, and how firmly."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from allocator.results.line import Caution
from allocator.results.table import as_table
from allocator.shown import shown

if TYPE_CHECKING:
    import pandas


@dataclass(frozen=True)
class Asset:
    """One thing paid for: an alternative, a law used to some extent, or a shared purchase.

    There is no field for sunk cost or book value: what was paid before today changes no decision. What the present
    machine would sell for today is its `trade_in`.
    """

    name: str
    step: str | None
    """None for a shared purchase."""
    price: float
    trade_in: float
    resale: float
    life_years: float
    per_year: float
    per_item: float
    """What is charged per item, over a year at the scenario's volume [currency/year]."""
    price_allowance: float
    """What the customer gets for a wider specification, over a year [currency/year]."""
    equivalent_annual_cost: float
    """Price less trade-in and resale as equal yearly amounts over the life: comparable between unequal lives."""


@dataclass(frozen=True)
class Savings:
    """What one line saves against another per year, negative where it costs more [currency/year]."""

    scrap: float
    rework: float
    inspection: float
    running: float
    """`per_year` of what is bought."""
    per_item: float
    price_allowance: float
    escapes: float
    """Avoided, not cash in the plant: kept apart."""

    @property
    def cash(self) -> float:
        return self.scrap + self.rework + self.inspection + self.running + self.per_item + self.price_allowance


@dataclass(frozen=True)
class CashYear:
    """The difference in cash of one year, booked at its end (year 0: today) [currency]."""

    year: int
    paid: float
    """Prices less trade-ins, today and at each replacement."""
    resale: float
    saving: float
    net: float
    discounted: float
    cumulative: float
    cumulative_discounted: float


@dataclass(frozen=True)
class ScrapView:
    """The saving in scrap under one way of valuing a scrapped item."""

    valuation: str
    """'accumulated', 'material only' or 'full unit'."""
    meaning: str
    scrap_saving: float
    npv: float
    worth_per_year: float


@dataclass(frozen=True)
class Capacity:
    """Starts that a step need not make any more, at the same shipped quantity [items/year]; never money here."""

    step: str
    starts_saved: float


@dataclass(frozen=True)
class Lever:
    """One figure changed alone, the choice and all levels kept: the worth at both ends, and where the verdict turns."""

    figure: str
    unit: str
    low: float
    base: float
    high: float
    worth_low: float
    worth_base: float
    worth_high: float
    turns_at: float | None
    """Value nearest to the base at which the worth is 0; None where the verdict holds over the range searched."""
    misses_promise: bool
    """Whether a target is missed at the upper end (the plan would then have to change)."""

    @property
    def swing(self) -> float:
        return abs(self.worth_high - self.worth_low)


@dataclass(frozen=True)
class CashCase:
    """The money of one line against another: the first less the second in all that follows."""

    against: str
    """'today', 'the cheapest plan without it', or 'today, it alone added'."""
    keeps_promise: bool
    """Whether the line that is argued for meets all targets."""
    savings: Savings
    capital: float
    """Paid today, less trade-ins, less what the other line would pay."""
    equivalent_annual_capital: float
    worth_per_year: float
    """Savings with escapes avoided, less the equivalent annual capital: the difference of the yearly totals."""
    npv: float
    """Of cash alone, over the horizon."""
    npv_with_escapes: float
    life_left: float
    """Present value of the life left in what is owned at the end of the horizon; not cash, and in no NPV above."""
    irr: float | None
    irr_note: str
    payback_years: float | None
    discounted_payback_years: float | None
    years: tuple[CashYear, ...]
    assets: tuple[Asset, ...]
    avoided: tuple[Asset, ...]
    """What the other line would pay for and this one does not."""
    scrap_views: tuple[ScrapView, ...]
    capacity: tuple[Capacity, ...]
    levers: tuple[Lever, ...]
    """Largest swing first."""

    @cached_property
    def sensitivities(self) -> pandas.DataFrame:
        """The figures changed alone as a table, the largest swing first."""
        return as_table(Lever, self.levers)


@shown
@dataclass(frozen=True)
class CapitalCase:
    """The capital case of the plan (`subject` None), or of one purchase."""

    title: str
    currency: str
    shipped_per_year: float
    horizon_years: float
    discount_rate: float
    subject: str | None
    step: str | None
    verdict: str | None
    """'buy', 'leave' or 'needed'; None for the whole plan, which is bought for its promise."""
    in_plan: bool
    reached: bool
    """Whether any plan with the subject keeps the targets; if not there is no case."""
    total_with: float | None
    total_without: float | None
    cases: tuple[CashCase, ...]
    left_out: tuple[str, ...]
    """In words: which comparisons could not be made, and why."""
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...]

    @cached_property
    def figures(self) -> pandas.DataFrame:
        """One row per comparison: what is paid, saved and earned."""
        import pandas  # here, because only those who ask for a table should wait for it

        names = (
            "against", "keeps_promise", "capital", "equivalent_annual_capital", "worth_per_year", "npv",
            "npv_with_escapes", "life_left", "irr", "payback_years", "discounted_payback_years",
        )  # fmt: skip
        return pandas.DataFrame({name: [getattr(case, name) for case in self.cases] for name in names})

    @cached_property
    def years(self) -> pandas.DataFrame:
        """Cash by year, one row per year and comparison."""
        table = as_table(CashYear, [year for case in self.cases for year in case.years])
        table.insert(0, "against", [case.against for case in self.cases for _ in case.years])
        return table
