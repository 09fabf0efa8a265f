"""Which ways can never be worth taking, and which choices are worth trying first."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.flow import GATE_FIELDS
from allocator.problem import Problem
from allocator.ways import Ways


def without_dominated(problem: Problem) -> Problem:
    """Return the problem without ways that another one of the same step beats in every respect.

    Only ways without a law, with the same gate and the same shared purchases are compared; the better one has no more
    defects, cost and capital.
    """
    ways = problem.options.ways
    keep = np.ones(len(ways), dtype=bool)
    plain = (ways.curves.kind == cv.NONE) & ~ways.moves
    groups: dict[tuple[object, ...], list[int]] = {}
    for w in np.flatnonzero(plain).tolist():
        gate = tuple(float(getattr(ways.gates, name)[w]) for name in GATE_FIELDS)
        groups.setdefault((int(ways.step[w]), gate, ways.uses[w].tobytes()), []).append(w)
    for members in groups.values():
        _drop_dominated(ways, members, keep)
    if keep.all():
        return problem
    return replace(problem, options=replace(problem.options, ways=ways.take(np.flatnonzero(keep))))


def _drop_dominated(ways: Ways, members: list[int], keep: NDArray[np.bool_]) -> None:
    members = sorted(members, key=lambda w: (ways.delta_high[w], ways.fixed_cost[w], ways.capital[w]))
    kept: list[int] = []
    for w in members:
        if any(ways.fixed_cost[v] <= ways.fixed_cost[w] and ways.capital[v] <= ways.capital[w] for v in kept):
            keep[w] = False
        else:
            kept.append(w)


def ways_by_step(problem: Problem) -> list[NDArray[np.int64]]:
    """Return the ways of every step, in file order."""
    step = problem.options.ways.step
    return [np.flatnonzero(step == i).astype(np.int64) for i in range(problem.line.n_steps)]


def first_choices(problem: Problem) -> list[NDArray[np.int64]]:
    """Return a few choices worth trying first: the least defects, the least spent, and prices in between."""
    ways = problem.options.ways
    per_finished = problem.line.per_finished[ways.step]
    defects = (
        per_finished * ways.delta_low * (1.0 - 0.5 * ways.gates.reworked) + per_finished * ways.gates.scrap_of_good
    )
    missed = per_finished * ways.delta_low * (1.0 - ways.gates.finds) + 1e-3 * defects * (1.0 - ways.gates.earlier)
    cost = ways.fixed_cost + problem.line.shipped * per_finished * ways.gates.per_item
    scale = float(np.sum(np.abs(cost))) / max(float(defects.sum()), 1e-300)
    scores = [defects, missed, cost + 1e-9 * scale * defects, ways.capital + 1e-9 * cost]
    scores += [cost + price * scale * defects for price in (0.1, 1.0, 10.0)]
    picked: list[NDArray[np.int64]] = []
    for score in scores:
        rows = np.array([mine[np.argmin(score[mine])] for mine in ways_by_step(problem)], dtype=np.int64)
        if not any(np.array_equal(rows, seen) for seen in picked):
            picked.append(rows)
    return picked
