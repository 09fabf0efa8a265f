"""What property tests draw from: levels, gates, lines and trees, laws and alternatives, as a scenario states them."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
from hypothesis import settings
from hypothesis import strategies as st

from allocator import curves as cv
from allocator.curves import Curves

Drawn = dict[str, Any]


def quick(examples: int) -> settings:
    """The same draws on every run, no clock (the machine may be busy), and few enough that all tests stay quick."""
    return settings(max_examples=examples, deadline=None, derandomize=True, database=None)


def shares(least: float = 0.0, most: float = 1.0) -> st.SearchStrategy[float]:
    return st.floats(least, most).map(lambda share: round(share, 4))


def amounts(least: float, most: float) -> st.SearchStrategy[float]:
    """Amounts over decades, as a person would write them."""
    return st.floats(np.log(least), np.log(most)).map(lambda x: float(f"{np.exp(x):.4g}"))


@st.composite
def levels(draw: st.DrawFn) -> Drawn:
    """Sigma level, offset, shift and sides of a process that is somewhere between hopeless and very good."""
    return {
        "z": draw(st.floats(0.8, 9.0)),
        "k": draw(st.sampled_from([0.0, 0.1, 0.35])),
        "shift": draw(st.sampled_from([0.0, 0.5, 1.5])),
        "sides": draw(st.sampled_from([1, 2])),
    }


@st.composite
def copies(draw: st.DrawFn) -> Drawn:
    installed = draw(st.integers(2, 4))
    return {
        "installed": installed,
        "needed": draw(st.integers(1, installed)),
        "common_cause": draw(st.sampled_from([0.0, 0.05, 0.5])),
    }


def curve(kind: int = cv.NONE, parameter: float = 0.0, *, start: float = 3.0, **state: Any) -> Curves:
    """One row of curves; `state` may name k, shift, sides, opportunities, scale and the copies."""
    given = {
        "k": 0.0, "shift": 0.0, "sides": 2, "opportunities": 1.0, "installed": 1, "needed": 1, "common_cause": 0.0,
        "scale": 1.0,
    } | state | {"start": start, "kind": kind, "parameter": parameter}  # fmt: skip
    whole = ("sides", "installed", "needed", "kind")
    return Curves(**{name: np.array([value], dtype=int if name in whole else float) for name, value in given.items()})


@st.composite
def inspections(draw: st.DrawFn) -> Drawn:
    table: Drawn = {"finds": draw(shares(0.2))}
    if draw(st.booleans()):
        table["earlier"] = draw(shares(0.0, 0.95))
    if draw(st.booleans()):
        table |= {"rejects_good": draw(shares(0.0, 0.05)), "rejects_lost": draw(shares())}
    if draw(st.booleans()):
        table |= {"per_item": draw(amounts(0.01, 1.0)), "share_inspected": draw(shares(0.1))}
    return table


def reworks() -> st.SearchStrategy[Drawn]:
    return st.fixed_dictionaries({"share": shares(), "cost": amounts(0.1, 20.0)})


@st.composite
def laws(draw: st.DrawFn, kinds: tuple[str, ...] = ("power", "exponential", "decade")) -> Drawn:
    law: Drawn = {"law": draw(st.sampled_from(kinds)), "per_year": draw(amounts(20.0, 20_000.0))}
    if law["law"] == "power":
        law["exponent"] = draw(st.sampled_from([0.5, 1.0, 2.0]))
    if law["law"] == "exponential":
        law["rate"] = draw(st.sampled_from([0.5, 1.5]))
    return law


@st.composite
def alternatives(draw: st.DrawFn, gates: bool = False) -> list[Drawn]:
    """Up to two machines and, perhaps, a setting or another gate."""
    offers = []
    for number in range(draw(st.integers(0, 2))):
        offers.append(
            {
                "name": f"machine {number}",
                "capability": {"defect_rate": draw(amounts(1e-4, 5e-3))},
                "price": draw(amounts(100.0, 50_000.0)),
                "per_item": draw(st.sampled_from([0.0, 0.02, -0.01])),
            }
        )
    if gates and draw(st.booleans()):
        offers.append({"name": "gauge", "group": "gate", "inspection": draw(inspections()), "per_year": 50.0})
    if gates and draw(st.booleans()):
        offers.append({"name": "bench", "group": "rework", "rework": draw(reworks()), "per_year": 20.0})
    return offers


@st.composite
def lines(
    draw: st.DrawFn, least: int = 1, most: int = 6, *, tree: bool = True, gates: bool = True, law: Any = None,
    offers: Any = None,
) -> Drawn:  # fmt: skip
    """A scenario without targets: a line or a tree with money, gates where `gates`, laws and offers where given."""
    size = draw(st.integers(least, most))
    steps: list[Drawn] = []
    for i in range(size):
        step: Drawn = {"name": f"s{i}", "cost_added": draw(amounts(0.5, 40.0))}
        step["capability"] = {"defect_rate": draw(amounts(2e-3, 4e-2))}
        if draw(st.booleans()):
            step["salvage"] = round(0.5 * step["cost_added"], 4)
        if tree and i < size - 1:
            step |= {"feeds": f"s{draw(st.integers(i + 1, size - 1))}", "per_unit": draw(st.sampled_from([1, 1, 2, 3]))}
        if gates and draw(st.booleans()):
            step["inspection"] = draw(inspections())
        if gates and draw(st.booleans()):
            step["rework"] = draw(reworks())
        if law is not None and draw(st.integers(0, 3)):
            step["improve"] = draw(law)
        if offers is not None:
            step["alternative"] = draw(offers)
        steps.append(step)
    return {
        "demand": {"shipped_per_year": 10_000, "years": 5, "discount_rate": 0.05},
        "target": {"escape_cost": draw(st.sampled_from([0.0, 30.0, 400.0]))},
        "step": steps,
    }


def plain_line(*rates: float, **of_every_step: Any) -> Drawn:
    """A serial line of steps "s0", "s1", … with these defect rates, each thrown-away item costing 1 at every gate."""
    names = [f"s{i}" for i in range(len(rates))]
    steps = [
        {"name": name, "scrap_cost": 1.0, "capability": {"defect_rate": rate}} | of_every_step
        for name, rate in zip(names, rates, strict=True)
    ]
    return {"demand": {"shipped_per_year": 100_000, "years": 10, "discount_rate": 0.0}, "step": steps}


def with_target(scenario: Drawn, **targets: Any) -> Drawn:
    return scenario | {"target": scenario.get("target", {}) | targets}


def rising(values: list[float]) -> bool:
    return all(right >= left for left, right in pairwise(values))
