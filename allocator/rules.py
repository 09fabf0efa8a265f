"""What would simpler apportionment rules cost on the same scenario: the reason to split by cost at all.

Each rule gives every step a part of the defect budget of the split yield; the step then takes its cheapest way, gates
left as they are, that keeps its part and its floor. Sources: equal and pro-rata (ARINC) apportionment and minimisation
of effort, MIL-HDBK-338B (1 October 1998), sections 6.3.2, 6.3.3 and 6.3.5; equal per opportunity is common practice.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.choice import Choice, Outcome, evaluate
from allocator.flow import GATE_FIELDS, Gates, gradient
from allocator.problem import Problem, within
from allocator.results import RuleOutcome
from allocator.state import floor_words
from allocator.ways import law_cost

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
Flags = NDArray[np.bool_]
MOST_REMARKS = 50
"""Steps that a rule's breaches are told of by name; of a long line thousands may break the same way."""


def simpler_rules(problem: Problem, plan: Outcome) -> tuple[tuple[RuleOutcome, ...], str]:
    """Return what each rule costs, or why the rules do not apply.

    Parameters
    ----------
    problem : Problem
        The question that the plan answers.
    plan : Outcome
        The plan's evaluated outcome; savings are measured against its total.
    """
    budget = problem.budgets.get(problem.split)
    if budget is None:
        return (), "without a target there is no budget that a rule could split"
    gates = _gates_today(problem)
    weight, fixed = _load_weights(problem, gates)
    free = budget - fixed
    if free <= 0.0:
        return (), "the false rejects of today's gates alone use up the budget, so no rule can split the rest"
    today = weight * problem.options.today.intensity()
    outcomes = []
    for name, source, split in RULES:
        parts = split(problem, weight, today, free)
        outcomes.append(_outcome(problem, plan, name, source, parts, weight, today, gates))
    return tuple(outcomes), ""


def _gates_today(problem: Problem) -> Gates:
    return problem.options.today.gates()


def _load_weights(problem: Problem, gates: Gates) -> tuple[Array, float]:
    """Return the load of one unit of δ of each step, and what false rejects use, for the split yield."""
    line, n = problem.line, problem.line.n_steps
    if problem.split == "rolled_yield":
        return line.per_finished, 0.0
    if problem.split == "shipped_yield":
        return gradient(line, gates, np.zeros(n), 1.0), 0.0
    weight = gradient(line, gates, line.per_finished * (1.0 - gates.reworked), 1.0)
    return weight, float(line.per_finished @ gates.scrap_of_good)


def _equal(problem: Problem, weight: Array, today: Array, free: float) -> Array:
    return np.full(len(today), free / len(today))


def _per_opportunity(problem: Problem, weight: Array, today: Array, free: float) -> Array:
    count = problem.line.per_finished * problem.options.today.opportunities
    return np.asarray(free * count / count.sum())


def _pro_rata(problem: Problem, weight: Array, today: Array, free: float) -> Array:
    total = today.sum()
    return np.asarray(free * today / total) if total > 0.0 else _equal(problem, weight, today, free)


def _raise_the_worst(problem: Problem, weight: Array, today: Array, free: float) -> Array:
    """Bring the worst steps to one common level and leave the others: Σ min(today, level) = budget."""
    if today.sum() <= free:
        return today
    rising = np.sort(today)
    below = np.cumsum(rising) - rising
    level = (free - below) / np.arange(len(rising), 0, -1)
    return np.asarray(np.minimum(today, level[np.argmax(level <= rising)]))


Split = Callable[[Problem, Array, Array, float], Array]
RULES: tuple[tuple[str, str, Split], ...] = (
    ("equal split", "MIL-HDBK-338B, 6.3.2", _equal),
    ("equal per opportunity", "common practice", _per_opportunity),
    ("pro rata to today", "ARINC; MIL-HDBK-338B, 6.3.3", _pro_rata),
    ("raise the worst", "minimum effort; MIL-HDBK-338B, 6.3.5", _raise_the_worst),
)


def _outcome(
    problem: Problem, plan: Outcome, name: str, source: str, parts: Array, weight: Array, today: Array, gates: Gates
) -> RuleOutcome:
    choice, broken = _cheapest_within(problem, parts, weight, gates)
    result = evaluate(problem.line, problem.options, choice)
    met = within(result.loads[problem.split], problem.budgets[problem.split] * (1.0 + 1e-9))
    for other, budget in problem.budgets.items():
        if other != problem.split and not within(result.loads[other], budget * (1.0 + 1e-9)):
            broken.append(f"misses the {other.replace('_', ' ')} target")
    if problem.capital is not None and not within(result.capital, problem.capital):
        broken.append(f"needs {result.capital:,.0f} of capital, above the limit")
    load = result.loads[problem.split]
    return RuleOutcome(
        rule=name, source=source, total=result.money.total, yield_reached=math.exp(-load),
        loss_reached=-math.expm1(-load),
        meets_target=met, saving=result.money.total - plan.money.total if met else None, broken=tuple(broken),
    )  # fmt: skip


