"""Whole lines at once come to what one step at a time gives, and stay quick at a hundred thousand steps."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pytest

from allocator.flow import GATE_FIELDS, gate_values
from allocator.problem import Problem, pose
from allocator.scenario.read import scenario_from_dict
from tests.reference.generate import random_scenario
from tests.stepwise import stepwise

SAME = 1e-13
"""Relative: array and scalar versions of exp and log may differ in the last digit."""


@cache
def posed(seed: int, hard: bool) -> Problem:
    return pose(scenario_from_dict(random_scenario(seed, hard)))


def assert_same_table(problem: Problem) -> None:
    """Every column of the table of ways, and every word, against the ways worked out one by one."""
    rows, notes = stepwise(problem.scenario, problem.line)
    ways = problem.options.ways
    assert ways.step.tolist() == [row.step for row in rows]
    assert list(ways.states) == [row.state for row in rows]
    columns: dict[str, Any] = {
        "z_low": [row.stretch.low for row in rows],
        "z_high": [row.stretch.high for row in rows],
        "fixed_cost": [row.fixed_cost for row in rows],
        "capital": [row.capital for row in rows],
        "capital_per_cost": [row.capital_per_cost for row in rows],
    }
    for name, expected in columns.items():
        np.testing.assert_allclose(getattr(ways, name), expected, rtol=SAME, err_msg=name)
    for name in ("start", "parameter", "scale"):
        np.testing.assert_allclose(getattr(ways.curves, name), [getattr(row, name) for row in rows], rtol=SAME)
    assert ways.curves.kind.tolist() == [row.kind for row in rows]
    gates = np.array([gate_values(row.state.inspection, row.state.rework) for row in rows]).T
    for name, expected in zip(GATE_FIELDS, gates, strict=True):
        assert getattr(ways.gates, name).tolist() == expected.tolist()
    names = problem.options.purchase_names
    assert ways.uses.tolist() == [[name in row.uses for name in names] for row in rows]
    words = [(text.alternatives, text.law, text.cap) for text in ways.text]
    assert words == [(row.alternatives, row.law, row.cap) for row in rows]
    for pieces, row in zip(ways.lines, rows, strict=True):
        assert (pieces is None) == (row.stretch.lines is None)
        if pieces is not None:
            np.testing.assert_allclose(np.array(pieces), np.array(row.stretch.lines), rtol=SAME, atol=1e-9)
    assert list(problem.options.notes) == notes


@pytest.mark.parametrize("hard", [False, True])
@pytest.mark.parametrize("seed", range(0, 120, 4))
def test_the_table_of_ways_is_what_each_step_alone_gives(seed: int, hard: bool) -> None:
    for one in range(seed, seed + 4):
        assert_same_table(posed(one, hard))
