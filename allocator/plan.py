"""The main job: the cheapest plan that keeps the promise, or the best that can be reached, with its proof."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from allocator.cautions import cautions_of_plan, what_is_assumed
from allocator.choice import Outcome
from allocator.errors import RangeError
from allocator.flow import first_pass, rework_cost, scrap_lost_at, yields
from allocator.flow import inspection_cost as inspection_by_step
from allocator.problem import CAPITAL, COST, Problem, pose
from allocator.results import BestReachable, Binding, Bought, Level, Plan, Proof, StepTarget
from allocator.rules import simpler_rules
from allocator.scenario.model import Scenario, Step
from allocator.solve.road import Solved, solve
from allocator.standing import level_at, levels_today, line_today, load_parts, load_shares, shipped_known
from allocator.state import State, floor_sigma, floor_words
from allocator.ways import Ways

AT_CAP = 1e-5
"""A step whose defects are within this share of its cap's is at the cap."""
JUST_REACHABLE = 1e-9
"""Room given to the best reachable budget when its least cost is asked for: yields that close are the same yield."""
BINDING_SLACK = 1e-6
"""A budget used to within this share of itself binds."""


def make_plan(
    scenario: Scenario,
    *,
    of: str | None = None,
    targets: dict[str, float] | None = None,
    spend: float | None = None,
    capital: float | None = None,
) -> Plan:
    """Return the cheapest plan that meets the scenario's targets, floors and limits.

    Parameters
    ----------
    scenario : Scenario
        As read by `read_scenario`.
    of : str, optional
        The yield whose budget is split: "final_yield", "rolled_yield" or "shipped_yield".
    targets : dict, optional
        Losses 1 − yield by yield name; each takes the place of the scenario's own target, the others stay.
    spend, capital : float, optional [currency/year, currency]
        Ask for the best split yield for a yearly total, or for a capital, instead of the least cost.

    Returns
    -------
    Plan
        `reached` is False when no choice meets the targets: the plan is then the best reachable one.

    Raises
    ------
    RangeError
        When `of` or a limit makes no sense.
    SolverError
        When a solver stops without an answer.
    """
    if spend is not None and capital is not None:
        raise RangeError("ask for the best yield for a yearly spend or for a capital, not both at once")
    problem = pose(scenario, of, targets)
    if problem.options.no_way:
        return _no_plan(problem, tuple(Binding(step, reason) for step, reason in problem.options.no_way))
    if spend is not None or capital is not None:
        return _best_for_the_money(problem, spend, capital)
    solved = solve(problem)
    if solved.outcome is None:
        return _out_of_reach(problem, solved)
    plan = describe(solved, "cheapest" if problem.budgets else "optimum", problem)
    plan = _with_next_nine(plan, problem, solved)
    rules, note = simpler_rules(problem, solved.outcome)
    return _with_cautions(replace(plan, rules=rules, rules_note=note), problem)


def best_reachable(problem: Problem) -> Solved:
    """Return the plan of the highest split yield that any choice reaches, at the least cost at which it is reached."""
    best = solve(problem.best_of(problem.split))
    if best.outcome is None:
        return best
    return cheapest_at(problem, best)


def cheapest_at(problem: Problem, best: Solved) -> Solved:
    """Return the cheapest plan that reaches the yield of an answer that was found for that yield alone."""
    assert best.outcome is not None
    load = best.outcome.loads[problem.split]
    budget = load * (1.0 + JUST_REACHABLE)
    cheapest = solve(replace(problem.with_budget(problem.split, budget), objective=COST), [rows_in(problem, best)])
    return cheapest if cheapest.outcome is not None else best


def rows_in(problem: Problem, solved: Solved) -> NDArray[np.int64]:
    """Return an answer's choice as rows of the full table of ways."""
    assert solved.outcome is not None
    small, full = solved.problem.options.ways, problem.options.ways
    key = {_way_key(full, w): w for w in range(len(full))}
    return np.array([key[_way_key(small, int(w))] for w in solved.outcome.choice.rows], dtype=np.int64)


