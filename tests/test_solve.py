"""The solvers: the same problem in bare cvxpy, optimality by its own conditions, bounds against feasible points."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace
from typing import Any

import cvxpy as cp
import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from strategies import Drawn, alternatives, laws, lines, plain_line, quick, with_target

from allocator import curves as cv
from allocator.choice import Choice, Outcome, evaluate, keeps_limits
from allocator.flow import GATE_FIELDS, Gates
from allocator.problem import CAPITAL, COST, Problem, pose
from allocator.scenario.read import scenario_from_dict
from allocator.solve import road
from allocator.solve.fixed import FixedAnswer, solve_fixed
from allocator.solve.interior import minimise
from allocator.solve.program import build_program
from allocator.solve.reduce import ways_by_step
from allocator.solve.road import Solved, solve

CONE = 1e-7
"""Clarabel keeps each of some ten cones to 1e-8; the weight G·Σ q·κ of exp(S) − 1 turns that into money."""
CLARABEL_PRICE = 1e-3
"""Its multipliers have about half the digits of its value; the price is what is left of two slopes of that size."""
SLOPE = 2e-6
"""Central differences of a smooth function against its gradient."""
STATIONARY = 1e-5
"""Left over of the gradient at a relative gap of 1e-10 (its square root)."""
ROUNDING = 1e-9
MIXED = 1e-6
"""The search aims at 1e-7; the promise for lines of this size is 1e-4."""

SPLITS = ("final_yield", "rolled_yield", "shipped_yield")


def problem_of(scenario: Drawn) -> Problem:
    return pose(scenario_from_dict(scenario))


def answer_of(problem: Problem) -> FixedAnswer:
    """The only choice, or the first, solved."""
    answer = solve_fixed(problem, first_rows(problem))
    assert answer is not None
    return answer


def first_rows(problem: Problem) -> np.ndarray:
    return np.array([mine[0] for mine in ways_by_step(problem)], dtype=np.int64)


def load_between(problem: Problem, rows: np.ndarray, name: str, share: float) -> float:
    """A budget so far between the least load of a choice (0) and its load today (1)."""
    low, high = (loads_of(problem, rows, end)[name] for end in ("z_high", "z_low"))
    return low + share * (high - low)


def loads_of(problem: Problem, rows: np.ndarray, end: str) -> dict[str, float]:
    z = getattr(problem.options.ways, end)[rows]
    return evaluate(problem.line, problem.options, Choice(rows, z)).loads


# ---------------------------------------------------------------- continuous, against bare cvxpy


def bare_cvxpy(problem: Problem, rows: np.ndarray, budget: float) -> tuple[float, float]:
    """Least cost and budget price of decade laws, written from the model page: scrap exponentials and logarithms."""
    ways, line = problem.options.ways, problem.line
    gates = Gates(*(getattr(ways.gates, name)[rows] for name in GATE_FIELDS))
    low, high, scale = ways.delta_low[rows], ways.delta_high[rows], ways.curves.scale[rows]
    n = ways.curves.opportunities[rows]
    x = cp.Variable(line.n_steps)  # δ/δ_high
    delta = cp.multiply(high, x)
    inherited: list[Any] = [0.0] * line.n_steps
    hidden: list[Any] = [0.0] * line.n_steps
    scrap: list[Any] = [0.0] * line.n_steps
    rework: Any = 0.0
    for i in range(line.n_steps):
        found = gates.finds[i] * delta[i] + gates.earlier[i] * inherited[i]
        hidden[i] = (1 - gates.finds[i]) * delta[i] + (1 - gates.earlier[i]) * inherited[i]
        scrap[i] = (1 - gates.reworked[i]) * found - math.log1p(-gates.rejects[i] * gates.lost[i])
        rework += line.per_finished[i] * gates.rework_cost[i] * gates.reworked[i] * found
        if line.feeds[i] >= 0:
            inherited[line.feeds[i]] += line.per_unit[i] * hidden[i]
    towards_end = list(scrap)
    for i in range(line.n_steps - 2, -1, -1):
        towards_end[i] = scrap[i] + towards_end[line.feeds[i]]
    scrapped = sum(line.per_finished[i] * line.net_cost[i] * (cp.exp(towards_end[i]) - 1) for i in range(line.n_steps))
    start = -np.expm1(-high / n)
    law = cp.sum(cp.multiply(scale / math.log(10), np.log(start) - cp.log(1 - cp.exp(-cp.multiply(high / n, x)))))
    inspection = float(line.per_finished @ gates.per_item)
    running = line.shipped * (scrapped + rework + line.escape_cost * hidden[-1] + inspection)
    used = sum(line.per_finished[i] * scrap[i] for i in range(line.n_steps)) + hidden[-1]
    size = max(float(np.sum(scale)), line.shipped * float(line.per_finished @ line.net_cost))
    limit = used / budget <= 1
    bare = cp.Problem(cp.Minimize((running + law) / size), [limit, x >= low / high, x <= 1])
    bare.solve(solver=cp.CLARABEL)
    assert bare.status == cp.OPTIMAL
    return float(bare.value) * size, float(limit.dual_value) * size / budget


@quick(12)
@given(lines(least=1, most=4, law=laws(("decade",))), st.floats(0.05, 0.9))
def test_same_as_bare_cvxpy(scenario: Drawn, share: float) -> None:
    many = [step | {"opportunities": 10} for step in scenario["step"]]  # so that exp(S) is not lost beside 1
    problem = problem_of(scenario | {"step": many})
    rows = first_rows(problem)
    assume(problem.options.ways.moves.all())
    budget = load_between(problem, rows, "final_yield", share)
    answer = answer_of(problem.with_budget("final_yield", budget))
    value, price = bare_cvxpy(problem, rows, budget)
    at_risk = problem.line.shipped * float(problem.line.per_finished @ problem.line.net_cost)
    noise = CONE * (at_risk + abs(value))
    assert answer.outcome.money.total == pytest.approx(value, abs=noise)
    assert answer.bound <= value + noise
    assert answer.price is not None
    assert answer.price["final_yield"] == pytest.approx(price, rel=CLARABEL_PRICE, abs=CLARABEL_PRICE * at_risk)


# ---------------------------------------------------------------- optimality by its own conditions


@quick(25)
@given(lines(law=laws()), st.floats(0.1, 0.9))
def test_slopes_of_the_program_are_those_of_the_exact_evaluation(scenario: Drawn, place: float) -> None:
    problem = problem_of(scenario)
    rows = first_rows(problem)
    program = build_program(problem, rows)
    assume(program.size > 0)
    v = program.low + place * (program.high - program.low)
    ways = problem.options.ways

    def exact(moved: np.ndarray, name: str) -> float:
        delta = program.intensities(moved)
        z = np.where(ways.moves[rows], cv.sigma(ways.curves.take(rows), delta), ways.z_low[rows])
        return evaluate(problem.line, problem.options, Choice(rows, z)).value(name)

    for name in (COST, CAPITAL, *SPLITS):
        value, slope, _, _ = program.derivatives(name, v)
        assert value == pytest.approx(exact(v, name), rel=1e-11, abs=1e-11)
        for i in range(program.size):
            step = 1e-4 * v[i] * np.eye(program.size)[i]
            difference = (exact(v + step, name) - exact(v - step, name)) / (2 * step[i])
            noise = 1e-12 * abs(value) / step[i]
            assert slope[i] == pytest.approx(difference, rel=SLOPE, abs=noise), name


@quick(30)
@given(lines(law=laws()), st.floats(0.02, 1.1), st.sampled_from(["final_yield", "rolled_yield"]))
def test_no_direction_improves_the_answer(scenario: Drawn, share: float, name: str) -> None:
    """Karush–Kuhn–Tucker, by the test's own account: sign of the reduced slope, and no price without a tight budget."""
    problem = problem_of(scenario)
    rows = first_rows(problem)
    budget = load_between(problem, rows, name, share)
    program = build_program(problem, rows)
    assume(program.size > 0)
    point = minimise(program, COST, {name: budget})
    assert point is not None
    value, slope, _, _ = program.derivatives(COST, point.v)
    load, per_defect, _, _ = program.derivatives(name, point.v)
    price = point.prices[name]
    assert load <= budget * (1 + ROUNDING)
    assert price >= 0.0
    assert price * (budget - load) <= STATIONARY * abs(value)
    reach = program.high - program.low
    left = (slope + price * per_defect) * reach
    tolerance = STATIONARY * (abs(value) + abs(program.value(COST, program.low)))
    place = (point.v - program.low) / reach
    assert np.all(left[place > 1e-4] <= tolerance), "less of these defects would be cheaper"
    assert np.all(left[place < 1 - 1e-4] >= -tolerance), "more of these defects would be cheaper"
    assert point.bound <= value
    assert value - point.bound <= 1e-9 * abs(value)


