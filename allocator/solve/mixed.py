"""Which way to run each step when equipment must be taken whole: cutting planes, then branch and bound, with proof."""

from __future__ import annotations

import time
from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from allocator.errors import SolverError
from allocator.problem import COST, Problem
from allocator.solve.backend import Answer, Rows, reduced_costs, solve_rows
from allocator.solve.cuts import cuts_at, cuts_for_choice, first_cuts
from allocator.solve.fixed import FixedAnswer, solve_fixed
from allocator.solve.rows import Master, build_master

Array = NDArray[np.float64]
ROUNDS_RELAXED = 14
ROUNDED_AT = (1, 4)
"""Rounds after which the relaxation's rounding is worth an exact solve, beside the last."""
ROUNDS_INTEGER = 25
SETTLED = 1e-9
"""The relaxation has settled when a round lifts its bound by less than this share."""


@dataclass
class Search:
    """What is known so far: the best answer, the best proven bound, and the ways not yet excluded."""

    problem: Problem
    best: FixedAnswer | None
    bound: float
    tried: dict[bytes, FixedAnswer | None]
    enough: float | None = None

    def done(self, gap: float) -> bool:
        """Return whether the gap is closed, or what was asked (`enough`) is decided either way."""
        if self.best is None:
            return False
        if self.enough is not None and (
            self.value(self.best) <= self.enough or self.bound > self.enough * (1.0 + 1e-9)
        ):
            return True
        return self.gap <= gap

    def offer(self, rows: NDArray[np.int64]) -> FixedAnswer | None:
        """Solve for one way per step (once) and keep it if it is the best so far."""
        key = rows.tobytes()
        if key not in self.tried:
            hopeless = None if self.best is None else self.value(self.best)
            self.tried[key] = solve_fixed(self.problem, rows, hopeless)
        answer = self.tried[key]
        if answer is not None and (self.best is None or self.value(answer) < self.value(self.best)):
            self.best = answer
        return answer

    def value(self, answer: FixedAnswer) -> float:
        return answer.outcome.value(self.problem.objective)

    @property
    def gap(self) -> float:
        """The relative gap, on the scale that the objective is promised on."""
        if self.best is None:
            return np.inf
        value = self.value(self.best)
        least = 1.0 if self.problem.objective == COST else 1e-300
        return (value - self.bound) / max(abs(value), least)


def solve_mixed(
    problem: Problem, starts: Iterable[NDArray[np.int64]], gap: float, seconds: float, enough: float | None = None
) -> Search:
    """Search for the best choice and prove it.

    Parameters
    ----------
    problem : Problem
    starts : list of int arrays, shape (n_steps,)
        Ways to try first; at least one must keep the limits for the scales of the master to be set by it.
    gap : float
        Relative gap aimed at.
    seconds : float
        Time after which the best so far is returned with the gap proven by then.
    enough : float, optional
        Stop as soon as a choice is at or below this value, or none can be.
    """
    began = time.monotonic()
    search = Search(problem, None, -np.inf, {}, enough)
    for rows in starts:
        search.offer(rows)
        if search.done(gap):
            return search
    if search.best is None:
        return search
    master = _master(search)
    fixed_out = _relax(search, master, gap)
    rounds = 0
    while not search.done(gap) and rounds < ROUNDS_INTEGER:
        left = seconds - (time.monotonic() - began)
        if left <= 0.5 or not _branch(search, master, fixed_out, gap, left):
            break
        rounds += 1
    return search


def _master(search: Search) -> Master:
    """Build the master around the best answer so far, which sets its scales and the ends of its flows."""
    problem, best = search.problem, search.best
    assert best is not None
    outcome = best.outcome
    load = outcome.loads[problem.split]
    defect_scale = problem.budgets.get(problem.split, 0.0) or load or max(outcome.loads.values()) or 1.0
    money = problem.spend if problem.spend is not None else outcome.money.total
    money_scale = max(abs(money), abs(outcome.money.improvement), 1e-6)
    master = build_master(problem, defect_scale, money_scale, _most_exponent(search))
    first_cuts(master, [outcome.flow.exponent, np.zeros_like(outcome.flow.exponent)])
    cuts_for_choice(master, outcome.choice.rows, outcome.flow.intensity, outcome.flow.exponent)
    return master