def _way_key(ways: Ways, w: int) -> tuple[object, ...]:
    return int(ways.step[w]), ways.text[w].alternatives, float(ways.z_low[w]), float(ways.z_high[w])


def _best_for_the_money(problem: Problem, spend: float | None, capital: float | None) -> Plan:
    asked = replace(problem.with_budget(problem.split, None), spend=spend)
    if capital is not None:
        asked = replace(asked, capital=capital)
    best = solve(asked.best_of(problem.split))
    if best.outcome is None:
        return _out_of_reach(asked, best)
    cheapest = cheapest_at(asked, best)
    plan = describe(cheapest, "best yield", asked)
    load_gap = f"no plan within the limit has a {_words(problem.split)} loss below {-math.expm1(-best.bound):.6g}"
    assert plan.proof is not None
    plan = replace(plan, proof=replace(plan.proof, note=load_gap), spend_limit=spend, capital_limit=capital)
    return _with_cautions(plan, asked)


def _words(yield_name: str) -> str:
    return yield_name.replace("_", " ")


def _out_of_reach(problem: Problem, blocked: Solved) -> Plan:
    """Return the best reachable plan, marked as not reaching the target."""
    if blocked.blocked in (CAPITAL, COST) or (blocked.blocked != problem.split and blocked.blocked is not None):
        return _other_limit_blocks(problem, blocked)
    best = best_reachable(problem)
    binding = binding_steps(problem, best, problem.budgets.get(problem.split))
    plan = describe(best, "cheapest", problem)
    return _with_cautions(
        replace(plan, reached=False, binding=binding, best_reachable=summarise(problem, best, binding)), problem
    )


def _other_limit_blocks(problem: Problem, blocked: Solved) -> Plan:
    """The split yield is not even in question: another target or the money cannot be kept; say which, and its best."""
    name, least = blocked.blocked, blocked.least
    assert name is not None
    if name in (CAPITAL, COST):
        limit = problem.capital if name == CAPITAL else problem.spend
        what = "capital" if name == CAPITAL else "yearly total"
        reason = (
            f"the {what} cannot be brought below {least:,.0f} with the floors and targets kept (limit {limit:,.0f})"
        )
        plan = _no_plan(problem, (Binding("(whole line)", reason),))
        return replace(plan, spend_limit=problem.spend, capital_limit=problem.capital)
    other = replace(problem, split=name, budgets={k: v for k, v in problem.budgets.items() if k == name})
    best = best_reachable(other)
    binding = binding_steps(other, best, problem.budgets[name])
    plan = describe(best, "cheapest", problem)
    return _with_cautions(
        replace(plan, reached=False, binding=binding, best_reachable=summarise(other, best, binding)), problem
    )


def summarise(problem: Problem, best: Solved, binding: tuple[Binding, ...]) -> BestReachable:
    """Return the best reachable yield of an answer with its total and what binds."""
    assert best.outcome is not None
    load = best.outcome.loads[problem.split]
    return BestReachable(problem.split, math.exp(-load), -math.expm1(-load), best.outcome.money.total, binding)


def binding_steps(problem: Problem, best: Solved, budget: float | None) -> tuple[Binding, ...]:
    """Return the steps that hold a target out of reach: the fewest, largest first, whose defects alone do so.

    Without a target (the end of the price of nines) the next nine is taken as the target.
    """
    assert best.outcome is not None
    load = best.outcome.loads[problem.split]
    wanted = budget if budget is not None else -math.log1p(-0.1 * -math.expm1(-load))
    parts = load_parts(problem.line, best.outcome.flow, problem.split)
    binding: list[Binding] = []
    for i in np.argsort(-parts, kind="stable"):
        if load <= wanted or parts[i] <= 0.0:
            break
        load -= float(parts[i])
        binding.append(Binding(problem.scenario.step[i].name, _what_holds(problem, best, int(i))))
    return tuple(binding)


