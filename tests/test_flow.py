"""What flows through the tree: balances, limits and identities, and the same counts as following the items."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from strategies import Drawn, lines, plain_line, quick

from allocator.flow import (
    Flow,
    Gates,
    Line,
    build_line,
    first_pass,
    from_start,
    gate_values,
    gradient,
    loads,
    money,
    run,
    scrap_cost,
    scrap_lost_at,
)
from allocator.scenario.read import scenario_from_dict
from allocator.tree import SHORT
from tests.reference.recount import recount

EXACT = 1e-12
"""Two orders of adding the same few dozen numbers."""
SLOPE = 1e-6
"""Central differences of a linear function lose half the digits at worst."""


def flow_of(scenario: Drawn) -> tuple[Line, Flow, dict[str, Any]]:
    """The program's flow at the intensities that the independent recount uses, and the recount."""
    read, counted = scenario_from_dict(scenario), recount(scenario, {})
    line, default = build_line(read), read.default
    gates = [gate_values(s.inspection or default.inspection, s.rework or default.rework) for s in read.step]
    delta = np.array([step.delta for step in counted["counted"]])
    return line, run(line, delta, Gates(*np.array(gates).T)), counted


@quick(60)
@given(lines(most=7))
def test_flow_is_what_following_the_items_counts(scenario: Drawn) -> None:
    line, flow, counted = flow_of(scenario)
    steps = counted["counted"]
    assert flow.found == pytest.approx([s.found for s in steps], rel=EXACT, abs=0.0)
    assert flow.hidden == pytest.approx([s.hidden for s in steps], rel=EXACT, abs=1e-18)
    assert np.exp(flow.exponent) * line.per_finished == pytest.approx([s.started for s in steps], rel=EXACT)
    assert loads(line, flow) == pytest.approx(counted["exponents"], rel=1e-11, abs=1e-15)
    assert first_pass(flow) == pytest.approx([s["first_pass_yield"] for s in counted["steps"]], rel=EXACT)
    got = money(line, flow, 0.0)
    for kind in ("scrap", "rework", "escapes", "inspection", "total"):
        assert getattr(got, kind) == pytest.approx(counted["annual_cost"][kind], rel=1e-11, abs=1e-9), kind


@quick(60)
@given(lines(most=7))
def test_items_started_are_passed_on_or_scrapped(scenario: Drawn) -> None:
    """Every item started at a step goes into an item of the next step, or is thrown away at this gate."""
    line, flow, _ = flow_of(scenario)
    started = line.shipped * line.per_finished * np.exp(flow.exponent)
    scrapped = -np.expm1(-flow.scrap_intensity) * started
    taken = np.append(started, line.shipped)[line.feeds]  # index −1, the customer, is the shipped quantity
    passed = line.per_unit * taken
    assert started == pytest.approx(passed + scrapped, rel=EXACT)


@quick(60)
@given(lines(most=7))
def test_scrap_by_where_it_is_added_is_scrap_by_where_it_is_lost(scenario: Drawn) -> None:
    line, flow, _ = flow_of(scenario)
    lost = scrap_lost_at(line, flow)
    assert np.all(lost >= 0.0)
    assert lost.sum() == pytest.approx(scrap_cost(line, flow.exponent).sum(), rel=1e-11, abs=1e-9)


@quick(40)
@given(lines(least=2, most=6))
def test_gradient_is_the_slope_of_found_and_escapes(scenario: Drawn) -> None:
    line, flow, _ = flow_of(scenario)
    per_found, per_escape = np.linspace(0.5, 2.0, line.n_steps), 7.0

    def priced(delta: np.ndarray) -> float:
        at = run(line, delta, flow.gates)
        return float(per_found @ at.found) + per_escape * at.escapes

    step = 1e-3
    slopes = [
        (priced(flow.intensity + step * unit) - priced(flow.intensity - step * unit)) / (2 * step)
        for unit in np.eye(line.n_steps)
    ]
    assert gradient(line, flow.gates, per_found, per_escape) == pytest.approx(slopes, rel=SLOPE, abs=1e-9)


