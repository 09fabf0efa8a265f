"""What each step could become: one flat table of ways, from alternatives and laws.

A way is a state of the step (a combination of alternatives, at most one per group) and, where the step has a law, a
stretch of sigma levels that the law reaches from there. A stretch over which the law is not convex in the defect
intensity is cut into shorter ones that carry their chord, so that every way is convex for the solver.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields
from typing import Any, SupportsIndex

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.curves import Curves
from allocator.flow import GATE_FIELDS, Gates, Line
from allocator.picks import Picks, all_picks, yearly_costs
from allocator.reach import Caps, Reaches, reaches
from allocator.scales import NAME, LawsInUse, laws_in_use
from allocator.scenario.levels import column
from allocator.scenario.model import Scenario
from allocator.state import floor_words
from allocator.states import States, states_today, states_with

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
Pieces = tuple[Array, Array]


@dataclass(frozen=True)
class WayText:
    """What people call a way: its alternatives, its law and what caps it."""

    alternatives: tuple[str, ...]
    law: str | None
    cap: str


@dataclass(frozen=True)
class Texts:
    """The words of many ways by index, made when they are asked for."""

    picks: Picks
    caps: Caps
    pick: Indices
    kind: Indices

    def __len__(self) -> int:
        return len(self.pick)

    def __getitem__(self, w: SupportsIndex) -> WayText:
        pick = self.pick[w].item()
        return WayText(self.picks.names(pick), NAME.get(self.kind[w].item()), self.caps.words(pick))

    def __iter__(self) -> Iterator[WayText]:
        return (self[w] for w in range(len(self)))

    @property
    def unchanged(self) -> NDArray[np.bool_]:
        """Where nothing is chosen."""
        return np.asarray((self.picks.members[self.pick] < 0).all(axis=1))

    def alternatives(self) -> list[tuple[str, ...]]:
        """Return what every way chooses."""
        names = [a.name for a in self.picks.alternatives]
        return [tuple([names[m] for m in chosen if m >= 0]) for chosen in self.picks.members[self.pick].tolist()]

    def caps_in_words(self) -> list[str]:
        """Return what caps every way."""
        return self.caps.all_words(self.pick)

    def take(self, rows: Any) -> Texts:
        """Return the words of some ways."""
        return Texts(self.picks, self.caps, self.pick[rows], self.kind[rows])


@dataclass(frozen=True)
class Lines:
    """Straight pieces by way, None where the law is smooth; few ways have any."""

    count: int
    pieces: dict[int, Pieces]

    def __len__(self) -> int:
        return self.count

    def __getitem__(self, w: SupportsIndex) -> Pieces | None:
        return self.pieces.get(int(w))

    def __iter__(self) -> Iterator[Pieces | None]:
        return (self.pieces.get(w) for w in range(self.count))

    def take(self, rows: Indices) -> Lines:
        """Return the pieces of some ways."""
        if not self.pieces:
            return Lines(len(rows), {})
        return Lines(len(rows), {i: self.pieces[w] for i, w in enumerate(rows.tolist()) if w in self.pieces})


@dataclass(frozen=True)
class Ways:
    """The table; arrays of shape (n_ways,), steps in file order.

    Parameters
    ----------
    step : array of int
    curves : Curves
        State and law of each way.
    z_low, z_high : [σ]
        From the level of the state (or its floor) to the cap; equal where nothing continuous can move.
    delta_low, delta_high : [defects per item]
        Intensity at z_high and at z_low.
    fixed_cost : [currency/year]
        Yearly cost of the alternatives, shared purchases apart.
    capital : [currency]
        Price less trade-in of the alternatives.
    capital_per_cost : [currency per currency/year]
        Capital behind one unit of the law's yearly cost.
    gates : Gates
    uses : bool, shape (n_ways, n_purchases)
    lines : Lines
        Straight pieces (δ rising, yearly cost falling) that stand for the law in the solver, None where it is smooth.
    states : States
    text : Texts
        Read by index; `text.pick` tells which ways of a step choose the same alternatives.
    """

    step: Indices
    curves: Curves
    z_low: Array
    z_high: Array
    delta_low: Array
    delta_high: Array
    fixed_cost: Array
    capital: Array
    capital_per_cost: Array
    gates: Gates
    uses: NDArray[np.bool_]
    lines: Lines
    states: States
    text: Texts

    def __len__(self) -> int:
        return len(self.step)

    @property
    def moves(self) -> NDArray[np.bool_]:
        """Where something continuous can move."""
        return self.delta_high > self.delta_low

    def least_by_step(self, n_steps: int) -> Array:
        """Return the least intensity that any way of each step reaches, shape (n_steps,)."""
        least = np.full(n_steps, np.inf)
        np.minimum.at(least, self.step, self.delta_low)
        return least

    def highest_unchanged(self, n_steps: int) -> Array:
        """Return the highest level [σ] of each step with no alternative chosen, −inf if it has no such way."""
        unchanged, highest = self.text.unchanged, np.full(n_steps, -np.inf)
        np.maximum.at(highest, self.step[unchanged], self.z_high[unchanged])
        return highest

    def find(self, other: Ways, rows: Indices) -> Indices:
        """Return where some ways of another table of the same options stand in this one, −1 for those it lacks."""
        if other is self:
            return rows
        pick, z_low, z_high = other.text.pick[rows], other.z_low[rows], other.z_high[rows]
        first = np.searchsorted(self.text.pick, pick, side="left")
        count = np.searchsorted(self.text.pick, pick, side="right") - first
        found = np.full(len(rows), -1, dtype=np.int64)
        for piece in range(int(count.max(initial=0))):
            at = np.minimum(first + piece, len(self) - 1)
            same = (piece < count) & (self.z_low[at] == z_low) & (self.z_high[at] == z_high)
            found[same] = at[same]
        return found

    def take(self, rows: Indices) -> Ways:
        """Return the table of some ways."""
        states = self.states.take(rows)
        return Ways(
            self.step[rows], self._curves_of(states, rows), self.z_low[rows], self.z_high[rows], self.delta_low[rows],
            self.delta_high[rows], self.fixed_cost[rows], self.capital[rows], self.capital_per_cost[rows],
            Gates(*(getattr(self.gates, name)[rows] for name in GATE_FIELDS)), self.uses[rows],
            self.lines.take(rows), states, self.text.take(rows),
        )  # fmt: skip

    def _curves_of(self, states: States, rows: Indices) -> Curves:
        """Return the curves of some ways; columns that they share with the states are taken only once."""
        taken = {id(mine): theirs for mine, theirs in zip(self.states.columns(), states.columns(), strict=True)}
        columns = (getattr(self.curves, f.name) for f in fields(Curves))
        return Curves(*(taken[id(column)] if id(column) in taken else column[rows] for column in columns))


@dataclass(frozen=True)
class Options:
    """Everything the steps could become, the shared purchases, and what was noticed on the way.

    `purchase_cost` [currency/year] and `purchase_capital` [currency] have shape (n_purchases,). `no_way` names
    the steps that cannot keep their floor by any way, with the reason. `today` is the state of every step as it stands.
    """

    ways: Ways
    purchase_names: tuple[str, ...]
    purchase_price: Array
    purchase_cost: Array
    purchase_capital: Array
    today: States
    no_way: tuple[tuple[str, str], ...]
    notes: tuple[str, ...]


def build_options(scenario: Scenario, line: Line) -> Options:
    """Return every way to run every step of a checked scenario."""
    steps, items = scenario.step, line.per_finished * line.shipped
    today, picks = states_today(scenario), all_picks(scenario.step)
    states, in_use = states_with(today, picks), laws_in_use(scenario, today, items)
    reached = reaches(steps, states, picks.step, in_use, today.levels.sigma_level)
    ways = _table(scenario, items, picks, states.take(reached.state), in_use, reached)
    found = np.bincount(ways.step, minlength=len(steps))
    return Options(
        ways=ways,
        purchase_names=tuple(purchase.name for purchase in scenario.purchase),
        purchase_price=column(scenario.purchase, "price"),
        purchase_cost=yearly_costs(scenario, scenario.purchase),
        purchase_capital=column(scenario.purchase, "price") - column(scenario.purchase, "trade_in"),
        today=today,
        no_way=tuple(
            (steps[i].name, f"no way to run it keeps its floor ({floor_words(steps[i].at_least)})")
            for i in np.flatnonzero(found == 0)
        ),
        notes=tuple(dict.fromkeys(reached.notes)),
    )


def _table(scenario: Scenario, items: Array, picks: Picks, states: States, in_use: LawsInUse, reached: Reaches) -> Ways:
    """Return the table of ways: one row per stretch that a combination of alternatives reaches."""
    pick, step, pays = reached.state, picks.step[reached.state], reached.improves[reached.state]
    kind = np.where(pays, in_use.kind[step], cv.NONE)
    curves = states.curves(kind, np.where(pays, in_use.parameter[step], 0.0), np.where(pays, in_use.scale[step], 0.0))
    offers = picks.alternatives
    per_item, allowance = column(offers, "per_item"), column(offers, "price_allowance")
    yearly = (
        yearly_costs(scenario, offers) + per_item * items[picks.owner] + allowance * scenario.demand.shipped_per_year
    )
    return Ways(
        step=step,
        curves=curves,
        z_low=reached.low,
        z_high=reached.high,
        delta_low=cv.intensity(curves, reached.high),
        delta_high=cv.intensity(curves, reached.low),
        fixed_cost=picks.sums(yearly)[pick],
        capital=picks.sums(column(offers, "price") - column(offers, "trade_in"))[pick],
        capital_per_cost=np.where(pays, in_use.capital_per_cost[step], 0.0),
        gates=states.gates(),
        uses=picks.uses([purchase.name for purchase in scenario.purchase])[pick],
        lines=Lines(len(pick), reached.lines),
        states=states,
        text=Texts(picks, reached.caps, pick, kind),
    )


def law_cost(ways: Ways, rows: NDArray[np.int64], z: Array) -> Array:
    """Return the true yearly cost of the law at sigma level z for some ways, shape (len(rows),)."""
    some = ways.curves.take(rows)
    cost = cv.smooth_cost(some, z)
    for i in np.flatnonzero(some.kind == cv.LINES):
        lines = ways.lines[rows[i]]
        assert lines is not None
        cost[i] = np.interp(cv.intensity(some.take([i]), z[[i]])[0], *lines)
    return cost
