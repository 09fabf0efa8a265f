"""The answer to buy or leave: what every alternative, shared purchase and law is worth, and where the verdict turns."""

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
class BreakEvenLevel:
    """How good an alternative must really be to be worth its price: one level in three figures."""

    sigma_level: float
    cpk: float
    dpmo: float


@dataclass(frozen=True)
class Weighing:
    """One thing weighed; money is per year, None where a plan is infeasible or where nothing turns the verdict."""

    step: str | None
    """None for a shared purchase."""
    alternative: str
    """'improve' for a law."""
    kind: str
    """'purchase', 'alternative' or 'law'."""
    verdict: str
    """'buy', 'leave', or 'needed' where nothing else keeps the promise."""
    in_plan: bool
    total_without: float | None
    """The best plan without it."""
    total_with: float | None
    """The best plan with it (a law: with it on offer)."""
    worth_per_year: float | None
    free: bool
    """Whether it ties up no capital, whatever else it costs."""
    capital: float
    """What it ties up: price less trade-in; for a law, what the plan spends on it."""
    stated_price: float | None
    """Its price; for a law the one amount it states; None where quotes state several."""
    price_per: str
    """What `stated_price` is for: 'once', 'year' or 'item'."""
    break_even_price: float | None
    """On the scale of `stated_price`."""
    break_even_price_factor: float | None
    """For a law: what its scale may be multiplied by until it is not worth using."""
    break_even_volume: float | None
    """The smallest number of units shipped per year from which it pays."""
    pays_from: str
    """'a volume' (the one above), 'any volume' (the smallest looked at already) or 'no volume' of those looked at."""
    break_even_capability: BreakEvenLevel | None
    against: tuple[str, ...]
    """What speaks against it, in words."""

    @property
    def break_even_sigma_level(self) -> float | None:
        return None if self.break_even_capability is None else self.break_even_capability.sigma_level

    @property
    def break_even_cpk(self) -> float | None:
        return None if self.break_even_capability is None else self.break_even_capability.cpk

    @property
    def break_even_dpmo(self) -> float | None:
        return None if self.break_even_capability is None else self.break_even_capability.dpmo


@shown
@dataclass(frozen=True)
class Weighed:
    """Everything that could be bought or changed, free moves first, by worth."""

    title: str
    currency: str
    shipped_per_year: float
    reached: bool
    targets: dict[str, float]
    target_losses: dict[str, float]
    split: str
    total: float | None
    """Of the plan."""
    gap: float | None
    rows: tuple[Weighing, ...]
    volumes: tuple[float, float]
    """The volumes between which break-even was looked for."""
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...]

    def gives_way(self, row: Weighing) -> bool:
        """Return whether a thing pays at a smaller volume than today's, but no longer at today's."""
        smaller = row.break_even_volume is not None and row.break_even_volume <= self.shipped_per_year
        return not row.in_plan and (smaller or row.pays_from == "any volume")

    @cached_property
    def things(self) -> pandas.DataFrame:
        """The things weighed as a table, in the order of `rows`."""
        return as_table(Weighing, self.rows)