# ---------------------------------------------------------------- bounds against feasible points


def a_feasible_point(problem: Problem, rows: np.ndarray, places: list[float]) -> Outcome | None:
    """Levels at some places of their ranges, moved towards the best ends until every budget is kept."""
    ways = problem.options.ways
    low, high = ways.delta_low[rows], ways.delta_high[rows]
    wanted = np.resize(places, len(rows)) * (high - low)
    for shrink in (*np.linspace(1.0, 0.0, 12), 0.0):
        inside = np.clip(low + shrink * wanted, low, high)
        z = np.where(ways.moves[rows], cv.sigma(ways.curves.take(rows), inside), ways.z_low[rows])
        z = np.clip(z, ways.z_low[rows], ways.z_high[rows])
        outcome = evaluate(problem.line, problem.options, Choice(rows, z))
        if keeps_limits(problem, outcome):
            return outcome
    return None


@quick(20)
@given(
    lines(most=4, law=laws(), offers=alternatives(gates=True)),
    st.floats(0.05, 0.8),
    st.lists(st.floats(0.0, 1.0), min_size=4, max_size=4),
    st.randoms(use_true_random=False),
)
def test_the_bound_is_below_every_feasible_point(
    scenario: Drawn, share: float, places: list[float], random: Any
) -> None:
    problem = problem_of(scenario)
    problem = problem.with_budget("final_yield", load_between(problem, first_rows(problem), "final_yield", share))
    assume(math.prod(len(mine) for mine in ways_by_step(problem)) <= 200)
    solved = solve(problem)
    assert solved.outcome is not None
    assert keeps_limits(problem, solved.outcome)
    assert solved.bound <= solved.outcome.money.total
    for _ in range(25):
        rows = np.array([random.choice(mine.tolist()) for mine in ways_by_step(problem)], dtype=np.int64)
        outcome = a_feasible_point(problem, rows, random.sample(places, len(places)))
        if outcome is not None:
            total = outcome.money.total
            assert solved.bound <= total + ROUNDING * abs(total)
            assert solved.outcome.money.total <= total + MIXED * max(abs(total), 1.0)


