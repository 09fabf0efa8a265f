"""What flows through the tree: starts, scrap, rework, escapes and their money, exact for any choice.

Defects are Poisson events, each found or missed independently. Per item that reaches gate j: own intensity δ_j,
inherited u_j = Σ per_unit_c·h_c; found f_j = η_j·δ_j + ε_j·u_j; still hidden h_j = (1−η_j)·δ_j + (1−ε_j)·u_j; scrap
intensity s_j = (1−ρ_j)·f_j − ln(1 − r_j·lost_j). Items started at i per shipped unit: q_i·exp(S_i), S_i = Σ s over the
gates from i to the end.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from allocator.results import Money, Yields
from allocator.scenario.model import Inspection, Rework, Scenario
from allocator.tree import Tree

Array = NDArray[np.float64]
OVERFLOW = 700.0
"""Above this flow exponent exp() overflows: the money of such a line is not a number anyone can read."""


@dataclass(frozen=True)
class Line:
    """The tree and what does not depend on any choice.

    Parameters
    ----------
    feeds : array of int, shape (n_steps,)
        Index of the step that each step feeds, −1 for the last; always later in the file.
    per_unit : shape (n_steps,) [items of this step per item fed]
    per_finished : shape (n_steps,) [items per finished unit]
        q, the product of `per_unit` from the step to the end.
    lost : shape (n_steps,) [currency/item]
        w, what is lost when one item is scrapped at the gate.
    net_cost : shape (n_steps,) [currency/item]
        κ, the net cost added at the step, 0 or more.
    shipped : float [units/year]
    escape_cost : float [currency per escaping defect]
    """

    feeds: NDArray[np.int64]
    per_unit: Array
    per_finished: Array
    lost: Array
    net_cost: Array
    shipped: float
    escape_cost: float

    @property
    def n_steps(self) -> int:
        return len(self.feeds)

    @cached_property
    def tree(self) -> Tree:
        return Tree(self.feeds)


@dataclass(frozen=True)
class Gates:
    """One gate per step, its inspected share already multiplied in; all arrays of shape (n_steps,).

    `finds`, `earlier`, `rejects` (good items rejected), `lost` (share of these really lost), `reworked` (share ρ of
    what is found) are shares; `rework_cost` and `per_item` are [currency/item].
    """

    finds: Array
    earlier: Array
    rejects: Array
    lost: Array
    reworked: Array
    rework_cost: Array
    per_item: Array

    @cached_property
    def scrap_of_good(self) -> Array:
        """−ln(1 − r·lost), the scrap intensity of false rejects."""
        return -np.log1p(-self.rejects * self.lost)


GATE_FIELDS = ("finds", "earlier", "rejects", "lost", "reworked", "rework_cost", "per_item")

PERFECT, NO_REWORK = Inspection(), Rework()
"""What a gate is without a stated inspection or rework."""


def gate_values(inspection: Inspection | None, rework: Rework | None) -> tuple[float, ...]:
    """Return one gate's figures in the order of `GATE_FIELDS`; without an inspection it finds all its own defects."""
    seen = inspection or PERFECT
    mended = rework or NO_REWORK
    share = seen.share_inspected
    return (
        seen.finds * share,
        seen.earlier * share,
        seen.rejects_good * share,
        seen.rejects_lost,
        mended.share,
        mended.cost,
        seen.per_item * share,
    )


def gate_table(inspections: Iterable[Inspection | None], reworks: Iterable[Rework | None]) -> Gates:
    """Return the gates of many steps, figures of a table that several share worked out once."""
    known: dict[tuple[int, int], int] = {}
    figures: list[tuple[float, ...]] = []
    place = []
    for inspection, rework in zip(inspections, reworks, strict=True):
        key = (id(inspection), id(rework))
        if key not in known:
            known[key] = len(figures)
            figures.append(gate_values(inspection, rework))
        place.append(known[key])
    table = np.array(figures, dtype=float).reshape(len(figures), len(GATE_FIELDS))
    return Gates(*table[place].T)