def _cheapest_within(problem: Problem, parts: Array, weight: Array, gates: Gates) -> tuple[Choice, list[str]]:
    """Return each step's way and level that keep its part at the least cost, and in words what the parts break.

    A floor binds whatever the rule says; a part that no way keeps is kept as nearly as possible.
    """
    ways, options, n = problem.options.ways, problem.options, problem.line.n_steps
    wanted = np.divide(parts, weight, out=np.full(n, math.inf), where=weight > 0.0)
    offered = _offered(problem, gates)
    # A part equal to what the step does today asks for nothing, whatever the last digit says.
    most = np.maximum(wanted[ways.step] * (1.0 + 1e-12), 0.0)
    delta = np.minimum(ways.delta_high, most)
    able = np.flatnonzero(offered & (delta >= ways.delta_low * (1.0 - 1e-12)))
    z = _levels_within(problem, able, delta[able])
    purchases = ways.uses[able] @ options.purchase_cost if len(options.purchase_cost) else 0.0
    cost = np.full(len(ways), math.inf)
    cost[able] = ways.fixed_cost[able] + law_cost(ways, able, z) + purchases
    level = ways.z_high.copy()
    level[able] = z
    missed = np.setdiff1d(np.arange(n), ways.step[able])
    rows = _first_by(cost, offered, ways.step)
    rows[missed] = _first_by(ways.delta_low, offered, ways.step)[missed]
    return Choice(rows, level[rows]), _remarks(problem, rows, missed, wanted)


def _first_by(score: Array, offered: Flags, step: Indices) -> Indices:
    """Return the row of each step's lowest score among what is offered, the first of equals."""
    rows = np.flatnonzero(offered)
    order = rows[np.lexsort((score[rows], step[rows]))]
    return np.asarray(order[np.flatnonzero(np.diff(step[order], prepend=-1))], dtype=np.int64)


def _offered(problem: Problem, gates: Gates) -> Flags:
    """Return the ways that leave their step's gate as it is, all of its ways where none does."""
    ways = problem.options.ways
    same = np.ones(len(ways), dtype=bool)
    for name in GATE_FIELDS:
        same &= getattr(ways.gates, name) == getattr(gates, name)[ways.step]
    some = np.zeros(problem.line.n_steps, dtype=bool)
    some[ways.step[same]] = True
    return same | ~some[ways.step]


def _levels_within(problem: Problem, rows: Indices, delta: Array) -> Array:
    """Return the level of some ways at intensity `delta`, held inside each way's range."""
    ways = problem.options.ways
    delta = np.maximum(delta, ways.delta_low[rows])
    z = ways.z_low[rows].copy()
    moved = np.flatnonzero(delta < ways.delta_high[rows])
    if len(moved):
        z[moved] = cv.sigma(ways.curves.take(rows[moved]), np.maximum(delta[moved], 1e-300))
    return np.asarray(np.clip(z, ways.z_low[rows], ways.z_high[rows]))


def _remarks(problem: Problem, rows: Indices, missed: Indices, wanted: Array) -> list[str]:
    """Say which parts cannot be kept, and which would leave a step below its floor (the floor is kept all the same)."""
    ways, steps = problem.options.ways, problem.scenario.step
    said = {i: f"'{steps[i].name}' cannot get there ({ways.text[rows[i]].cap})" for i in missed[:MOST_REMARKS].tolist()}
    below = _left_below_floor(problem, wanted)
    below[missed] = False
    for i in np.flatnonzero(below)[:MOST_REMARKS].tolist():
        said[i] = f"'{steps[i].name}' would stay below its floor ({floor_words(steps[i].at_least)}); the floor is kept"
    texts = [said[i] for i in sorted(said)][:MOST_REMARKS]
    more = len(missed) + int(below.sum()) - len(texts)
    return [*texts, f"the same holds for {more:,} more steps"] if more else texts


def _left_below_floor(problem: Problem, wanted: Array) -> Flags:
    """Return where a part alone would leave a step, whose floor has to raise it, below that floor."""
    ways, n = problem.options.ways, problem.line.n_steps
    floored = np.array([step.at_least is not None for step in problem.scenario.step], dtype=bool)
    least_z, most_delta = np.full(n, math.inf), np.full(n, -math.inf)
    np.minimum.at(least_z, ways.step, ways.z_low)
    np.maximum.at(most_delta, ways.step, ways.delta_high)
    below = problem.options.today.levels.sigma_level < least_z * (1.0 - 1e-9)
    return np.asarray(floored & below & (wanted > most_delta))
