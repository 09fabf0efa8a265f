"""Which invented lines are measured: drawn as arrays, turned into a posed problem or into a scenario."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.flow import Line, gate_table
from allocator.picks import Picks
from allocator.problem import Problem
from allocator.reach import TENTH, Caps
from allocator.scenario.levels import Levels
from allocator.scenario.model import Alternative, Inspection, Rework
from allocator.scenario.read import scenario_from_dict
from allocator.states import States
from allocator.ways import Lines, Options, Texts, Ways

Array = NDArray[np.float64]
SHIPPED = 100_000.0
LOSSES = {"high": 0.5, "low": 13.8}
"""Defects per finished unit today: a yield of 61 %, or of one in a million."""
KEPT = {"continuous": 0.4, "mixed": 0.45}
"""The target allows this share of today's defects; laws here end at a tenth of them."""
DEARER = {"high": 1.0, "low": 3_000.0}
"""How much dearer improvement is than scrap there, so that the target binds and not the scrap."""
OFFERS = 5
"""Machines on offer at every step of a mixed line: with the present one, six ways."""
LEAK, BENCH = {"finds": 0.9, "earlier": 0.3}, {"share": 0.25, "cost": 0.5}
"""Gate and rework of every step of a tree; the gates of a serial line find everything and mend nothing."""
LAWS = (("power", "exponent", 0.5), ("power", "exponent", 2.0), ("exponential", "rate", 1.0), ("decade", "", 0.0))
KINDS = (cv.POWER, cv.POWER, cv.EXPONENTIAL, cv.DECADE)


@dataclass(frozen=True)
class Shape:
    """What a line looks like: its length, laws ("continuous") or machines ("mixed"), "high" or "low" yield, a tree."""

    steps: int
    kind: str = "continuous"
    yields: str = "high"
    tree: bool = False

    def __str__(self) -> str:
        return f"{self.kind}, {self.yields} yield, {'tree' if self.tree else 'serial'}"


@dataclass(frozen=True)
class Drawn:
    """The figures of a line, arrays of shape (n_steps,), offers of shape (n_steps, OFFERS) where it is mixed."""

    shape: Shape
    feeds: NDArray[np.int64]
    per_unit: Array
    levels: Levels
    opportunities: Array
    cost_added: Array
    law: NDArray[np.int64]
    scale: Array
    budget: float
    offer_level: Array | None = None
    offer_cost: Array | None = None


def draw(shape: Shape, seed: int = 1) -> Drawn:
    """Return an invented line; three steps of ten are measured with two limits and drift, the others counted."""
    rng, n = np.random.default_rng(seed), shape.steps
    feeds, per_unit = _tree(n, rng) if shape.tree else (np.append(np.arange(1, n), -1), np.ones(n))
    per_finished = _per_finished(feeds, per_unit)
    defects = rng.uniform(0.2, 2.0, n) / per_finished
    defects *= LOSSES[shape.yields] / float(per_finished @ defects)
    opportunities = rng.integers(30, 60, n).astype(float)
    measured = rng.random(n) < 0.3
    k, shift = np.where(measured, 0.1, 0.0), np.where(measured, 0.5, 0.0)
    sides = np.where(measured, 2, 1)
    log_p = np.log(-np.expm1(-defects / opportunities))
    z = np.asarray(cv.sigma_from_log_defects(log_p, k, shift, sides), dtype=float)
    levels = Levels(z, shift, k, sides, np.zeros(n, dtype=bool))
    scale = DEARER[shape.yields] * 10 ** rng.uniform(2.0, 4.0, n)
    return Drawn(
        shape, feeds, per_unit, levels, opportunities,
        cost_added=rng.uniform(0.005, 0.05, n),
        law=rng.integers(0, len(LAWS), n),
        scale=scale,
        budget=KEPT[shape.kind] * LOSSES[shape.yields],
        **(_offers_drawn(levels, log_p, scale, rng) if shape.kind == "mixed" else {}),
    )  # fmt: skip


def _offers_drawn(levels: Levels, log_p: Array, scale: Array, rng: np.random.Generator) -> dict[str, Array]:
    """Return level and yearly cost of the machines on offer: the better the dearer, but not strictly."""
    decades = rng.uniform(0.1, 1.6, (len(scale), OFFERS))
    lower = log_p[:, None] - np.log(10.0) * decades
    k, shift, sides = levels.k[:, None], levels.shift[:, None], levels.sides[:, None]
    return {
        "offer_level": np.asarray(cv.sigma_from_log_defects(lower, k, shift, sides), dtype=float),
        "offer_cost": scale[:, None] * decades * 10 ** rng.uniform(-0.3, 0.3, (len(scale), OFFERS)),
    }


