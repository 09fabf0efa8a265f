"""Our own branch and bound against the same master solved whole by HiGHS, and against every choice one by one."""

from __future__ import annotations

import itertools
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.sparse import csr_array

from allocator.choice import keeps_limits
from allocator.problem import Problem, pose
from allocator.scenario.read import read_scenario, scenario_from_dict
from allocator.solve import mixed, road, tree_search
from allocator.solve.backend import Rows, bound_by_prices
from allocator.solve.fixed import solve_fixed
from allocator.solve.reduce import ways_by_step
from allocator.solve.relaxed import Relaxed
from allocator.solve.road import Solved, solve
from tests.reference.generate import random_scenario
from tests.strategies import alternatives, laws, lines, quick

ROOT = Path(__file__).parent.parent
Drawn = dict[str, Any]


def by_the_tree(problem: Problem) -> Solved:
    """No choice is tried one by one, and the master is never solved whole."""
    with pytest.MonkeyPatch.context() as patch:
        _through_the_master(patch)
        patch.setattr(mixed, "solve_whole", _refuse)
        return solve(problem)


def whole(problem: Problem) -> Solved:
    """The root alone is ours; all branching is done by HiGHS."""
    with pytest.MonkeyPatch.context() as patch:
        _through_the_master(patch)
        patch.setattr(tree_search, "MOST_SPLITS", -1)
        return solve(problem)


def _through_the_master(patch: pytest.MonkeyPatch) -> None:
    patch.setattr(road, "SMALL_MOVING", 0)
    patch.setattr(road, "SMALL_STILL", 0)
    patch.setattr(road, "serves", lambda problem: False)


def _refuse(*_: object) -> None:
    raise AssertionError("the tree should have settled this")


def same(ours: Solved, other: Solved) -> None:
    assert (ours.outcome is None) == (other.outcome is None)
    if ours.outcome is None or other.outcome is None:
        return
    values = [solved.outcome.value(ours.problem.objective) for solved in (ours, other)]
    room = (ours.gap + other.gap + 1e-9) * max(map(abs, values))
    assert values[0] == pytest.approx(values[1], abs=room)
    assert max(ours.bound, other.bound) <= min(values) + 1e-9 * max(map(abs, values))


@pytest.mark.parametrize("name", ["pump", "parcels"])
@pytest.mark.parametrize("share", [1.0, 0.9])
def test_shipped_scenarios_by_the_tree_and_whole(name: str, share: float) -> None:
    problem = pose(read_scenario(ROOT / "scenarios" / f"{name}.toml"))
    budget = problem.budgets[problem.split]
    asked = problem.with_budget(problem.split, share * budget)
    ours = by_the_tree(asked)
    assert ours.gap <= road.GAP
    same(ours, whole(asked))


@quick(12)
@given(lines(least=3, most=5, law=laws(), offers=alternatives(gates=True)), st.floats(0.05, 1.0), st.floats(0.0, 1.0))
def test_random_lines_by_the_tree_whole_and_choice_by_choice(scenario: Drawn, share: float, part: float) -> None:
    """Under a limit on capital between none and all that the unlimited plan takes."""
    problem = pose(scenario_from_dict(scenario))
    free = solve(problem)
    assert free.outcome is not None
    asked = replace(problem, capital=part * max(free.outcome.capital, 0.0))
    asked = asked.with_budget("final_yield", free.outcome.loads["final_yield"] * (1.0 + share))
    assume(not asked.options.no_way)
    every = [np.array(rows, dtype=np.int64) for rows in itertools.islice(itertools.product(*ways_by_step(asked)), 200)]
    assume(1 < len(every) < 200)
    ours = by_the_tree(asked)
    same(ours, whole(asked))
    answers = [answer for rows in every if (answer := solve_fixed(asked, rows)) is not None]
    assert (ours.outcome is None) == (not answers)
    if ours.outcome is not None:
        assert keeps_limits(asked, ours.outcome)
        least = min(answer.outcome.money.total for answer in answers)
        assert ours.outcome.money.total <= least + (ours.gap + 1e-9) * max(abs(least), 1.0)
        assert ours.bound <= least + 1e-9 * max(abs(least), 1.0)


def knapsack() -> Rows:
    """Least −(3a + 4b + 5c) with 2a + 3b + 4c ≤ 5.5; a is worth most for its room, then b, then c."""
    return Rows(
        cost=np.array([-3.0, -4.0, -5.0]),
        upper=csr_array(np.array([[2.0, 3.0, 4.0]])), upper_limit=np.array([5.5]),
        equal=csr_array((0, 3)), equal_value=np.zeros(0),
        low=np.zeros(3), high=np.ones(3), binary=np.ones(3, dtype=bool),
    )  # fmt: skip


def test_the_relaxed_programme_keeps_up_with_ends_and_rows() -> None:
    """By hand: what is worth most for its room first, the last in part."""
    relaxed = Relaxed(knapsack())
    low, high = np.zeros(3), np.ones(3)
    first = relaxed.solve(low, high)
    assert first is not None
    assert first.bound == pytest.approx(-(3.0 + 4.0 + 5.0 * 0.5 / 4.0), abs=1e-9)
    without = relaxed.solve(low, np.array([0.0, 1.0, 1.0]))
    assert without is not None
    assert without.bound == pytest.approx(-(4.0 + 5.0 * 2.5 / 4.0), abs=1e-9)
    relaxed.add(csr_array(np.array([[0.0, 1.0, 1.0]])), np.array([1.0]))
    either = relaxed.solve(low, np.array([0.0, 1.0, 1.0]))
    assert either is not None
    assert either.bound == pytest.approx(-5.0, abs=1e-9)
    assert relaxed.solve(np.array([0.0, 1.0, 1.0]), high) is None


@pytest.mark.parametrize("price", [0.0, 0.3, 1.25, 40.0])
def test_any_prices_prove_a_bound(price: float) -> None:
    """A wrong price gives a looser bound, never a false one."""
    rows = knapsack()
    bound = bound_by_prices(rows, np.array([price]), np.zeros(0), rows.low, rows.high)
    assert bound <= -(3.0 + 4.0 + 5.0 * 0.5 / 4.0) + 1e-9


def test_a_plan_found_while_limits_were_taken_on_one_by_one_serves_as_a_start() -> None:
    """No first choice keeps both budgets here, and the budgets leave fewer ways than the plan was found among."""
    problem = pose(scenario_from_dict(random_scenario(6009)))
    free = solve(problem)
    assert free.outcome is not None
    asked = replace(problem, capital=0.6 * free.outcome.capital)
    same(by_the_tree(asked), solve(asked))
