"""The answer to a comparison: the plans of several scenarios side by side, and where they differ."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from allocator.results.line import Caution
from allocator.results.plan import Plan, StepTarget
from allocator.shown import shown

if TYPE_CHECKING:
    import pandas


@dataclass(frozen=True)
class Compared:
    """One of the scenarios: its plan, and how its money stands to that of the first."""

    label: str
    """The name of its file without folder and ending, made distinct."""
    file: str
    plan: Plan
    total_over_first: float | None
    """Its yearly total less the first's; None where one of them is not known or the currencies differ."""
    per_unit_over_first: float | None
    capital_over_first: float | None


@dataclass(frozen=True)
class StepAcross:
    """One step in every scenario; None where a scenario has no step of that name, or no plan at all."""

    step: str
    targets: tuple[StepTarget | None, ...]
    differs: bool
    """Whether choice, supplier or sigma level (by more than the rounding of a solve) is not the same everywhere."""


@dataclass(frozen=True)
class TakenAcross:
    """One thing to buy or to do: 'taken', 'left' or 'not offered' in each scenario."""

    step: str | None
    """None for a shared purchase."""
    what: str
    states: tuple[str, ...]


@shown
@dataclass(frozen=True)
class Comparison:
    """Several scenarios side by side, each with the plan that is best for it."""

    cases: tuple[Compared, ...]
    cheapest: str | None
    """Label of the one that meets its targets at the least total per shipped unit; None where none does or can be."""
    taken: tuple[TakenAcross, ...]
    rows: tuple[StepAcross, ...]
    unlike: tuple[str, ...]
    """In words: what the scenarios do not have in common (promise, volume, currency, rate), to read the money by."""

    @property
    def cautions(self) -> tuple[Caution, ...]:
        """Return the cautions of all plans, each once."""
        return tuple(dict.fromkeys(caution for case in self.cases for caution in case.plan.cautions))

    @cached_property
    def totals(self) -> pandas.DataFrame:
        """One row per scenario: whether its promise is kept, its money, and the differences to the first."""
        import pandas  # here, because only those who ask for a table should wait for it

        plans = [case.plan for case in self.cases]
        over = ("total_over_first", "per_unit_over_first", "capital_over_first")
        columns = {
            "label": [case.label for case in self.cases],
            "reached": [plan.reached for plan in plans],
            "total": [None if plan.money is None else plan.money.total for plan in plans],
            "cost_per_unit": [plan.cost_per_unit for plan in plans],
            "capital": [plan.capital for plan in plans],
        }
        return pandas.DataFrame(columns | {name: [getattr(case, name) for case in self.cases] for name in over})

    @cached_property
    def steps(self) -> pandas.DataFrame:
        """One row per step: the sigma level to reach in each scenario, and whether the scenarios differ there."""
        import pandas

        levels = {
            case.label: [None if (at := row.targets[i]) is None else at.target.sigma_level for row in self.rows]
            for i, case in enumerate(self.cases)
        }
        names, differs = [row.step for row in self.rows], [row.differs for row in self.rows]
        return pandas.DataFrame({"step": names, **levels, "differs": differs})
