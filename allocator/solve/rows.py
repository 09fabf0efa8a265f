"""The master problem's fixed rows: one way per step, the tree's flow, budgets and money, all linear.

Where a step's gate is itself a choice, its inflow is split over the gates (the exact disaggregated form), so that a
choice never multiplies a flow. Everything counted in defects is divided by one defect scale, money by one money scale.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.flow import GATE_FIELDS
from allocator.problem import CAPITAL, COST, Problem
from allocator.solve.backend import Rows
from allocator.solve.hidden import HiddenEnds, hidden_ends

if TYPE_CHECKING:
    from scipy.sparse import csr_array

Array = NDArray[np.float64]
Terms = dict[int, float]


class Sheet:
    """Rows collected one by one as {variable: coefficient} ≤ or = a constant."""

    def __init__(self) -> None:
        self.variables: list[int] = []
        self.values: list[float] = []
        self.starts: list[int] = [0]
        self.constants: list[float] = []

    def __len__(self) -> int:
        return len(self.constants)

    def add(self, terms: Terms, constant: float) -> None:
        kept = [(variable, value) for variable, value in terms.items() if value != 0.0]
        self.variables.extend([variable for variable, _ in kept])
        self.values.extend([value for _, value in kept])
        self.starts.append(len(self.variables))
        self.constants.append(constant)

    def matrix(self, width: int, since: int = 0) -> csr_array:
        """Return the coefficients of the rows from one on, shape (n_rows − since, width)."""
        from scipy.sparse import csr_array  # here, because its import takes time that few questions need

        begin = self.starts[since]
        starts = np.array(self.starts[since:], dtype=np.int32) - begin
        variables = np.array(self.variables[begin:], dtype=np.int32)
        values = np.array(self.values[begin:], dtype=float)
        return csr_array((values, variables, starts), shape=(len(self) - since, width))

    def limits(self, since: int = 0) -> Array:
        """Return the constants of the rows from one on."""
        return np.array(self.constants[since:], dtype=float)


def plus(*terms: tuple[float, Terms]) -> Terms:
    """Return the weighted sum of linear terms."""
    total: Terms = {}
    for weight, part in terms:
        for variable, value in part.items():
            total[variable] = total.get(variable, 0.0) + weight * value
    return total


@dataclass
class Layout:
    """Which variable stands for what; −1 where a way or step has none.

    `pick` x and `amount` D/δ_high and `law` (cost of the law) per way, `buy` per purchase, `exponent` S and `scrap` per
    step; `low`, `high` are the ends of all variables.
    """

    pick: NDArray[np.int64]
    amount: NDArray[np.int64]
    law: NDArray[np.int64]
    buy: NDArray[np.int64]
    exponent: NDArray[np.int64]
    scrap: NDArray[np.int64]
    low: list[float]
    high: list[float]
    binary: list[bool]

    def new(self, high: float, low: float = 0.0, binary: bool = False) -> int:
        self.low.append(low)
        self.high.append(high)
        self.binary.append(binary)
        return len(self.low) - 1


@dataclass
class Master:
    """The rows that every cut is added to.

    `totals` holds the objective candidates as linear terms: the yearly cost, the three loads and the capital.
    """

    problem: Problem
    layout: Layout
    upper: Sheet
    equal: Sheet
    totals: dict[str, Terms]
    defect_scale: float
    money_scale: float

    def rows(self) -> Rows:
        """Return the programme for the problem's objective."""
        width = len(self.layout.low)
        cost = np.zeros(width)
        for variable, value in self.totals[self.problem.objective].items():
            cost[variable] = value
        return Rows(
            cost, self.upper.matrix(width), self.upper.limits(), self.equal.matrix(width),
            self.equal.limits(), np.array(self.layout.low), np.array(self.layout.high),
            np.array(self.layout.binary),
        )  # fmt: skip

    @property
    def objective_scale(self) -> float:
        """What one unit of the programme's objective stands for."""
        if self.problem.objective == CAPITAL:
            return 1.0
        return self.money_scale if self.problem.objective == COST else self.defect_scale


def build_master(problem: Problem, defect_scale: float, money_scale: float, most_exponent: float) -> Master:
    """Return the master's rows without any cut of a law or of scrap.

    Parameters
    ----------
    problem : Problem
        Its options already reduced to the ways worth keeping, in the order of the steps.
    defect_scale : float
        δ-like quantities are divided by it.
    money_scale : float [currency/year]
    most_exponent : float
        An upper end for the flow exponents S.
    """
    layout = _layout(problem, defect_scale, money_scale, most_exponent)
    master = Master(problem, layout, Sheet(), Sheet(), {}, defect_scale, money_scale)
    _choose_one_way(master)
    _tie_purchases(master)
    _tie_amounts(master)
    _flow(master)
    _limits(master)
    return master


