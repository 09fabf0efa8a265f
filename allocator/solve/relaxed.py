"""The relaxed programme, kept in HiGHS between solves: each one starts from the basis of the last."""

from __future__ import annotations

import highspy
import numpy as np
from highspy import HighsModelStatus as Status
from numpy.typing import NDArray
from scipy.sparse import csr_array, vstack

from allocator.errors import SolverError
from allocator.solve.backend import FEASIBILITY, RelaxedAnswer, Rows, bound_by_prices, silent_stdout

Array = NDArray[np.float64]
ITERATIONS = 100_000
"""Simplex iterations of one solve: far more than any needs, so that none goes on for ever."""


class Relaxed:
    """A linear programme to which rows are added, and whose binary variables are held between ends.

    HiGHS is spoken to directly, because a branch costs little only where the basis of the one before is kept.

    Parameters
    ----------
    rows : Rows
        Their binary variables are relaxed.
    """

    def __init__(self, rows: Rows) -> None:
        self.rows = rows
        self.binary = np.flatnonzero(rows.binary).astype(np.int32)
        self._equal_from = len(rows.upper_limit)
        with silent_stdout():
            self._highs = highspy.Highs()  # type: ignore[no-untyped-call]
            self._highs.setOptionValue("output_flag", False)
        self._highs.setOptionValue("simplex_iteration_limit", ITERATIONS)
        for option in ("primal_feasibility_tolerance", "dual_feasibility_tolerance"):
            self._highs.setOptionValue(option, FEASIBILITY)
        self._highs.passModel(_model(rows))

    def add(self, upper: csr_array, limit: Array) -> None:
        """Add rows A·x ≤ b."""
        if len(limit) == 0:
            return
        self._highs.addRows(
            len(limit), np.full(len(limit), -np.inf), limit, upper.nnz,
            upper.indptr[:-1].astype(np.int32), upper.indices.astype(np.int32), upper.data,
        )  # fmt: skip
        self.rows = self.rows.with_upper(csr_array(vstack([self.rows.upper, upper])), limit)

    def solve(self, low: Array, high: Array) -> RelaxedAnswer | None:
        """Return the relaxed answer with the binary variables between some ends; None when there is none.

        Its bound is computed from the prices, safe against the solver's tolerances.

        Raises
        ------
        SolverError
            When HiGHS finds neither values nor that there are none.
        """
        self._highs.changeColsBounds(len(self.binary), self.binary, low, high)
        self._highs.run()
        if self._highs.getModelStatus() not in (Status.kOptimal, Status.kInfeasible):
            # Now and then a basis carried along leads nowhere; from scratch the answer comes.
            self._highs.clearSolver()
            self._highs.run()
        status = self._highs.getModelStatus()
        if status == Status.kInfeasible:
            return None
        if status != Status.kOptimal:
            raise SolverError(f"HiGHS stopped without values ({self._highs.modelStatusToString(status)})")
        return self._answer(low, high)

    def _answer(self, low: Array, high: Array) -> RelaxedAnswer:
        solution = self._highs.getSolution()
        price = -np.array(solution.row_dual)
        at, end = self._equal_from, self._equal_from + len(self.rows.equal_value)
        upper_price, equal_price = np.concatenate([price[:at], price[end:]]), price[at:end]
        lows, highs = self.rows.low.copy(), self.rows.high.copy()
        lows[self.binary], highs[self.binary] = low, high
        bound = bound_by_prices(self.rows, upper_price, equal_price, lows, highs)
        return RelaxedAnswer(np.array(solution.col_value), bound, upper_price, equal_price)


def _model(rows: Rows) -> highspy.HighsLp:
    table = csr_array(vstack([rows.upper, rows.equal]))
    model = highspy.HighsLp()
    model.num_row_, model.num_col_ = table.shape
    model.col_cost_, model.col_lower_, model.col_upper_ = rows.cost, rows.low, rows.high
    model.row_lower_ = np.concatenate([np.full(len(rows.upper_limit), -np.inf), rows.equal_value])
    model.row_upper_ = np.concatenate([rows.upper_limit, rows.equal_value])
    model.a_matrix_.format_ = highspy.MatrixFormat.kRowwise
    model.a_matrix_.start_, model.a_matrix_.index_, model.a_matrix_.value_ = table.indptr, table.indices, table.data
    return model
