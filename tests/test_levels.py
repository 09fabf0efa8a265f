"""Levels by price: few passes lead to the proof, and a level beside an answer is what the tails say."""

from __future__ import annotations

import numpy as np
import pytest

from allocator import curves
from allocator.problem import Problem
from allocator.solve.answers import Market
from allocator.solve.duty import build_duty
from allocator.solve.price import clear
from allocator.solve.reduce import gates_of_first
from tests.benchmarks.lines import Shape, draw, problem_of

GAP = 1e-10


def one_way_each(shape: Shape) -> tuple[Problem, Market]:
    problem = problem_of(draw(shape))
    ways = problem.options.ways
    return problem, Market(ways.curves, ways.z_low, ways.z_high)


@pytest.mark.parametrize("tree", [False, True])
@pytest.mark.parametrize("yields", ["high", "low"])
def test_prices_and_tangent_moved_together_leave_one_pass_to_the_proof(yields: str, tree: bool) -> None:
    """Prices balanced anew for every tangent of scrap took up to eight passes here."""
    problem, market = one_way_each(Shape(2_000, yields=yields, tree=tree))
    duty = build_duty(problem.line, gates_of_first(problem), problem.budgets)
    cleared = clear(market, duty, problem.options.ways.curves, GAP)
    assert cleared is not None
    assert cleared.gap <= GAP
    assert cleared.passes == 1


@pytest.mark.parametrize("beside", [0.0, 1e-9, -1e-9, 1e-3])
def test_levels_beside_the_last_answers_are_those_of_the_inverted_tails(beside: float) -> None:
    problem, market = one_way_each(Shape(10_000))
    laws = problem.options.ways.curves
    delta = market.answer(np.full(10_000, 3e7)).delta * (1.0 + beside)
    known = market.levels(delta)
    told = np.isfinite(known)
    assert np.array_equal(told, (laws.kind != curves.DECADE) & (abs(beside) < 1e-6))
    np.testing.assert_allclose(known[told], curves.sigma(laws.take(told), delta[told]), rtol=1e-12)
