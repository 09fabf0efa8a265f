"""Is a question with something banned, forced or held the one that a rewritten scenario would ask?"""

from __future__ import annotations

import copy
import math
from functools import partial
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner

from allocator.cli import app
from allocator.errors import RangeError
from allocator.plan import make_plan
from allocator.problem import Problem, pose
from allocator.results import Plan
from allocator.scenario.read import read_scenario, scenario_from_dict
from allocator.solve.road import solve
from allocator.variants import Thing, find_thing, forced, held, held_at_today, things, without
from tests.reference.combination import Way
from tests.reference.generate import random_scenario
from tests.reference.optimum import optimum

FOLDER = Path(__file__).parent.parent / "scenarios"
GAP = 1e-6
"""Two questions that must have the same answer; each is solved to 1e-7 or better at these sizes."""
SEEDS = (1, 18, 21, 42, 65, 67, 86, 96, 106, 125, 141, 150, 217, 228)
"""Small scenarios within reach, with alternatives, purchases and laws; each thing is banned and forced in turn."""


def total(problem: Problem) -> float:
    if problem.options.no_way:
        return math.inf
    outcome = solve(problem).outcome
    return math.inf if outcome is None else outcome.money.total


def asked(scenario: dict[str, Any], **changes: Any) -> Problem:
    return pose(scenario_from_dict(scenario | changes))


def banned_by_hand(scenario: dict[str, Any], thing: Thing) -> dict[str, Any]:
    """The scenario written anew without the thing."""
    changed = copy.deepcopy(scenario)
    if thing.kind == "purchase":
        for step in changed["step"]:
            step["alternative"] = [a for a in step.get("alternative", []) if a.get("uses") != thing.name]
        return changed
    step = changed["step"][thing.step]
    if thing.kind == "law":
        del step["improve"]
    else:
        step["alternative"] = [a for a in step["alternative"] if a["name"] != thing.name]
    return changed


@pytest.mark.parametrize("seed", SEEDS)
def test_banned_and_forced_against_the_reference(seed: int) -> None:
    """Banned is the optimum of the scenario written without it, forced the best of all combinations that take it."""
    scenario = random_scenario(seed)
    problem = asked(scenario)
    assert things(problem)
    for thing in things(problem):
        want = optimum(banned_by_hand(scenario, thing))["total"]
        assert total(without(problem, thing)) == pytest.approx(want, rel=GAP, abs=GAP), thing
        want = optimum(scenario, taking=partial(takes, scenario, thing))["total"]
        got = min((total(one) for one in forced(problem, thing)), default=math.inf)
        assert got == pytest.approx(want, rel=GAP, abs=GAP), thing


def takes(scenario: dict[str, Any], thing: Thing, ways: list[Way]) -> bool:
    """Whether a combination takes the thing (every one may take a law)."""
    if thing.kind == "law":
        return True
    chosen = [a for i, way in enumerate(ways) for a in way.alternatives if thing.step in (-1, i)]
    return thing.name in [a.get("uses") if thing.kind == "purchase" else a["name"] for a in chosen]


# ---------------------------------------------------------------- a line that can be followed by hand


def cell(**more: Any) -> dict[str, Any]:
    """Two steps; the first has a law, a machine and an off-centre process, the second a law and a floor."""
    law = {"law": "decade", "per_year": 1_000.0, "up_to": {"dpmo": 20}}
    turn = {"name": "turn", "scrap_cost": 2.0, "capability": {"cp": 1.0, "cpk": 0.9}, "improve": law | {"up_to": 5.0}}
    machine = {"name": "machine", "capability": {"cp": 1.4}, "price": 9_000.0}
    press = {
        "name": "press",
        "scrap_cost": 3.0,
        "capability": {"dpmo": 4_000},
        "improve": law,
        "at_least": {"dpmo": 900},
    }
    return {
        "demand": {"shipped_per_year": 50_000, "years": 5, "discount_rate": 0.08},
        "target": {"final_yield": 0.998},
        "step": [turn | {"alternative": [machine]}, press],
    } | more