def _most_exponent(search: Search) -> float:
    """Return an end for the flow exponents that no better plan can pass: its scrap alone would cost more."""
    problem, best = search.problem, search.best
    assert best is not None
    line, ways = problem.line, problem.options.ways
    weight = line.shipped * line.per_finished * line.net_cost
    steps = np.zeros(line.n_steps)
    np.maximum.at(steps, ways.step, ways.delta_high + ways.gates.scrap_of_good)
    most = float(np.sum(steps * np.maximum(line.per_finished, 1.0)) * max(1.0, float(np.max(1.0 / line.per_finished))))
    money = (
        problem.spend
        if problem.spend is not None
        else (best.outcome.money.total if problem.objective == COST else None)
    )
    if money is not None and np.all(weight > 0.0):
        savings = -np.minimum(ways.fixed_cost, 0.0).sum() - np.minimum(problem.options.purchase_cost, 0.0).sum()
        most = min(most, float(np.log1p((max(money, 0.0) + savings) / weight.min())) * 1.01 + 1e-6)
    return min(most, 600.0)


def _relax(search: Search, master: Master, gap: float) -> NDArray[np.bool_]:
    """Tighten the relaxation, try its roundings, and return the ways that its reduced costs exclude."""
    excluded = np.zeros(len(search.problem.options.ways), dtype=bool)
    before = -np.inf
    for turn in range(ROUNDS_RELAXED):
        rows = master.rows()
        answer = solve_rows(rows, integer=False)
        if answer is None:
            raise SolverError("the relaxed master lost a plan that keeps every limit; please report the scenario")
        bound = answer.bound * master.objective_scale
        search.bound = max(search.bound, bound)
        added = cuts_at(master, answer.x)
        settled = added == 0 or bound - before <= SETTLED * abs(bound)
        if settled or turn in ROUNDED_AT:
            _offer_rounded(search, master, answer.x)
        excluded |= _excluded(search, master, rows, answer, bound)
        if search.done(gap) or settled:
            break
        before = bound
    return excluded


def _offer_rounded(search: Search, master: Master, x: Array) -> None:
    """Offer the choice nearest to a relaxed answer and teach the master its exact value."""
    rounded = search.offer(_rounded(search.problem, master, x))
    if rounded is not None:
        cuts_for_choice(
            master, rounded.outcome.choice.rows, rounded.outcome.flow.intensity, rounded.outcome.flow.exponent
        )


def _excluded(search: Search, master: Master, rows: Rows, answer: Answer, bound: float) -> NDArray[np.bool_]:
    """Ways whose reduced cost alone lifts the bound above the best plan: no better plan takes them."""
    assert search.best is not None
    assert answer.upper_price is not None
    assert answer.equal_price is not None
    reduced = reduced_costs(rows, answer.upper_price, answer.equal_price) * master.objective_scale
    value = search.value(search.best)
    return np.asarray(bound + reduced[master.layout.pick] > value + 1e-9 * abs(value))


def _branch(search: Search, master: Master, excluded: NDArray[np.bool_], gap: float, seconds: float) -> bool:
    """Solve the integer master once, offer its choice and cut it off where it was wrong; False when nothing moved."""
    rows = master.rows()
    high = rows.high.copy()
    high[master.layout.pick[excluded]] = 0.0
    answer = solve_rows(replace(rows, high=high), integer=True, relative_gap=0.3 * gap, seconds=seconds)
    if answer is None:
        # Only ways that cannot beat the best plan are excluded, so nothing better is left.
        assert search.best is not None
        search.bound = search.value(search.best)
        return False
    bound, before = answer.bound * master.objective_scale, (search.bound, search.best)
    # The tree's own tolerances add up with the size of the programme.
    safety = (1e-9 + 2e-10 * len(search.problem.options.ways)) * abs(bound)
    assert search.best is not None
    search.bound = max(search.bound, min(bound - safety, search.value(search.best)))
    chosen = _rounded(search.problem, master, answer.x)
    known = chosen.tobytes() in search.tried
    added = cuts_at(master, answer.x)
    found = search.offer(chosen)
    if found is None:
        master.upper.add({int(master.layout.pick[w]): 1.0 for w in chosen}, len(chosen) - 1.0)
    else:
        cuts_for_choice(master, chosen, found.outcome.flow.intensity, found.outcome.flow.exponent)
    return not (known and added == 0 and found is not None and (search.bound, search.best) == before)


def _rounded(problem: Problem, master: Master, x: Array) -> NDArray[np.int64]:
    """Return for each step its way with the largest share in x."""
    step, share = problem.options.ways.step, x[master.layout.pick]
    order = np.lexsort((share, step))
    last = np.flatnonzero(np.diff(step[order], append=problem.line.n_steps) != 0)
    return np.asarray(order[last], dtype=np.int64)