@quick(40)
@given(lines(most=7, gates=False))
def test_final_yield_is_the_rolled_yield_without_rework_and_false_rejects(scenario: Drawn) -> None:
    line, flow, _ = flow_of(scenario)
    used = loads(line, flow)
    assert used["final_yield"] == pytest.approx(used["rolled_yield"], rel=EXACT)
    assert used["shipped_yield"] == 0.0


@quick(40)
@given(lines(least=2, most=6))
def test_what_no_gate_finds_reaches_the_customer(scenario: Drawn) -> None:
    """With gates that find nothing all defects escape and nothing is scrapped: final = shipped = rolled."""
    blind = {"finds": 0, "earlier": 0}
    line, flow, _ = flow_of(scenario | {"step": [step | {"inspection": blind} for step in scenario["step"]]})
    used = loads(line, flow)
    assert used["shipped_yield"] == pytest.approx(used["rolled_yield"], rel=EXACT)
    assert used["final_yield"] == pytest.approx(used["rolled_yield"], rel=EXACT)
    assert flow.exponent == pytest.approx(0.0, abs=0.0)


def test_items_per_finished_unit_multiply_towards_the_end() -> None:
    """Four screws in a hinge, two hinges in a door: 8 screws; a bad hinge takes its four screws with it."""
    scenario = plain_line(0.01, 0.02, 0.0001)
    scenario["step"][0] |= {"per_unit": 4, "scrap_cost": 1.0}
    scenario["step"][1] |= {"per_unit": 2, "scrap_cost": 9.0}
    scenario["step"][2] |= {"scrap_cost": 30.0}
    line, flow, _ = flow_of(scenario)
    assert line.per_finished.tolist() == [8.0, 2.0, 1.0]
    assert line.net_cost.tolist() == [1.0, 9.0 - 4.0 * 1.0, 30.0 - 2.0 * 9.0]
    good = [0.99, 0.98, 0.9999]
    wanted = [8 / math.prod(good), 2 / (good[1] * good[2]), 1 / good[2]]
    assert line.per_finished * np.exp(flow.exponent) == pytest.approx(wanted, rel=EXACT)
    defects = -8 * math.log(good[0]) - 2 * math.log(good[1]) - math.log(good[2])
    assert loads(line, flow)["rolled_yield"] == pytest.approx(defects, rel=EXACT)


def test_a_long_line_keeps_its_digits() -> None:
    """2,000 steps in a row, each losing one in a thousand: starts = 0.999^−2000, first step first."""
    steps = 2_000
    line = build_line(scenario_from_dict(plain_line(*[1e-3] * steps)))
    perfect = np.tile(gate_values(None, None), (steps, 1)).T
    flow = run(line, np.full(steps, -math.log1p(-1e-3)), Gates(*perfect))
    assert np.exp(flow.exponent) == pytest.approx(0.999 ** -np.arange(steps, 0.0, -1.0), rel=1e-11)
    assert scrap_lost_at(line, flow).sum() == pytest.approx(line.shipped * (0.999**-2000.0 - 1.0), rel=1e-10)


def test_a_hidden_defect_is_found_later_or_escapes() -> None:
    """Two gates that find half of their own and half of what came in: by hand, with δ = 0.2 and 0.1."""
    line = build_line(scenario_from_dict(plain_line(0.01, 0.01)))
    half = np.full(2, 0.5)
    nothing = np.zeros(2)
    gates = Gates(half, half, nothing, nothing, np.array([0.0, 0.4]), nothing, nothing)
    flow = run(line, np.array([0.2, 0.1]), gates)
    assert flow.found == pytest.approx([0.1, 0.05 + 0.05])
    assert flow.escapes == pytest.approx(0.05 + 0.05)
    assert flow.exponent == pytest.approx([0.1 + 0.6 * 0.1, 0.6 * 0.1])
    assert loads(line, flow)["final_yield"] == pytest.approx(0.1 + 0.06 + 0.1)