def build_line(scenario: Scenario) -> Line:
    """Return the tree of a checked scenario with the cost that each gate puts at risk."""
    steps = scenario.step
    index = {step.name: i for i, step in enumerate(steps)}
    last = len(steps) - 1
    feeds = [
        -1 if i == last else (index[step.feeds] if step.feeds is not None else i + 1) for i, step in enumerate(steps)
    ]
    per_unit = [1.0 if i == last else step.per_unit for i, step in enumerate(steps)]
    per_finished = [1.0] * len(steps)
    for i in range(last - 1, -1, -1):
        per_finished[i] = per_unit[i] * per_finished[feeds[i]]
    lost, net_cost = _costs_at_risk(scenario, feeds, per_unit)
    return Line(
        feeds=np.array(feeds, dtype=np.int64),
        per_unit=np.array(per_unit),
        per_finished=np.array(per_finished),
        lost=np.array(lost),
        net_cost=np.array(net_cost),
        shipped=scenario.demand.shipped_per_year,
        escape_cost=scenario.target.escape_cost,
    )


def _costs_at_risk(scenario: Scenario, feeds: list[int], per_unit: list[float]) -> tuple[list[float], list[float]]:
    """Return w (lost per scrapped item) and κ = w − Σ per_unit·w of what feeds the step."""
    n = len(feeds)
    inherited_cost, inherited_loss = [0.0] * n, [0.0] * n
    lost, net_cost = [0.0] * n, [0.0] * n
    for i, step in enumerate(scenario.step):
        if step.scrap_cost is not None:
            accumulated = lost[i] = step.scrap_cost
        else:
            accumulated = inherited_cost[i] + (step.cost_added or 0.0)
            lost[i] = accumulated - step.salvage
        net_cost[i] = max(lost[i] - inherited_loss[i], 0.0)
        if feeds[i] >= 0:
            inherited_cost[feeds[i]] += per_unit[i] * accumulated
            inherited_loss[feeds[i]] += per_unit[i] * lost[i]
    return lost, net_cost


@dataclass(frozen=True)
class Flow:
    """What flows at given defect intensities and gates; arrays of shape (n_steps,), per item unless said."""

    intensity: Array
    """δ, own defects per item."""
    inherited: Array
    """u, hidden defects that came in."""
    found: Array
    """f."""
    hidden: Array
    """h, still hidden when leaving."""
    scrap_intensity: Array
    """s."""
    exponent: Array
    """S, so that exp(S)·q items are started per shipped unit."""
    gates: Gates

    @property
    def escapes(self) -> float:
        """E, escaping defects per shipped unit."""
        return float(self.hidden[-1])


def run(line: Line, intensity: Array, gates: Gates) -> Flow:
    """Return the exact flow for defect intensities `intensity` [per item], shape (n_steps,), and one gate per step."""
    missed, kept = (1.0 - gates.finds) * intensity, 1.0 - gates.earlier
    inherited = np.zeros(line.n_steps)
    if missed.any():
        inherited = line.tree.gathered(line.tree.inflow(line.per_unit * missed), line.per_unit * kept)
    found = gates.finds * intensity + gates.earlier * inherited
    scrap = (1.0 - gates.reworked) * found + gates.scrap_of_good
    hidden = missed + kept * inherited
    return Flow(intensity, inherited, found, hidden, scrap, towards_end(line, scrap), gates)


def towards_end(line: Line, values: Array) -> Array:
    """Return for every step the sum of `values` over the gates from it to the end, shape (n_steps,)."""
    return line.tree.sums_to_end(values)


def from_start(line: Line, values: Array) -> Array:
    """Return for every step the sum of `values` over itself and all the steps that lead to it, shape (n_steps,)."""
    return line.tree.sums_from_start(values)