def _layout(problem: Problem, defect_scale: float, money_scale: float, most_exponent: float) -> Layout:
    ways, line, n_ways = problem.options.ways, problem.line, len(problem.options.ways)
    none = np.full(n_ways, -1)
    layout = Layout(
        none.copy(), none.copy(), none.copy(), np.array([], dtype=int), *(np.full(line.n_steps, -1),) * 2, [], [], []
    )
    moves = ways.moves
    dearest = _dearest_law(problem)
    for w in range(n_ways):
        layout.pick[w] = layout.new(1.0, binary=True)
        if moves[w]:
            layout.amount[w] = layout.new(1.0)
            layout.law[w] = layout.new(dearest[w] / money_scale)
    layout.buy = np.array([layout.new(1.0, binary=True) for _ in problem.options.purchase_names], dtype=np.int64)
    layout.exponent = np.array([layout.new(most_exponent / defect_scale) for _ in range(line.n_steps)])
    weight = line.shipped * line.per_finished * line.net_cost
    layout.scrap = np.array(
        [layout.new(w * np.expm1(min(most_exponent, 690.0)) / money_scale) if w > 0.0 else -1 for w in weight]
    )
    return layout


def _dearest_law(problem: Problem) -> Array:
    """Return the most that each way's law can cost [currency/year]."""
    ways = problem.options.ways
    most = cv.smooth_cost(ways.curves, ways.z_high)
    for w, lines in enumerate(ways.lines):
        if lines is not None:
            most[w] = lines[1][0]
    return most + 1.0


def _ways_of(problem: Problem) -> list[NDArray[np.int64]]:
    step = problem.options.ways.step
    return [np.flatnonzero(step == i) for i in range(problem.line.n_steps)]


def _choose_one_way(master: Master) -> None:
    for ways in _ways_of(master.problem):
        master.equal.add({int(master.layout.pick[w]): 1.0 for w in ways}, 1.0)


def _tie_purchases(master: Master) -> None:
    """A purchase is made exactly when some chosen way uses it."""
    uses = master.problem.options.ways.uses
    for p, buy in enumerate(master.layout.buy):
        users = np.flatnonzero(uses[:, p])
        for step in np.unique(master.problem.options.ways.step[users]):
            here = users[master.problem.options.ways.step[users] == step]
            master.upper.add({**{int(master.layout.pick[w]): 1.0 for w in here}, int(buy): -1.0}, 0.0)
        master.upper.add({int(buy): 1.0, **{int(master.layout.pick[w]): -1.0 for w in users}}, 0.0)


def _tie_amounts(master: Master) -> None:
    """δ of a law's way lies between its ends when the way is chosen and is 0 otherwise."""
    ways, layout = master.problem.options.ways, master.layout
    for w in np.flatnonzero(ways.moves):
        pick, amount = int(layout.pick[w]), int(layout.amount[w])
        master.upper.add({amount: 1.0, pick: -1.0}, 0.0)
        master.upper.add({pick: float(ways.delta_low[w] / ways.delta_high[w]), amount: -1.0}, 0.0)


def _own(master: Master, chosen: Iterable[int]) -> Terms:
    """Return the own intensity of a step, in defect scales, summed over some of its ways."""
    ways, layout = master.problem.options.ways, master.layout
    terms: Terms = {}
    for w in chosen:
        variable = layout.amount[w] if layout.amount[w] >= 0 else layout.pick[w]
        terms[int(variable)] = float(ways.delta_high[w]) / master.defect_scale
    return terms


