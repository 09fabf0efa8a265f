"""What would anyone otherwise write: the same questions given to general solvers, as a competent person would.

Continuous (cvxpy): a grid of levels per step with convex weights, one matrix variable; the grid closes in on the
solution round by round. Mixed (cvxpy): one binary per way. SLSQP: levels as variables, exact slopes. Every peer yields
its plan after each round, as intensities or as chosen ways; the caller evaluates it and says when it is good enough.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from allocator import curves as cv
from allocator.flow import GATE_FIELDS, Gates
from allocator.problem import Problem
from allocator.solve.reduce import first_ways

Array = NDArray[np.float64]
LEVELS = 9
"""Levels per step in a grid."""
CLOSING = 1.5
"""Half-width of the next grid, in spacings of the last."""
ROUNDS = 14
TOLERANCE = 1e-10
TANGENTS = 4
"""Flows at which scrap gets its first tangents."""
MIP_GAP = 4e-7
"""Asked of HiGHS, so that what scrap's tangents leave out still fits into the gap compared at."""


@dataclass(frozen=True)
class Flows:
    """What couples the steps, as matrices over the steps of a line whose gates are fixed."""

    own_missed: Array
    earlier_missed: Array
    gates: Gates
    brings: sparse.csr_array
    """What each step's items bring along of the steps that feed it."""
    next: sparse.csr_array
    scrap_weight: Array
    rework_weight: Array
    per_finished: Array
    budget: float
    leaky: bool


def flows_of(problem: Problem) -> Flows:
    """Return the couplings of a posed problem with one budget of rolled yield."""
    line = problem.line
    ways, first = problem.options.ways, first_ways(problem)
    gates = Gates(*(getattr(ways.gates, name)[first] for name in GATE_FIELDS))
    n, fed = line.n_steps, np.flatnonzero(line.feeds >= 0)
    onward = sparse.csr_array((np.ones(len(fed)), (fed, line.feeds[fed])), shape=(n, n))
    brings = sparse.csr_array((line.per_unit[fed], (line.feeds[fed], fed)), shape=(n, n))
    share = line.shipped * line.per_finished
    return Flows(
        1.0 - gates.finds, 1.0 - gates.earlier, gates, brings, onward, share * line.net_cost,
        share * gates.rework_cost * gates.reworked, line.per_finished, problem.budgets["rolled_yield"],
        bool((gates.finds < 1.0).any()),
    )  # fmt: skip


def exponents(cp: Any, flows: Flows, delta: Any) -> tuple[Any, Any, list[Any]]:
    """Return flow exponents and found defects as cvxpy expressions of the intensities, and the rows that tie them."""
    n, gates, rows = len(flows.per_finished), flows.gates, []
    found = cp.multiply(gates.finds, delta)
    if flows.leaky:
        hidden = cp.Variable(n)
        came_in = flows.brings @ hidden
        found = found + cp.multiply(gates.earlier, came_in)
        rows.append(hidden == cp.multiply(flows.own_missed, delta) + cp.multiply(flows.earlier_missed, came_in))
    exponent = cp.Variable(n)
    scrap = cp.multiply(1.0 - gates.reworked, found) + gates.scrap_of_good
    rows.append(exponent == scrap + flows.next @ exponent)
    return exponent, found, rows


def scrap_by_tangents(cp: Any, flows: Flows, exponent: Any, seen: list[Array]) -> tuple[Any, list[Any]]:
    """Return scrap for a linear solver: above its tangents at the flows seen."""
    thrown = cp.Variable(len(flows.scrap_weight))
    rows = [thrown >= np.expm1(at) + cp.multiply(np.exp(at), exponent - at) for at in seen]
    return flows.scrap_weight @ thrown, rows


# ------------------------------------------------------------------------------------------------ continuous


def grid_in_cvxpy(problem: Problem, solver: str) -> Iterator[Array]:
    """Yield the intensities after each round of a closing grid, by Clarabel (scrap exact) or HiGHS (by tangents)."""
    import cvxpy as cp

    flows, ways = flows_of(problem), problem.options.ways
    centre, width = 0.5 * (ways.z_low + ways.z_high), 0.5 * (ways.z_high - ways.z_low)
    seen: list[Array] = []
    for _ in range(ROUNDS):
        z = np.clip(centre[:, None] + width[:, None] * np.linspace(-1.0, 1.0, LEVELS), *_ends(ways))
        delta, cost = _on_grid(ways.curves, z)
        weights = cp.Variable(z.shape, nonneg=True)
        chosen = cp.sum(cp.multiply(delta, weights), axis=1)
        exponent, found, rows = exponents(cp, flows, chosen)
        rows += [cp.sum(weights, axis=1) == 1.0, flows.per_finished @ chosen / flows.budget <= 1.0]
        if solver == "CLARABEL":
            scrap = flows.scrap_weight @ (cp.exp(exponent) - 1.0)
        else:
            seen = seen or _first_seen(flows, delta)
            scrap, more = scrap_by_tangents(cp, flows, exponent, seen)
            rows += more
        law = cp.sum(cp.multiply(cost, weights))
        size = float(cost.sum() / LEVELS + flows.scrap_weight.sum())
        asked = cp.Problem(cp.Minimize((scrap + law + flows.rework_weight @ found) / size), rows)
        _solve(asked, solver, OPTIONS[solver])
        seen.append(np.asarray(exponent.value))
        now = np.clip((delta * weights.value).sum(axis=1), ways.delta_low, ways.delta_high)
        yield now
        settled = np.clip(cv.sigma(ways.curves, now), ways.z_low, ways.z_high)
        at_edge = np.abs(settled - centre) > 0.9 * width
        centre, width = settled, np.where(at_edge, width, CLOSING / (LEVELS - 1) * width)


