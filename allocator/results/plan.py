"""The answer to the main job: the plan, its steps, its proof and what it is compared with."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from allocator.results.confidence import Confidence
from allocator.results.line import Caution, Level, Money, TodayLine, Yields
from allocator.results.table import as_table
from allocator.shown import shown

if TYPE_CHECKING:
    import pandas


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
    feeds: str | None
    """The step that its items go into; None for the last."""
    found: float
    """Expected defects per finished unit that are found at this step's gate, wherever they arose."""


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
class LeastNeeded:
    """Where a limit on money stands in the way: the least that would do."""

    of: str
    """'capital' or 'total' (the yearly total)."""
    limit: float
    without_targets: float | None
    """With the floors kept (a total: with all else that was asked); None where the limit leaves that much."""
    with_targets: float | None
    """With the targets kept too; None without targets, or where no amount does."""


@dataclass(frozen=True)
class Restraint:
    """What the plan was told to keep to, and what the plan would be without it (None where it misses the target)."""

    what: tuple[str, ...]
    total_unrestrained: float | None
    loss_unrestrained: float | None
    """Of the split yield."""


@shown
@dataclass(frozen=True)
class Plan:
    """The cheapest plan that meets the target, or (reached False) the best that can be reached."""

    title: str
    currency: str
    shipped_per_year: float
    question: str
    """'cheapest' (meet the target at least cost), 'optimum' (no target), 'best yield' (for the money), 'confident'."""
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
    rows: tuple[StepTarget, ...]
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
    restraint: Restraint | None = None
    confidence: Confidence | None = None
    """How sure the plan is, where that was asked."""
    least_needed: LeastNeeded | None = None
    """Where a limit on money is what leaves no plan, or keeps the target out of reach."""

    @property
    def cost_of_restraint(self) -> float | None:
        """What the restraints add to the yearly total; None without them, or where either plan is missing."""
        if (
            self.restraint is None
            or self.restraint.total_unrestrained is None
            or self.money is None
            or not self.reached
        ):
            return None
        return self.money.total - self.restraint.total_unrestrained

    @property
    def cost_per_unit(self) -> float | None:
        return None if self.money is None else self.money.total / self.shipped_per_year

    @cached_property
    def steps(self) -> pandas.DataFrame:
        """The steps as a table: the level to reach, today's (`…_today`), what is chosen, cost and share."""
        return as_table(StepTarget, self.rows)