@pytest.mark.parametrize(
    ("key", "value", "sigma"),
    [("sigma_level", 4.2, 4.2), ("cpk", 1.2, 4.0), ("cpk", 1.08, 3.6)],  # k = 0.1, so z = 3·Cpk/0.9
)
def test_a_level_held_is_the_level_of_the_plan(key: str, value: float, sigma: float) -> None:
    plan = make_plan(scenario_from_dict(cell()), hold={"turn": {key: value}}, without=["machine"])
    assert plan.reached
    assert plan.rows[0].target.sigma_level == pytest.approx(sigma, rel=1e-12)
    # A decade law of 1,000 a year: what it asks for is the fall of the defects in tenfold cuts.
    cuts = math.log10(plan.rows[0].today.dpmo / plan.rows[0].target.dpmo)
    assert plan.rows[0].improvement == pytest.approx(1_000.0 * cuts, rel=1e-9)


def test_holding_at_the_plans_own_level_costs_nothing() -> None:
    scenario = scenario_from_dict(cell())
    free = make_plan(scenario)
    assert free.money is not None
    plan = make_plan(scenario, hold={"press": {"dpmo": free.rows[1].target.dpmo}})
    assert plan.cost_of_restraint == pytest.approx(0.0, abs=GAP * free.money.total)


@pytest.mark.parametrize("ppm", [200.0, 700.0])
def test_a_level_held_against_the_scenario_fixed_there(ppm: float) -> None:
    """Held is the same as a step that stands there, its law's bill paid apart."""
    scenario = cell()
    plan = make_plan(scenario_from_dict(scenario), hold={"press": {"ppm": ppm}})
    press = scenario["step"][1] | {"capability": {"ppm": ppm}, "fixed": True}
    del press["improve"]
    fixed = optimum(scenario | {"step": [scenario["step"][0], press]})["total"]
    assert plan.money is not None
    assert plan.money.total == pytest.approx(fixed + 1_000.0 * math.log10(4_000 / ppm), rel=GAP)


def test_a_concession_costs_nothing_at_the_step_itself() -> None:
    """A supplier who falls back behind today is not paid for it, and the buyer's machine is not held down to it."""
    scenario = cell(target={})
    plan = make_plan(scenario_from_dict(scenario), hold={"turn": {"sigma_level": 2.8}})
    assert plan.rows[0].target.sigma_level == 2.8
    assert plan.rows[0].improvement == 0.0
    assert plan.rows[0].alternatives == ()
    assert plan.cost_of_restraint is not None
    assert plan.cost_of_restraint > 0.0


def test_a_refusal_keeps_capability_but_leaves_the_gate_free() -> None:
    scenario = cell(target={"escape_cost": 400.0})
    scenario["step"][0]["inspection"] = {"finds": 0.5}
    look = {"name": "look twice", "group": "gate", "inspection": {"finds": 0.9, "per_item": 0.02}}
    centre = {"name": "centre it", "group": "setting", "k": 0.0}
    scenario["step"][0]["alternative"] += [look, centre]
    problem = asked(scenario)
    solved = solve(held_at_today(problem, "turn"))
    assert solved.outcome is not None
    assert solved.outcome.choice.z[0] == problem.options.today.levels.sigma_level[0]
    text = solved.problem.options.ways.text[int(solved.outcome.choice.rows[0])]
    assert text.alternatives == ("look twice",)
    assert solved.outcome.improvement[0] == 0.0


@pytest.mark.parametrize("safety", [False, True])
@pytest.mark.parametrize("level", [{"dpmo": 1_000.0}, {"sigma_level": 2.0}])
def test_no_step_is_held_below_its_floor(safety: bool, level: dict[str, float]) -> None:
    scenario = cell()
    scenario["step"][1]["safety"] = safety
    words = "safety floor is at most 900 dpmo" if safety else "its floor is at most 900 dpmo"
    with pytest.raises(RangeError, match=words):
        make_plan(scenario_from_dict(scenario), hold={"press": level})
    with pytest.raises(RangeError, match=r"today's level: its (safety )?floor"):
        held_at_today(asked(scenario), "press")
    kept = make_plan(scenario_from_dict(scenario), hold={"press": {"dpmo": 899.0}})
    assert kept.rows[1].target.dpmo == pytest.approx(899.0)


def test_without_the_law_a_floor_may_be_out_of_reach() -> None:
    plan = make_plan(scenario_from_dict(cell()), without=["press: improve"])
    assert not plan.reached
    assert plan.binding[0].step == "press"
    assert plan.restraint is not None
    assert plan.restraint.total_unrestrained is not None
    assert plan.cost_of_restraint is None


