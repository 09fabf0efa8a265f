"""One way to run the line as a cost engineer sees it: its flow, its money by kind, and every single thing paid for."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.choice import Outcome
from allocator.flow import GATE_FIELDS, Flow, Gates, Line, loads, money, run, yields
from allocator.money import annual_cost
from allocator.problem import Problem, within
from allocator.results import Asset, Money, Yields
from allocator.scenario.model import Alternative, Costs, Law
from allocator.standing import flow_today, shipped_known
from allocator.states import States
from allocator.variants import IMPROVE
from allocator.ways import Ways, law_cost


@dataclass(frozen=True)
class Stand:
    """The line run in one way."""

    line: Line
    flow: Flow
    assets: tuple[Asset, ...]
    money: Money
    inspected: bool
    """Whether some gate states an inspection, so that escapes are known."""

    @property
    def capital(self) -> float:
        """What is paid today, less trade-ins [currency]."""
        return float(sum(asset.price - asset.trade_in for asset in self.assets))

    @property
    def yields(self) -> Yields:
        return yields(self.line, self.flow, self.inspected)

    def keeps(self, budgets: dict[str, float]) -> bool:
        """Return whether all targets are met."""
        used = loads(self.line, self.flow)
        return all(within(used[name], budget) for name, budget in budgets.items())


def stand_today(problem: Problem) -> Stand:
    """Return the line as it stands: nothing bought, nothing improved."""
    return _stand(problem, flow_today(problem), [], problem.options.today)


def stand_of(problem: Problem, ways: Ways, outcome: Outcome) -> Stand:
    """Return the line as an evaluated choice among some ways runs it."""
    owned = [*_shared(problem, outcome.bought)]
    rows, by_law = outcome.choice.rows, law_cost(ways, outcome.choice.rows, outcome.choice.z).tolist()
    for i, row in enumerate(rows.tolist()):
        owned += _at_step(problem, ways, i, row, by_law[i])
    return _stand(problem, outcome.flow, owned, ways.states.take(outcome.choice.rows))


def stand_with_only(problem: Problem, rows: dict[int, tuple[Ways, int, float]]) -> Stand:
    """Return today's line with some steps run otherwise: by step index a table of ways, its row and the level."""
    today = problem.options.today
    intensity, gates = today.intensity(), today.gates()
    figures = {name: getattr(gates, name).copy() for name in GATE_FIELDS}
    used = np.zeros(len(problem.options.purchase_names), dtype=bool)
    inspection, owned = today.inspection.copy(), list[Asset]()
    for i, (ways, row, z) in rows.items():
        one = ways.take(np.array([row]))
        intensity[i] = cv.intensity(one.curves, np.array([z]))[0]
        for name in GATE_FIELDS:
            figures[name][i] = getattr(one.gates, name)[0]
        inspection[i] = one.states.inspection[0]
        used |= one.uses[0]
        owned += _at_step(problem, ways, i, row, float(law_cost(ways, np.array([row]), np.array([z]))[0]))
    flow = run(problem.line, intensity, Gates(**figures))
    return _stand(problem, flow, [*_shared(problem, used), *owned], replace(today, inspection=inspection))


def _stand(problem: Problem, flow: Flow, owned: list[Asset], states: States) -> Stand:
    rate = rate_of(problem)
    paid = sum(yearly(asset, rate) for asset in owned)
    return Stand(
        problem.line, flow, tuple(owned), money(problem.line, flow, paid), inspected=shipped_known(problem, states)
    )


def rate_of(problem: Problem) -> float:
    """Return the discount rate; nothing has a price where none is stated."""
    return problem.scenario.demand.discount_rate or 0.0


def yearly(asset: Asset, rate: float) -> float:
    """Return what an asset costs per year at a discount rate [currency/year]."""
    owning = annual_cost(asset.price, asset.trade_in, asset.resale, rate, asset.life_years)
    return owning + asset.per_year + asset.per_item + asset.price_allowance


def _asset(problem: Problem, name: str, i: int, costs: Costs, items: float) -> Asset:
    demand = problem.scenario.demand
    life = costs.life_years or demand.years or 1.0
    own = costs if isinstance(costs, Alternative) else None
    return Asset(
        name=name, step=None if i < 0 else problem.scenario.step[i].name, price=costs.price, trade_in=costs.trade_in,
        resale=costs.resale, life_years=life, per_year=costs.per_year,
        per_item=0.0 if own is None else own.per_item * items,
        price_allowance=0.0 if own is None else own.price_allowance * problem.line.shipped,
        equivalent_annual_cost=annual_cost(costs.price, costs.trade_in, costs.resale, rate_of(problem), life),
    )  # fmt: skip


def _shared(problem: Problem, bought: NDArray[np.bool_]) -> Iterator[Asset]:
    for purchase, taken in zip(problem.scenario.purchase, bought.tolist(), strict=True):
        if taken:
            yield _asset(problem, purchase.name, -1, purchase, 0.0)


def _at_step(problem: Problem, ways: Ways, i: int, row: int, by_law: float) -> Iterator[Asset]:
    step, items = problem.scenario.step[i], float(problem.line.per_finished[i] * problem.line.shipped)
    chosen = ways.text[row].alternatives
    for alternative in step.alternative:
        if alternative.name in chosen:
            yield _asset(problem, alternative.name, i, alternative, items)
    if step.improve is not None and by_law > 0.0:
        yield _law_asset(problem, step.improve, i, by_law, float(ways.capital_per_cost[row]))


def _law_asset(problem: Problem, law: Law, i: int, cost: float, capital_per_cost: float) -> Asset:
    """Return a law's yearly cost as what it is paid as: a price, or so much a year, or so much an item."""
    per_item = law.per_item is not None or any(point.per_item is not None for point in law.points)
    priced = capital_per_cost > 0.0
    return Asset(
        name=IMPROVE, step=problem.scenario.step[i].name, price=cost * capital_per_cost, trade_in=0.0, resale=0.0,
        life_years=law.life_years or problem.scenario.demand.years or 1.0,
        per_year=cost if not (priced or per_item) else 0.0, per_item=cost if per_item else 0.0, price_allowance=0.0,
        equivalent_annual_cost=cost if priced else 0.0,
    )  # fmt: skip
