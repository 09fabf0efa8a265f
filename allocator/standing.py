"""Where a step stands at a given sigma level, and where the whole line stands today."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from allocator.capability import index_after_shift, log_good, study_index
from allocator.choice import flow_of_states
from allocator.flow import OVERFLOW, Flow, Line, gradient, money, yields
from allocator.problem import Problem
from allocator.results import Level, TodayLine, records
from allocator.states import States

Array = NDArray[np.float64]
LOTS = (100, 1_000, 10_000)


def levels_at(states: States, z: Array, items_per_unit: Array) -> tuple[Level, ...]:
    """Return the level of every step in its state at sigma level z, with its indices and defect figures.

    Parameters
    ----------
    states : States
        One per step.
    z, items_per_unit : shape (n_steps,) [σ, items per finished unit]
    """
    levels, log_p = states.levels, states.log_p_at(z)
    whole = np.where(states.has_cp, z / 3.0, np.nan).tolist()
    columns = {
        "sigma_level": z.tolist(),
        "shift": levels.shift.tolist(),
        "k": levels.k.tolist(),
        "sides": levels.sides.tolist(),
        "cp": [cp if two else None for cp, two in zip(whole, states.has_cp.tolist(), strict=True)],
        "cpk": study_index(z, levels.k).tolist(),
        "cpk_after_shift": index_after_shift(z, levels.k, levels.shift).tolist(),
        "dpmo": (1e6 * np.exp(log_p)).tolist(),
        "ppm": (-1e6 * np.expm1(states.opportunities * log_good(log_p))).tolist(),
        "dpu": (items_per_unit * states.opportunities * np.exp(log_p)).tolist(),
    }
    return records(Level, columns)


def levels_today(problem: Problem) -> tuple[Level, ...]:
    """Return today's level of every step."""
    today = problem.options.today
    return levels_at(today, today.levels.sigma_level, problem.line.per_finished)


def defects_per_unit(states: States, z: Array, items_per_unit: Array) -> float:
    """Return the expected defects per finished unit, Σ q·n·p, with every step in its state at sigma level z."""
    return float(sum((items_per_unit * states.opportunities * np.exp(states.log_p_at(z))).tolist()))


def flow_today(problem: Problem) -> Flow:
    """Return today's flow: nothing bought, nothing improved."""
    return flow_of_states(problem.line, problem.options.today)


def names_fed(problem: Problem) -> list[str | None]:
    """Return the name of the step that each step feeds, None for the last."""
    names = [step.name for step in problem.scenario.step]
    return [None if fed < 0 else names[fed] for fed in problem.line.feeds.tolist()]


def shipped_known(problem: Problem, states: States) -> bool:
    """Return whether escapes are known: some gate of the line states an inspection, or they are what is asked."""
    asked = problem.split == "shipped_yield" or "shipped_yield" in problem.budgets
    return asked or any(inspection is not None for inspection in states.inspection)


def line_today(problem: Problem) -> TodayLine:
    """Return where the line stands; its money is left out where the flow overflows, with the reason."""
    flow, today = flow_today(problem), problem.options.today
    over = float(np.max(flow.exponent))
    seen = yields(problem.line, flow, shipped_known(problem, today))
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
        dpu=defects_per_unit(today, today.levels.sigma_level, problem.line.per_finished),
        bad_per_lot=tuple((lot, lot * seen.final_loss) for lot in LOTS),
        escaped_per_lot=() if seen.shipped_loss is None else tuple((lot, lot * seen.shipped_loss) for lot in LOTS),
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
