"""Where the line stands, and what was understood of its file."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING

from allocator.results.line import Caution, Level, TodayLine
from allocator.results.table import as_table
from allocator.shown import shown

if TYPE_CHECKING:
    import pandas


@dataclass(frozen=True)
class StepToday:
    """One row of today's line."""

    step: str
    supplier: str | None
    level: Level
    first_pass_yield: float
    starts_per_year: float
    scrap: float
    rework: float
    inspection: float
    defect_share: float
    """Part of all defects per finished unit that arise in this step."""
    money_share: float
    """Part of today's scrap, rework and inspection that is lost at this step's gate."""
    feeds: str | None
    """The step that its items go into; None for the last."""
    found: float
    """Expected defects per finished unit that are found at this step's gate, wherever they arose."""


@shown
@dataclass(frozen=True)
class Today:
    """Where the line stands: yields, defects per unit, and where the money goes."""

    title: str
    currency: str
    shipped_per_year: float
    line: TodayLine
    rows: tuple[StepToday, ...]
    targets: dict[str, float]
    target_losses: dict[str, float]
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...]

    @cached_property
    def steps(self) -> pandas.DataFrame:
        """The steps as a table: where each stands, and what is lost there."""
        return as_table(StepToday, self.rows)


@dataclass(frozen=True)
class Understood:
    """What was understood of one step."""

    step: str
    supplier: str | None
    feeds: str | None
    items_per_unit: float
    opportunities: float
    level: Level
    given: str
    """The form the capability was given in, as written."""
    lost_when_scrapped: float
    """w_j: what is lost when one item is scrapped at this gate [currency/item]."""
    net_cost_added: float
    """κ_j [currency/item]."""
    ways: int
    """How many ways there are to run the step (alternatives combined)."""
    improves: str | None
    """The law in words, with its cap."""
    inspection: str
    """'assumed' or the stated inspection in words."""


@shown
@dataclass(frozen=True)
class Check:
    """Is the scenario sound, what was understood, which cautions apply."""

    title: str
    currency: str
    shipped_per_year: float
    file: str
    rows: tuple[Understood, ...]
    targets: dict[str, float]
    target_losses: dict[str, float]
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...] = field(default_factory=tuple)

    @cached_property
    def steps(self) -> pandas.DataFrame:
        """The steps as a table, as they were understood."""
        return as_table(Understood, self.rows)
