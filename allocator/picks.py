"""What can be chosen: for every step each combination of alternatives, at most one per group, and what it costs."""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from operator import attrgetter

import numpy as np
from numpy.typing import NDArray

from allocator.money import capital_recovery
from allocator.scenario.levels import column, given_in
from allocator.scenario.model import Alternative, Costs, Scenario, Step

Array = NDArray[np.float64]
Indices = NDArray[np.int64]


@dataclass(frozen=True)
class Picks:
    """Every combination of every step, steps in file order, nothing chosen first.

    Parameters
    ----------
    step : array of int, shape (n_picks,)
    members : array of int, shape (n_picks, most groups of a step)
        Indices into `alternatives`; −1 where nothing is chosen.
    alternatives : tuple
        Those of all steps, one after another.
    owner : array of int, shape (n_alternatives,)
        The step of each.
    """

    step: Indices
    members: Indices
    alternatives: tuple[Alternative, ...]
    owner: Indices

    def __len__(self) -> int:
        return len(self.step)

    def names(self, pick: int) -> tuple[str, ...]:
        """Return the names of what is chosen."""
        return tuple(self.alternatives[m].name for m in self.members[pick].tolist() if m >= 0)

    def columns(self) -> Iterator[Indices]:
        """Yield what is chosen in the first group, then in the second, and so on, each of shape (n_picks,)."""
        yield from self.members.T

    def sums(self, per_alternative: Array) -> Array:
        """Return the sum of a figure over what is chosen, shape (n_picks,)."""
        figures = np.append(per_alternative, 0.0)  # what −1 stands for
        total = np.zeros(len(self))
        for chosen in self.columns():
            total = total + figures[chosen]
        return total

    def uses(self, purchases: Sequence[str]) -> NDArray[np.bool_]:
        """Return which shared purchases each combination uses, shape (n_picks, n_purchases)."""
        used = np.zeros((len(self), len(purchases)), dtype=bool)
        place = {name: p for p, name in enumerate(purchases)}
        named = np.array([*(place.get(a.uses or "", -1) for a in self.alternatives), -1], dtype=np.int64)
        for chosen in self.columns():
            rows = np.flatnonzero(named[chosen] >= 0)
            used[rows, named[chosen[rows]]] = True
        return used


def combinations(step: Step) -> list[tuple[Alternative, ...]]:
    """Return every choice of at most one alternative per group, nothing chosen first."""
    table = _combined(tuple(a.group for a in step.alternative))
    return [tuple(step.alternative[a] for a in chosen if a >= 0) for chosen in table.tolist()]


def all_picks(steps: Sequence[Step]) -> Picks:
    """Return every combination of every step."""
    counts = np.array([len(step.alternative) for step in steps], dtype=np.int64)
    first = np.cumsum(counts) - counts
    alike: dict[tuple[str, ...], list[int]] = {}
    for i, step in enumerate(steps):
        alike.setdefault(tuple(map(attrgetter("group"), step.alternative)), []).append(i)
    tables = {groups: _combined(groups) for groups in alike}
    width = max(table.shape[1] for table in tables.values())
    owners, members = [], []
    for groups, those in alike.items():
        table, base = tables[groups], first[those]
        chosen = np.full((len(those), *table.shape[:1], width), -1, dtype=np.int64)
        chosen[:, :, : table.shape[1]] = np.where(table < 0, -1, base[:, None, None] + table)
        members.append(chosen.reshape(len(those) * len(table), width))
        owners.append(np.repeat(np.array(those, dtype=np.int64), len(table)))
    owner, member = np.concatenate(owners), np.concatenate(members)
    order = np.argsort(owner, kind="stable")
    return Picks(
        step=owner[order],
        members=member[order],
        alternatives=tuple(a for step in steps for a in step.alternative),
        owner=np.repeat(np.arange(len(steps)), counts),
    )


def _combined(groups: tuple[str, ...]) -> Indices:
    """Return the combinations of alternatives of the given groups, by their place in the step, −1 for none."""
    places: dict[str, list[int]] = {}
    for place, group in enumerate(groups):
        places.setdefault(group, [-1]).append(place)
    rows = list(itertools.product(*places.values()))
    return np.array(rows, dtype=np.int64).reshape(len(rows), len(places))


def yearly_costs(scenario: Scenario, tables: Sequence[Costs]) -> Array:
    """Return what each purchase or alternative costs per year, apart from what is charged per item [currency/year]."""
    price, trade_in, resale = (column(tables, name) for name in ("price", "trade_in", "resale"))
    total = column(tables, "per_year")
    paid = np.flatnonzero((price != 0.0) | (trade_in != 0.0) | (resale != 0.0))
    lives = column(tables, "life_years")[paid]
    crf, rate = recoveries(scenario, lives), scenario.demand.discount_rate
    if rate is not None:
        total[paid] += (price[paid] - trade_in[paid]) * crf - resale[paid] * (crf - rate)
    return total


def recoveries(scenario: Scenario, lives: Array) -> Array:
    """Return the capital recovery factor of every life [year], the scenario's horizon where it is nan [1/year]."""
    years, rate = scenario.demand.years, scenario.demand.discount_rate
    if len(lives) == 0:
        return np.zeros(0)
    assert rate is not None, "checked when read"
    stated = np.where(given_in(lives), lives, np.nan if years is None else years)
    known = {life: capital_recovery(rate, life) for life in set(stated.tolist())}
    return np.array([known[life] for life in stated.tolist()])
