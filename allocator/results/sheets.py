"""What is asked of each supplier: a target sheet per part, how it is shown, and what it is worth."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from allocator.results.line import Caution, Level
from allocator.results.table import as_table
from allocator.shown import shown

if TYPE_CHECKING:
    import pandas


@dataclass(frozen=True)
class Sheet:
    """One part of one supplier: from today to target, the evidence for it, and what it is worth to the buyer."""

    step: str
    supplier: str
    today: Level
    target: Level
    alternatives: tuple[str, ...]
    """What the plan takes here: the target is for whoever delivers that."""
    floor: str | None
    safety: bool
    counted: bool
    """Whether the capability is counted, not measured: its Cpk is then the equivalent of its ppm."""
    items_per_year: float
    """Parts bought a year, those lost on the way included."""
    parts_for_90: int | None
    """Parts that demonstrate the target at 90 % with none bad; None beyond 1e15."""
    parts_for_95: int | None
    parts_with_bad: tuple[tuple[int, int | None, int | None], ...]
    """(bad parts allowed, parts for 90 %, parts for 95 %), from none bad on."""
    volume_allows: bool
    """Whether a year's parts demonstrate the target at 95 % with none bad."""
    observed_cpk_needed: tuple[tuple[int, float], ...]
    """(parts measured, Cpk they must show for the target's Cpk to be claimed with 95 % confidence)."""
    worth_per_ppm_year: float
    """Fall of the buyer's yearly cost for one bad part in a million less [currency/year]."""
    worth_per_ppm_item: float
    """The same per part bought: the largest price rise worth paying for it [currency/part]."""
    worth_has_target: bool
    """Whether the worth holds the target's part; False where no price of the defect budget is known."""
    improvement: float
    """What the plan pays for this step's improvement [currency/year]."""
    cost_of_refusal: float | None
    """Rise of the buyer's yearly cost if the step stays as it stands today; None where that cannot be."""
    refusal_reason: str | None
    """Why there is no cost of a refusal."""
    largest_price_rise: float | None
    """Per part, for the whole way from today to the target, in place of what the plan pays [currency/part]."""


@dataclass(frozen=True)
class SupplierSheet:
    """All the sheets of one supplier, in file order."""

    supplier: str
    rows: tuple[Sheet, ...]


@shown
@dataclass(frozen=True)
class SupplierSheets:
    """The target sheets of all suppliers."""

    title: str
    currency: str
    shipped_per_year: float
    rows: tuple[Sheet, ...]
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...]

    @property
    def suppliers(self) -> tuple[SupplierSheet, ...]:
        """The sheets by supplier, in the order in which the file first names each."""
        names = dict.fromkeys(row.supplier for row in self.rows)
        return tuple(SupplierSheet(name, tuple(row for row in self.rows if row.supplier == name)) for name in names)

    @cached_property
    def steps(self) -> pandas.DataFrame:
        """The sheets as a table, one row per part."""
        return as_table(Sheet, self.rows)
