"""What each step could become: one flat table of ways, from alternatives and laws.

A way is a state of the step (a combination of alternatives, at most one per group) and, where the step has a law, a
stretch of sigma levels that the law reaches from there. A stretch over which the law is not convex in the defect
intensity is cut into shorter ones that carry their chord, so that every way is convex for the solver.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.curves import Curves
from allocator.flow import GATE_FIELDS, Gates, Line, gate_values
from allocator.money import annual_cost
from allocator.reach import horizon, law_in_use, reaches
from allocator.scenario.model import Alternative, Costs, Purchase, Scenario, Step
from allocator.state import State, floor_sigma, floor_words, state_today, state_with
from allocator.stretch import Stretch

Array = NDArray[np.float64]


@dataclass(frozen=True)
class WayText:
    """What people call a way: its alternatives, its law and what caps it."""

    alternatives: tuple[str, ...]
    law: str | None
    cap: str


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
    lines : tuple
        Straight pieces (δ rising, yearly cost falling) that stand for the law in the solver, None where it is smooth.
    states, text : tuple
    """

    step: NDArray[np.int64]
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
    lines: tuple[tuple[Array, Array] | None, ...]
    states: tuple[State, ...]
    text: tuple[WayText, ...]

    def __len__(self) -> int:
        return len(self.step)

    @property
    def moves(self) -> NDArray[np.bool_]:
        """Where something continuous can move."""
        return self.delta_high > self.delta_low

    def take(self, rows: NDArray[np.int64]) -> Ways:
        """Return the table of some ways."""
        return Ways(
            self.step[rows], self.curves.take(rows), self.z_low[rows], self.z_high[rows], self.delta_low[rows],
            self.delta_high[rows], self.fixed_cost[rows], self.capital[rows], self.capital_per_cost[rows],
            Gates(*(getattr(self.gates, name)[rows] for name in GATE_FIELDS)), self.uses[rows],
            tuple(self.lines[i] for i in rows), tuple(self.states[i] for i in rows), tuple(self.text[i] for i in rows),
        )  # fmt: skip


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
    today: tuple[State, ...]
    no_way: tuple[tuple[str, str], ...]
    notes: tuple[str, ...]


@dataclass
class _Row:
    """One way under construction."""

    step: int
    state: State
    stretch: Stretch
    kind: int
    start: float
    parameter: float
    scale: float
    fixed_cost: float
    capital: float
    capital_per_cost: float
    uses: tuple[str, ...]
    text: WayText


def build_options(scenario: Scenario, line: Line) -> Options:
    """Return every way to run every step of a checked scenario."""
    rows: list[_Row] = []
    no_way: list[tuple[str, str]] = []
    notes: list[str] = []
    today = tuple(state_today(scenario, step) for step in scenario.step)
    for index, step in enumerate(scenario.step):
        items = line.per_finished[index] * line.shipped
        found = list(_ways_of_step(scenario, step, index, today[index], items, notes))
        rows.extend(found)
        if not found:
            no_way.append((step.name, f"no way to run it keeps its floor ({floor_words(step.at_least)})"))
    names = tuple(purchase.name for purchase in scenario.purchase)
    return Options(
        ways=_table(rows, names),
        purchase_names=names,
        purchase_price=np.array([p.price for p in scenario.purchase], dtype=float),
        purchase_cost=np.array([yearly_cost(scenario, p) for p in scenario.purchase], dtype=float),
        purchase_capital=np.array([p.price - p.trade_in for p in scenario.purchase], dtype=float),
        today=today,
        no_way=tuple(no_way),
        notes=tuple(dict.fromkeys(notes)),
    )


def yearly_cost(scenario: Scenario, costs: Costs) -> float:
    """Return what a purchase or alternative costs per year, apart from what is charged per item [currency/year]."""
    total = costs.per_year
    if costs.price or costs.trade_in or costs.resale:
        years, rate = horizon(scenario, costs.life_years)
        total += annual_cost(costs.price, costs.trade_in, costs.resale, rate, years)
    return total


def combinations(step: Step) -> Iterator[tuple[Alternative, ...]]:
    """Yield every choice of at most one alternative per group, nothing chosen first."""
    groups: dict[str, list[Alternative | None]] = {}
    for alternative in step.alternative:
        groups.setdefault(alternative.group, [None]).append(alternative)
    for combination in itertools.product(*groups.values()):
        yield tuple(a for a in combination if a is not None)


def _ways_of_step(
    scenario: Scenario, step: Step, index: int, today: State, items: float, notes: list[str]
) -> Iterator[_Row]:
    law = law_in_use(scenario, step, today, items) if step.improve is not None else None
    for chosen in combinations(step):
        state = state_with(today, chosen)
        fixed = sum(
            yearly_cost(scenario, a) + a.per_item * items + a.price_allowance * scenario.demand.shipped_per_year
            for a in chosen
        )
        capital = sum(a.price - a.trade_in for a in chosen)
        uses = tuple(a.uses for a in chosen if a.uses is not None)
        names = tuple(a.name for a in chosen)
        floor = floor_sigma(step.at_least, state)
        for reach in reaches(step, state, today, law, floor, notes):
            yield _Row(
                index, state, reach.stretch, reach.kind, state.level.sigma_level, reach.parameter, reach.scale,
                fixed, capital, reach.capital_per_cost, uses, WayText(names, reach.law, reach.cap),
            )  # fmt: skip


def _table(rows: Sequence[_Row], purchases: tuple[str, ...]) -> Ways:
    def column(values: list[float]) -> Array:
        return np.array(values, dtype=float)

    curves = Curves(
        k=column([r.state.level.k for r in rows]),
        shift=column([r.state.level.shift for r in rows]),
        sides=np.array([r.state.level.sides for r in rows], dtype=np.int64),
        opportunities=column([r.state.opportunities for r in rows]),
        installed=np.array([r.state.installed for r in rows], dtype=np.int64),
        needed=np.array([r.state.needed for r in rows], dtype=np.int64),
        common_cause=column([r.state.common_cause for r in rows]),
        start=column([r.start for r in rows]),
        kind=np.array([r.kind for r in rows], dtype=np.int64),
        parameter=column([r.parameter for r in rows]),
        scale=column([r.scale for r in rows]),
    )
    z_low, z_high = column([r.stretch.low for r in rows]), column([r.stretch.high for r in rows])
    gates = np.array([gate_values(r.state.inspection, r.state.rework) for r in rows], dtype=float).reshape(
        len(rows), -1
    )
    return Ways(
        step=np.array([r.step for r in rows], dtype=np.int64),
        curves=curves,
        z_low=z_low,
        z_high=z_high,
        delta_low=cv.intensity(curves, z_high),
        delta_high=cv.intensity(curves, z_low),
        fixed_cost=column([r.fixed_cost for r in rows]),
        capital=column([r.capital for r in rows]),
        capital_per_cost=column([r.capital_per_cost for r in rows]),
        gates=Gates(*gates.T),
        uses=np.array([[name in r.uses for name in purchases] for r in rows], dtype=bool).reshape(len(rows), -1),
        lines=tuple(r.stretch.lines for r in rows),
        states=tuple(r.state for r in rows),
        text=tuple(r.text for r in rows),
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


def purchase_named(scenario: Scenario, name: str) -> Purchase:
    """Return a shared purchase by its name."""
    return next(p for p in scenario.purchase if p.name == name)