def gradient(line: Line, gates: Gates, per_found: Array, per_escape: float) -> Array:
    """Return d(Σ per_found·f + per_escape·E)/dδ, shape (n_steps,), by one pass from the end of the tree.

    Every budget and the linearised money are of this form, so this is the price that each step's defects carry.
    """
    missed = 1.0 - gates.finds
    if not missed.any():
        return gates.finds * per_found
    kept = 1.0 - gates.earlier
    at_gate = gates.earlier * per_found  # what a defect that came in is worth there, at once; at the end it escapes
    at_gate[-1] += kept[-1] * per_escape
    per_inherited = line.tree.spread(at_gate, line.per_unit * kept)
    per_hidden = line.per_unit * per_inherited[line.feeds]
    per_hidden[-1] = per_escape
    return gates.finds * per_found + missed * per_hidden


def loads(line: Line, flow: Flow) -> dict[str, float]:
    """Return the three used budgets −ln(yield): rolled Σ q·δ, final Σ q·s + E, shipped E."""
    q = line.per_finished
    return {
        "rolled_yield": float(q @ flow.intensity),
        "final_yield": float(q @ flow.scrap_intensity) + flow.escapes,
        "shipped_yield": flow.escapes,
    }


def yields(line: Line, flow: Flow, inspected: bool) -> Yields:
    """Return the three yields and their losses; the shipped yield is None when no inspection was stated."""
    used = loads(line, flow)
    yield_of = {name: float(np.exp(-load)) for name, load in used.items()}
    loss_of = {name: float(-np.expm1(-load)) for name, load in used.items()}
    return Yields(
        rolled_yield=yield_of["rolled_yield"],
        final_yield=yield_of["final_yield"],
        shipped_yield=yield_of["shipped_yield"] if inspected else None,
        rolled_loss=loss_of["rolled_yield"],
        final_loss=loss_of["final_yield"],
        shipped_loss=loss_of["shipped_yield"] if inspected else None,
    )


def scrap_cost(line: Line, exponent: Array) -> Array:
    """Return G·q·κ·(exp(S) − 1) per step [currency/year]: what is added at the step and thrown away somewhere."""
    with np.errstate(over="ignore"):
        return line.shipped * line.per_finished * line.net_cost * np.expm1(exponent)


def scrap_lost_at(line: Line, flow: Flow) -> Array:
    """Return what is thrown away at each gate, items scrapped there times w [currency/year]; total as `scrap_cost`."""
    passed = flow.exponent - flow.scrap_intensity
    with np.errstate(over="ignore"):
        scrapped = line.shipped * line.per_finished * np.exp(passed) * np.expm1(flow.scrap_intensity)
    return scrapped * line.lost


def rework_cost(line: Line, flow: Flow) -> Array:
    """Return the yearly rework cost per step, charged on shipped quantity [currency/year]."""
    gates = flow.gates
    return line.shipped * line.per_finished * gates.rework_cost * gates.reworked * flow.found


def inspection_cost(line: Line, gates: Gates) -> Array:
    """Return the yearly inspection cost per step, charged on shipped quantity [currency/year]."""
    return line.shipped * line.per_finished * gates.per_item


def money(line: Line, flow: Flow, improvement: float) -> Money:
    """Return the yearly cost by kind; exact, and infinite where the flow exponent overflows."""
    return Money(
        scrap=float(np.sum(scrap_cost(line, flow.exponent))),
        rework=float(np.sum(rework_cost(line, flow))),
        escapes=line.shipped * line.escape_cost * flow.escapes,
        inspection=float(np.sum(inspection_cost(line, flow.gates))),
        improvement=improvement,
    )


def first_pass(flow: Flow) -> Array:
    """Return the first-pass yield of every step, exp(−f)·(1 − r), shape (n_steps,)."""
    return np.exp(-flow.found) * (1.0 - flow.gates.rejects)