def _what_holds(problem: Problem, best: Solved, i: int) -> str:
    assert best.outcome is not None
    ways, row, step = best.problem.options.ways, int(best.outcome.choice.rows[i]), problem.scenario.step[i]
    text = ways.text[row]
    at = f"sigma level {best.outcome.choice.z[i]:.4g}"
    chosen = f" with {', '.join(text.alternatives)}" if text.alternatives else ""
    if step.fixed:
        return f"fixed by the scenario at {at}"
    least = float(np.min(ways.delta_low[ways.step == i]))
    could_do_better = best.outcome.flow.intensity[i] > least * (1.0 + AT_CAP)
    if problem.capital is not None and could_do_better:
        return f"at {at}{chosen}; the capital limit allows no more"
    missing = "" if step.alternative else "; no alternative is offered"
    return f"at {at}{chosen}: {text.cap}{missing}"


def describe(solved: Solved, question: str, problem: Problem) -> Plan:
    """Return an evaluated answer in the words and units that people and programs read."""
    outcome = solved.outcome
    assert outcome is not None
    scenario, options = problem.scenario, problem.options
    return Plan(
        title=scenario.title,
        currency=scenario.currency,
        shipped_per_year=problem.line.shipped,
        question=question,
        reached=True,
        split=problem.split,
        targets={name: math.exp(-budget) for name, budget in problem.budgets.items()},
        target_losses={name: -math.expm1(-budget) for name, budget in problem.budgets.items()},
        yields=yields(problem.line, outcome.flow, shipped_known(problem, _states(solved))),
        money=outcome.money,
        dpu=float(sum(level.dpu for level in _target_levels(solved))),
        capital=outcome.capital,
        purchases=tuple(
            Bought(name, float(options.purchase_price[p]), float(options.purchase_cost[p]))
            for p, name in enumerate(options.purchase_names)
            if outcome.bought[p]
        ),
        steps=_step_targets(solved, problem),
        today=line_today(problem),
        proof=_proof(solved),
        price_of_defect_budget=price_of_budget(solved, problem),
        cost_of_next_nine=None,
        best_reachable=None,
        binding=(),
        rules=(),
        rules_note="",
        assumed=(),
        cautions=(),
    )


def _proof(solved: Solved) -> Proof:
    assert solved.outcome is not None
    return Proof(solved.outcome.money.total, solved.bound, solved.gap, solved.method, solved.seconds)


def price_of_budget(solved: Solved, problem: Problem) -> float | None:
    """Return the fall of the total per unit of defect budget with the choices kept.

    0 where the target does not bind (or there is none), None where nothing continuous can move.
    """
    outcome, budget = solved.outcome, problem.budgets.get(problem.split)
    assert outcome is not None
    if solved.price is None:
        return None
    if (
        budget is None
        or problem.split not in solved.problem.budgets
        or outcome.loads[problem.split] < budget * (1.0 - BINDING_SLACK)
    ):
        return 0.0
    return solved.price.get(problem.split)


def _with_next_nine(plan: Plan, problem: Problem, solved: Solved) -> Plan:
    budget = problem.budgets.get(problem.split)
    assert solved.outcome is not None
    if budget is None:
        return plan
    next_budget = -math.log1p(-0.1 * -math.expm1(-budget))
    best = solve(problem.best_of(problem.split), [rows_in(problem, solved)])
    assert best.outcome is not None, "the plan itself keeps every other limit"
    if best.outcome.loads[problem.split] <= next_budget:
        further = solve(problem.with_budget(problem.split, next_budget), [rows_in(problem, best)])
        assert further.outcome is not None
        return replace(plan, cost_of_next_nine=further.outcome.money.total - solved.outcome.money.total)
    highest = cheapest_at(problem, best)
    return replace(plan, best_reachable=summarise(problem, highest, binding_steps(problem, highest, next_budget)))


def _with_cautions(plan: Plan, problem: Problem) -> Plan:
    return replace(plan, assumed=what_is_assumed(problem), cautions=cautions_of_plan(problem, plan))


def _states(solved: Solved) -> tuple[State, ...]:
    assert solved.outcome is not None
    return tuple(solved.problem.options.ways.states[w] for w in solved.outcome.choice.rows)


