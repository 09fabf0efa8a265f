"""Where a step stands at a given sigma level, and where the whole line stands today."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from allocator.capability import index_after_shift, log_good, study_index
from allocator.choice import flow_of_states
from allocator.flow import OVERFLOW, Flow, Line, gradient, money, yields
from allocator.problem import Problem
from allocator.results import Level, TodayLine
from allocator.state import State, has_cp

LOTS = (100, 1_000, 10_000)


def level_at(state: State, z: float, items_per_unit: float) -> Level:
    """Return the level of a step in a state at sigma level z, with its indices and defect figures."""
    log_p = state.log_p_at(z)
    delta = -state.opportunities * float(log_good(log_p))
    k, shift = state.level.k, state.level.shift
    return Level(
        sigma_level=z,
        shift=shift,
        k=k,
        sides=state.level.sides,
        cp=z / 3.0 if has_cp(state) else None,
        cpk=float(study_index(z, k)),
        cpk_after_shift=float(index_after_shift(z, k, shift)),
        dpmo=1e6 * math.exp(log_p),
        ppm=-1e6 * math.expm1(-delta),
        dpu=items_per_unit * state.opportunities * math.exp(log_p),
    )


def levels_today(problem: Problem) -> tuple[Level, ...]:
    """Return today's level of every step."""
    q = problem.line.per_finished
    return tuple(level_at(s, s.level.sigma_level, float(q[i])) for i, s in enumerate(problem.options.today))


def flow_today(problem: Problem) -> Flow:
    """Return today's flow: nothing bought, nothing improved."""
    return flow_of_states(problem.line, problem.options.today)


def shipped_known(problem: Problem, states: tuple[State, ...]) -> bool:
    """Return whether escapes are known: some gate of the line states an inspection, or they are what is asked."""
    asked = problem.split == "shipped_yield" or "shipped_yield" in problem.budgets
    return asked or any(state.inspection is not None for state in states)


def line_today(problem: Problem) -> TodayLine:
    """Return where the line stands; its money is left out where the flow overflows, with the reason."""
    flow = flow_today(problem)
    over = float(np.max(flow.exponent))
    seen = yields(problem.line, flow, shipped_known(problem, problem.options.today))
    reason = None
    if over > OVERFLOW:
        reason = (
            f"one shipped unit would need e^{over:,.0f} units started (flow exponent above {OVERFLOW:.0f}); "
            "the cost of today's line is beyond any number"
        )
    return TodayLine(
        yields=seen,
        money=money(problem.line, flow, 0.0) if reason is None else None,
        money_reason=reason,
        dpu=sum(level.dpu for level in levels_today(problem)),
        bad_per_lot=tuple((lot, lot * seen.rolled_loss) for lot in LOTS),
    )


def load_shares(line: Line, flow: Flow, split: str) -> NDArray[np.float64]:
    """Return each step's part of the used budget of one yield.

    From defects that arise here, wherever found, and this gate's false rejects. Shape (n_steps,); sums to 1, or is
    all 0 where nothing is used.
    """
    parts = load_parts(line, flow, split)
    total = float(parts.sum())
    return parts / total if total > 0.0 else np.zeros(line.n_steps)


def load_parts(line: Line, flow: Flow, split: str) -> NDArray[np.float64]:
    """Return each step's part of the used budget of one yield itself, shape (n_steps,)."""
    gates, q = flow.gates, line.per_finished
    if split == "rolled_yield":
        return q * flow.intensity
    if split == "shipped_yield":
        return gradient(line, gates, np.zeros(line.n_steps), 1.0) * flow.intensity
    slope = gradient(line, gates, q * (1.0 - gates.reworked), 1.0)
    return slope * flow.intensity + q * gates.scrap_of_good
