"""The answer to a design review: every option for the steps that matter in one table, on the same yearly basis."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from allocator.results.line import Caution, Money, Yields
from allocator.shown import shown

if TYPE_CHECKING:
    import pandas


@dataclass(frozen=True)
class LineFigures:
    """What the whole line costs and yields in one way to run it."""

    total: float | None
    """None where the cost is beyond any number, as are the next three."""
    money: Money | None
    over_living: float | None
    """Total less that of living with today's scrap."""
    over_plan: float | None
    """Total less that of the cheapest plan."""
    yields: Yields
    capital: float
    misses: tuple[str, ...]
    """In words: targets missed, and floors below which a step would be left."""
    allowed: bool
    """False where a safety characteristic would be left below its floor: no money buys that."""


@dataclass(frozen=True)
class ReviewRow:
    """One option: what the line costs and yields with it."""

    step: str | None
    """None for the whole line."""
    option: str
    """The name in the scenario; empty for the line as a whole, for a step as it is and for a law."""
    kinds: tuple[str, ...]
    """What it changes, as 'recentre', 'widen the spec', 'another supplier' (the words of `option_table.KINDS`)."""
    in_plan: bool
    """Whether the cheapest plan takes it, alone or with others."""
    figures: LineFigures | None
    """With it (and its law) alone at its step and the rest of the line planned anew around it; None where no such
    plan keeps the targets, floors and limits."""
    alone: LineFigures | None
    """With it alone added to today's line; None where it cannot stand alone, or is nothing to add."""
    against: tuple[str, ...]
    """What speaks against it, or rests on an assumption."""
    idle: bool = False
    """Whether it is a law that pays at no level: the figures are those of the step as it is."""


@dataclass(frozen=True)
class ReviewedStep:
    """A step of the table, with its part of today's losses."""

    step: str
    money_share: float
    defect_share: float


@shown
@dataclass(frozen=True)
class Review:
    """The table of a design review."""

    title: str
    currency: str
    shipped_per_year: float
    split: str
    targets: dict[str, float]
    target_losses: dict[str, float]
    reached: bool
    """Whether any plan keeps the targets, floors and limits."""
    steps: tuple[ReviewedStep, ...]
    """Those in the table, the most money first."""
    rows: tuple[ReviewRow, ...]
    """Living with the scrap first, then the cheapest plan, then step by step: as it is, and each option."""
    not_offered: tuple[str, ...]
    """Kinds of option that the scenario offers at none of these steps."""
    left_out: tuple[str, ...]
    """Steps that only their law could improve, and that are not in the table."""
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...]

    @cached_property
    def options(self) -> pandas.DataFrame:
        """One row per option: its figures with the rest of the line planned anew, and added alone to today's line."""
        import pandas  # here, because only those who ask for a table should wait for it

        names = ("total", "over_living", "over_plan", "capital", "allowed")
        head = {name: [getattr(row, name) for row in self.rows] for name in ("step", "option", "kinds", "in_plan")}
        planned = {name: [getattr(row.figures, name, None) for row in self.rows] for name in names}
        alone = {f"{name}_alone": [getattr(row.alone, name, None) for row in self.rows] for name in names}
        return pandas.DataFrame(head | planned | alone)
