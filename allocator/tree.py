"""How do figures add up along the tree: from the steps that feed to the end, and back, in one sweep of many steps.

Both directions are linear recurrences. The tree is cut into paths, so that from any step to the end only a few of them
(at most log2 of the number of steps) are entered; paths that lie equally many cuts from the end are swept together, as
one triangular system with two diagonals. Sums of figures that are 0 or more lose no digits that way, however small
some of them are.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
SHORT = 400
"""Steps up to which a plain loop is as quick and needs no solver library."""


@dataclass(frozen=True)
class _Sweep:
    """Paths equally far from the end: their steps in order, and for all but the first whether it goes on a path."""

    steps: Indices
    joined: Array
    feeding: Indices
    """The steps that end a path here and feed another one,"""
    fed: Indices
    """and the steps that these feed."""


@dataclass(frozen=True)
class Tree:
    """An in-tree by `feeds`: the later step that each step feeds, −1 for the last; shape (n_steps,)."""

    feeds: Indices
    _sweeps: list[_Sweep] = field(default_factory=list, repr=False, compare=False)

    @cached_property
    def serial(self) -> bool:
        """Whether each step feeds the next."""
        return np.array_equal(self.feeds[:-1], np.arange(1, len(self.feeds)))

    def sums_to_end(self, own: Array) -> Array:
        """Return the sum of `own` over each step and all that follow it, shape (n_steps,)."""
        if self.serial:
            return np.asarray(np.cumsum(own[::-1])[::-1])
        return self.spread(own, np.ones(len(own)))

    def sums_from_start(self, own: Array) -> Array:
        """Return the sum of `own` over each step and all that lead to it, shape (n_steps,)."""
        return np.cumsum(own) if self.serial else self.gathered(own, np.ones(len(own)))

    def gathered(self, own: Array, passed: Array) -> Array:
        """Return x with x_i = own_i + Σ passed_c·x_c over the steps c that feed i, shape (n_steps,)."""
        if len(own) <= SHORT:
            return self._gathered_one_by_one(own, passed)
        if self.serial:
            return _forward(own, passed[:-1])
        found = own.astype(float)
        for sweep in self.sweeps:
            steps = sweep.steps
            found[steps] = _forward(found[steps], sweep.joined * passed[steps[:-1]])
            np.add.at(found, sweep.fed, passed[sweep.feeding] * found[sweep.feeding])
        return found

    def spread(self, own: Array, taken: Array) -> Array:
        """Return x with x_i = own_i + taken_i·x_f for the step f that i feeds, shape (n_steps,)."""
        if len(own) <= SHORT:
            return self._spread_one_by_one(own, taken)
        if self.serial:
            return _forward(own[::-1], taken[-2::-1])[::-1]
        found = own.astype(float)
        for sweep in reversed(self.sweeps):
            found[sweep.feeding] += taken[sweep.feeding] * found[sweep.fed]
            steps = sweep.steps
            found[steps[::-1]] = _forward(found[steps[::-1]], (sweep.joined * taken[steps[:-1]])[::-1])
        return found

    def inflow(self, passed: Array) -> Array:
        """Return the sum of `passed` over the steps that feed each step, shape (n_steps,)."""
        return np.asarray(np.bincount(self.feeds[:-1], passed[:-1], minlength=len(passed)))

    @property
    def sweeps(self) -> list[_Sweep]:
        """The paths, farthest from the end first; cut once and kept."""
        if not self._sweeps:
            self._sweeps.extend(_cut(self.feeds))
        return self._sweeps

    def _gathered_one_by_one(self, own: Array, passed: Array) -> Array:
        sums, share, feeds = own.tolist(), passed.tolist(), self.feeds.tolist()
        for i in range(len(sums) - 1):
            sums[feeds[i]] += share[i] * sums[i]
        return np.array(sums)

    def _spread_one_by_one(self, own: Array, taken: Array) -> Array:
        sums, share, feeds = own.tolist(), taken.tolist(), self.feeds.tolist()
        for i in range(len(sums) - 2, -1, -1):
            sums[i] += share[i] * sums[feeds[i]]
        return np.array(sums)


def _forward(right: Array, factor: Array) -> Array:
    """Return x with x_0 = right_0 and x_j = right_j + factor_(j−1)·x_(j−1)."""
    from scipy.linalg.lapack import dtbtrs  # here, because short lines need no solver library

    band = np.empty((len(right), 2))  # the library reads it by columns: no copy that way
    np.negative(factor, out=band[:-1, 1])
    band[-1, 1] = 0.0
    found, failed = dtbtrs(band.T, right, uplo="L", diag="U")
    assert failed == 0, "a unit diagonal cannot be singular"
    return np.asarray(found)


def _cut(feeds: Indices) -> list[_Sweep]:
    """Cut the tree into paths: each step goes on with the largest of the subtrees that feed it."""
    steps = np.arange(len(feeds))
    cuts, end = _paths(feeds)
    order = np.lexsort((steps, end, -cuts))
    first = np.flatnonzero(np.diff(cuts[order], prepend=-1))
    sweeps = []
    for members in np.split(order, first[1:]):
        goes_on = end[members[1:]] == end[members[:-1]]
        ends = members[np.append(~goes_on, True)]
        feeding = ends[feeds[ends] >= 0]
        sweeps.append(_Sweep(members, goes_on.astype(float), feeding, feeds[feeding]))
    return sweeps


def _paths(feeds: Indices) -> tuple[Indices, Indices]:
    """Return for every step how many cuts lie between it and the end, and the last step of its path."""
    n, fed = len(feeds), feeds.tolist()
    size = [1] * n
    for i in range(n - 1):
        size[fed[i]] += size[i]
    order = np.lexsort((-np.arange(n - 1), np.array(size)[:-1], feeds[:-1]))
    goes_on = np.zeros(n, dtype=bool)
    goes_on[order[np.append(np.diff(feeds[order]) != 0, True)]] = True
    cut, cuts, end = (~goes_on).tolist(), [0] * n, list(range(n))
    for i in range(n - 2, -1, -1):
        cuts[i] = cuts[fed[i]] + cut[i]
        if not cut[i]:
            end[i] = end[fed[i]]
    return np.array(cuts, dtype=np.int64), np.array(end, dtype=np.int64)
