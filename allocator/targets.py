"""What must every step reach: from where it stands to its target, what is chosen, and what holds it there."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.choice import Outcome
from allocator.flow import first_pass, inspection_cost, rework_cost, scrap_lost_at
from allocator.problem import Problem
from allocator.results import Level, StepTarget, records
from allocator.scales import NAME
from allocator.scenario.model import Floor, Step
from allocator.standing import levels_at, levels_today, load_shares, names_fed
from allocator.state import floor_words
from allocator.states import floor_sigmas
from allocator.ways import Ways

Array = NDArray[np.float64]
AT_CAP = 1e-5
"""A step whose defects are within this share of its cap's is at the cap."""
AT_FLOOR = 1e-6
"""A step whose sigma level is within this share of its floor's is at the floor."""


def step_targets(problem: Problem, ways: Ways, outcome: Outcome) -> tuple[StepTarget, ...]:
    """Return the targets of an evaluated choice among some ways, in file order."""
    line, flow, steps = problem.line, outcome.flow, problem.scenario.step
    states, z = ways.states.take(outcome.choice.rows), outcome.choice.z
    target = levels_at(states, z, line.per_finished)
    least = floor_sigmas([step.at_least for step in steps], states, np.arange(len(steps)))
    binds = z <= least * (1.0 + AT_FLOOR)
    figures = {
        "budget_share": load_shares(line, flow, problem.split),
        "starts_per_year": line.shipped * line.per_finished * np.exp(flow.exponent),
        "scrap": scrap_lost_at(line, flow),
        "rework": rework_cost(line, flow),
        "inspection": inspection_cost(line, flow.gates),
        "improvement": outcome.improvement,
        "capital": outcome.capital_by_step,
        "first_pass_yield": first_pass(flow),
        "floor_binds": binds,
        "found": line.per_finished * flow.found,
    }
    return records(
        StepTarget,
        {
            "step": [step.name for step in steps],
            "supplier": [step.supplier for step in steps],
            "safety": [step.safety for step in steps],
            "feeds": names_fed(problem),
            "today": levels_today(problem),
            "target": target,
            "floor": [floor_words(step.at_least) for step in steps],
            "floor_distance": list(map(_floor_distance, steps, target, binds.tolist())),
            **_choice_words(ways, outcome),
            **{name: values.tolist() for name, values in figures.items()},
        },
    )


def _choice_words(ways: Ways, outcome: Outcome) -> dict[str, list[Any]]:
    """Return alternatives, law and cap of every step, the cap only where the step sits at it."""
    rows, text = outcome.choice.rows, ways.text.take(outcome.choice.rows)
    start, low, high = _range_of_alternatives(ways)
    least = low[np.searchsorted(start, rows, side="right") - 1]
    most = high[np.searchsorted(start, rows, side="right") - 1]
    at_cap = (least < most) & (outcome.flow.intensity <= least * (1.0 + AT_CAP))
    raised = outcome.choice.z > ways.curves.start[rows] * (1.0 + AT_FLOOR)
    return {
        "alternatives": text.alternatives(),
        "law": [NAME.get(kind) for kind in np.where(raised, text.kind, cv.NONE).tolist()],
        "at_cap": at_cap.tolist(),
        "cap": [cap if capped else None for cap, capped in zip(text.caps_in_words(), at_cap.tolist(), strict=True)],
    }


def _range_of_alternatives(ways: Ways) -> tuple[NDArray[np.int64], Array, Array]:
    """Return where the ways of each combination start, and the least and the most defects that they reach together."""
    start = np.flatnonzero(np.diff(ways.text.pick, prepend=-1))
    return start, np.minimum.reduceat(ways.delta_low, start), np.maximum.reduceat(ways.delta_high, start)


def _floor_distance(step: Step, level: Level, binds: bool) -> str | None:
    """Return how far a target stands above its step's floor, in words with the unit."""
    floor: Floor | None = step.at_least
    if floor is None:
        return None
    if binds:
        return "at the floor"
    if floor.cpk is not None:
        return f"{max(level.cpk - floor.cpk, 0.0):.2f} Cpk above the floor"
    if floor.sigma_level is not None:
        return f"{max(level.sigma_level - floor.sigma_level, 0.0):.2f} sigma above the floor"
    assert floor.dpmo is not None
    return f"{max(floor.dpmo - level.dpmo, 0.0):.4g} dpmo below the most allowed"
