"""The main job: the cheapest plan that keeps the promise, or the best that can be reached, with its proof."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from allocator.cautions import cautions_of_held, cautions_of_plan, what_is_assumed
from allocator.confidence import confident_plan
from allocator.errors import RangeError
from allocator.flow import yields
from allocator.least import capital_for_targets, least_capital, least_total
from allocator.problem import CAPITAL, COST, Problem, pose
from allocator.results import BestReachable, Binding, Bought, LeastNeeded, Plan, Proof, Restraint
from allocator.rules import simpler_rules
from allocator.scenario.model import Scenario
from allocator.solve.road import Solved, solve
from allocator.standing import defects_per_unit, line_today, load_parts, shipped_known
from allocator.targets import AT_CAP, step_targets
from allocator.variants import restrained, restraint_words

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
    hold: Mapping[str, Mapping[str, float]] | None = None,
    without: Sequence[str] = (),
    with_: Sequence[str] = (),
    confidence: float | None = None,
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
    hold : mapping, optional
        By step the level that a supplier insists on, as {"weld": {"cpk": 1.33}} (or sigma_level, dpmo, ppm).
    without, with_ : sequence of str, optional
        Alternatives, purchases or laws ("STEP: improve") that are not to be had, or to be had whatever they cost.

    confidence : float, optional
        Ask for the cheapest plan found that meets every target with this probability under the error of the estimates.

    Returns
    -------
    Plan
        `reached` is False when no choice meets the targets: the plan is then the best reachable one.

    Raises
    ------
    RangeError
        When `of`, a limit, a name or a level held makes no sense, or a level held lies below the step's floor.
    SolverError
        When a solver stops without an answer.
    """
    if spend is not None and capital is not None:
        raise RangeError("ask for the best yield for a yearly spend or for a capital, not both at once")
    if confidence is not None and (spend is not None or capital is not None):
        raise RangeError("a confidence is asked of a target: leave out the yearly spend or the capital")
    problem, asked = pose(scenario, of, targets), (spend, capital, confidence)
    if not (hold or without or with_):
        return _plan_of(problem, *asked)
    plan = min((_plan_of(one, *asked) for one in restrained(problem, hold, without, with_)), key=_rank)
    free = _plan_of(problem, *asked)
    total = free.money.total if free.reached and free.money is not None else None
    loss = split_loss(free) if free.reached else None
    kept = Restraint(restraint_words(hold, without, with_), total, loss)
    return replace(plan, restraint=kept, cautions=(*cautions_of_held(plan, hold or ()), *plan.cautions))


def _plan_of(problem: Problem, spend: float | None, capital: float | None, confidence: float | None) -> Plan:
    if problem.options.no_way:
        return _no_plan(problem, tuple(Binding(step, reason) for step, reason in problem.options.no_way))
    if spend is not None or capital is not None:
        return _best_for_the_money(problem, spend, capital)
    if confidence is not None:
        return _with_confidence(problem, confidence)
    solved = solve(problem)
    if solved.outcome is None:
        return _out_of_reach(problem, solved)
    plan = describe(solved, "cheapest" if problem.budgets else "optimum", problem)
    plan = _with_next_nine(plan, problem, solved)
    rules, note = simpler_rules(problem, solved.outcome)
    return _with_cautions(replace(plan, rules=rules, rules_note=note), problem)


def _with_confidence(problem: Problem, confidence: float) -> Plan:
    found = confident_plan(problem, confidence)
    if found is None:
        return _out_of_reach(problem, solve(problem))
    solved, told = found
    plan = describe(solved, "confident", problem)
    assert plan.proof is not None
    proof = replace(plan.proof, lower_bound=None, gap=None, note=f"{told.asked} plans compared: {told.method}.")
    note = "left out, since none of them allows for the error of the estimates"
    plan = _with_cautions(replace(plan, reached=told.reached, proof=proof, rules_note=note, confidence=told), problem)
    # Elsewhere small samples are taken as exact, and that is cautioned; here they are allowed for.
    return replace(plan, cautions=tuple(c for c in plan.cautions if c.code != "small_sample"))


def _rank(plan: Plan) -> tuple[bool, float, float]:
    """Order plans from the best: those that reach the target first, then by what was asked, yield or cost."""
    total = math.inf if plan.money is None else plan.money.total
    by_yield = plan.question == "best yield" or not plan.reached
    return not plan.reached, split_loss(plan) if by_yield else total, total


def split_loss(plan: Plan) -> float:
    """Return the loss 1 − yield of the split yield, infinite where there is no plan."""
    loss = None if plan.yields is None else getattr(plan.yields, plan.split.replace("_yield", "_loss"))
    return math.inf if loss is None else float(loss)


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
    return problem.options.ways.find(solved.problem.options.ways, solved.outcome.choice.rows)


def _best_for_the_money(problem: Problem, spend: float | None, capital: float | None) -> Plan:
    asked = replace(problem.with_budget(problem.split, None), spend=spend)
    if capital is not None:
        asked = replace(asked, capital=capital)
    best = solve(asked.best_of(problem.split))
    if best.outcome is None:
        return _out_of_reach(asked, best)
    cheapest = cheapest_at(asked, best)
    plan = describe(cheapest, "best yield", asked)
    lowest = -1e6 * math.expm1(-best.bound)
    load_gap = f"No plan within the limit loses less than {lowest:,.6g} ppm of the {_words(problem.split)}."
    assert plan.proof is not None
    plan = replace(plan, proof=replace(plan.proof, note=load_gap), spend_limit=spend, capital_limit=capital)
    return _with_cautions(plan, asked)


