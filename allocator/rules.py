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
from allocator.capability import log_good
from allocator.choice import Choice, Outcome, evaluate
from allocator.flow import GATE_FIELDS, Gates, gate_values, gradient
from allocator.problem import Problem, within
from allocator.results import RuleOutcome
from allocator.state import floor_words
from allocator.ways import law_cost

Array = NDArray[np.float64]


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
    today = weight * np.array([-s.opportunities * float(log_good(s.log_p)) for s in problem.options.today])
    outcomes = []
    for name, source, split in RULES:
        parts = split(problem, weight, today, free)
        outcomes.append(_outcome(problem, plan, name, source, parts, weight, today, gates))
    return tuple(outcomes), ""


def _gates_today(problem: Problem) -> Gates:
    return Gates(*np.array([gate_values(s.inspection, s.rework) for s in problem.options.today]).T)


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
    count = problem.line.per_finished * np.array([s.opportunities for s in problem.options.today])
    return np.asarray(free * count / count.sum())


def _pro_rata(problem: Problem, weight: Array, today: Array, free: float) -> Array:
    total = today.sum()
    return np.asarray(free * today / total) if total > 0.0 else _equal(problem, weight, today, free)


def _raise_the_worst(problem: Problem, weight: Array, today: Array, free: float) -> Array:
    """Bring the worst steps to one common level and leave the others: Σ min(today, level) = budget."""
    if today.sum() <= free:
        return today
    rising = np.sort(today)
    for kept in range(len(rising)):
        level = (free - rising[:kept].sum()) / (len(rising) - kept)
        if level <= rising[kept]:
            break
    return np.asarray(np.minimum(today, level))


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
    broken: list[str] = []
    rows, z = [], []
    for i in range(problem.line.n_steps):
        row, level, remark = _cheapest_within(problem, i, float(parts[i]), float(weight[i]), gates)
        rows.append(row)
        z.append(level)
        broken.extend(remark)
    result = evaluate(problem.line, problem.options, Choice(np.array(rows, dtype=np.int64), np.array(z)))
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


def _cheapest_within(
    problem: Problem, i: int, part: float, weight: float, gates: Gates
) -> tuple[int, float, list[str]]:
    """Return the way and level that keep the step's part at the least cost, and in words what the part breaks.

    A floor binds whatever the rule says; a part that no way keeps is kept as nearly as possible.
    """
    ways, options, step = problem.options.ways, problem.options, problem.scenario.step[i]
    mine = np.array(
        [w for w in np.flatnonzero(ways.step == i) if _same_gate(problem, int(w), i, gates)], dtype=np.int64
    )
    if len(mine) == 0:
        mine = np.flatnonzero(ways.step == i).astype(np.int64)
    wanted = part / weight if weight > 0.0 else math.inf
    # A part equal to what the step does today asks for nothing, whatever the last digit says.
    delta = np.minimum(ways.delta_high[mine], np.maximum(wanted * (1.0 + 1e-12), 0.0))
    reached = delta >= ways.delta_low[mine] * (1.0 - 1e-12)
    if not reached.any():
        best = int(mine[np.argmin(ways.delta_low[mine])])
        return best, float(ways.z_high[best]), [f"'{step.name}' cannot get there ({ways.text[best].cap})"]
    able, delta = mine[reached], np.maximum(delta[reached], ways.delta_low[mine][reached])
    z = np.where(
        delta >= ways.delta_high[able], ways.z_low[able], cv.sigma(ways.curves.take(able), np.maximum(delta, 1e-300))
    )
    z = np.clip(z, ways.z_low[able], ways.z_high[able])
    purchases = ways.uses[able] @ options.purchase_cost if len(options.purchase_cost) else 0.0
    cost = ways.fixed_cost[able] + law_cost(ways, able, z) + purchases
    best = int(np.argmin(cost))
    return int(able[best]), float(z[best]), _floor_remark(problem, i, wanted)


def _floor_remark(problem: Problem, i: int, wanted: float) -> list[str]:
    """Say when a step's part alone would leave it below its floor (the floor is kept all the same)."""
    step, ways = problem.scenario.step[i], problem.options.ways
    if step.at_least is None:
        return []
    mine = np.flatnonzero(ways.step == i)
    today = problem.options.today[i]
    below = today.level.sigma_level < ways.z_low[mine].min() * (1.0 - 1e-9)
    allowed = float(ways.delta_high[mine].max())
    if below and wanted > allowed:
        return [f"'{step.name}' would stay below its floor ({floor_words(step.at_least)}); the floor is kept"]
    return []


def _same_gate(problem: Problem, w: int, i: int, gates: Gates) -> bool:
    table = problem.options.ways.gates
    return all(float(getattr(table, name)[w]) == float(getattr(gates, name)[i]) for name in GATE_FIELDS)
