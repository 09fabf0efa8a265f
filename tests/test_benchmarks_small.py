"""Do the benchmarks measure what they say, on short lines: same questions, peers that agree, a table that is kept."""

from __future__ import annotations

from dataclasses import fields

import numpy as np
import pytest

from allocator.problem import pose
from allocator.scenario.read import scenario_from_dict
from allocator.solve.road import solve
from tests.benchmarks.__main__ import README, TABLE
from tests.benchmarks.cases import LINES, SIZES, last_record, measure
from tests.benchmarks.lines import Shape, draw, problem_of, scenario_of
from tests.benchmarks.run import GAP, beside
from tests.benchmarks.table import text_of

SAME = 1e-11
BOUND_ROUNDING = 1e-11
"""A peer's total is summed in another order than the bound."""
CONE_GAP = 1e-8
"""What Clarabel's tolerances of 1e-10 on every cone are sure to leave of a total."""
TIMES_FASTER, STEPS = 50, 2_000


@pytest.mark.parametrize("kind", SIZES)
@pytest.mark.parametrize("line", LINES)
def test_a_problem_from_arrays_is_the_one_posed_from_the_scenario(kind: str, line: tuple[str, bool]) -> None:
    drawn = draw(Shape(40, kind, *line))
    mine, ordinary = problem_of(drawn), pose(scenario_from_dict(scenario_of(drawn)))
    assert mine.budgets == pytest.approx(ordinary.budgets, rel=SAME)
    for name in ("feeds", "per_unit", "per_finished", "lost", "net_cost"):
        np.testing.assert_allclose(getattr(mine.line, name), getattr(ordinary.line, name), rtol=SAME, err_msg=name)
    ours, theirs = mine.options.ways, ordinary.options.ways
    for name in ("step", "z_low", "z_high", "delta_low", "delta_high", "fixed_cost", "capital", "capital_per_cost"):
        np.testing.assert_allclose(getattr(ours, name), getattr(theirs, name), rtol=SAME, err_msg=name)
    for part in ("curves", "gates"):
        for f in fields(getattr(ours, part)):
            mine_, theirs_ = getattr(getattr(ours, part), f.name), getattr(getattr(theirs, part), f.name)
            np.testing.assert_allclose(mine_, theirs_, rtol=SAME, err_msg=f.name)


@pytest.mark.parametrize("line", LINES)
def test_the_target_binds_so_that_there_is_something_to_share_out(line: tuple[str, bool]) -> None:
    problem = problem_of(draw(Shape(40, "continuous", *line)))
    solved = solve(problem)
    assert solved.outcome is not None
    assert solved.outcome.loads["rolled_yield"] == pytest.approx(problem.budgets["rolled_yield"], rel=1e-9)
    ways = problem.options.ways
    moved = (solved.outcome.choice.z > ways.z_low) & (solved.outcome.choice.z < ways.z_high)
    assert moved.mean() > 0.5


@pytest.mark.parametrize(
    ("kind", "peer", "within"),
    [
        ("continuous", "CLARABEL", CONE_GAP),
        ("continuous", "HIGHS", GAP["continuous"]),
        ("continuous", "slsqp", GAP["continuous"]),
        ("mixed", "whole", GAP["mixed"]),
    ],
)
@pytest.mark.parametrize("line", [("high", False), ("low", True)])
def test_a_peer_comes_to_our_plan_and_never_below_our_bound(
    kind: str, peer: str, within: float, line: tuple[str, bool]
) -> None:
    records = list(beside(Shape(20, kind, *line), peer))
    assert records[0]["ours_gap"] <= GAP[kind]
    assert -BOUND_ROUNDING <= records[-1]["gap"] <= within


@pytest.mark.long
@pytest.mark.parametrize("peer", ["CLARABEL", "HIGHS"])
def test_two_thousand_steps_many_times_faster_than_the_same_in_cvxpy(peer: str) -> None:
    """The peer is stopped once it has taken that much longer without being there."""
    records = beside(Shape(STEPS), peer)
    ours = next(records)
    assert ours["ours_gap"] <= GAP["continuous"]
    for record in records:
        if record["seconds"] > TIMES_FASTER * ours["ours"]:
            return
    pytest.fail(f"{peer} took only {record['seconds'] / ours['ours']:.0f} times as long, gap {record['gap']:.0e}")


@pytest.mark.long
def test_what_was_measured_is_laid_out_with_its_notes() -> None:
    case = measure(Shape(20, "mixed"), seconds=60.0)
    assert case.ours["peak_MiB"] > 10.0
    text = text_of([case], {"steps": 20, "seconds": 1.0, "wall": 1.2, "peak_MiB": 90.0, "gap": 1e-12, "exit": 0})
    assert f" {case.peers['whole']['seconds']:.3g} " in text
    assert "high serial" in text
    case.peers["whole"] |= {"gap": 1e-3, "stopped": "stopped after 1 s"}
    assert "got to 1e-03 only: stopped after 1 s" in text_of([case], None)


@pytest.mark.long
def test_a_peer_is_stopped_in_time() -> None:
    record = last_record(Shape(20_000), "CLARABEL", seconds=4.0)
    assert record["stopped"] == "stopped after 4 s"


def test_the_readme_keeps_a_table_of_every_size() -> None:
    found = TABLE.search(README.read_text())
    assert found is not None
    for steps in {steps for sizes in SIZES.values() for steps in sizes}:
        assert f"{steps:,}  " in found[0]
