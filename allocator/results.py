"""What the commands answer with: plain frozen records, numbers only; they neither print nor plot."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass, field, fields
from typing import TYPE_CHECKING, Any, TypeVar

if TYPE_CHECKING:
    import pandas


def as_table(rows: Sequence[Any]) -> pandas.DataFrame:
    """Return records as a table, one row each; nested figures become columns such as `target.cpk`."""
    import pandas  # here, because only those who ask for a table should wait for it

    return pandas.json_normalize([asdict(row) for row in rows])


Record = TypeVar("Record")


def records(kind: type[Record], columns: dict[str, Sequence[Any]]) -> tuple[Record, ...]:
    """Return one record per row of columns that name every field; quicker than calling the class row by row."""
    wanted = [f.name for f in fields(kind)]  # type: ignore[arg-type]
    assert sorted(columns) == sorted(wanted), "columns and fields are the same"
    made = []
    for row in zip(*(columns[name] for name in wanted), strict=True):
        record = object.__new__(kind)
        record.__dict__.update(zip(wanted, row, strict=True))
        made.append(record)
    return tuple(made)


@dataclass(frozen=True)
class Yields:
    """The three yields, with their losses 1 − yield kept exact for many nines.

    `shipped_yield` is None when no step states an inspection (the gates are then only assumed perfect).
    """

    rolled_yield: float
    final_yield: float
    shipped_yield: float | None
    rolled_loss: float
    final_loss: float
    shipped_loss: float | None


@dataclass(frozen=True)
class Money:
    """Cost per year by kind [currency/year]."""

    scrap: float
    rework: float
    escapes: float
    inspection: float
    improvement: float

    @property
    def total(self) -> float:
        return self.scrap + self.rework + self.escapes + self.inspection + self.improvement


@dataclass(frozen=True)
class Level:
    """Where one step stands or shall stand.

    `cp` is None for one-sided and attribute steps; `cpk` is the study index, without the drift allowance;
    `cpk_after_shift` is what is left of it after the shift. `dpmo` counts opportunities, `ppm` items.
    """

    sigma_level: float
    shift: float
    k: float
    sides: int
    cp: float | None
    cpk: float
    cpk_after_shift: float
    dpmo: float
    ppm: float
    dpu: float
    """Expected defects of this step per finished unit, Σ q·n·p."""


@dataclass(frozen=True)
class StepTarget:
    """One row of the plan: a step, from where it stands to what it must reach."""

    step: str
    supplier: str | None
    today: Level
    target: Level
    alternatives: tuple[str, ...]
    law: str | None
    """Law of improvement used above the chosen alternative's own level, if any."""
    budget_share: float
    """Part of the used budget of the split yield that arises here; sums to 1 over the steps."""
    starts_per_year: float
    scrap: float
    rework: float
    inspection: float
    improvement: float
    capital: float
    at_cap: bool
    cap: str | None
    """What caps the step (in words), when `at_cap`."""
    floor: str | None
    """The floor in words, when the step has one."""
    floor_distance: str | None
    """How far the target stands above the floor, in words with its unit."""
    floor_binds: bool
    safety: bool
    first_pass_yield: float


@dataclass(frozen=True)
class Bought:
    """A shared purchase that the plan makes."""

    name: str
    price: float
    per_year_cost: float


@dataclass(frozen=True)
class Proof:
    """Evidence for a solve: the plan's own value, a proven lower bound, the gap and how it was proven."""

    total: float
    lower_bound: float | None
    gap: float | None
    method: str
    seconds: float
    note: str = ""


@dataclass(frozen=True)
class RuleOutcome:
    """What a simpler apportionment rule would cost on the same scenario."""

    rule: str
    """'equal split', 'equal per opportunity', 'pro rata to today', 'raise the worst'."""
    source: str
    total: float
    yield_reached: float
    loss_reached: float
    meets_target: bool
    saving: float | None
    """The rule's total less the plan's; None where the rule misses the target."""
    broken: tuple[str, ...]
    """In words: each floor, cap or limit that the rule alone would break."""