def _words(yield_name: str) -> str:
    return yield_name.replace("_", " ")


def _out_of_reach(problem: Problem, blocked: Solved) -> Plan:
    """Return the best reachable plan, marked as not reaching the target."""
    if blocked.blocked in (CAPITAL, COST):
        return _too_little_money(problem, least_capital if blocked.blocked == CAPITAL else least_total)
    split = blocked.blocked or problem.split
    asked = problem
    if split != problem.split:  # The split yield is not even in question: another target cannot be kept.
        asked = replace(problem, split=split, budgets={k: v for k, v in problem.budgets.items() if k == split})
    best = best_reachable(asked)
    binding = binding_steps(asked, best, problem.budgets.get(split))
    plan = replace(
        describe(best, "cheapest", problem),
        reached=False, binding=binding, best_reachable=summarise(asked, best, binding),
        least_needed=capital_for_targets(problem),
    )  # fmt: skip
    return _with_cautions(plan, problem)


def _too_little_money(problem: Problem, least: Callable[[Problem], tuple[LeastNeeded, Solved]]) -> Plan:
    """Return the plan that needs the least of the money of which there is too little."""
    needed, nearest = least(problem)
    what = "capital" if needed.of == CAPITAL else "yearly total"
    reason = f"the {what} cannot be brought below {needed.without_targets:,.0f} (limit {needed.limit:,.0f})"
    plan = replace(
        describe(nearest, "best yield" if needed.of == "total" else "cheapest", problem),
        reached=False, binding=(Binding("(whole line)", reason),), least_needed=needed,
        spend_limit=problem.spend, capital_limit=problem.capital,
    )  # fmt: skip
    return _with_cautions(plan, problem)


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
    order = np.argsort(-parts, kind="stable")
    before = load - (np.cumsum(parts[order]) - parts[order])
    enough = (before <= wanted) | (parts[order] <= 0.0)
    those = order[: int(np.argmax(enough)) if enough.any() else len(order)]
    steps = problem.scenario.step
    held = zip(those.tolist(), _what_holds(problem, best, those), strict=True)
    return tuple(Binding(steps[i].name, reason) for i, reason in held)


def _what_holds(problem: Problem, best: Solved, those: NDArray[np.int64]) -> Iterator[str]:
    """Yield for some steps, in words, what keeps each of them where it stands."""
    outcome, ways = best.outcome, best.problem.options.ways
    assert outcome is not None
    least = ways.least_by_step(problem.line.n_steps)[those]
    could_do_better = (outcome.flow.intensity[those] > least * (1.0 + AT_CAP)) & (problem.capital is not None)
    text = ways.text.take(outcome.choice.rows[those])
    columns = (those, outcome.choice.z[those], could_do_better)
    stated = zip(*(c.tolist() for c in columns), text.alternatives(), text.caps_in_words(), strict=True)
    for i, z, limited, alternatives, cap in stated:
        step, at = problem.scenario.step[i], f"sigma level {z:.4g}"
        chosen = f" with {', '.join(alternatives)}" if alternatives else ""
        missing = "" if step.alternative else "; no alternative is offered"
        if step.fixed:
            yield f"fixed by the scenario at {at}"
        elif limited:
            yield f"at {at}{chosen}; the capital limit allows no more"
        else:
            yield f"at {at}{chosen} and no further: {cap}{missing}"


def describe(solved: Solved, question: str, problem: Problem) -> Plan:
    """Return an evaluated answer in the words and units that people and programs read."""
    outcome = solved.outcome
    assert outcome is not None
    scenario, options, ways = problem.scenario, problem.options, solved.problem.options.ways
    states = ways.states.take(outcome.choice.rows)
    return Plan(
        title=scenario.title,
        currency=scenario.currency,
        shipped_per_year=problem.line.shipped,
        question=question,
        reached=True,
        split=problem.split,
        targets={name: math.exp(-budget) for name, budget in problem.budgets.items()},
        target_losses={name: -math.expm1(-budget) for name, budget in problem.budgets.items()},
        yields=yields(problem.line, outcome.flow, shipped_known(problem, states)),
        money=outcome.money,
        dpu=defects_per_unit(states, outcome.choice.z, problem.line.per_finished),
        capital=outcome.capital,
        purchases=tuple(
            Bought(name, float(options.purchase_price[p]), float(options.purchase_cost[p]))
            for p, name in enumerate(options.purchase_names)
            if outcome.bought[p]
        ),
        rows=step_targets(problem, ways, outcome),
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


def _no_plan(problem: Problem, binding: tuple[Binding, ...]) -> Plan:
    """Return the answer when no choice at all keeps the floors and limits."""
    plan = Plan(
        title=problem.scenario.title, currency=problem.scenario.currency, shipped_per_year=problem.line.shipped,
        question="cheapest", reached=False, split=problem.split,
        targets={name: math.exp(-budget) for name, budget in problem.budgets.items()},
        target_losses={name: -math.expm1(-budget) for name, budget in problem.budgets.items()},
        yields=None, money=None, dpu=None, capital=None, purchases=(), rows=(), today=line_today(problem), proof=None,
        price_of_defect_budget=None, cost_of_next_nine=None, best_reachable=None, binding=binding, rules=(),
        rules_note="", assumed=(), cautions=(),
    )  # fmt: skip
    return _with_cautions(plan, problem)
