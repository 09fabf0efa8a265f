"""Which plan keeps its targets with a given probability under the error of the estimates: the cheapest one found.

Three ways to ask for safety, each turned up until the plan holds in that share of the states of nature: a smaller
budget; every estimate at the same bound; every estimate where it stands when the line just fails. Each is an ordinary
plan of an altered problem, so nothing is proved here: the cheapest plan that holds is taken.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from copy import copy
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from allocator.choice import Choice, Outcome, evaluate, keeps_limits
from allocator.doubt import (
    EXACT,
    Doubts,
    Nature,
    budget_used,
    draw_nature,
    inflated,
    seen_in,
    true_intensity,
    with_larger_samples,
)
from allocator.problem import Problem
from allocator.solve.road import Solved, solve

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
SEED = 20_260_117
MOST_CELLS = 1_000_000
"""Draws times estimates held at once."""
MOST_DRAWS, FEWEST_DRAWS = 40_000, 6_000
EDGE_SHARE = 0.02
"""Share of the states taken as those in which the line just fails."""
MOST_ASKED = 8
CLOSE = 0.998
"""A plan that uses this much of its budget at the confidence asked for is tight enough."""
AIM = math.log(0.9993)
"""Aimed at, within that."""
SURE, SETTLED = 1e-6, 1e-4
"""Least change from which a slope is taken; share of the total at which bounds and levels have settled."""
ROUNDS = 2
WORTH_ANOTHER = 1e-3
"""Share of the total that a round must have saved for another one to be worth its time."""


@dataclass(frozen=True)
class Asking:
    """One way to ask for safety: the defects of every way multiplied or not, and whose money they shall cost."""

    factor: Array | None = None
    priced_at: Outcome | None = None


@dataclass(frozen=True)
class Found:
    """A plan and the part of the tightest budget that it uses at the confidence asked for; it holds up to 1.

    `reach` is the part of the tightest budget that it was asked to use and did, in the altered problem.
    """

    outcome: Outcome
    used: float
    asking: Asking
    reach: float

    @property
    def total(self) -> float:
        return self.outcome.money.total


@dataclass
class Search:
    """The search for one problem and confidence; `asked` are all plans seen, holding or not."""

    problem: Problem
    doubts: Doubts
    confidence: float
    nature: Nature = field(init=False)
    asked: list[Found] = field(default_factory=list)

    def __post_init__(self) -> None:
        draws = max(FEWEST_DRAWS, min(MOST_DRAWS, MOST_CELLS // len(self.doubts)))
        self.nature = draw_nature(self.doubts, draws, SEED, stratified=True)

    def with_larger(self, times: Mapping[int, float]) -> Search:
        """Return the same search, nothing asked yet, with some samples so many times larger, their estimates kept."""
        larger = copy(self)
        larger.asked = []
        larger.nature = with_larger_samples(self.nature, self.doubts, times, SEED)
        return larger

    @property
    def best(self) -> Found | None:
        """The cheapest plan that holds."""
        holding = [found for found in self.asked if self.holds(found)]
        return min(holding, key=lambda found: found.total, default=None)

    def holds(self, found: Found) -> bool:
        return found.used <= 1.0 and keeps_limits(self.problem, found.outcome)

    def used(self, outcome: Outcome, nature: Nature) -> float:
        """Return the part of the tightest budget used at the confidence asked for."""
        shown = seen_in(nature, self.doubts, self.problem, outcome)
        use = budget_used(shown, self.problem, outcome)
        return float(np.quantile(use, self.confidence, method="higher"))

    def ask(self, asking: Asking, tightness: float, near: Found | None = None) -> Found | None:
        """Return the plan of the altered problem with its budgets tightened, judged as it is; None if there is none."""
        budgets = {name: budget * tightness for name, budget in self.problem.budgets.items()}
        starts = [] if near is None else [near.outcome.choice.rows]
        return self._judged(solve(replace(self._altered(asking), budgets=budgets), starts), asking)

    def best_at(self, asking: Asking) -> None:
        """Look for the plan of the best split yield of the altered problem, whatever it costs."""
        others = {name: budget for name, budget in self.problem.budgets.items() if name != self.problem.split}
        self._judged(solve(replace(self._altered(asking), budgets=others, objective=self.problem.split)), asking)

    def _altered(self, asking: Asking) -> Problem:
        return self.problem if asking.factor is None else inflated(self.problem, asking.factor, asking.priced_at)

    def _judged(self, solved: Solved, asking: Asking) -> Found | None:
        if solved.outcome is None:
            return None
        ways = self.problem.options.ways
        rows = ways.find(solved.problem.options.ways, solved.outcome.choice.rows)
        outcome = evaluate(self.problem.line, self.problem.options, Choice(rows, solved.outcome.choice.z))
        return self.judge(outcome, asking, solved.outcome.loads)

    def judge(self, outcome: Outcome, asking: Asking, loads: Mapping[str, float]) -> Found:
        """Note a plan with what it uses at the confidence asked for."""
        reach = max(loads[name] / budget for name, budget in self.problem.budgets.items())
        found = Found(outcome, self.used(outcome, self.nature), asking, reach)
        self.asked.append(found)
        return found

    def tighten(self, asking: Asking, near: Found, start: float, most: int = MOST_ASKED) -> None:
        """Turn one way of asking up or down until its plan just holds."""
        holds, fails, impossible = 0.0, math.inf, 0.0
        tightness, seen = start, [near] if near.asking is asking else []
        for _ in range(most):
            found = self.ask(asking, tightness, near)
            if found is None:
                impossible = max(impossible, tightness)
            else:
                if found.used <= 1.0:
                    holds = max(holds, tightness)
                else:
                    fails = min(fails, tightness)
                if CLOSE <= found.used <= 1.0 or (found.used <= 1.0 and found.reach < tightness * CLOSE):
                    return  # tight, or nothing is gained by a larger budget
                near = found
                seen.append(found)
            low = max(holds, impossible)
            if fails < low / CLOSE:
                return
            guess = _next(seen, low, fails)
            if guess is None:
                return
            tightness = guess

    def at_bounds(self, confidence: float, levels: Array) -> Array:
        """Return the factor from every way's defects to their bound at a confidence, each at its level nearest to one.

        Parameters
        ----------
        confidence : float
        levels : shape (n_steps,) [σ]
        """
        factor = np.ones(len(self.problem.options.ways))
        for rows, delta, estimate in self._in_doubt(self.nature, levels):
            factor[rows] = np.quantile(delta, confidence, axis=0, method="higher") / estimate
        return factor

    def at_edge(self, found: Found) -> Array:
        """Return the factor from every way's defects to those in the states in which a plan just fails."""
        shown = seen_in(self.nature, self.doubts, self.problem, found.outcome)
        use = budget_used(shown, self.problem, found.outcome)
        count = max(20, int(EDGE_SHARE * len(use)))
        edge = np.argsort(np.abs(use - found.used), kind="stable")[:count]
        there = Nature(self.nature.ratio[edge], self.nature.off[edge], self.nature.factor[edge])
        factor = np.ones(len(self.problem.options.ways))
        for rows, delta, estimate in self._in_doubt(there, found.outcome.choice.z):
            factor[rows] = delta.mean(axis=0) / estimate
        return factor

    def _in_doubt(self, nature: Nature, levels: Array) -> Iterator[tuple[Indices, Array, Array]]:
        """Yield the ways in doubt, a batch at a time, with their true and estimated defects."""
        ways = self.problem.options.ways
        doubtful = np.flatnonzero(self.doubts.of_way != EXACT)
        batch = max(1, MOST_CELLS // len(nature.ratio))
        for first in range(0, len(doubtful), batch):
            rows = doubtful[first : first + batch]
            z = np.clip(levels[ways.step[rows]], ways.z_low[rows], ways.z_high[rows])
            exact = Nature(*(np.ones((1, len(self.doubts))) * value for value in (1.0, 0.0, 1.0)))
            estimate = true_intensity(exact, self.doubts, ways, rows, z)[0]
            yield rows, true_intensity(nature, self.doubts, ways, rows, z), np.maximum(estimate, 1e-300)


def _next(seen: list[Found], low: float, fails: float) -> float | None:
    """Return the tightness to ask for next: by the slope between the last two plans, within what is known."""
    guess = 0.0
    if seen:
        last, slope = seen[-1], 1.0
        if len(seen) > 1 and abs(math.log(last.reach / seen[-2].reach)) > SURE:
            slope = math.log(last.used / seen[-2].used) / math.log(last.reach / seen[-2].reach)
        guess = last.reach * math.exp((AIM - math.log(last.used)) / min(max(slope, 0.3), 3.0))
    if low < guess < fails:
        return guess
    return math.sqrt(low * fails) if low > 0.0 and fails < math.inf else None


def on_own_bounds(search: Search, plain: Found) -> Found | None:
    """Return the plan that takes every estimate at its own bound, money included: the rule that ours is compared with.

    The bound depends on the level to reach: a few rounds settle both.
    """
    levels, found = plain.outcome.choice.z, None
    for _ in range(MOST_ASKED):
        asking = Asking(search.at_bounds(search.confidence, levels))
        before, found = found, search.ask(asking, 1.0, found)
        if found is None:
            return None
        levels = found.outcome.choice.z
        if before is not None and abs(found.total - before.total) <= SETTLED * abs(found.total):
            break
    return found


def find_confident(search: Search, plain: Outcome) -> tuple[Found | None, Found | None]:
    """Return the cheapest plan found that holds (None if none does), and the one on every estimate's own bound.

    Parameters
    ----------
    search : Search
    plain : Outcome
        The plan that takes the estimates as exact.
    """
    as_estimated = Asking()
    first = search.judge(plain, as_estimated, plain.loads)
    own = on_own_bounds(search, first)
    if search.holds(first):
        return first, own
    search.tighten(as_estimated, first, first.reach / first.used)
    if own is not None:
        near = search.best or own
        asking = Asking(search.at_bounds(search.confidence, near.outcome.choice.z), near.outcome)
        search.tighten(asking, own, own.reach / own.used)
    if search.best is None:
        # Not for the least cost but for the best yield: what is then still missing is out of reach.
        search.best_at(Asking(search.at_bounds(search.confidence, plain.choice.z)))
    for _ in range(ROUNDS):
        best = search.best
        if best is None:
            break
        search.tighten(Asking(search.at_edge(best), best.outcome), best, 1.0)
        if search.best is None or search.best.total > best.total * (1.0 - WORTH_ANOTHER):
            break
    return search.best, own