def _flow(master: Master) -> None:
    """Write found, hidden and scrap of every gate, and collect what the totals need."""
    problem, layout, scale = master.problem, master.layout, master.defect_scale
    line, ways = problem.line, problem.options.ways
    q, shipped = line.per_finished, line.shipped
    ends = hidden_ends(problem)
    inflow: list[Terms] = [{} for _ in range(line.n_steps)]
    rolled: Terms = {}
    final: Terms = {}
    cost: Terms = {}
    escape: Terms = {}
    for i, mine in enumerate(_ways_of(problem)):
        hidden: Terms = {}
        scrap: Terms = {int(layout.pick[w]): float(ways.gates.scrap_of_good[w]) / scale for w in mine}
        for group, entering in _gates_of(master, mine, inflow[i], ends):
            gate = {name: float(getattr(ways.gates, name)[group[0]]) for name in GATE_FIELDS}
            own = _own(master, group)
            found = plus((gate["finds"], own), (gate["earlier"], entering))
            hidden = plus((1.0, hidden), (1.0 - gate["finds"], own), (1.0 - gate["earlier"], entering))
            scrap = plus((1.0, scrap), (1.0 - gate["reworked"], found))
            rework = shipped * q[i] * gate["rework_cost"] * gate["reworked"] * scale / master.money_scale
            cost = plus((1.0, cost), (rework, found))
        rolled = plus((1.0, rolled), (float(q[i]), _own(master, mine)))
        final = plus((1.0, final), (float(q[i]), scrap))
        following = {} if line.feeds[i] < 0 else {int(layout.exponent[line.feeds[i]]): -1.0}
        master.equal.add({int(layout.exponent[i]): 1.0, **following, **plus((-1.0, scrap))}, 0.0)
        if line.feeds[i] >= 0:
            leaving = layout.new(ends.behind(i) / scale)
            master.equal.add({leaving: 1.0, **plus((-1.0, hidden))}, 0.0)
            inflow[line.feeds[i]] = plus((1.0, inflow[line.feeds[i]]), (float(line.per_unit[i]), {leaving: 1.0}))
        else:
            escape = hidden
    master.totals = {
        "rolled_yield": rolled,
        "final_yield": plus((1.0, final), (1.0, escape)),
        "shipped_yield": escape,
        COST: plus(
            (1.0, cost), (shipped * line.escape_cost * scale / master.money_scale, escape), (1.0, _fixed_money(master))
        ),
        CAPITAL: _capital(master),
    }


def _gates_of(
    master: Master, mine: NDArray[np.int64], inflow: Terms, ends: HiddenEnds
) -> list[tuple[list[int], Terms]]:
    """Return the step's ways grouped by gate, each with the part of the inflow that enters when it is chosen."""
    table, step = master.problem.options.ways.gates, int(master.problem.options.ways.step[mine[0]])
    groups: dict[tuple[float, ...], list[int]] = {}
    for w in mine.tolist():
        groups.setdefault(
            tuple(float(getattr(table, name)[w]) for name in ("finds", "earlier", "reworked", "rework_cost")), []
        ).append(w)
    if len(groups) == 1 or not inflow:
        return [(group, inflow if len(groups) == 1 else {}) for group in groups.values()]
    shares: list[tuple[list[int], Terms]] = []
    for group in groups.values():
        most = ends.before(step, float(table.earlier[group[0]]), float(table.reworked[group[0]])) / master.defect_scale
        part = master.layout.new(most)
        master.upper.add({part: 1.0, **{int(master.layout.pick[w]): -most for w in group}}, 0.0)
        shares.append((group, {part: 1.0}))
    master.equal.add(plus((1.0, inflow), *((-1.0, part) for _, part in shares)), 0.0)
    return shares


def _fixed_money(master: Master) -> Terms:
    """Return the yearly cost of choices, laws, purchases and scrap, in money scales."""
    problem, layout, scale = master.problem, master.layout, master.money_scale
    ways, line = problem.options.ways, problem.line
    per_way = ways.fixed_cost + (line.shipped * line.per_finished)[ways.step] * ways.gates.per_item
    terms = {int(layout.pick[w]): float(per_way[w]) / scale for w in range(len(ways))}
    terms |= {int(v): 1.0 for v in layout.law if v >= 0}
    terms |= {int(v): float(c) / scale for v, c in zip(layout.buy, problem.options.purchase_cost, strict=True)}
    terms |= {int(v): 1.0 for v in layout.scrap if v >= 0}
    return terms


def _capital(master: Master) -> Terms:
    problem, layout = master.problem, master.layout
    ways = problem.options.ways
    terms = {int(layout.pick[w]): float(ways.capital[w]) for w in range(len(ways))}
    terms |= {
        int(layout.law[w]): float(ways.capital_per_cost[w]) * master.money_scale for w in np.flatnonzero(ways.moves)
    }
    terms |= {int(v): float(c) for v, c in zip(layout.buy, problem.options.purchase_capital, strict=True)}
    return terms


def _limits(master: Master) -> None:
    problem = master.problem
    for name, budget in problem.budgets.items():
        master.upper.add(master.totals[name], budget / master.defect_scale)
    if problem.capital is not None:
        size = max(problem.capital, 1.0)
        master.upper.add({v: c / size for v, c in master.totals[CAPITAL].items()}, problem.capital / size)
    if problem.spend is not None:
        master.upper.add(master.totals[COST], problem.spend / master.money_scale)


def nearest_choice(master: Master, x: Array) -> NDArray[np.int64]:
    """Return for each step its way with the largest share in x."""
    step, share = master.problem.options.ways.step, x[master.layout.pick]
    order = np.lexsort((share, step))
    last = np.flatnonzero(np.diff(step[order], append=master.problem.line.n_steps) != 0)
    return np.asarray(order[last], dtype=np.int64)
