"""Branch and bound over the relaxed master: tangents are added wherever a branch is too optimistic, and stay for all.

Every branch is a relaxed programme solved from the basis of the one before, and its bound is computed from its prices.
The master's rows are few and its relaxation is close, so a handful of branches does.
"""

from __future__ import annotations

import heapq
import itertools
import time
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from allocator.errors import SolverError
from allocator.solve.backend import RelaxedAnswer, reduced_costs
from allocator.solve.cuts import cuts_at, cuts_for_choice
from allocator.solve.relaxed import Relaxed
from allocator.solve.rows import Master, nearest_choice
from allocator.solve.search import CLOSED, Search

Array = NDArray[np.float64]
ROUNDS_AT_ROOT = 14
ROUNDED_AT = (1, 4)
"""Rounds at the root after which the rounding of the relaxed answer is worth an exact solve, beside the last."""
SETTLED = 1e-9
"""The root has settled when a round of tangents lifts its bound by less than this share."""
ROUNDS_AT_BRANCH = 2
ROUNDS_AT_LEAF = 30
MOST_SPLITS = 500
"""Splits after which the master is better solved whole."""
WHOLE = 1e-6
"""How near to 0 or 1 a share must be to be taken as a choice."""


@dataclass(order=True)
class _Branch:
    """Ends of the binary variables, and what is proven for all choices between them."""

    bound: float
    number: int
    low: Array = field(compare=False)
    high: Array = field(compare=False)


class TreeSearch:
    """One tree: its relaxed programme, the branches still open, and the least bound among those closed.

    Parameters
    ----------
    search : Search
        Kept up to date as the tree grows.
    master : Master
        Its tangents grow with the tree.
    gap : float
        Relative gap aimed at.
    until : float
        Time of the monotonic clock at which to stop.
    """

    def __init__(self, search: Search, master: Master, gap: float, until: float) -> None:
        self.search, self.master, self.gap, self.until = search, master, gap, until
        self.relaxed = Relaxed(master.rows())
        self.excluded = np.zeros(len(search.problem.options.ways), dtype=bool)
        self._told = len(master.upper)
        self._closed = np.inf
        self._open: list[_Branch] = []
        self._splits = 0

    def grow(self) -> None:
        """Grow until the gap is closed, no branch is left, or there are too many."""
        root = self._settle_root()
        if self.search.done(self.gap):
            return
        self._open = [root]
        while self._open:
            self._plunge(heapq.heappop(self._open))
            if self.search.done(self.gap) or self._spent():
                return

    @property
    def left_open(self) -> bool:
        """Whether branches are left that could hold something better."""
        return bool(self._open)

    def _spent(self) -> bool:
        return self._splits > MOST_SPLITS or time.monotonic() > self.until

    def _settle_root(self) -> _Branch:
        """Add tangents until the bound of the whole settles, try its roundings, and leave out what it excludes."""
        low, high = np.zeros(len(self.relaxed.binary)), np.ones(len(self.relaxed.binary))
        before = -np.inf
        for turn in range(ROUNDS_AT_ROOT):
            answer = self._relax(low, high)
            if answer is None:
                raise SolverError("the relaxed master lost a plan that keeps every limit; please report the scenario")
            bound = self._bound_of(answer)
            self.search.bound = max(self.search.bound, bound)
            added = cuts_at(self.master, answer.x)
            settled = added == 0 or bound - before <= SETTLED * abs(bound)
            if settled or turn in ROUNDED_AT:
                self._offer(answer)
            self.excluded |= self._excluded(answer, bound)
            if settled or self.search.done(self.gap):
                break
            before = bound
        high[np.isin(self.relaxed.binary, self.master.layout.pick[self.excluded])] = 0.0
        return _Branch(self.search.bound, 0, low, high)

    def _plunge(self, branch: _Branch) -> None:
        """Follow a branch to its end, always on the side that the relaxed answer leans to; leave the others open."""
        while True:
            answer = self._settle(branch)
            if answer is None:
                break
            if self.search.hopeless(branch.bound, self.gap) or self._is_whole(answer):
                self._closed = min(self._closed, branch.bound)
                break
            branch, other = self._split(branch, answer)
            heapq.heappush(self._open, other)
            if self._spent():
                heapq.heappush(self._open, branch)
                break
        proven = min([self._closed, *(b.bound for b in self._open[:1])])
        self.search.bound = max(self.search.bound, min(proven, self.search.value_of_best))

    def _settle(self, branch: _Branch) -> RelaxedAnswer | None:
        """Add tangents while they lift a branch, and solve choices met on the way exactly; None if nothing is left."""
        before = -np.inf
        for turn in itertools.count():
            answer = self._relax(branch.low, branch.high)
            if answer is None:
                return None
            branch.bound = max(branch.bound, self._bound_of(answer))
            if self.search.hopeless(branch.bound, self.gap):
                return answer
            added, whole = cuts_at(self.master, answer.x), self._is_whole(answer)
            new = whole and self._offer(answer)
            rising = added > 0 and branch.bound - before > 0.1 * CLOSED * self.gap * abs(branch.bound)
            if not new and (not rising or turn >= (ROUNDS_AT_LEAF if whole else ROUNDS_AT_BRANCH)):
                return answer
            before = branch.bound
        raise AssertionError("the rounds have an end")

    def _split(self, branch: _Branch, answer: RelaxedAnswer) -> tuple[_Branch, _Branch]:
        """Return the two sides of the least decided variable, the likelier first."""
        x = answer.x[self.relaxed.binary]
        at = int(np.argmax(np.minimum(x, 1.0 - x)))
        up, down = branch.low.copy(), branch.high.copy()
        up[at], down[at] = 1.0, 0.0
        self._splits += 1
        taken = _Branch(branch.bound, 2 * self._splits, up, branch.high)
        left = _Branch(branch.bound, 2 * self._splits + 1, branch.low, down)
        return (taken, left) if x[at] >= 0.5 else (left, taken)

    def _relax(self, low: Array, high: Array) -> RelaxedAnswer | None:
        upper, width = self.master.upper, len(self.relaxed.rows.cost)
        self.relaxed.add(upper.matrix(width, self._told), upper.limits(self._told))
        self._told = len(upper)
        return self.relaxed.solve(low, high)

    def _bound_of(self, answer: RelaxedAnswer) -> float:
        return answer.bound * self.master.objective_scale

    def _is_whole(self, answer: RelaxedAnswer) -> bool:
        x = answer.x[self.relaxed.binary]
        return bool(np.all(np.minimum(x, 1.0 - x) <= WHOLE))

    def _offer(self, answer: RelaxedAnswer) -> bool:
        """Offer the choice nearest to a relaxed answer and teach the master its exact value; False if it was known."""
        rows = nearest_choice(self.master, answer.x)
        if rows.tobytes() in self.search.tried:
            return False
        found = self.search.offer(rows)
        if found is None:
            self.master.upper.add({int(self.master.layout.pick[w]): 1.0 for w in rows}, len(rows) - 1.0)
        else:
            flow = found.outcome.flow
            cuts_for_choice(self.master, found.outcome.choice.rows, flow.intensity, flow.exponent)
        return True

    def _excluded(self, answer: RelaxedAnswer, bound: float) -> NDArray[np.bool_]:
        """Ways whose reduced cost alone lifts the bound above the best plan: no better plan takes them."""
        reduced = reduced_costs(self.relaxed.rows, answer.upper_price, answer.equal_price)
        value = self.search.value_of_best
        lifted = bound + reduced[self.master.layout.pick] * self.master.objective_scale
        return np.asarray(lifted > value + 1e-9 * abs(value))
