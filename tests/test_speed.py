"""Is it quick enough to be asked again and again: cold commands, and a long line with equipment everywhere."""

from __future__ import annotations

import random
import resource
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest

from allocator.plan import make_plan
from allocator.scenario.read import scenario_from_dict
from tests.benchmarks.cases import end_to_end

ROOT = Path(__file__).parent.parent
RUNS = 3
"""The best of so many counts, since the machine may be busy with something else."""
MIXED_GAP = 1e-4
"""Promised up to 200 steps of 6 ways."""
MIXED_SECONDS = 10.0
TABLE_SECONDS = 22.0
"""From a table of 100,000 steps to the plan as JSON. The aim is 12 s; 12 to 16 s are measured, by how fast the machine
happens to be, so what is held here is only that it does not grow."""


def processor_seconds() -> float:
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime


def best_seconds(*arguments: str, enough: float) -> float:
    """The fastest of a few cold runs, in processor time because other tests share the cores; quick enough ends them."""
    best = float("inf")
    for _ in range(RUNS):
        began = processor_seconds()
        subprocess.run([sys.executable, "-m", "allocator", *arguments], cwd=ROOT, check=True, capture_output=True)
        best = min(best, processor_seconds() - began)
        if best <= enough:
            break
    return best


@pytest.mark.parametrize(
    ("arguments", "seconds"),
    [(("--help",), 0.5), (("plan", "scenarios/latch.toml"), 2.0), (("plan", "scenarios/pump.toml"), 4.0)],
    ids=["help", "latch", "pump"],
)
def test_a_cold_command_answers_within(arguments: tuple[str, ...], seconds: float) -> None:
    assert best_seconds(*arguments, enough=seconds) <= seconds


@pytest.mark.parametrize(
    ("scenario", "absent"),
    [
        ("latch", ("highspy", "cvxpy", "pandas", "scipy.optimize", "matplotlib")),
        ("latch_bought", ("highspy", "cvxpy", "pandas", "matplotlib")),
        ("bracket", ("highspy", "cvxpy", "pandas", "matplotlib")),
        ("parcels", ("cvxpy", "pandas", "matplotlib")),
        ("pump", ("cvxpy", "pandas", "matplotlib")),
    ],
)
def test_a_plan_loads_only_what_it_needs(scenario: str, absent: tuple[str, ...]) -> None:
    told = f"import sys; from allocator.cli import main; sys.argv = ['allocator', 'plan', 'scenarios/{scenario}.toml']"
    loaded = f"print([name for name in {absent!r} if name in sys.modules], file=sys.stderr)"
    program = f"{told}\ntry:\n    main()\nexcept SystemExit:\n    pass\n{loaded}"
    ran = subprocess.run([sys.executable, "-c", program], cwd=ROOT, check=True, capture_output=True, text=True)
    assert ran.stderr.strip() == "[]"


@pytest.mark.long
def test_a_table_of_a_hundred_thousand_steps_is_planned_within() -> None:
    taken = []
    for _ in range(RUNS):
        taken.append(end_to_end(100_000))
        assert taken[-1]["exit"] == 0
        assert taken[-1]["gap"] <= 1e-9
        if taken[-1]["seconds"] <= TABLE_SECONDS:
            break
    assert min(record["seconds"] for record in taken) <= TABLE_SECONDS


def long_line(steps: int, offers: int, seed: int = 7) -> dict[str, Any]:
    """A line in which every step has so many machines on offer, three in ten also a law; gates leak and mend."""
    draw = random.Random(seed)
    scenario: dict[str, Any] = {
        "demand": {"shipped_per_year": 200_000, "years": 8, "discount_rate": 0.08},
        "target": {"escape_cost": 150.0},
        "default": {"inspection": {"finds": 0.9, "earlier": 0.2}, "rework": {"share": 0.4, "cost": 2.0}},
        "step": [],
    }
    for i in range(steps):
        rate = 10 ** draw.uniform(-4.0, -2.5)
        step: dict[str, Any] = {"name": f"s{i}", "cost_added": round(draw.uniform(0.1, 2.0), 3)}
        step["capability"] = {"defect_rate": rate}
        step["alternative"] = [
            {
                "name": f"machine {j}",
                "capability": {"defect_rate": rate * 10 ** -draw.uniform(0.1, 1.6)},
                "price": round(10 ** draw.uniform(3.3, 5.3)),
                "per_year": round(draw.uniform(0, 2_000)),
            }
            for j in range(offers)
        ]
        if draw.random() < 0.3:
            step["improve"] = {"law": "decade", "price": round(10 ** draw.uniform(3.5, 5.0))}
        scenario["step"].append(step)
    return scenario


@pytest.mark.parametrize("share", [0.6, 0.3])
def test_two_hundred_steps_of_six_ways(share: float) -> None:
    """At a share of what the economic optimum loses, the plan comes within seconds and with its proof."""
    scenario = scenario_from_dict(long_line(200, 5))
    optimum = make_plan(scenario)
    assert optimum.yields is not None
    loss = share * optimum.yields.final_loss
    took = float("inf")
    for _ in range(RUNS):
        began = time.perf_counter()
        plan = make_plan(scenario, targets={"final_yield": loss})
        took = min(took, time.perf_counter() - began)
        assert plan.reached
        assert plan.proof is not None
        assert plan.proof.gap is not None
        assert plan.proof.gap <= MIXED_GAP
        if took <= MIXED_SECONDS:
            break
    assert took <= MIXED_SECONDS


@pytest.mark.long
def test_weighing_the_largest_scenario_takes_half_a_minute_on_two_cores() -> None:
    """49 things on 30 steps with a binding limit on capital; in processor time, 45 s measured."""
    enough = 2 * 30.0
    assert best_seconds("weigh", "scenarios/pump.toml", "--json", enough=enough) <= enough