# ---------------------------------------------------------------- nothing left to move


def decade_line() -> Drawn:
    return plain_line(0.02, 0.01, 0.03, improve={"law": "decade", "per_year": 500.0})


def test_a_budget_of_exactly_the_least_reachable_is_met_and_nothing_below() -> None:
    problem = problem_of(decade_line())
    rows = first_rows(problem)
    least = loads_of(problem, rows, "z_high")["final_yield"]
    answer = answer_of(problem.with_budget("final_yield", least))
    assert answer.outcome.choice.z == pytest.approx(problem.options.ways.z_high[rows], rel=1e-12)
    assert answer.bound == pytest.approx(answer.outcome.money.total, rel=1e-12)
    assert solve_fixed(problem.with_budget("final_yield", least * (1 - 1e-8)), rows) is None
    blocked = solve(problem.with_budget("final_yield", least * (1 - 1e-8)))
    assert (blocked.outcome, blocked.blocked) == (None, "final_yield")
    assert blocked.least == pytest.approx(least, rel=1e-9)


@pytest.mark.parametrize("room", [1e-3, 1e-6, 1e-8, 1e-10])
def test_a_budget_just_above_the_least_reachable(room: float) -> None:
    problem = problem_of(decade_line())
    least = loads_of(problem, first_rows(problem), "z_high")["final_yield"]
    answer = answer_of(problem.with_budget("final_yield", least * (1 + room)))
    total = answer.outcome.money.total
    dearest = evaluate(problem.line, problem.options, Choice(first_rows(problem), problem.options.ways.z_high))
    assert total <= dearest.money.total * (1 + ROUNDING)
    assert total - answer.bound <= 1e-9 * total