@dataclass(frozen=True)
class Binding:
    """A step that holds the target out of reach, and what holds the step."""

    step: str
    reason: str


@dataclass(frozen=True)
class BestReachable:
    """The highest yield (`of` says which) any choice can reach, its least cost, and what binds there."""

    of: str
    yield_: float
    loss: float
    total: float
    binding: tuple[Binding, ...]


@dataclass(frozen=True)
class TodayLine:
    """The line as it stands: nothing bought, nothing improved."""

    yields: Yields
    money: Money | None
    """None when the flow overflows (flow exponent above 700); then `money_reason` says so."""
    money_reason: str | None
    dpu: float
    bad_per_lot: tuple[tuple[int, float], ...]
    """Units not right first time, by lot size."""


@dataclass(frozen=True)
class Plan:
    """The cheapest plan that meets the target, or (reached False) the best that can be reached."""

    title: str
    currency: str
    shipped_per_year: float
    question: str
    """'cheapest' (meet the target at least cost), 'optimum' (no target), 'best yield' (for the money)."""
    reached: bool
    split: str
    """The yield whose budget is split: 'final_yield', 'rolled_yield' or 'shipped_yield'."""
    targets: dict[str, float]
    target_losses: dict[str, float]
    yields: Yields | None
    """None only when no choice at all keeps the floors and limits."""
    money: Money | None
    dpu: float | None
    capital: float | None
    purchases: tuple[Bought, ...]
    steps: tuple[StepTarget, ...]
    today: TodayLine
    proof: Proof | None
    price_of_defect_budget: float | None
    cost_of_next_nine: float | None
    best_reachable: BestReachable | None
    binding: tuple[Binding, ...]
    rules: tuple[RuleOutcome, ...]
    rules_note: str
    """Why the simpler rules were left out, when they do not apply."""
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...]
    spend_limit: float | None = None
    capital_limit: float | None = None

    @property
    def cost_per_unit(self) -> float | None:
        return None if self.money is None else self.money.total / self.shipped_per_year

    def table(self) -> pandas.DataFrame:
        """Return the steps as a table: today's and the target's level, what is chosen, cost and share."""
        return as_table(self.steps)


@dataclass(frozen=True)
class NinesPoint:
    """One point of the price of nines."""

    label: str
    """'today', 'whole nine', 'target', 'highest reachable', 'grid' or 'economic optimum'."""
    nines: float
    target_yield: float
    target_loss: float
    yield_: float
    loss: float
    total: float
    extra: float | None
    price_of_defect_budget: float | None
    changes: tuple[str, ...]
    gap: float


@dataclass(frozen=True)
class Nines:
    """Total cost and cost of each extra nine, up to the highest reachable."""

    title: str
    currency: str
    split: str
    today_nines: float
    points: tuple[NinesPoint, ...]
    highest: BestReachable | None
    optimum_yield: float | None
    optimum_loss: float | None
    optimum_total: float | None
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...]

    def table(self) -> pandas.DataFrame:
        """Return the points as a table."""
        return as_table(self.points)


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


@dataclass(frozen=True)
class Today:
    """Where the line stands: yields, defects per unit, and where the money goes."""

    title: str
    currency: str
    shipped_per_year: float
    line: TodayLine
    steps: tuple[StepToday, ...]
    targets: dict[str, float]
    target_losses: dict[str, float]
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...]

    def table(self) -> pandas.DataFrame:
        """Return the steps as a table."""
        return as_table(self.steps)


@dataclass(frozen=True)
class Caution:
    """Something sound but risky in the input or the answer: where, why it matters, what to do."""

    code: str
    """A short stable word for programs, as 'small_sample'."""
    steps: tuple[str, ...]
    reason: str
    fix: str


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


@dataclass(frozen=True)
class Check:
    """Is the scenario sound, what was understood, which cautions apply."""

    title: str
    currency: str
    shipped_per_year: float
    file: str
    steps: tuple[Understood, ...]
    targets: dict[str, float]
    target_losses: dict[str, float]
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...] = field(default_factory=tuple)