OPTIONS: dict[str, dict[str, Any]] = {
    "CLARABEL": {"tol_gap_abs": TOLERANCE, "tol_gap_rel": TOLERANCE, "tol_feas": TOLERANCE},
    "HIGHS": {
        "highs_options": {
            "solver": "ipm",  # half the simplex's time on these
            "primal_feasibility_tolerance": TOLERANCE,
            "dual_feasibility_tolerance": TOLERANCE,
        }
    },
}


MIXED_OPTIONS = {"mip_rel_gap": MIP_GAP, "mip_abs_gap": 0.0, "mip_feasibility_tolerance": 1e-9}


def _solve(asked: Any, solver: str, options: dict[str, Any]) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # "may be inaccurate": how accurate is measured from the plan
        asked.solve(solver=solver, **options)


def _ends(ways: Any) -> tuple[Array, Array]:
    return ways.z_low[:, None], ways.z_high[:, None]


def _on_grid(curves: cv.Curves, z: Array) -> tuple[Array, Array]:
    """Return intensity and yearly law cost at every level of a grid, shape as `z`."""
    each = curves.take(np.repeat(np.arange(len(z)), z.shape[1]))
    return cv.intensity(each, z.ravel()).reshape(z.shape), cv.smooth_cost(each, z.ravel()).reshape(z.shape)


def _first_seen(flows: Flows, delta: Array) -> list[Array]:
    """Return flow exponents spread between the best and the worst that a line can have."""
    best, worst = (_exponents_at(flows, end) for end in (delta.min(axis=1), delta.max(axis=1)))
    return [best + share * (worst - best) for share in np.linspace(0.0, 1.0, TANGENTS)]


def _exponents_at(flows: Flows, delta: Array) -> Array:
    from scipy.sparse.linalg import spsolve

    n, gates = len(delta), flows.gates
    eye = sparse.eye_array(n, format="csr")
    hidden = spsolve((eye - sparse.diags_array(flows.earlier_missed) @ flows.brings).tocsc(), flows.own_missed * delta)
    found = gates.finds * delta + gates.earlier * (flows.brings @ hidden)
    scrap = (1.0 - gates.reworked) * found + gates.scrap_of_good
    return np.asarray(spsolve((eye - flows.next).tocsc(), scrap))


def slsqp(problem: Problem, evaluate: Callable[[Array], tuple[float, Array]]) -> Iterator[Array]:
    """Yield the intensities that SLSQP finds, levels as variables; `evaluate` gives running money and its slope."""
    from scipy.optimize import minimize

    flows, ways = flows_of(problem), problem.options.ways
    low, span = ways.z_low, ways.z_high - ways.z_low
    size = evaluate(ways.delta_high)[0] + float(np.sum(ways.curves.scale))

    def cost(x: Array) -> tuple[float, Array]:
        delta, rise, _ = cv.intensity_slopes(ways.curves, low + x * span)
        law, law_rise, _ = cv.smooth_slopes(ways.curves, delta)
        running, slope = evaluate(delta)
        return (running + float(np.sum(law))) / size, (slope + law_rise) * rise * span / size

    def room(x: Array) -> float:
        return 1.0 - float(flows.per_finished @ cv.intensity(ways.curves, low + x * span)) / flows.budget

    def room_slope(x: Array) -> Array:
        return -flows.per_finished * cv.intensity_slopes(ways.curves, low + x * span)[1] * span / flows.budget

    found = minimize(
        cost, np.full(len(low), 0.5), jac=True, method="SLSQP", bounds=[(0.0, 1.0)] * len(low),
        constraints=[{"type": "ineq", "fun": room, "jac": room_slope}], options={"ftol": 1e-14, "maxiter": 1000},
    )  # fmt: skip
    yield cv.intensity(ways.curves, low + np.clip(found.x, 0.0, 1.0) * span)


# ------------------------------------------------------------------------------------------------ mixed


def whole_in_highs(problem: Problem) -> Iterator[NDArray[np.int64]]:
    """Yield the chosen rows of the whole mixed problem in HiGHS, scrap above tangents that each round adds to."""
    import cvxpy as cp

    flows, ways, n = flows_of(problem), problem.options.ways, problem.line.n_steps
    offers = len(ways) // n
    delta, cost = ways.delta_low.reshape(n, offers), ways.fixed_cost.reshape(n, offers)
    seen = _first_seen(flows, delta)
    for _ in range(ROUNDS):
        picks = cp.Variable((n, offers), boolean=True)
        chosen = cp.sum(cp.multiply(delta, picks), axis=1)
        exponent, found, rows = exponents(cp, flows, chosen)
        scrap, tangents = scrap_by_tangents(cp, flows, exponent, seen)
        rows += [*tangents, cp.sum(picks, axis=1) == 1.0, flows.per_finished @ chosen / flows.budget <= 1.0]
        size = float(cost.sum() / offers + flows.scrap_weight.sum())
        bought = cp.sum(cp.multiply(cost, picks))
        asked = cp.Problem(cp.Minimize((scrap + bought + flows.rework_weight @ found) / size), rows)
        _solve(asked, "HIGHS", MIXED_OPTIONS)
        taken = np.argmax(picks.value, axis=1)
        seen.append(_exponents_at(flows, delta[np.arange(n), taken]))
        yield np.arange(n) * offers + taken
