"""Many neighbouring questions, each solved for itself from what is known already: the plan and its neighbours."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.choice import evaluate
from allocator.flow import GATE_FIELDS, Gates
from allocator.problem import CAPITAL, Problem
from allocator.solve.duty import build_duty
from allocator.solve.fixed import solve_fixed
from allocator.solve.road import Solved, solve
from allocator.variants import LAW, PURCHASE, Thing
from allocator.ways import Ways

Indices = NDArray[np.int64]
USED = 1e-6
"""A law is used when it raises the sigma level by more than this share."""
MOST_STARTS = 6


def ask(problem: Problem, near: Solved) -> Solved | None:
    """Return the best answer, searched from that of a neighbouring question; None where no choice keeps the limits."""
    if problem.options.no_way:
        return None
    solved = solve(problem, starts_like(problem.options.ways, near))
    return None if solved.outcome is None else solved


def starts_like(ways: Ways, near: Solved) -> list[Indices]:
    """Return choices among some ways that are as near as possible to an answer of a neighbouring question."""
    assert near.outcome is not None
    known, rows = near.problem.options.ways, near.outcome.choice.rows
    found = ways.find(known, rows)
    missing = np.flatnonzero(found < 0)
    if len(missing) == 0:
        return [found]
    offers = [_nearest_first(ways, int(i), int(known.text.pick[rows[i]])) for i in missing]
    starts = []
    for turn in range(min(max(map(len, offers)), MOST_STARTS)):
        start = found.copy()
        start[missing] = [offer[turn % len(offer)] for offer in offers]
        starts.append(start)
    return starts


def _nearest_first(ways: Ways, step: int, pick: int) -> Indices:
    """Return the ways of a step, those of a given choice of alternatives first."""
    mine = np.flatnonzero(ways.step == step)
    return mine[np.argsort(ways.text.pick[mine] != pick, kind="stable")]


def total_of(solved: Solved) -> float:
    """Return the yearly total of an answer."""
    assert solved.outcome is not None
    return solved.outcome.money.total


def takes(solved: Solved, thing: Thing) -> bool:
    """Return whether an answer takes an alternative, makes a shared purchase, or uses a law."""
    outcome, ways = solved.outcome, solved.problem.options.ways
    assert outcome is not None
    if thing.kind == PURCHASE:
        return bool(outcome.bought[thing.place])
    row = outcome.choice.rows[thing.step]
    if thing.kind == LAW:
        return bool(outcome.choice.z[thing.step] > ways.curves.start[row] * (1.0 + USED))
    return bool((ways.text.picks.members[ways.text.pick[row]] == thing.place).any())


def total_at(problem: Problem, solved: Solved) -> float:
    """Return what an answer's choice, levels and all, costs under a question that prices the same ways differently."""
    assert solved.outcome is not None
    choice = solved.outcome.choice
    rows = problem.options.ways.find(solved.problem.options.ways, choice.rows)
    assert (rows >= 0).all(), "the same scenario at another price has the same ways"
    return evaluate(problem.line, problem.options, type(choice)(rows, choice.z)).money.total


def value_of_defects(solved: Solved, step: int) -> float | None:
    """Return what one unit of a step's defect intensity less is worth in an answer, its choices kept [currency/year].

    None where nothing continuous moves, so that the budgets have no price.
    """
    problem, outcome = solved.problem, solved.outcome
    assert outcome is not None
    gates = Gates(*(getattr(problem.options.ways.gates, name)[outcome.choice.rows] for name in GATE_FIELDS))
    duty = build_duty(problem.line, gates, problem.budgets)
    slope = float(duty.money(outcome.flow.intensity)[1][step])
    if not problem.budgets:
        return slope
    if solved.price is None:
        return None
    priced = zip(problem.budgets, duty.loads, strict=True)
    return slope + sum(solved.price.get(name, 0.0) * float(weight[step]) for name, (weight, _, _) in priced)


def law_slope_at_start(ways: Ways, row: int, solved: Solved) -> float | None:
    """Return what the first unit of defect intensity less costs by the law of a way; None where it has no law."""
    some = ways.curves.take([row])
    start = cv.intensity(some, some.start)
    lines = ways.lines[row]
    if lines is not None:
        delta, cost = lines
        slope = float((cost[-2] - cost[-1]) / (delta[-1] - delta[-2])) if len(delta) > 1 else 0.0
    elif some.kind[0] == cv.NONE:
        return None
    else:
        slope = -float(cv.smooth_slopes(some, start)[1][0])
    limit = 0.0 if solved.price is None else solved.price.get(CAPITAL, 0.0)
    return slope * (1.0 + limit * float(ways.capital_per_cost[row])) or None


@dataclass
class Track:
    """The best answers along one figure (a volume, a level), each worked out once.

    Between two figures at which the same choice is best, that choice is kept and only its levels are worked out anew;
    everywhere else the question is asked in full.

    Parameters
    ----------
    question : callable
        The question at a figure.
    answer : callable
        Its best answer from a neighbouring one, None where there is none.
    known : dict
        Answers by figure, at least one to start from.
    """

    question: Callable[[float], Problem]
    answer: Callable[[Problem, Solved], Solved | None]
    known: dict[float, Solved | None]
    asked: dict[float, Problem] = field(default_factory=dict)

    def asked_at(self, figure: float) -> Problem:
        """Return the question at a figure."""
        if figure not in self.asked:
            self.asked[figure] = self.question(figure)
        return self.asked[figure]

    def at(self, figure: float) -> Solved | None:
        """Return the best answer at a figure."""
        if figure not in self.known:
            below = max((f for f in self.known if f < figure), default=None)
            above = min((f for f in self.known if f > figure), default=None)
            sides = [self.known[f] for f in (below, above) if f is not None]
            kept = _kept_choice(self.asked_at(figure), *sides) if len(sides) == 2 else None
            self.known[figure] = kept or self.answer(self.asked_at(figure), self._nearest(figure))
        return self.known[figure]

    def _nearest(self, figure: float) -> Solved:
        found = [(abs(f - figure), solved) for f, solved in self.known.items() if solved is not None]
        return min(found, key=lambda pair: pair[0])[1]


def _kept_choice(problem: Problem, below: Solved | None, above: Solved | None) -> Solved | None:
    """Return the answer that keeps the choice of both neighbours; None where they differ or it does not serve."""
    if below is None or above is None:
        return None
    picks = _picks(below)
    if not np.array_equal(picks, _picks(above)):
        return None
    table = problem.options.ways.text.pick
    first = np.searchsorted(table, picks, side="left")
    if (np.searchsorted(table, picks, side="right") - first != 1).any():
        return None
    fixed = solve_fixed(problem, first.astype(np.int64), near=above.near)
    if fixed is None:
        return None
    return Solved(problem, fixed.outcome, fixed.bound, math.nan, fixed.price, "the choice of both neighbours", 0.0)


def _picks(solved: Solved) -> Indices:
    assert solved.outcome is not None
    return solved.problem.options.ways.text.pick[solved.outcome.choice.rows]
