"""The continuous problem once every step's way is chosen: convex functions of the intensities that can still move."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.curves import Curves
from allocator.flow import GATE_FIELDS, Flow, Gates, Line, gradient, loads, run
from allocator.problem import CAPITAL, COST, Problem

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Function:
    """One convex function: constant + linear·v + Σ law·C(v) + (scrap, where it belongs).

    `linear` and `law` have shape (n_variables,); `law` holds how much of each variable's law cost counts.
    """

    constant: float
    linear: Array
    law: Array
    scrap: bool


@dataclass(frozen=True)
class Program:
    """Variables are intensities: δ of a smooth way, or the part of δ on one straight piece.

    Parameters
    ----------
    step : array of int, shape (n_variables,)
    low, high : shape (n_variables,) [defects per item]
    curves : Curves
        Row per variable; straight pieces have kind LINES.
    slope : shape (n_variables,) [currency/year per unit of δ]
        Of straight pieces, 0 for smooth ways.
    base : shape (n_steps,)
        δ of each step where all its variables are 0.
    exponent_base, exponent_slope : shape (n_steps,), (n_steps, n_variables)
        Flow exponents S = base + slope·v.
    scrap_weight : shape (n_steps,) [currency/year]
        G·q·κ.
    functions : dict
        COST, the three yields' loads, and CAPITAL.
    """

    step: NDArray[np.int64]
    low: Array
    high: Array
    curves: Curves
    slope: Array
    base: Array
    exponent_base: Array
    exponent_slope: Array
    scrap_weight: Array
    functions: dict[str, Function]

    @property
    def size(self) -> int:
        return len(self.low)

    def value(self, name: str, v: Array) -> float:
        """Return one function at v (infinite where the flow overflows)."""
        return self.derivatives(name, v)[0]

    def derivatives(
        self, name: str, v: Array, laws: tuple[Array, Array, Array] | None = None
    ) -> tuple[float, Array, Array, Array]:
        """Return value, gradient, diagonal curvature of the laws, and the scrap weights G·q·κ·exp(S) (0 without scrap).

        `laws` are the slopes at v, where they are known already.
        """
        function = self.functions[name]
        value, grad, bend = function.constant + float(function.linear @ v), function.linear, np.zeros(self.size)
        if function.law.any():
            cost, first, second = self.law_slopes(v) if laws is None else laws
            value += float(function.law @ cost)
            grad, bend = grad + function.law * first, function.law * second
        weight = np.zeros(len(self.base))
        if function.scrap:
            exponent = self.exponent_base + self.exponent_slope @ v
            with np.errstate(over="ignore"):
                weight = self.scrap_weight * np.exp(exponent)
                value += float(np.sum(self.scrap_weight * np.expm1(exponent)))
            grad = grad + weight @ self.exponent_slope
        return value, grad, bend, weight

    def law_slopes(self, v: Array) -> tuple[Array, Array, Array]:
        """Return the law cost of each variable with its first and second derivative."""
        cost, first, second = cv.smooth_slopes(self.curves, v)
        straight = self.curves.kind == cv.LINES
        return np.where(straight, self.slope * v, cost), np.where(straight, self.slope, first), second

    def intensities(self, v: Array) -> Array:
        """Return δ of every step, shape (n_steps,)."""
        delta = self.base.copy()
        np.add.at(delta, self.step, v)
        return delta


def build_program(problem: Problem, rows: NDArray[np.int64]) -> Program:
    """Return the continuous problem for one way per step."""
    line, ways = problem.line, problem.options.ways
    table, base, law_base = _variables(problem, rows)
    owner = table["row"].astype(np.int64)
    straight = table["straight"].astype(bool)
    curves = ways.curves.take(owner)
    kind = np.where(straight, cv.LINES, curves.kind)
    curves = Curves(**{**curves.__dict__, "kind": kind})
    step = ways.step[owner]
    gates = Gates(*(getattr(ways.gates, name)[rows] for name in GATE_FIELDS))
    at_base = run(line, base, gates)
    return Program(
        step=step,
        low=table["low"],
        high=table["high"],
        curves=curves,
        slope=table["slope"],
        base=base,
        exponent_base=at_base.exponent,
        exponent_slope=_exponent_slope(line, gates, step),
        scrap_weight=line.shipped * line.per_finished * line.net_cost,
        functions=_functions(problem, rows, gates, at_base, step, law_base, ways.capital_per_cost[owner]),
    )


def _variables(problem: Problem, rows: NDArray[np.int64]) -> tuple[dict[str, Array], Array, Array]:
    """Return the variables' table, δ of each step at zero, and the law cost (at zero) of the chosen ways."""
    ways = problem.options.ways
    base, law_base = ways.delta_high[rows].copy(), np.zeros(len(rows))
    listed: list[tuple[float, float, float, float, bool]] = []
    for i, row in enumerate(rows.tolist()):
        lines = ways.lines[row]
        if lines is not None:
            delta, cost = lines
            base[i], law_base[i] = delta[0], cost[0]
            for piece in range(len(delta) - 1):
                length = float(delta[piece + 1] - delta[piece])
                if length > 0.0:
                    listed.append((row, 0.0, length, float(cost[piece + 1] - cost[piece]) / length, True))
        elif ways.delta_high[row] > ways.delta_low[row]:
            base[i] = 0.0
            listed.append((row, float(ways.delta_low[row]), float(ways.delta_high[row]), 0.0, False))
        elif ways.curves.kind[row] != cv.NONE:
            law_base[i] = float(cv.smooth_cost(ways.curves.take([row]), ways.z_low[[row]])[0])
    columns = np.array(listed, dtype=float).reshape(len(listed), 5).T
    return dict(zip(("row", "low", "high", "slope", "straight"), columns, strict=True)), base, law_base


