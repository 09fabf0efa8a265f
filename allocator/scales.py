"""What does one unit of each step's law of improvement cost: kind, parameter and scale in money."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator import laws
from allocator.picks import recoveries
from allocator.scenario.levels import column, given_in
from allocator.scenario.model import Law, Scenario
from allocator.states import States, sigmas_meant

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
KIND = {"power": cv.POWER, "exponential": cv.EXPONENTIAL, "decade": cv.DECADE, "quotes": cv.LINES}
NAME = {kind: name for name, kind in KIND.items()}


@dataclass(frozen=True)
class LawsInUse:
    """Every step's law with its scale worked out, arrays of shape (n_steps,); kind NONE where a step has none.

    `scale` [currency/year] and `capital` [currency] belong to one unit of the law's shape. `knots` holds for quotes
    their sigma levels and yearly costs in the order written, by step.
    """

    kind: Indices
    parameter: Array
    scale: Array
    capital: Array
    knots: dict[int, tuple[Array, Array]]

    @property
    def capital_per_cost(self) -> Array:
        """Capital behind one unit of yearly cost."""
        return np.divide(self.capital, self.scale, out=np.zeros_like(self.scale), where=self.scale != 0.0)


def laws_in_use(scenario: Scenario, today: States, items: Array) -> LawsInUse:
    """Return the law of every step.

    Parameters
    ----------
    scenario : Scenario
    today : States
        Of every step.
    items : shape (n_steps,) [items/year]
    """
    owner = np.array([i for i, step in enumerate(scenario.step) if step.improve is not None], dtype=np.int64)
    table: list[Any] = [scenario.step[i].improve for i in owner.tolist()]
    kind = np.array([KIND[law.law] for law in table], dtype=np.int64)
    exponent, rate = column(table, "exponent"), column(table, "rate")
    parameter = np.nan_to_num(np.where(given_in(exponent), exponent, rate))
    quoted = np.flatnonzero(kind == cv.LINES).tolist()
    stated, priced, itemised = _stated(table, quoted)
    stated /= _shapes_at(table, kind, parameter, today, owner)
    yearly = np.where(itemised, items[owner], 1.0)
    yearly[priced] = recoveries(scenario, column(table, "life_years")[priced])
    return LawsInUse(
        kind=_on_steps(kind, owner, today),
        parameter=_on_steps(parameter, owner, today),
        scale=_on_steps(stated * yearly, owner, today),
        capital=_on_steps(stated * priced, owner, today),
        knots=_knots([(owner[j].item(), table[j], yearly[j].item()) for j in quoted], today),
    )


def _on_steps(values: NDArray[Any], owner: Indices, today: States) -> NDArray[Any]:
    """Spread figures of the steps that have a law over all steps, 0 elsewhere."""
    spread = np.zeros(len(today), dtype=values.dtype)
    spread[owner] = values
    return spread


def _stated(table: list[Law], quoted: list[int]) -> tuple[Array, NDArray[np.bool_], NDArray[np.bool_]]:
    """Return the amount each law states (1 for quotes, which state theirs), and whether it is a price, or per item."""
    price, per_year, per_item = (column(table, name) for name in ("price", "per_year", "per_item"))
    priced, itemised = given_in(price), given_in(per_item)
    stated = np.where(priced, price, np.where(given_in(per_year), per_year, np.nan_to_num(per_item)))
    for j in quoted:
        stated[j] = 1.0
        priced[j] = any(point.price is not None for point in table[j].points)
        itemised[j] = any(point.per_item is not None for point in table[j].points)
    return stated, priced, itemised


def _shapes_at(table: list[Law], kind: Indices, parameter: Array, today: States, owner: Indices) -> Array:
    """Return each law's shape at its `at` level, so that getting there from today costs the stated amount; else 1."""
    shapes = np.ones(len(table))
    some = np.array([j for j, law in enumerate(table) if law.at is not None], dtype=np.int64)
    if len(some) == 0:
        return shapes
    here, named = today.take(owner[some]), [table[j].at for j in some.tolist()]
    there, start = sigmas_meant([at for at in named if at is not None], here), here.levels.sigma_level
    for which, shape in ((cv.POWER, laws.power), (cv.EXPONENTIAL, laws.exponential)):
        rows = np.flatnonzero(kind[some] == which)
        shapes[some[rows]] = shape(there[rows], start[rows], parameter[some[rows]])
    rows = np.flatnonzero(kind[some] == cv.DECADE)
    lower = here.take(rows)
    shapes[some[rows]] = laws.decade(lower.log_p_at(there[rows]), lower.log_p_at(start[rows]))
    return shapes


def _knots(quotes: list[tuple[int, Law, float]], today: States) -> dict[int, tuple[Array, Array]]:
    """Return sigma levels and yearly costs of quotes, given as (step, law, yearly cost of one unit of its scale)."""
    points = [point for _, law, _ in quotes for point in law.points]
    steps = np.array([step for step, law, _ in quotes for _ in law.points], dtype=np.int64)
    levels = sigmas_meant(points, today.take(steps))
    found, done = {}, 0
    for step, law, yearly in quotes:
        amounts = [_amount(p.price, p.per_year, p.per_item) for p in law.points]
        found[step] = levels[done : done + len(amounts)], yearly * np.array(amounts)
        done += len(amounts)
    return found


def _amount(*stated: float | None) -> float:
    return next((x for x in stated if x is not None), 0.0)
