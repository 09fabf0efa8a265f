"""Where does the line stand today: yields, defects per unit, and where defects and money are lost (they differ)."""

from __future__ import annotations

import math

import numpy as np

from allocator.cautions import cautions_of_input, what_is_assumed
from allocator.flow import first_pass, inspection_cost, rework_cost, scrap_lost_at
from allocator.problem import Problem, pose
from allocator.results import StepToday, Today
from allocator.scenario.model import Scenario
from allocator.standing import flow_today, levels_today, line_today, names_fed


def see_today(scenario: Scenario) -> Today:
    """Return where the line stands, nothing bought and nothing improved.

    Parameters
    ----------
    scenario : Scenario
        As read by `read_scenario`.
    """
    problem = pose(scenario)
    return Today(
        title=scenario.title,
        currency=scenario.currency,
        shipped_per_year=problem.line.shipped,
        line=line_today(problem),
        rows=_steps(problem),
        targets={name: math.exp(-budget) for name, budget in problem.budgets.items()},
        target_losses={name: -math.expm1(-budget) for name, budget in problem.budgets.items()},
        assumed=what_is_assumed(problem),
        cautions=cautions_of_input(problem),
    )


def _steps(problem: Problem) -> tuple[StepToday, ...]:
    line, flow, levels = problem.line, flow_today(problem), levels_today(problem)
    with np.errstate(over="ignore", invalid="ignore"):
        scrap, rework = scrap_lost_at(line, flow), rework_cost(line, flow)
        inspection = inspection_cost(line, flow.gates)
        starts = line.shipped * line.per_finished * np.exp(flow.exponent)
        lost = scrap + rework + inspection
        money_share = lost / lost.sum() if 0.0 < lost.sum() < math.inf else np.zeros(line.n_steps)
    all_defects = sum(level.dpu for level in levels)
    yields_, found, feeds = first_pass(flow), line.per_finished * flow.found, names_fed(problem)
    return tuple(
        StepToday(
            step=step.name,
            supplier=step.supplier,
            level=levels[i],
            first_pass_yield=float(yields_[i]),
            starts_per_year=float(starts[i]),
            scrap=float(scrap[i]),
            rework=float(rework[i]),
            inspection=float(inspection[i]),
            defect_share=levels[i].dpu / all_defects if all_defects else 0.0,
            money_share=float(money_share[i]),
            feeds=feeds[i],
            found=float(found[i]),
        )
        for i, step in enumerate(problem.scenario.step)
    )
