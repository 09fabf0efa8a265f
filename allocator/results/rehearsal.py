"""What a rehearsal counted, beside what was worked out."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from allocator.results.line import Caution
from allocator.results.table import as_table
from allocator.shown import shown

if TYPE_CHECKING:
    import pandas


ROUNDING = 1e-9
"""Of figures without chance, which are summed up in another order."""


@dataclass(frozen=True)
class Rehearsed:
    """One figure: as worked out, as counted, and the 95 % interval of what was counted."""

    computed: float | None
    """None where the plan does not count this way, or where the figure is not known."""
    simulated: float
    lower: float
    upper: float

    @property
    def holds(self) -> bool | None:
        """Whether the interval holds the computed figure, up to rounding."""
        if self.computed is None:
            return None
        room = ROUNDING * abs(self.computed)
        return self.lower - room <= self.computed <= self.upper + room


@dataclass(frozen=True)
class StepRehearsed:
    """One step in the rehearsal."""

    step: str
    starts_per_year: Rehearsed
    scrap: Rehearsed
    clustering: float | None
    """α, None where the defects are Poisson."""
    poisson_item_yield: float
    """Share of items without a defect of this step, exp(−δ)."""
    clustered_item_yield: float
    """The same with the step's clustering, (1 + δ/α)^−α."""
    drawn: bool
    """Whether the step's capability was drawn anew for every line (only with `uncertain`)."""


@shown
@dataclass(frozen=True)
class Rehearsal:
    """The line made to work unit by unit, and its counts beside the computed figures."""

    title: str
    currency: str
    shipped_per_year: float
    line: str
    """'plan', or 'today' for the line as it stands."""
    units: int
    seed: int
    uncertain: bool
    items_made: float
    losses: dict[str, Rehearsed]
    """1 − yield by yield name; the shipped one is missing where no gate states an inspection."""
    money: dict[str, Rehearsed]
    """Cost per year by kind, and 'total'; charged as the plan does [currency/year]."""
    every_item: dict[str, Rehearsed]
    """'inspection', 'rework' and 'total', charged on every item met [currency/year]."""
    difference: Rehearsed
    """What charging every item met adds to the total [currency/year]."""
    poisson_rolled_yield: float
    clustered_rolled_yield: float
    """By the closed forms; equal where no step clusters."""
    rows: tuple[StepRehearsed, ...]
    missed: tuple[str, ...]
    """Names of the yields and the kinds of money whose interval does not hold the computed figure."""
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...]

    @cached_property
    def steps(self) -> pandas.DataFrame:
        """The steps as a table: starts and scrap, computed and simulated, and what clusters."""
        return as_table(StepRehearsed, self.rows)
