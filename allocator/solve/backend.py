"""Hand a linear or mixed-integer programme to HiGHS through cvxpy and bring back values, prices and the dual bound."""

from __future__ import annotations

import os
import sys
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from allocator.errors import SolverError

Array = NDArray[np.float64]
FEASIBILITY = 1e-9
"""Absolute tolerance asked of HiGHS; rows are scaled so that this is far below a defect budget."""


@dataclass(frozen=True)
class Rows:
    """A programme: min cost·x, upper rows A·x ≤ b, equal rows E·x = d, low ≤ x ≤ high, some x binary."""

    cost: Array
    upper: csr_array
    upper_limit: Array
    equal: csr_array
    equal_value: Array
    low: Array
    high: Array
    binary: NDArray[np.bool_]


@dataclass(frozen=True)
class Answer:
    """Values, a lower bound of the programme, and the prices of the rows (None for an integer solve)."""

    x: Array
    bound: float
    upper_price: Array | None
    equal_price: Array | None


def solve_rows(rows: Rows, integer: bool, relative_gap: float = 0.0, seconds: float = 60.0) -> Answer | None:
    """Solve the programme, its relaxation unless `integer`; None when it is infeasible.

    The bound of a relaxation is computed from its prices, safe against the solver's tolerances because every
    variable has finite ends (Neumaier and Shcherbina, Mathematical Programming 99, 2004); that of an integer solve is
    the dual bound of the branch-and-bound tree.

    Raises
    ------
    SolverError
        When HiGHS stops without values (a time limit before the first solution, say).
    """
    chosen = rows.binary if integer else np.zeros(len(rows.cost), dtype=bool)
    options: dict[str, Any] = {"time_limit": seconds, "output_flag": False}
    options |= {"primal_feasibility_tolerance": FEASIBILITY, "dual_feasibility_tolerance": FEASIBILITY}
    if integer:
        options |= {"mip_rel_gap": relative_gap, "mip_feasibility_tolerance": FEASIBILITY, "mip_abs_gap": 0.0}
    solved = _ask(rows, chosen, options)
    if solved.status == "unknown":
        # Now and then presolve loses its way on a sound programme; without it the answer comes.
        solved = _ask(rows, chosen, options | {"presolve": "off"})
    if solved.status == "infeasible":
        return None
    if solved.x is None:
        raise SolverError(f"HiGHS stopped without values (status {solved.status}, {seconds:.0f} s allowed)")
    if integer:
        return Answer(solved.x, solved.dual_bound, None, None)
    assert solved.upper_price is not None
    assert solved.equal_price is not None
    bound = _safe_bound(rows, solved.upper_price, solved.equal_price)
    return Answer(solved.x, bound, solved.upper_price, solved.equal_price)


@dataclass(frozen=True)
class _Solved:
    """What came back: a status, and where there are any, values, prices and the dual bound."""

    status: str
    x: Array | None = None
    upper_price: Array | None = None
    equal_price: Array | None = None
    dual_bound: float = -np.inf


def _ask(rows: Rows, chosen: NDArray[np.bool_], options: dict[str, Any]) -> _Solved:
    import cvxpy as cp  # here, because it takes a second that the price road must not pay for

    x = cp.Variable(len(rows.cost))
    if chosen.any():
        x = cp.Variable(len(rows.cost), boolean=(np.flatnonzero(chosen),))
    upper, equal = cp.Constant(rows.upper), cp.Constant(rows.equal)
    constraints = [upper @ x <= rows.upper_limit, equal @ x == rows.equal_value, x >= rows.low, x <= rows.high]
    problem = cp.Problem(cp.Minimize(rows.cost @ x), constraints)
    try:
        with _silent_stdout(), warnings.catch_warnings():
            # A stop at the time allowed is "inaccurate" to cvxpy; here its dual bound is judged, not its word.
            warnings.filterwarnings("ignore", message="Solution may be inaccurate")
            problem.solve(solver=cp.HIGHS, **options)  # type: ignore[no-untyped-call]
    except (cp.error.SolverError, ValueError):
        # cvxpy answers a status it does not know with either of the two.
        return _Solved("unknown")
    if problem.status in cp.settings.INF_OR_UNB:
        return _Solved("infeasible")
    evidence: Any = problem.solver_stats.extra_stats
    if chosen.any():
        return _Solved(str(problem.status), x.value, dual_bound=float(evidence.mip_dual_bound))
    return _Solved(str(problem.status), x.value, constraints[0].dual_value, constraints[1].dual_value)


@contextmanager
def _silent_stdout() -> Iterator[None]:
    """Keep HiGHS's banner, which it writes past Python and past its own options, out of what programs read."""
    sys.stdout.flush()
    kept, nowhere = os.dup(1), os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, 1)
    try:
        yield
    finally:
        os.dup2(kept, 1)
        os.close(kept)
        os.close(nowhere)


def reduced_costs(rows: Rows, upper_price: Array, equal_price: Array) -> Array:
    """Return what each variable costs after its rows are priced in, shape (n_variables,)."""
    return np.asarray(rows.cost + rows.upper.T @ np.maximum(upper_price, 0.0) + rows.equal.T @ equal_price)


def _safe_bound(rows: Rows, upper_price: Array, equal_price: Array) -> float:
    reduced = reduced_costs(rows, upper_price, equal_price)
    ends = np.minimum(reduced * rows.low, reduced * rows.high).sum()
    return float(ends - np.maximum(upper_price, 0.0) @ rows.upper_limit - equal_price @ rows.equal_value)