def _target_levels(solved: Solved) -> list[Level]:
    assert solved.outcome is not None
    q, z = solved.problem.line.per_finished, solved.outcome.choice.z
    return [level_at(state, float(z[i]), float(q[i])) for i, state in enumerate(_states(solved))]


def _step_targets(solved: Solved, problem: Problem) -> tuple[StepTarget, ...]:
    outcome = solved.outcome
    assert outcome is not None
    line, flow = problem.line, outcome.flow
    starts = line.shipped * line.per_finished * np.exp(flow.exponent)
    columns = {
        "budget_share": load_shares(line, flow, problem.split),
        "starts_per_year": starts,
        "scrap": scrap_lost_at(line, flow),
        "rework": rework_cost(line, flow),
        "inspection": inspection_by_step(line, flow.gates),
        "improvement": outcome.improvement,
        "capital": outcome.capital_by_step,
        "first_pass_yield": first_pass(flow),
    }
    today, target = levels_today(problem), _target_levels(solved)
    return tuple(
        StepTarget(
            step=step.name,
            supplier=step.supplier,
            today=today[i],
            target=target[i],
            safety=step.safety,
            **_choice_words(solved, outcome, i),
            **_floor_words(step, _states(solved)[i], target[i]),
            **{name: float(values[i]) for name, values in columns.items()},  # type: ignore[arg-type]
        )
        for i, step in enumerate(problem.scenario.step)
    )


def _choice_words(solved: Solved, outcome: Outcome, i: int) -> dict[str, Any]:
    ways, row, z = solved.problem.options.ways, int(outcome.choice.rows[i]), float(outcome.choice.z[i])
    text = ways.text[row]
    same = [w for w in np.flatnonzero(ways.step == i) if ways.text[w].alternatives == text.alternatives]
    least = float(np.min(ways.delta_low[same]))
    moves = least < float(np.max(ways.delta_high[same]))
    at_cap = bool(moves and outcome.flow.intensity[i] <= least * (1.0 + AT_CAP))
    raised = z > ways.curves.start[row] * (1.0 + 1e-6)
    return {
        "alternatives": text.alternatives,
        "law": text.law if raised else None,
        "at_cap": at_cap,
        "cap": text.cap if at_cap else None,
    }


def _floor_words(step: Step, state: State, level: Level) -> dict[str, Any]:
    floor = step.at_least
    if floor is None:
        return {"floor": None, "floor_distance": None, "floor_binds": False}
    least = floor_sigma(floor, state)
    if floor.cpk is not None:
        distance = f"{max(level.cpk - floor.cpk, 0.0):.2f} Cpk above the floor"
    elif floor.sigma_level is not None:
        distance = f"{max(level.sigma_level - floor.sigma_level, 0.0):.2f} sigma above the floor"
    else:
        assert floor.dpmo is not None
        distance = f"{max(floor.dpmo - level.dpmo, 0.0):.4g} dpmo below the most allowed"
    binds = level.sigma_level <= least * (1.0 + 1e-6)
    return {"floor": floor_words(floor), "floor_distance": "at the floor" if binds else distance, "floor_binds": binds}


def _no_plan(problem: Problem, binding: tuple[Binding, ...]) -> Plan:
    """Return the answer when no choice at all keeps the floors and limits."""
    plan = Plan(
        title=problem.scenario.title, currency=problem.scenario.currency, shipped_per_year=problem.line.shipped,
        question="cheapest", reached=False, split=problem.split,
        targets={name: math.exp(-budget) for name, budget in problem.budgets.items()},
        target_losses={name: -math.expm1(-budget) for name, budget in problem.budgets.items()},
        yields=None, money=None, dpu=None, capital=None, purchases=(), steps=(), today=line_today(problem), proof=None,
        price_of_defect_budget=None, cost_of_next_nine=None, best_reachable=None, binding=binding, rules=(), rules_note="",
        assumed=(), cautions=(),
    )  # fmt: skip
    return _with_cautions(plan, problem)
