"""The least cost of one combination, with a lower bound: tangents, and where a law is not convex, branching.

Every law and every exponential gets its own tangents, so the linear programme closes on the optimum from below within
a few rounds; its points, evaluated exactly, close on it from above. Where a law is concave, the chord is its bound and
the range is split.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, field

import numpy as np
from scipy.optimize import linprog

from tests.reference.combination import Combination

RELATIVE_GAP = 2e-9
"""Of the objective; simplex works to about 1e-10."""
CAPITAL_SLACK = 2e-10
"""Of the capital left for laws; simplex keeps its rows to 1e-10."""
ROUNDS = 60
NODES = 400
FIRST_TANGENTS = 24


@dataclass
class Task:
    """What to minimise and what to keep: cost, or the exponent of one yield, under budgets and a capital limit."""

    problem: Combination
    budgets: dict[str, float]
    capital_limit: float | None = None
    minimise: str = "cost"

    def value(self, x: np.ndarray) -> float:
        """The objective, exactly."""
        return self.problem.cost(x) if self.minimise == "cost" else self.problem.exponent(self.minimise, x)

    def within_capital(self, x: np.ndarray) -> bool:
        """Is the capital limit met, exactly?"""
        if self.capital_limit is None:
            return True
        return self.problem.capital(x) <= self.capital_limit + CAPITAL_SLACK * self.capital_unit()

    def capital_unit(self) -> float:
        """The capital left for laws: near the best reachable yield, a billionth of the limit may be worth a lot."""
        assert self.capital_limit is not None
        return max(self.capital_limit - self.problem.capital_fixed, 1e-9 * max(1.0, abs(self.capital_limit)))


@dataclass
class Curve:
    """One law as a function of its intensity, with the places where its curvature changes."""

    task: Task
    v: int
    bends: list[float] = field(default_factory=list)
    convex_first: bool = True

    def at(self, d: float) -> tuple[float, float]:
        """Value and slope."""
        law = self.task.problem._law(self.v)
        z = law.z_at_delta(d)
        return law.shape(z), law.shape_slope(z)

    def grid(self, low: float, high: float, count: int) -> np.ndarray:
        """Intensities evenly spaced in sigma level; for quotes, the middle of every segment too."""
        law = self.task.problem._law(self.v)
        z = np.linspace(law.z_at_delta(high), law.z_at_delta(low), count)
        points = [min(max(law.state.delta(level), low), high) for level in z]
        corners = sorted({low, high, *(d for d, _ in law.hull if low < d < high)})
        if law.hull:
            points = [(a + b) / 2 for a, b in itertools.pairwise(corners)]
        return np.array(points)


@dataclass
class Outcome:
    """Best point and bound of one combination; x is None where nothing is feasible."""

    value: float
    lower: float
    x: np.ndarray | None


def solve(task: Task, cutoff: float = math.inf) -> Outcome:
    """Minimise; stops early once the bound passes `cutoff`."""
    problem = task.problem
    curves = [_curve(task, v) for v in range(len(problem.moving))]
    root = [(float(a), float(b)) for a, b in zip(problem.low, problem.high, strict=True)]
    best, open_nodes, closed = Outcome(math.inf, -math.inf, None), [(-math.inf, root)], math.inf
    for _ in range(NODES):
        if not open_nodes:
            break
        open_nodes.sort(key=lambda node: -node[0])
        bound, box = open_nodes.pop()
        if bound >= min(cutoff, best.value - _tolerance(best.value)):
            closed = min(closed, bound)
            continue
        node = _close_in(task, curves, box, min(cutoff, best.value))
        if node.x is not None and node.value < best.value:
            best = Outcome(node.value, 0.0, node.x)
        halves = _split(curves, box, node) if node.lower < min(cutoff, best.value - _tolerance(best.value)) else []
        if halves:
            open_nodes += [(max(node.lower, bound), half) for half in halves]
        else:
            closed = min(closed, node.lower)
    lower = min([closed, best.value] + [bound for bound, _ in open_nodes])
    return Outcome(best.value, lower, best.x)


def _tolerance(value: float) -> float:
    return RELATIVE_GAP * max(abs(value), 1e-12) if math.isfinite(value) else 0.0


def _curve(task: Task, v: int) -> Curve:
    curve = Curve(task, v)
    law = task.problem._law(v)
    if law.kind in ("quotes", "decade"):
        return curve
    low, high = float(task.problem.low[v]), float(task.problem.high[v])
    points = curve.grid(low, high, 161)[::-1]
    slopes = np.array([curve.at(d)[1] for d in points])
    rising = np.diff(slopes) >= -1e-12 * np.abs(slopes[1:])
    curve.convex_first = bool(rising[0])
    curve.bends = [float(points[i + 1]) for i in range(len(rising) - 1) if rising[i] != rising[i + 1]]
    return curve


def _is_convex(curve: Curve, low: float, high: float) -> bool | None:
    """True or False for a range of one curvature, None for a mixed one."""
    if any(low < bend < high for bend in curve.bends):
        return None
    passed = sum(bend <= (low + high) / 2 for bend in curve.bends)
    return curve.convex_first == (passed % 2 == 0)


def _lines(curve: Curve, low: float, high: float) -> list[tuple[float, float, float]]:
    """First supporting lines (point, value, slope) of the law on a range."""
    kind = _is_convex(curve, low, high)
    if kind is True:
        return [(d, *curve.at(d)) for d in curve.grid(low, high, FIRST_TANGENTS)]
    points = [low, high] if kind is False else sorted(curve.grid(low, high, 161))
    hull: list[tuple[float, float]] = []
    for point in ((d, curve.at(d)[0]) for d in points):
        while len(hull) >= 2 and _above(hull[-2], hull[-1], point):
            hull.pop()
        hull.append(point)
    return [(a[0], a[1], (b[1] - a[1]) / (b[0] - a[0])) for a, b in itertools.pairwise(hull)]


def _above(a: tuple[float, float], b: tuple[float, float], c: tuple[float, float]) -> bool:
    return (b[1] - a[1]) * (c[0] - a[0]) >= (c[1] - a[1]) * (b[0] - a[0])


def _close_in(task: Task, curves: list[Curve], box: list[tuple[float, float]], cutoff: float) -> Outcome:
    """Rounds of tangents on one box."""
    lines = [_lines(curve, *edge) for curve, edge in zip(curves, box, strict=True)]
    low, high = np.array([a for a, _ in box]), np.array([b for _, b in box])
    programme = Programme(task, low, high, lines)
    best = Outcome(math.inf, -math.inf, None)
    for _ in range(ROUNDS):
        lower, x = programme.solve()
        if x is None:
            return Outcome(best.value, math.inf, best.x)
        best.lower = max(best.lower, lower)
        x = np.clip(x, low, high)
        if task.within_capital(x) and task.value(x) < best.value:
            best.value, best.x = task.value(x), x
        if best.lower >= min(cutoff, best.value) - _tolerance(best.value):
            break
        if not programme.add_tangents(x, curves, box):
            break
    return best


def _split(curves: list[Curve], box: list[tuple[float, float]], node: Outcome) -> list[list[tuple[float, float]]]:
    """Two boxes, split where a law is not convex; nothing where all are."""
    unclear = [v for v, curve in enumerate(curves) if _is_convex(curve, *box[v]) is not True]
    unclear = [v for v in unclear if box[v][1] > box[v][0] * (1 + 1e-9)]
    if not unclear:
        return []
    v = max(unclear, key=lambda v: math.log(box[v][1] / box[v][0]))
    low, high = box[v]
    inside = [bend for bend in curves[v].bends if low < bend < high]
    at = inside[0] if inside else math.sqrt(low * high)
    return [[*box[:v], half, *box[v + 1 :]] for half in ((low, at), (at, high))]


class Programme:
    """The linear programme over x (intensities), y (laws) and t (exponentials), each in units of its own size."""

    def __init__(self, task: Task, low: np.ndarray, high: np.ndarray, lines: list[list[tuple[float, float, float]]]):
        p = task.problem
        self.task, self.low, self.high = task, low, high
        self.size_y = np.array([max(p._law(v).shape(p._law(v).z_at_delta(d)), 1e-30) for v, d in enumerate(low)])
        self.s_low, self.s_high = p.exp_start + p.exp_slope @ low, p.exp_start + p.exp_slope @ high
        self.curved = [j for j in range(len(p.exp_weight)) if p.exp_weight[j] > 0 and self.s_high[j] > self.s_low[j]]
        self.size_t = np.exp(self.s_high) - np.exp(self.s_low)
        self.rows: list[np.ndarray] = []
        self.sides: list[float] = []
        self.offset = 0.0
        for v, found in enumerate(lines):
            for d, value, slope in found:
                self._law_line(v, d, value, slope)
        for j in self.curved:
            for share in (0.0, 0.25, 0.5, 0.75, 1.0):
                self._exp_line(j, self.s_low[j] + share * (self.s_high[j] - self.s_low[j]))
        self._limits()
        self.objective, self.offset = self._objective()

    def _blank(self) -> np.ndarray:
        return np.zeros(2 * len(self.low) + len(self.curved))

    def _add(self, row: np.ndarray, side: float) -> None:
        self.rows.append(row)
        self.sides.append(side)

    def _law_line(self, v: int, d: float, value: float, slope: float) -> None:
        row = self._blank()
        row[v] = slope * self.high[v] / self.size_y[v]
        row[len(self.low) + v] = -1.0
        self._add(row, (slope * d - value) / self.size_y[v])

    def _exp_line(self, j: int, s: float) -> None:
        p, row = self.task.problem, self._blank()
        growth = math.exp(s) / self.size_t[j]
        row[: len(self.low)] = growth * p.exp_slope[j] * self.high
        row[2 * len(self.low) + self.curved.index(j)] = -1.0
        self._add(row, growth * (s - 1 - p.exp_start[j]) + math.exp(self.s_low[j]) / self.size_t[j])

    def _limits(self) -> None:
        task, p = self.task, self.task.problem
        for name, budget in task.budgets.items():
            row = self._blank()
            row[: len(self.low)] = p.yield_slope[name] * self.high / budget
            self._add(row, 1 - p.yield_start[name] / budget)
        if task.capital_limit is not None:
            unit = task.capital_unit()
            row = self._blank()
            row[len(self.low) : 2 * len(self.low)] = p.capital_rate * self.size_y / unit
            self._add(row, (task.capital_limit - p.capital_fixed) / unit)

    def _objective(self) -> tuple[np.ndarray, float]:
        task, p, row = self.task, self.task.problem, self._blank()
        width = len(self.low)
        if task.minimise != "cost":
            row[:width] = p.yield_slope[task.minimise] * self.high
            return row, p.yield_start[task.minimise]
        row[:width] = p.linear * self.high
        row[width : 2 * width] = p.yearly * self.size_y
        row[2 * width :] = p.exp_weight[self.curved] * self.size_t[self.curved]
        return row, p.constant + float(p.exp_weight @ np.expm1(self.s_low))

    def solve(self) -> tuple[float, np.ndarray | None]:
        """Bound and intensities; (inf, None) when the lines leave nothing feasible."""
        width = len(self.low)
        bounds = [(a / b, 1.0) for a, b in zip(self.low, self.high, strict=True)]
        bounds += [(0.0, None)] * (width + len(self.curved))
        if not bounds:
            fits = all(side >= -1e-10 for side in self.sides)
            return (self.offset, np.zeros(0)) if fits else (math.inf, None)
        unit = max(float(np.max(np.abs(self.objective))), 1e-300)
        answer = linprog(
            self.objective / unit,
            A_ub=np.array(self.rows) if self.rows else None,
            b_ub=np.array(self.sides) if self.rows else None,
            bounds=bounds,
            method="highs",
            options={"primal_feasibility_tolerance": 1e-10, "dual_feasibility_tolerance": 1e-10},
        )
        if answer.status == 2:
            return math.inf, None
        if answer.status != 0:
            raise RuntimeError(f"linear programme: {answer.message}")
        return self.offset + unit * float(answer.fun), answer.x[:width] * self.high

    def add_tangents(self, x: np.ndarray, curves: list[Curve], box: list[tuple[float, float]]) -> bool:
        """New lines at x; False when no law or exponential has any left to give."""
        before = len(self.rows)
        for v, curve in enumerate(curves):
            if _is_convex(curve, *box[v]) is True and not self.task.problem._law(v).hull:
                self._law_line(v, x[v], *curve.at(x[v]))
        s = self.task.problem.exp_start + self.task.problem.exp_slope @ x
        if self.task.minimise == "cost":
            for j in self.curved:
                self._exp_line(j, float(s[j]))
        return len(self.rows) > before
