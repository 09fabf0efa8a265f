"""Random laws of improvement, with and without `at` and `up_to`, priced on the scale of what the step loses."""

from __future__ import annotations

import random

from tests.reference.laws import SCALES, law_of
from tests.reference.line import items_per_unit, recovery
from tests.reference.states import State, today_state


def _round(value: float, digits: int = 4) -> float:
    return float(f"{value:.{digits}g}")


def improvement(rng: random.Random, scenario: dict, i: int, loss: float, hard: bool) -> dict:
    """The `improve` table of step i."""
    step = scenario["step"][i]
    state = today_state(scenario, step)
    kind = rng.choice(["power", "exponential", "decade", "quotes"])
    if kind == "power" and state.z <= 0.05:
        kind = "exponential"
    table: dict = {"law": kind}
    if kind == "power":
        table["exponent"] = rng.choice([0.3, 0.8, 1.0, 2.0, 4.0] if not hard else [0.1, 0.3, 1.0, 3.0])
    if kind == "exponential":
        table["rate"] = rng.choice([0.5, 1.0, 2.0])
    if rng.random() < 0.3:
        table["life_years"] = rng.choice([2, 4, 10])
    worth = (loss + 1) * rng.uniform(0.05, 2.5)
    if kind == "quotes":
        return table | _quotes(rng, scenario, table, state, worth)
    if rng.random() < 0.6:
        table["up_to"] = _capability(rng, state, state.z * rng.uniform(1.1, 1.7) + 0.1, numbers=True)
    return table | _scaled(rng, scenario, i, table, state, worth)


def _scaled(rng: random.Random, scenario: dict, i: int, table: dict, state: State, worth: float) -> dict:
    """A price (yearly worth `worth` at the cap), yearly or per item; or the price of one known level."""
    step, demand = scenario["step"][i], scenario["demand"]
    scale = rng.choice([*SCALES, "price", "price"])
    q = items_per_unit(scenario)[i]
    factor = recovery(demand["discount_rate"], table.get("life_years", demand["years"]))
    worth_in = {"price": worth / factor, "per_year": worth, "per_item": worth / q / demand["shipped_per_year"]}
    if rng.random() < 0.35:
        known = _capability(rng, state, state.z * rng.uniform(1.05, 1.4) + 0.1, numbers=False)
        return {scale: _round(worth_in[scale]), "at": known}
    law = law_of(scenario, step | {"improve": table | {"per_year": 1.0}}, state, q)
    span = law.shape(law.z_cap) if law else 1.0
    return {scale: _round(worth_in[scale] / span)}


def _quotes(rng: random.Random, scenario: dict, table: dict, state: State, worth: float) -> dict:
    factor = recovery(scenario["demand"]["discount_rate"], table.get("life_years", scenario["demand"]["years"]))
    z, price, points = state.z, 0.0, []
    for _ in range(rng.choice([1, 2, 3, 4])):
        z = z * rng.uniform(1.04, 1.2) + 0.03
        price += worth / factor * rng.uniform(0.05, 0.7)
        points.append(_capability(rng, state, z, numbers=False) | {"price": _round(price)})
    told: dict = {"points": points}
    if rng.random() < 0.25:
        told["up_to"] = _capability(rng, state, state.z + (z - state.z) * rng.uniform(0.3, 1.2), numbers=True)
    return told


def _capability(rng: random.Random, state: State, z: float, numbers: bool) -> float | dict:
    form = rng.choice(["sigma_level", "cpk", "dpmo", "yield", "ppm"] + ["number"] * 2 * numbers)
    if form == "number":
        return _round(z)
    if form == "sigma_level":
        return {"sigma_level": _round(z)}
    if form == "cpk":
        return {"cpk": _round(z * (1 - state.k) / 3)}
    if form == "dpmo":
        return {"dpmo": _round(1e6 * state.p(z), 6)}
    if form == "yield":
        return {"yield": 1 - state.p(z)}
    item = 1e6 * (1 - (1 - state.p(z)) ** state.n)
    return {"ppm": _round(item, 6)}
