"""How sure is a plan, what does it cost to be surer, and which estimate deserves more data."""

from __future__ import annotations

import math
import time
from collections.abc import Iterator
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from allocator.choice import Outcome
from allocator.cost_range import improvement_drawn, totals_drawn
from allocator.doubt import EXACT, Doubts, budget_used, draw_nature, find_doubts, seen_in
from allocator.errors import RangeError
from allocator.intervals import share_interval
from allocator.problem import Problem
from allocator.results import Confidence, StudyWorth, Trial
from allocator.solve.road import Solved, solve
from allocator.tighten import Found, Search, find_confident

Array = NDArray[np.float64]
LEAST, MOST = 0.5, 0.999
FRESH_SEED, PRICE_SEED = 77_003, 77_004
MOST_FRESH, FEWEST_FRESH, FRESH_CELLS = 100_000, 10_000, 4_000_000
COST_SHARE = 0.90
TIMES = 4.0
"""A further study is taken to make the sample this many times larger."""
MOST_STUDIES, ASKED_PER_STUDY = 8, 3
"""Estimates for which the plan is made anew, those that use up most of the budget first."""
LAW = (
    "σ² by its chi-square law (n − 1 degrees of freedom), the mean by its normal law, counts by the Beta law "
    "(Jeffreys); an improved level inherits the relative error of the level it starts from; what states no sample is "
    "exact"
)
METHOD = (
    "ordinary plans with a smaller budget, with every estimate at one bound, and with the estimates where the line "
    "just fails, each turned up until it holds; the cheapest that holds is taken, and no proof that none is cheaper"
)
STUDIES_METHOD = (
    f"the plan is made anew with that one sample {TIMES:g} times as large and its estimate kept (on average a study "
    "moves it neither way); what the estimate itself turns out to be is not foreseen"
)


def confident_plan(problem: Problem, confidence: float) -> tuple[Solved, Confidence] | None:
    """Return the cheapest plan found that meets every target with the given probability, and how sure it is.

    Parameters
    ----------
    problem : Problem
        With at least one target.
    confidence : float
        From 0.5 to 0.999.

    Returns
    -------
    tuple or None
        None when the targets are out of reach even with every estimate exact. Where only the confidence is out of
        reach (`reached` False) the surest plan seen.

    Raises
    ------
    RangeError
        When nothing is in doubt, or the question makes no sense.
    """
    if not LEAST <= confidence <= MOST:
        raise RangeError(f"a confidence lies from {LEAST:g} to {MOST:g}, not at {confidence:g} (90 % is 0.9)")
    if not problem.budgets:
        raise RangeError("a plan with confidence needs a target to be sure of: set one, as final_yield = 0.99")
    doubts = find_doubts(problem)
    if len(doubts) == 0:
        raise RangeError(
            "no capability states a sample, so nothing is in doubt: add the parts behind each, as { cpk = 1.33, "
            "sample = 50 }, { bad = 3, of = 5000 } or { data = … }"
        )
    began = time.monotonic()
    plain = solve(problem)
    if plain.outcome is None:
        return None
    search = Search(problem, doubts, confidence)
    best, own = find_confident(search, _in_full(problem, plain))
    reached = best is not None
    best = best or min(search.asked, key=lambda found: found.used)
    tried = _Tried(problem, doubts)
    studies, left_out = what_to_measure(search, best) if reached else ((), 0)
    low, high, improvement, ranges = tried.costs(best.outcome)
    told = Confidence(
        confidence=confidence,
        reached=reached,
        draws=tried.draws,
        trial=tried.trial(best.outcome),
        plain=tried.trial(_in_full(problem, plain)),
        own_bounds=None if own is None else tried.trial(own.outcome),
        cost_share=COST_SHARE,
        cost_low=low,
        cost_high=high,
        improvement_low=improvement[0],
        improvement_high=improvement[1],
        in_doubt=tuple(_names(problem, doubts.of_way[best.outcome.choice.rows] != EXACT)),
        exact=tuple(_names(problem, doubts.of_way[best.outcome.choice.rows] == EXACT)),
        ranges=ranges,
        asked=len(search.asked),
        studies=studies,
        studies_left_out=left_out,
        law=LAW,
        method=METHOD,
        studies_method=STUDIES_METHOD,
    )
    seconds = time.monotonic() - began
    solved = Solved(problem, best.outcome, -math.inf, math.nan, None, "the cheapest plan found", seconds)
    return solved, told


def _in_full(problem: Problem, solved: Solved) -> Outcome:
    """Return an outcome whose rows are those of the problem's own table."""
    assert solved.outcome is not None
    rows = problem.options.ways.find(solved.problem.options.ways, solved.outcome.choice.rows)
    return replace(solved.outcome, choice=replace(solved.outcome.choice, rows=rows))


def _names(problem: Problem, those: NDArray[np.bool_]) -> Iterator[str]:
    for i in np.flatnonzero(those).tolist():
        yield problem.scenario.step[i].name


class _Tried:
    """Tries plans on draws that the search has not seen."""

    def __init__(self, problem: Problem, doubts: Doubts):
        self.problem, self.doubts = problem, doubts
        self.draws = max(FEWEST_FRESH, min(MOST_FRESH, FRESH_CELLS // len(doubts)))
        self.nature = draw_nature(doubts, self.draws, FRESH_SEED)

    def trial(self, outcome: Outcome) -> Trial:
        shown = seen_in(self.nature, self.doubts, self.problem, outcome)
        kept = int(np.sum(budget_used(shown, self.problem, outcome) <= 1.0 + 1e-9))
        return Trial(outcome.money.total, kept / self.draws, *share_interval(kept, self.draws))

    def costs(self, outcome: Outcome) -> tuple[float, float, tuple[float, float], int]:
        shown = seen_in(self.nature, self.doubts, self.problem, outcome)
        improvement, ranges = improvement_drawn(self.problem, outcome, self.draws, PRICE_SEED)
        totals = totals_drawn(self.problem, outcome, shown, improvement)
        tail = 0.5 - 0.5 * COST_SHARE
        low, high = np.quantile(totals, [tail, 1.0 - tail])
        least, most = np.quantile(improvement, [tail, 1.0 - tail])
        return float(low), float(high), (float(least), float(most)), ranges


def what_to_measure(search: Search, best: Found) -> tuple[tuple[StudyWorth, ...], int]:
    """Return what four times the sample of each estimate in a plan would save, and how many were not looked at.

    Parameters
    ----------
    search : Search
    best : Found
        The plan that holds with the samples as they are.
    """
    doubts, steps = search.doubts, search.problem.scenario.step
    used = doubts.of_way[best.outcome.choice.rows]
    larger = {int(s): search.with_larger({int(s): TIMES}) for s in used[used != EXACT]}
    eased = {s: other.used(best.outcome, other.nature) for s, other in larger.items()}
    sources = sorted(eased, key=lambda s: eased[s])
    worth = []
    for s in sources[:MOST_STUDIES]:
        larger[s].tighten(best.asking, best, best.reach / eased[s], ASKED_PER_STUDY)
        cheaper = larger[s].best
        saving = 0.0 if cheaper is None else max(best.total - cheaper.total, 0.0)
        name, sample = steps[doubts.step[s]].name, int(doubts.sample[s])
        worth.append(StudyWorth(name, doubts.names[s] or None, sample, int(TIMES * sample), saving))
    worth.sort(key=lambda study: -study.saving)
    return tuple(worth), max(len(sources) - MOST_STUDIES, 0)
