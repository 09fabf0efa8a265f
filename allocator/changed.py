"""The same question at another volume, at another price, or with an alternative of another capability."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from allocator.flow import build_line
from allocator.picks import recoveries
from allocator.problem import Problem
from allocator.scenario.levels import Levels, resolve_all
from allocator.scenario.model import Alternative, Capability, Costs
from allocator.variants import ALTERNATIVE, PURCHASE, Thing, ways_that_take
from allocator.ways import Lines, build_options

Array = NDArray[np.float64]


def at_volume(problem: Problem, factor: float) -> Problem:
    """Return the question at `factor` times as many units shipped per year."""
    scenario = problem.scenario
    demand = scenario.demand.model_copy(update={"shipped_per_year": scenario.demand.shipped_per_year * factor})
    scenario = scenario.model_copy(update={"demand": demand})
    line = build_line(scenario)
    return replace(problem, scenario=scenario, line=line, options=build_options(scenario, line))


def costs_of(problem: Problem, thing: Thing) -> Costs:
    """Return the table that states what an alternative or a shared purchase costs."""
    if thing.kind == PURCHASE:
        return problem.scenario.purchase[thing.place]
    return alternative_of(problem, thing)


def alternative_of(problem: Problem, thing: Thing) -> Alternative:
    """Return the alternative that a thing stands for."""
    assert thing.kind == ALTERNATIVE
    return problem.options.ways.text.picks.alternatives[thing.place]


def cost_per_price(problem: Problem, thing: Thing) -> float | None:
    """Return the yearly cost of one unit of price, CRF(rate, life) [1/year]; None where no horizon is stated."""
    costs, demand = costs_of(problem, thing), problem.scenario.demand
    if demand.discount_rate is None or (costs.life_years is None and demand.years is None):
        return None
    lives = np.array([np.nan if costs.life_years is None else costs.life_years])
    return float(recoveries(problem.scenario, lives)[0])


def at_price(problem: Problem, thing: Thing, price: float) -> Problem:
    """Return the question with the price of an alternative or a shared purchase changed, its trade-in kept."""
    more, per_price = price - costs_of(problem, thing).price, cost_per_price(problem, thing)
    assert per_price is not None, "a price was stated, so a horizon was too"
    options = problem.options
    if thing.kind == PURCHASE:
        cost, capital = options.purchase_cost.copy(), options.purchase_capital.copy()
        cost[thing.place] += per_price * more
        capital[thing.place] += more
        return replace(problem, options=replace(options, purchase_cost=cost, purchase_capital=capital))
    taken = ways_that_take(problem, thing).astype(float)
    ways = replace(
        options.ways,
        fixed_cost=options.ways.fixed_cost + per_price * more * taken,
        capital=options.ways.capital + more * taken,
    )
    return replace(problem, options=replace(options, ways=ways))


def at_law_price(problem: Problem, step: int, factor: float) -> Problem:
    """Return the question with the scale of one step's law multiplied by `factor`, quotes and all."""
    ways = problem.options.ways
    mine = ways.step == step
    pieces = {w: (delta, cost * factor if mine[w] else cost) for w, (delta, cost) in ways.lines.pieces.items()}
    curves = replace(ways.curves, scale=np.where(mine, ways.curves.scale * factor, ways.curves.scale))
    ways = replace(ways, curves=curves, lines=Lines(len(ways), pieces))
    return replace(problem, options=replace(problem.options, ways=ways))


def level_of(problem: Problem, thing: Thing) -> Levels:
    """Return the level that an alternative's capability stands for, as one row."""
    own, at = alternative_of(problem, thing).capability, np.array([thing.step])
    assert own is not None
    today = problem.options.today
    return resolve_all([own], today.opportunities[at], today.levels.take(at))


def at_level(problem: Problem, thing: Thing, z: float) -> Problem:
    """Return the question with an alternative's capability at sigma level z, its shift, offset and sides kept."""
    level, scenario = level_of(problem, thing)[0], problem.scenario
    capability = Capability(sigma_level=z, shift=level.shift, k=level.k, sides=2 if level.sides == 2 else 1)
    step = scenario.step[thing.step]
    changed = tuple(
        a.model_copy(update={"capability": capability}) if a.name == thing.name else a for a in step.alternative
    )
    steps = list(scenario.step)
    steps[thing.step] = step.model_copy(update={"alternative": changed})
    scenario = scenario.model_copy(update={"step": tuple(steps)})
    return replace(problem, scenario=scenario, options=build_options(scenario, problem.line))