def test_a_shared_purchase_forced_is_used_somewhere() -> None:
    scenario = cell(purchase=[{"name": "cooler", "price": 900_000.0}])
    for step in scenario["step"]:
        step["alternative"] = [{"name": "cooled", "uses": "cooler", "capability": {"sigma_level": 4.5}}]
    plan = make_plan(scenario_from_dict(scenario), with_=["cooler"])
    assert [bought.name for bought in plan.purchases] == ["cooler"]
    assert any(step.alternatives == ("cooled",) for step in plan.rows)
    assert plan.cost_of_restraint is not None
    assert plan.cost_of_restraint > 100_000.0
    with pytest.raises(RangeError, match="'turn: cooled', 'press: cooled'"):
        make_plan(scenario_from_dict(scenario), without=["cooled"])
    with pytest.raises(RangeError, match="cannot be forced"):
        make_plan(scenario_from_dict(scenario), with_=["turn=cooled"], without=["cooler"])


@pytest.mark.parametrize(
    ("question", "words"),
    [
        ({"without": ["machin"]}, "did you mean 'machine'"),
        ({"with_": ["turn: improv"]}, "did you mean 'turn: improve'"),
        ({"without": ["improve"]}, "say which: 'turn: improve', 'press: improve'"),
        ({"hold": {"turm": {"cpk": 1.0}}}, "did you mean 'turn'"),
        ({"hold": {"turn": {"cpm": 1.0}}}, "allowed are sigma_level, cpk, dpmo, ppm"),
        ({"hold": {"turn": {"cpk": math.nan}}}, "must lie above 0"),
        ({"hold": {"turn": {"cpk": 3.0}}}, "reaches sigma level 3 to"),
        ({"hold": {"turn": {}}}, "one figure"),
    ],
)
def test_what_is_not_there_is_refused_with_a_hint(question: dict[str, Any], words: str) -> None:
    with pytest.raises(RangeError, match=words):
        make_plan(scenario_from_dict(cell()), **question)


def test_the_best_yield_for_the_money_under_a_restraint() -> None:
    scenario = scenario_from_dict(cell())
    plans: list[Plan] = [make_plan(scenario, spend=12_000.0, without=gone) for gone in ([], ["machine"])]
    losses = [plan.yields.final_loss for plan in plans if plan.yields is not None]
    assert losses[0] <= losses[1]
    assert plans[1].restraint is not None
    assert plans[1].restraint.loss_unrestrained == pytest.approx(losses[0], rel=GAP)


# ---------------------------------------------------------------- on the command line


def run(*arguments: str) -> Any:
    return CliRunner().invoke(app, ["plan", str(FOLDER / "latch.toml"), *arguments])


def test_the_sheet_says_what_the_refusal_costs() -> None:
    shown = " ".join(run("--hold", "rivet=dpmo:6000").stdout.split())
    assert "Told to keep: 'rivet' held at dpmo 6000. That costs 262.70 EUR/year more than the free plan" in shown
    lost = run("--hold", "rivet=dpmo:8000")
    assert lost.exit_code == 1
    assert "Free of it the target can be met, at 12,930 EUR/year" in " ".join(lost.stdout.split())
    same = run("--without", "orbital riveter")
    assert "That costs nothing" in same.stdout


@pytest.mark.parametrize("text", ["rivet", "rivet=cpk", "=cpk:1", "rivet=cpk:high"])
def test_a_hold_that_cannot_be_read_is_refused(text: str) -> None:
    answer = run("--hold", text)
    assert answer.exit_code == 2
    assert "STEP=KEY:VALUE" in answer.output


def test_a_step_is_held_once() -> None:
    answer = run("--hold", "rivet=cpk:1", "--hold", "rivet=cpk:1.1")
    assert answer.exit_code == 2
    assert "one level only" in answer.output


def test_every_thing_of_the_pump_is_found_by_its_full_name() -> None:
    problem = pose(read_scenario(FOLDER / "pump.toml"))
    steps = problem.scenario.step
    for thing in things(problem):
        owner = "purchase" if thing.step < 0 else steps[thing.step].name
        assert find_thing(problem, f"{owner}: {thing.name}") == find_thing(problem, f"{owner}={thing.name}") == thing
    assert held(problem, "shaft", "ppm", 300.0).options.no_way == ()