def test_a_line_where_nothing_can_move_is_only_evaluated() -> None:
    problem = problem_of(plain_line(0.02, 0.01))
    answer = answer_of(problem)
    assert answer.price is None
    assert answer.bound == pytest.approx(answer.outcome.money.total, rel=1e-12)
    rolled = -math.log(0.98) - math.log(0.99)
    assert answer.outcome.loads["final_yield"] == pytest.approx(rolled, rel=1e-12)
    assert solve(problem.with_budget("final_yield", rolled * (1 + 1e-9))).outcome is not None
    assert solve(problem.with_budget("final_yield", rolled * (1 - 1e-9))).outcome is None


def test_the_least_of_a_load_and_of_the_capital() -> None:
    scenario = plain_line(0.02, 0.01, improve={"law": "decade", "price": 500.0})
    problem = problem_of(scenario)
    best = solve(problem.best_of("rolled_yield"))
    assert best.outcome is not None
    assert best.outcome.loads["rolled_yield"] == pytest.approx(
        loads_of(problem, first_rows(problem), "z_high")["rolled_yield"], rel=1e-9
    )
    thrifty = solve(replace(problem, objective=CAPITAL))
    assert thrifty.outcome is not None
    assert thrifty.outcome.capital == pytest.approx(0.0, abs=1e-6)


# ---------------------------------------------------------------- whole ways: the master against every choice


def by_every_choice(problem: Problem) -> float | None:
    """The least of the objective over all choices, each solved by itself."""
    values = [
        answer.outcome.value(problem.objective)
        for rows in itertools.product(*ways_by_step(problem))
        if (answer := solve_fixed(problem, np.array(rows, dtype=np.int64))) is not None
    ]
    return min(values, default=None)


@pytest.fixture
def no_enumeration(monkeypatch: pytest.MonkeyPatch) -> None:
    """Every question goes to the master, however small, and even where the price alone would settle it."""
    monkeypatch.setattr(road, "SMALL_MOVING", 0)
    monkeypatch.setattr(road, "SMALL_STILL", 0)
    monkeypatch.setattr(road, "serves", lambda problem: False)


def offered(*, gates: bool = False, law: bool = True, price: float = 3_000.0) -> Drawn:
    """Four steps in a tree, each with a machine, two of them with other gates."""
    step: Drawn = {
        "inspection": {"finds": 0.8, "earlier": 0.3, "rejects_good": 0.002},
        "rework": {"share": 0.2, "cost": 2},
    }
    scenario = plain_line(0.02, 0.012, 0.03, 0.008, **step)
    for i, each in enumerate(scenario["step"]):
        each |= {"scrap_cost": 3.0 * 4.0**i, "feeds": f"s{max(i + 1, 2)}"} if i < 3 else {"scrap_cost": 400.0}
        machine = {"name": "machine", "capability": {"defect_rate": 0.002 + 0.001 * i}, "price": price * (i + 1)}
        each["alternative"] = [machine]
        if law and i % 2 == 0:
            each["improve"] = {"law": "decade", "price": 8_000.0}
        if gates and i >= 2:
            look = {"name": "look", "group": "gate", "inspection": {"finds": 0.95, "earlier": 0.9, "per_item": 0.05}}
            bench = {"name": "bench", "group": "rework", "rework": {"share": 0.9, "cost": 3.0}, "per_year": 300.0}
            each["alternative"] += [look, bench]
    return with_target(scenario, escape_cost=90.0)


def agree(problem: Problem) -> Solved:
    """Solve by the master and hold it against every choice."""
    wanted, solved = by_every_choice(problem), solve(problem)
    assert (solved.outcome is None) == (wanted is None)
    if solved.outcome is None or wanted is None:
        return solved
    assert "branch and bound" in solved.method
    assert keeps_limits(problem, solved.outcome)
    value, unit = solved.outcome.value(problem.objective), max(abs(wanted), 1e-12)
    assert solved.bound <= wanted + 1e-9 * unit
    assert value == pytest.approx(wanted, rel=MIXED)
    assert solved.gap <= 1e-4
    return solved


