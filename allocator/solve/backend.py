"""A programme in rows: solved whole by HiGHS through cvxpy, and what prices of its rows prove."""

from __future__ import annotations

import os
import sys
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from allocator.errors import SolverError

if TYPE_CHECKING:
    from scipy.sparse import csr_array

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

    def with_upper(self, upper: csr_array, more: Array) -> Rows:
        """Return the programme with other upper rows, the old ones first among them, and the limits of the new ones."""
        return replace(self, upper=upper, upper_limit=np.concatenate([self.upper_limit, more]))


@dataclass(frozen=True)
class Answer:
    """Values and a lower bound of an integer programme."""

    x: Array
    bound: float


@dataclass(frozen=True)
class RelaxedAnswer:
    """Values, a lower bound of a relaxed programme, and the prices of its rows."""

    x: Array
    bound: float
    upper_price: Array
    equal_price: Array


def solve_whole(rows: Rows, relative_gap: float, seconds: float) -> Answer | None:
    """Solve the integer programme by the branch and bound of HiGHS; None when it is infeasible.

    Raises
    ------
    SolverError
        When HiGHS stops without values (a time limit before the first solution, say).
    """
    options: dict[str, Any] = {"time_limit": seconds, "output_flag": False}
    options |= {"primal_feasibility_tolerance": FEASIBILITY, "dual_feasibility_tolerance": FEASIBILITY}
    options |= {"mip_rel_gap": relative_gap, "mip_feasibility_tolerance": FEASIBILITY, "mip_abs_gap": 0.0}
    status, answer = _ask(rows, options)
    if status == "unknown":
        # Now and then presolve loses its way on a sound programme; without it the answer comes.
        status, answer = _ask(rows, options | {"presolve": "off"})
    if status == "infeasible":
        return None
    if answer is None:
        raise SolverError(f"HiGHS stopped without values (status {status}, {seconds:.0f} s allowed)")
    return answer


def _ask(rows: Rows, options: dict[str, Any]) -> tuple[str, Answer | None]:
    import cvxpy as cp  # here, because it takes a second that few questions must pay for

    x = cp.Variable(len(rows.cost), boolean=(np.flatnonzero(rows.binary),))
    upper, equal = cp.Constant(rows.upper), cp.Constant(rows.equal)
    constraints = [upper @ x <= rows.upper_limit, equal @ x == rows.equal_value, x >= rows.low, x <= rows.high]
    problem = cp.Problem(cp.Minimize(rows.cost @ x), constraints)
    try:
        with silent_stdout(), warnings.catch_warnings():
            # A stop at the time allowed is "inaccurate" to cvxpy; here its dual bound is judged, not its word.
            warnings.filterwarnings("ignore", message="Solution may be inaccurate")
            problem.solve(solver=cp.HIGHS, **options)  # type: ignore[no-untyped-call]
    except (cp.error.SolverError, ValueError):
        # cvxpy answers a status it does not know with either of the two.
        return "unknown", None
    if problem.status in cp.settings.INF_OR_UNB:
        return "infeasible", None
    evidence: Any = problem.solver_stats.extra_stats
    return str(problem.status), None if x.value is None else Answer(x.value, float(evidence.mip_dual_bound))


@contextmanager
def silent_stdout() -> Iterator[None]:
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


def bound_by_prices(rows: Rows, upper_price: Array, equal_price: Array, low: Array, high: Array) -> float:
    """Return a lower bound of the relaxation between some ends of its variables, true whatever the prices are.

    Every variable has finite ends (Neumaier and Shcherbina, Mathematical Programming 99, 2004).
    """
    reduced = reduced_costs(rows, upper_price, equal_price)
    ends = np.minimum(reduced * low, reduced * high).sum()
    return float(ends - np.maximum(upper_price, 0.0) @ rows.upper_limit - equal_price @ rows.equal_value)