def _tree(n: int, rng: np.random.Generator) -> tuple[NDArray[np.int64], Array]:
    """Return a tree in which up to three steps feed each step, now and then two items of them into one."""
    from_end = np.arange(n - 1, -1, -1)
    feeds = np.where(from_end == 0, -1, n - 1 - (from_end - 1) // 3)
    return feeds, np.where((rng.random(n) < 0.25) & (from_end > 0), 2.0, 1.0)


def _per_finished(feeds: NDArray[np.int64], per_unit: Array) -> Array:
    q, fed = per_unit.tolist(), feeds.tolist()
    for i in range(len(q) - 2, -1, -1):
        q[i] *= q[fed[i]]
    return np.array(q)


def scenario_of(drawn: Drawn) -> dict[str, Any]:
    """Return the line as a scenario file would hold it."""
    tree, mixed = drawn.shape.tree, drawn.shape.kind == "mixed"
    gates = {"inspection": LEAK, "rework": BENCH} if tree else {}
    return {
        "demand": {"shipped_per_year": SHIPPED},
        "target": {"rolled_yield": float(np.exp(-drawn.budget))},
        "default": gates,
        "step": [_step(drawn, i) | (_offers(drawn, i) if mixed else _law(drawn, i)) for i in range(drawn.shape.steps)],
    }


def _step(drawn: Drawn, i: int) -> dict[str, Any]:
    levels, feeds = drawn.levels, drawn.feeds[i].item()
    fed = {"feeds": f"s{feeds}", "per_unit": drawn.per_unit[i].item()} if drawn.shape.tree and feeds >= 0 else {}
    names = ("sigma_level", "k", "shift", "sides")
    capability = {name: getattr(levels, name)[i].item() for name in names}
    figures = {"opportunities": drawn.opportunities[i].item(), "cost_added": drawn.cost_added[i].item()}
    return {"name": f"s{i}", **fed, **figures, "capability": capability}


def _law(drawn: Drawn, i: int) -> dict[str, Any]:
    name, key, value = LAWS[drawn.law[i]]
    return {"improve": {"law": name, "per_year": drawn.scale[i].item()} | ({key: value} if key else {})}


def _offers(drawn: Drawn, i: int) -> dict[str, Any]:
    pairs = zip(drawn.offer_level[i].tolist(), drawn.offer_cost[i].tolist(), strict=True)
    machines = [
        {"name": f"machine {j}", "capability": {"sigma_level": z}, "per_year": cost}
        for j, (z, cost) in enumerate(pairs)
    ]
    return {"alternative": machines}


def problem_of(drawn: Drawn) -> Problem:
    """Return the line as a posed problem, from the arrays alone: a million records would take gigabytes by themselves.

    It is what `pose` makes of `scenario_of`, but for names and words.
    """
    n, tree = drawn.shape.steps, drawn.shape.tree
    bare = {"demand": {"shipped_per_year": SHIPPED}, "target": {"rolled_yield": float(np.exp(-drawn.budget))}}
    one = {"name": "s", "cost_added": 1.0, "capability": {"sigma_level": 3.0}}
    scenario = scenario_from_dict(bare | {"step": [one]})
    today = States(
        drawn.levels, drawn.opportunities, np.ones(n, dtype=np.int64), np.ones(n, dtype=np.int64), np.zeros(n),
        _same(Inspection(**LEAK) if tree else None, n), _same(Rework(**BENCH) if tree else None, n),
    )  # fmt: skip
    ways = _machines(drawn, today) if drawn.shape.kind == "mixed" else _laws(drawn, today)
    nothing = np.zeros(0)
    options = Options(ways, (), nothing, nothing, nothing, today, (), ())
    return Problem(scenario, _line(drawn), options, {"rolled_yield": drawn.budget}, "rolled_yield")


def _same(value: object, n: int) -> NDArray[np.object_]:
    return np.full(n, value, dtype=object)


def _line(drawn: Drawn) -> Line:
    cost, fed = drawn.cost_added.tolist(), drawn.feeds.tolist()
    for i, per_unit in enumerate(drawn.per_unit[:-1].tolist()):
        cost[fed[i]] += per_unit * cost[i]
    per_finished = _per_finished(drawn.feeds, drawn.per_unit)
    return Line(drawn.feeds, drawn.per_unit, per_finished, np.array(cost), drawn.cost_added, SHIPPED, 0.0)


def _laws(drawn: Drawn, today: States) -> Ways:
    n = drawn.shape.steps
    kind = np.array(KINDS)[drawn.law]
    curves = today.curves(kind, np.array([value for *_, value in LAWS])[drawn.law], drawn.scale)
    low = drawn.levels.sigma_level
    high = today.sigma_at(today.log_p_at(low) - np.log(10.0))
    step = np.arange(n)
    picks = Picks(step, np.full((n, 0), -1), (), np.zeros(0, dtype=np.int64))
    return _ways(step, curves, today, low, high, np.zeros(n), picks)


def _machines(drawn: Drawn, today: States) -> Ways:
    n = drawn.shape.steps
    step = np.repeat(np.arange(n), OFFERS + 1)
    z = np.column_stack([drawn.levels.sigma_level, drawn.offer_level]).ravel()
    cost = np.column_stack([np.zeros(n), drawn.offer_cost]).ravel()
    states = today.take(step)
    states.levels.sigma_level[:] = z
    place = np.tile(np.arange(-1, OFFERS), n)
    members = np.where(place < 0, -1, step * OFFERS + place)[:, None]
    alike = tuple(Alternative(name=f"machine {j}") for j in range(OFFERS))
    picks = Picks(step, members, alike * n, np.repeat(np.arange(n), OFFERS))
    return _ways(step, states.curves(), states, z, z.copy(), cost, picks)


def _ways(
    step: NDArray[np.int64], curves: cv.Curves, states: States, low: Array, high: Array, cost: Array, picks: Picks
) -> Ways:
    count = len(step)
    texts = Texts(picks, Caps(high, np.full(count, TENTH)), np.arange(count), curves.kind)
    return Ways(
        step, curves, low, high, cv.intensity(curves, high), cv.intensity(curves, low), cost, np.zeros(count),
        np.zeros(count), gate_table(states.inspection, states.rework), np.zeros((count, 0), dtype=bool),
        Lines(count, {}), states, texts,
    )  # fmt: skip