def by_steps(line: Line, intensity: np.ndarray, gates: Gates, weight: np.ndarray, per_escape: float) -> list[Any]:
    """Inherited, hidden, exponents, sums from the start and the gradient, one step after another."""
    n, feeds = line.n_steps, line.feeds.tolist()
    inherited, hidden, exponent, gathered = np.zeros(n), np.zeros(n), np.zeros(n), weight.copy()
    for i in range(n):
        hidden[i] = (1.0 - gates.finds[i]) * intensity[i] + (1.0 - gates.earlier[i]) * inherited[i]
        if feeds[i] >= 0:
            inherited[feeds[i]] += line.per_unit[i] * hidden[i]
            gathered[feeds[i]] += gathered[i]
    found = gates.finds * intensity + gates.earlier * inherited
    scrap = (1.0 - gates.reworked) * found - np.log1p(-gates.rejects * gates.lost)
    slope, per_inherited = np.zeros(n), np.zeros(n)
    for i in range(n - 1, -1, -1):
        last = feeds[i] < 0
        exponent[i] = scrap[i] + (0.0 if last else exponent[feeds[i]])
        per_hidden = per_escape if last else line.per_unit[i] * per_inherited[feeds[i]]
        slope[i] = gates.finds[i] * weight[i] + (1.0 - gates.finds[i]) * per_hidden
        per_inherited[i] = gates.earlier[i] * weight[i] + (1.0 - gates.earlier[i]) * per_hidden
    return [inherited, hidden, exponent, gathered, slope]


TREES = {
    "one step": lambda n, _: np.zeros(0, dtype=int),
    "serial": lambda n, _: np.arange(1, n),
    "all feed the last": lambda n, _: np.full(n - 1, n - 1),
    "near by": lambda n, draw: np.minimum(np.arange(n - 1) + draw.integers(1, 5, n - 1), n - 1),
    "anywhere": lambda n, draw: np.arange(n - 1) + 1 + (draw.random(n - 1) * np.arange(n - 1, 0, -1)).astype(int) % n,
    "two long arms": lambda n, _: np.minimum(np.arange(n - 1) + 2, n - 1),
    "comb": lambda n, _: np.where(np.arange(n - 1) % 2, np.arange(n - 1) + 2, np.arange(n - 1) + 1).clip(max=n - 1),
}


@pytest.mark.parametrize("size", [1, 2, 7, SHORT, SHORT + 1, 3_001])
@pytest.mark.parametrize("shape", TREES)
def test_long_trees_at_once_are_what_one_step_after_another_gives(shape: str, size: int) -> None:
    """Figures over twelve decades, gates that find all, some and nothing; each figure to its own last digits."""
    draw = np.random.default_rng(size)
    n = 1 if shape == "one step" else size
    feeds = np.append(TREES[shape](n, draw), -1).astype(np.int64)
    assert np.all(feeds[:-1] > np.arange(n - 1))
    per_unit = np.where(draw.random(n) < 0.02, 3.0, 1.0)
    nothing = np.zeros(n)
    line = Line(feeds, per_unit, np.ones(n), nothing, nothing, 1.0, 1.0)
    finds, earlier = (draw.choice([0.0, 0.3, 0.999, 1.0], n) for _ in range(2))
    gates = Gates(finds, 0.5 * earlier, 0.01 * draw.random(n), draw.random(n), draw.random(n), nothing, nothing)
    intensity, weight = 10.0 ** draw.uniform(-15.0, -3.0, n), 10.0 ** draw.uniform(-6.0, 6.0, n)
    flow = run(line, intensity, gates)
    got = [flow.inherited, flow.hidden, flow.exponent, from_start(line, weight), gradient(line, gates, weight, 7.0)]
    for name, mine, wanted in zip(
        ("inherited", "hidden", "exponent", "from start", "gradient"),
        got,
        by_steps(line, intensity, gates, weight, 7.0),
        strict=True,
    ):
        np.testing.assert_allclose(mine, wanted, rtol=1e-13, atol=0.0, err_msg=name)
