"""What is each supplier asked for, how can it be shown, and what is it worth: target sheets of the plan."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from allocator.cautions import cautions_of_input, what_is_assumed
from allocator.choice import Outcome
from allocator.demonstrate import observed_cpk_needed, parts_needed
from allocator.errors import Fault, InputError, OutOfReachError, RangeError
from allocator.flow import from_start, gradient
from allocator.problem import Problem, pose
from allocator.results import Sheet, StepTarget, SupplierSheets
from allocator.scenario.model import Scenario
from allocator.solve.road import Solved, solve
from allocator.targets import step_targets
from allocator.variants import held_at_today

Array = NDArray[np.float64]
MOST_BAD = 2
STUDIES = (30, 50, 100)
"""Parts in the usual capability studies."""


def supplier_sheets(
    scenario: Scenario, *, of: str | None = None, watch: Callable[[int, int], None] | None = None
) -> SupplierSheets:
    """Return one target sheet per part of every supplier that the scenario names.

    Parameters
    ----------
    scenario : Scenario
        As read by `read_scenario`.
    of : str, optional
        The yield whose budget is split: "final_yield", "rolled_yield" or "shipped_yield".
    watch : callable, optional
        Told how many sheets of how many are done; each asks anew what a refusal costs.

    Raises
    ------
    InputError
        When no step names a supplier.
    OutOfReachError
        When no plan meets the target.

    Notes
    -----
    Parts to show a target: success-run theorem with none bad, binomial with some; Cpk to observe: noncentral t. Worth
    of a ppm: derivative of the yearly cost with the choices kept and all levels free, what the step itself costs
    left out.
    """
    named = [i for i, step in enumerate(scenario.step) if step.supplier is not None]
    if not named:
        allowed = 'write supplier = "…" on the steps that are bought'
        raise InputError([Fault(scenario.file or "scenario", "supplier", "no step that names one", allowed)])
    problem = pose(scenario, of)
    solved = None if problem.options.no_way else solve(problem)
    if solved is None or solved.outcome is None:
        raise OutOfReachError(
            "the target cannot be met, so there is nothing to agree on; `allocator plan` says what binds"
        )
    targets = step_targets(problem, solved.problem.options.ways, solved.outcome)
    worth = worth_of_defects(problem, solved.outcome, solved.price or {})
    sheets = []
    for done, i in enumerate(named, start=1):
        sheets.append(_sheet(problem, solved, targets[i], float(worth[i])))
        if watch is not None:
            watch(done, len(named))
    return SupplierSheets(
        title=scenario.title,
        currency=scenario.currency,
        shipped_per_year=problem.line.shipped,
        rows=tuple(sheets),
        assumed=what_is_assumed(problem),
        cautions=cautions_of_input(problem),
    )


def worth_of_defects(problem: Problem, outcome: Outcome, prices: dict[str, float]) -> Array:
    """Return the fall of the yearly cost per defect less that a step makes per item, shape (n_steps,).

    What the step's own improvement costs is left out; all other levels are at their best, so that by the envelope
    theorem only the prices of the budgets, scrap, rework and escapes count.

    Parameters
    ----------
    outcome : Outcome
        An optimal choice.
    prices : dict
        Fall of the total per unit of budget, by yield; 0 for those not named.
    """
    line, flow, gates = problem.line, outcome.flow, outcome.flow.gates
    q, final = line.per_finished, prices.get("final_yield", 0.0)
    at_risk = from_start(line, line.shipped * q * line.net_cost * np.exp(flow.exponent))
    per_found = (1.0 - gates.reworked) * (at_risk + final * q) + line.shipped * q * gates.rework_cost * gates.reworked
    per_escape = line.shipped * line.escape_cost + final + prices.get("shipped_yield", 0.0)
    return gradient(line, gates, per_found, per_escape) + prices.get("rolled_yield", 0.0) * q


def _sheet(problem: Problem, solved: Solved, row: StepTarget, worth: float) -> Sheet:
    assert solved.outcome is not None
    assert row.supplier is not None
    delta = -math.log1p(-1e-6 * row.target.ppm)
    parts = [(bad, _parts(delta, 0.90, bad), _parts(delta, 0.95, bad)) for bad in range(MOST_BAD + 1)]
    per_ppm = worth * 1e-6 * math.exp(delta)
    refused, reason = _refused(problem, solved, row)
    total = solved.outcome.money.total
    cost = None if refused is None else max(refused - total, 0.0)
    for_95 = parts[0][2]
    return Sheet(
        step=row.step,
        supplier=row.supplier,
        today=row.today,
        target=row.target,
        alternatives=row.alternatives,
        floor=row.floor,
        safety=row.safety,
        counted=bool(problem.options.today.levels.attribute[_index(problem, row.step)]),
        items_per_year=row.starts_per_year,
        parts_for_90=parts[0][1],
        parts_for_95=for_95,
        parts_with_bad=tuple(parts),
        volume_allows=for_95 is not None and for_95 <= row.starts_per_year,
        observed_cpk_needed=tuple((n, observed_cpk_needed(row.target.cpk, n, 0.95)) for n in STUDIES),
        worth_per_ppm_year=per_ppm,
        worth_per_ppm_item=per_ppm / row.starts_per_year,
        worth_has_target=solved.price is not None or not problem.budgets,
        improvement=row.improvement,
        cost_of_refusal=cost,
        refusal_reason=reason,
        largest_price_rise=None if cost is None else (cost + row.improvement) / row.starts_per_year,
    )


def _index(problem: Problem, name: str) -> int:
    return next(i for i, step in enumerate(problem.scenario.step) if step.name == name)


def _parts(delta: float, confidence: float, bad: int) -> int | None:
    try:
        return parts_needed(delta, confidence, bad)
    except RangeError:
        return None


def _refused(problem: Problem, solved: Solved, row: StepTarget) -> tuple[float | None, str | None]:
    """Return the least yearly cost if the step stays as it stands, or why there is none."""
    assert solved.outcome is not None
    if row.law is None and not row.alternatives:
        return solved.outcome.money.total, None  # The plan leaves the step as it is.
    try:
        asked = held_at_today(problem, row.step)
    except RangeError as error:
        return None, str(error)
    i = _index(problem, row.step)
    start = asked.options.ways.find(solved.problem.options.ways, solved.outcome.choice.rows)
    start[i] = np.flatnonzero(asked.options.ways.step == i)[0]
    again = None if asked.options.no_way else solve(asked, [start])
    if again is None or again.outcome is None:
        return None, "the target is then out of reach"
    return again.outcome.money.total, None