def _functions(
    problem: Problem, rows: NDArray[np.int64], gates: Gates, at_base: Flow, step: NDArray[np.int64], law_base: Array,
    capital_per_cost: Array,
) -> dict[str, Function]:  # fmt: skip
    line, options, ways = problem.line, problem.options, problem.options.ways
    q, shipped = line.per_finished, line.shipped
    none, every = np.zeros(len(step)), np.ones(len(step))
    bought = ways.uses[rows].any(axis=0)
    rework = shipped * q * gates.rework_cost * gates.reworked
    fixed = ways.fixed_cost[rows].sum() + options.purchase_cost[bought].sum() + law_base.sum()
    fixed += float(np.sum(shipped * q * gates.per_item) + rework @ at_base.found)
    fixed += shipped * line.escape_cost * at_base.escapes
    capital = ways.capital[rows].sum() + options.purchase_capital[bought].sum()
    capital += float(ways.capital_per_cost[rows] @ law_base)
    slope_cost = gradient(line, gates, rework, shipped * line.escape_cost)[step]
    used = loads(line, at_base)
    slopes = {
        "rolled_yield": q[step],
        "final_yield": gradient(line, gates, q * (1.0 - gates.reworked), 1.0)[step],
        "shipped_yield": gradient(line, gates, np.zeros(line.n_steps), 1.0)[step],
    }
    functions = {name: Function(used[name], slopes[name], none, False) for name in used}
    functions[COST] = Function(float(fixed), slope_cost, every, True)
    functions[CAPITAL] = Function(float(capital), none, capital_per_cost, False)
    return functions


def _exponent_slope(line: Line, gates: Gates, step: NDArray[np.int64]) -> Array:
    """Return dS/dv, shape (n_steps, n_variables): own defects are found here, the hidden ones further on."""
    n, m = line.n_steps, len(step)
    inherited, scrap = np.zeros((n, m)), np.zeros((n, m))
    columns = np.arange(m)
    for i in range(n):
        mine = columns[step == i]
        own = np.zeros(m)
        own[mine] = 1.0
        scrap[i] = (1.0 - gates.reworked[i]) * (gates.finds[i] * own + gates.earlier[i] * inherited[i])
        hidden = (1.0 - gates.finds[i]) * own + (1.0 - gates.earlier[i]) * inherited[i]
        if line.feeds[i] >= 0:
            inherited[line.feeds[i]] += line.per_unit[i] * hidden
    for i in range(n - 2, -1, -1):
        scrap[i] += scrap[line.feeds[i]]
    return scrap