@pytest.mark.usefixtures("no_enumeration")
@pytest.mark.parametrize("loss", [None, 0.08, 0.03, 0.012])
@pytest.mark.parametrize("gates", [False, True])
def test_the_master_against_every_choice(loss: float | None, gates: bool) -> None:
    problem = problem_of(offered(gates=gates, law=not gates))
    agree(problem if loss is None else problem.with_budget("final_yield", -math.log1p(-loss)))


@pytest.mark.usefixtures("no_enumeration")
@quick(8)
@given(lines(least=2, most=3, law=laws(), offers=alternatives(gates=True)), st.floats(0.02, 1.0))
def test_the_master_against_every_choice_on_random_lines(scenario: Drawn, share: float) -> None:
    problem = problem_of(scenario)
    assume(1 < math.prod(len(mine) for mine in ways_by_step(problem)) <= 60)
    budget = load_between(problem, first_rows(problem), "final_yield", share)
    asked = problem.with_budget("final_yield", budget)
    wanted, solved = by_every_choice(asked), solve(asked)
    assert wanted is not None
    assert solved.outcome is not None
    assert solved.outcome.money.total == pytest.approx(wanted, rel=MIXED, abs=MIXED)
    assert solved.bound <= wanted + 1e-9 * abs(wanted)


@pytest.mark.usefixtures("no_enumeration")
@pytest.mark.parametrize("capital", [0.0, 4_000.0, 20_000.0])
def test_the_master_under_a_capital_limit(capital: float) -> None:
    problem = replace(problem_of(offered()), capital=capital)
    solved = agree(problem)
    assert solved.outcome is not None
    assert solved.outcome.capital <= capital * (1 + ROUNDING) + 1e-9


@pytest.mark.usefixtures("no_enumeration")
@pytest.mark.parametrize("capital", [4_000.0, 20_000.0])
def test_the_best_yield_under_a_capital_limit(capital: float) -> None:
    agree(replace(problem_of(offered()).best_of("final_yield"), capital=capital))


@pytest.mark.usefixtures("no_enumeration")
@pytest.mark.parametrize("more", [1.02, 1.3, 3.0])
def test_the_best_yield_for_a_yearly_total(more: float) -> None:
    problem = problem_of(offered())
    cheapest = by_every_choice(problem)
    assert cheapest is not None
    solved = agree(replace(problem.best_of("final_yield"), spend=cheapest * more))
    assert solved.outcome is not None
    assert solved.outcome.money.total <= cheapest * more * (1 + ROUNDING)


@pytest.mark.usefixtures("no_enumeration")
def test_no_choice_keeps_a_yearly_total_below_the_least() -> None:
    problem = problem_of(offered())
    cheapest = by_every_choice(problem)
    assert cheapest is not None
    blocked = solve(replace(problem.best_of("final_yield"), spend=cheapest * (1 - 1e-4)))
    assert (blocked.outcome, blocked.blocked) == (None, COST)
    assert blocked.least == pytest.approx(cheapest, rel=1e-4)


@pytest.mark.usefixtures("no_enumeration")
def test_a_shared_purchase_is_paid_once() -> None:
    """Two steps share a hall for 9,000: worth it for both together, not for one."""
    scenario = plain_line(0.02, 0.02)
    for step in scenario["step"]:
        step["alternative"] = [{"name": "new", "capability": {"defect_rate": 0.001}, "uses": "hall"}]
    hall = {"name": "hall", "price": 0.0, "per_year": 3_000.0}
    problem = problem_of(scenario | {"purchase": [hall]})
    solved = agree(problem)
    assert solved.outcome is not None
    assert solved.outcome.bought.tolist() == [True]
    assert solved.outcome.money.improvement == pytest.approx(3_000.0)
    one = scenario | {"purchase": [hall], "step": [scenario["step"][0], plain_line(0.02, 0.02)["step"][1]]}
    alone = agree(problem_of(one)).outcome
    assert alone is not None
    assert alone.bought.tolist() == [False]
