"""One combination of ways as a problem in the intensities δ that the laws may still lower.

With the gates fixed every flow and every budget is linear in δ; the total is
constant + linear·δ + Σ weight·exp(S(δ)) + Σ yearly·shape(δ).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from tests.reference.laws import Law, law_of
from tests.reference.line import (
    YIELDS,
    capital_of,
    children,
    downstream_first,
    feeds,
    items_per_unit,
    net_cost_added,
    purchases_used,
    yearly_cost,
)
from tests.reference.states import State, floor_level, selections, state_with

FLOOR_SLACK = 1e-10


@dataclass(frozen=True)
class Way:
    """One choice of alternatives in one step, with the range of levels its law opens."""

    alternatives: list[dict]
    state: State
    law: Law | None
    z_low: float
    z_high: float
    yearly: float
    capital: float


def ways_of(scenario: dict, i: int) -> list[Way]:
    """Every way to run step i that can meet its floor."""
    step, q = scenario["step"][i], items_per_unit(scenario)[i]
    found = []
    for picked in selections(step):
        state = state_with(scenario, step, picked)
        law, floor = law_of(scenario, step, state, q), floor_level(step, state)
        low = max(state.z, floor - FLOOR_SLACK) if floor > state.z + FLOOR_SLACK else state.z
        high = state.z if law is None else law.z_cap
        if low > high + FLOOR_SLACK:
            continue
        yearly = sum(yearly_cost(a, scenario, q) for a in picked)
        capital = sum(capital_of(a) for a in picked)
        found.append(Way(picked, state, law, min(low, high), high, yearly, capital))
    return found


@dataclass
class Combination:
    """The continuous problem that remains once every step has its way."""

    ways: list[Way]
    moving: list[int]
    low: np.ndarray
    high: np.ndarray
    constant: float
    linear: np.ndarray
    exp_weight: np.ndarray
    exp_start: np.ndarray
    exp_slope: np.ndarray
    yearly: np.ndarray
    capital_rate: np.ndarray
    capital_fixed: float
    yield_start: dict[str, float]
    yield_slope: dict[str, np.ndarray]

    def shapes(self, x: np.ndarray) -> np.ndarray:
        """Shape of each moving law at the intensities x."""
        return np.array([self._law(v).shape(self._law(v).z_at_delta(d)) for v, d in enumerate(x)])

    def shape_slopes(self, x: np.ndarray) -> np.ndarray:
        """Its change with x."""
        return np.array([self._law(v).shape_slope(self._law(v).z_at_delta(d)) for v, d in enumerate(x)])

    def _law(self, v: int) -> Law:
        law = self.ways[self.moving[v]].law
        assert law is not None
        return law

    def cost(self, x: np.ndarray) -> float:
        """Total yearly cost."""
        scrap = float(self.exp_weight @ np.expm1(self.exp_start + self.exp_slope @ x))
        return self.constant + float(self.linear @ x) + scrap + float(self.yearly @ self.shapes(x))

    def cost_slope(self, x: np.ndarray) -> np.ndarray:
        """Gradient of the total."""
        growth = self.exp_weight * np.exp(self.exp_start + self.exp_slope @ x)
        return self.linear + growth @ self.exp_slope + self.yearly * self.shape_slopes(x)

    def capital(self, x: np.ndarray) -> float:
        """Cash out."""
        return self.capital_fixed + float(self.capital_rate @ self.shapes(x))

    def exponent(self, name: str, x: np.ndarray) -> float:
        """−ln of a yield."""
        return self.yield_start[name] + float(self.yield_slope[name] @ x)

    def choice(self, scenario: dict, x: np.ndarray) -> dict:
        """The choice in the form that `recount` reads."""
        levels = {i: self._law(v).z_at_delta(x[v]) for v, i in enumerate(self.moving)}
        # a law squeezed between floor and cap does not move but must still be paid up to there
        still = {
            i: way.z_low for i, way in enumerate(self.ways) if i not in levels and way.law and way.z_low > way.state.z
        }
        return {
            step["name"]: {
                "alternatives": [a["name"] for a in way.alternatives],
                "z": levels.get(i, still.get(i)),
            }
            for i, (step, way) in enumerate(zip(scenario["step"], self.ways, strict=True))
        }

    def cheapest_thinkable(self) -> float:
        """A bound that needs no search: the fewest defects, and no law paid for."""
        scrap = float(self.exp_weight @ np.expm1(self.exp_start + self.exp_slope @ self.low))
        return self.constant + float(self.linear @ self.low) + scrap


def combine(scenario: dict, ways: list[Way]) -> Combination:
    """The problem left by one way per step."""
    q = np.array(items_per_unit(scenario))
    units = scenario["demand"]["shipped_per_year"]
    gates = [way.state.gate() for way in ways]
    found, hidden = _travel(scenario, gates)
    fatal = np.array([1 - g["reworked"] for g in gates])[:, None] * found
    rejects = np.array([-math.log1p(-g["rejects"] * g["lost"]) for g in gates])
    downstream = _downstream(scenario)
    weight = units * q * np.array(net_cost_added(scenario))
    escape_cost = scenario.get("target", {}).get("escape_cost", 0.0)
    rework = units * q * np.array([g["rework_cost"] * g["reworked"] for g in gates])
    linear = rework @ found + units * escape_cost * hidden[-1]
    slopes = {"final_yield": q @ fatal + hidden[-1], "rolled_yield": q, "shipped_yield": hidden[-1]}

    moving = [i for i, way in enumerate(ways) if way.law is not None and way.z_low < way.z_high]
    still = np.array([0.0 if i in moving else way.state.delta(way.z_low) for i, way in enumerate(ways)])
    bought = purchases_used(scenario, [a for way in ways for a in way.alternatives])
    inspection = units * float(q @ [g["per_item"] for g in gates])
    constant = inspection + sum(way.yearly for way in ways) + sum(yearly_cost(p, scenario, 0) for p in bought)
    squeezed = [way for i, way in enumerate(ways) if i not in moving and way.law is not None]
    constant += sum(way.law.yearly * way.law.shape(way.z_low) for way in squeezed if way.law)
    capital = sum(way.capital for way in ways) + sum(capital_of(p) for p in bought)
    capital += sum(way.law.capital * way.law.shape(way.z_low) for way in squeezed if way.law)
    laws = [ways[i].law for i in moving]
    return Combination(
        ways=ways,
        moving=moving,
        low=np.array([ways[i].state.delta(ways[i].z_high) for i in moving]),
        high=np.array([ways[i].state.delta(ways[i].z_low) for i in moving]),
        constant=constant + float(linear @ still),
        linear=linear[moving],
        exp_weight=weight,
        exp_start=downstream @ (fatal @ still + rejects),
        exp_slope=(downstream @ fatal)[:, moving],
        yearly=np.array([law.yearly for law in laws if law]),
        capital_rate=np.array([law.capital for law in laws if law]),
        capital_fixed=capital,
        yield_start={
            name: float(slopes[name] @ still) + (float(q @ rejects) if name == "final_yield" else 0.0)
            for name in YIELDS
        },
        yield_slope={name: np.asarray(slopes[name])[moving] for name in YIELDS},
    )


def _travel(scenario: dict, gates: list[dict]) -> tuple[np.ndarray, np.ndarray]:
    """Found and hidden intensity at each gate, per unit of intensity made in each step."""
    size, into = len(gates), children(scenario)
    found, hidden = np.zeros((size, size)), np.zeros((size, size))
    for i in reversed(downstream_first(scenario)):
        inherited = sum((scenario["step"][c].get("per_unit", 1) * hidden[c] for c in into[i]), np.zeros(size))
        own = np.eye(size)[i]
        found[i] = gates[i]["finds"] * own + gates[i]["earlier"] * inherited
        hidden[i] = (1 - gates[i]["finds"]) * own + (1 - gates[i]["earlier"]) * inherited
    return found, hidden


def _downstream(scenario: dict) -> np.ndarray:
    """1 where the column's gate lies between the row's step and the end, both included."""
    target = feeds(scenario)
    path = np.zeros((len(target), len(target)))
    for i in range(len(target)):
        at: int | None = i
        while at is not None:
            path[i, at] = 1.0
            at = target[at]
    return path
