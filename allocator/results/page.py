"""What the page of a design review shows: the plan, the line at every stop of its control, what it rests on."""

from __future__ import annotations

from dataclasses import dataclass

from allocator.results.capital import CapitalCase
from allocator.results.confidence import Confidence
from allocator.results.line import Money, Yields
from allocator.results.plan import BestReachable, Plan
from allocator.results.rehearsal import Rehearsal
from allocator.results.sheets import SupplierSheets
from allocator.results.weigh import Weighed


@dataclass(frozen=True)
class Row:
    """One row of the page: a step, or steps next to each other in the tree where there are too many to show."""

    steps: tuple[str, ...]
    """In file order; one name unless the page is grouped."""
    supplier: str | None
    """None too where the steps of the row have different ones."""
    sigma_low: float
    sigma_high: float
    """Lowest and highest sigma level of the row today."""
    floor: str | None
    safety: bool


@dataclass(frozen=True)
class RowAt:
    """One row at one stop."""

    sigma_low: float
    sigma_high: float
    alternatives: tuple[str, ...]
    law: str | None
    """The law used, where the row is one step."""
    changed: int
    """Steps of the row that take an alternative or improve."""
    judged: bool
    """What is chosen rests on a judged figure."""
    floor_distance: str | None
    budget_share: float
    improvement: float
    scrap: float
    rework: float


@dataclass(frozen=True)
class Stop:
    """The cheapest plan at one promise; at 'today' the line as it stands."""

    label: str
    """'today', 'economic optimum', 'target', 'whole nine', 'highest reachable' or '' (between them)."""
    nines: float
    asked_yield: float
    asked_loss: float
    """What is promised of the split yield."""
    yields: Yields
    money: Money | None
    """None only for a line of today whose flow overflows."""
    against_today: float | None
    """Total less today's total [currency/year]."""
    cost_per_unit: float | None
    capital: float
    price_per_ppm: float | None
    """What one defective unit per million less costs a year, the choices kept; 0 where the promise does not bind,
    None where nothing continuous can move."""
    purchases: tuple[str, ...]
    rows: tuple[RowAt, ...]
    gap: float | None


@dataclass(frozen=True)
class Carried:
    """What happens at one row of the line; defects per finished unit, money per year."""

    arises: float
    found: float
    hidden: float
    """Defects still hidden when the row hands over."""
    lost: float
    """Scrap and rework at the row's gates."""


@dataclass(frozen=True)
class LinePart:
    """One row in the picture of the line."""

    row: int
    feeds: int | None
    """Place in the picture of the part that it feeds, None for the last."""
    today: Carried
    plan: Carried | None


@dataclass(frozen=True)
class Share:
    """A row's part of the defect budget and of the money."""

    name: str
    budget_share: float
    improvement: float
    lost: float
    """Scrap and rework [currency/year]."""


@dataclass(frozen=True)
class Division:
    """How the defect budget and the money of the plan divide, the largest share of the budget first."""

    shares: tuple[Share, ...]
    rest: Share | None
    """All the smaller ones together."""
    rest_count: int
    half_of_budget: tuple[str, ...]
    """The fewest rows that use half of the defect budget or more."""
    half_of_spending: tuple[str, ...]
    """The fewest rows that take half of the improvement money or more."""


@dataclass(frozen=True)
class Stated:
    """What a table of the scenario rests on, in the words of its author."""

    where: str
    what: str
    given: str
    evidence: str | None
    source: str | None
    note: str | None


@dataclass(frozen=True)
class Sources:
    """Where the figures come from."""

    stated: tuple[Stated, ...]
    """The tables with a source, an evidence or a note, and where all are shown the others too."""
    by_evidence: dict[str, int]
    """Tables with figures by their evidence; 'not stated' for those that say nothing."""
    left_out: int
    """Tables that are not listed, because there are too many."""


@dataclass(frozen=True)
class LeftOut:
    """What is too much for a page and left to its own command."""

    command: str
    """'weigh' or 'suppliers'."""
    count: int
    """Of things to weigh, of parts bought."""
    most: int
    """What a page takes."""


@dataclass(frozen=True)
class ReviewPage:
    """Everything the page shows; each figure on it stands in here."""

    file: str
    plan: Plan
    highest: BestReachable | None
    """With what holds it there; None where only today can be shown."""
    rows: tuple[Row, ...]
    grouped: bool
    stops: tuple[Stop, ...]
    shown: int
    """Which stop the page opens with: the target, else the optimum, else the best that can be reached, else today."""
    line: tuple[LinePart, ...]
    division: Division | None
    sources: Sources
    weighed: Weighed | None
    """None where no plan keeps the promise."""
    case: CapitalCase | None
    """None without a horizon and a rate, or where no plan keeps the promise."""
    confidence: Confidence | None
    """None without a target, without a plan that keeps it, and where no estimate states its sample."""
    rehearsal: Rehearsal | None
    """None where no plan keeps the promise."""
    sheets: SupplierSheets | None
    """None where no supplier is named, or too many, or no plan keeps the promise."""
    left_out: tuple[LeftOut, ...]
