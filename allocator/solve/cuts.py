"""Tangents of laws and of scrap, in δ scaled by the choice variable, added to the master where it is too optimistic."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.problem import COST
from allocator.solve.rows import Master

Array = NDArray[np.float64]
FIRST_TANGENTS = 5
VIOLATED = 1e-8
"""A cut is added when the master undercuts the law or the scrap by more than this share of the money scale."""


def first_cuts(master: Master, exponents: list[Array]) -> None:
    """Add tangents over every law's range, all straight pieces, and scrap tangents at the given flow exponents."""
    ways = master.problem.options.ways
    smooth = np.array([w for w in np.flatnonzero(ways.moves) if ways.lines[w] is None], dtype=np.int64)
    for place in np.linspace(0.0, 1.0, FIRST_TANGENTS):
        low, high = ways.delta_low[smooth], ways.delta_high[smooth]
        _law_tangents(master, smooth, low ** (1.0 - place) * high**place)
    for w in np.flatnonzero(ways.moves):
        lines = ways.lines[w]
        if lines is not None:
            _straight_pieces(master, int(w), *lines)
    for exponent in exponents:
        _scrap_tangents(master, exponent, np.arange(len(exponent)))


def cuts_at(master: Master, x: Array) -> int:
    """Add the cuts that the master's answer x violates; return how many were added."""
    return _law_cuts_at(master, x) + _scrap_cuts_at(master, x)


def cuts_for_choice(master: Master, rows: NDArray[np.int64], delta: Array, exponent: Array) -> None:
    """Add the tangents at an evaluated choice, so that the master values this choice exactly."""
    ways = master.problem.options.ways
    smooth = np.array([w for w in rows if ways.moves[w] and ways.lines[w] is None], dtype=np.int64)
    _law_tangents(master, smooth, delta[ways.step[smooth]])
    _scrap_tangents(master, exponent, np.arange(len(exponent)))


def _law_cuts_at(master: Master, x: Array) -> int:
    ways, layout = master.problem.options.ways, master.layout
    smooth = np.array([w for w in np.flatnonzero(ways.moves) if ways.lines[w] is None], dtype=np.int64)
    if len(smooth) == 0:
        return 0
    pick, amount, law = x[layout.pick[smooth]], x[layout.amount[smooth]], x[layout.law[smooth]]
    used = pick > 1e-7
    smooth, pick, amount, law = smooth[used], pick[used], amount[used], law[used]
    if len(smooth) == 0:
        return 0
    delta = np.clip(amount / pick * ways.delta_high[smooth], ways.delta_low[smooth], ways.delta_high[smooth])
    cost = cv.smooth_slopes(ways.curves.take(smooth), delta)[0] / master.money_scale
    short = pick * cost - law > VIOLATED
    _law_tangents(master, smooth[short], delta[short])
    return int(short.sum())


def _scrap_cuts_at(master: Master, x: Array) -> int:
    if not _scrap_counts(master):
        return 0
    layout, line = master.layout, master.problem.line
    steps = np.flatnonzero(layout.scrap >= 0)
    exponent = x[layout.exponent] * master.defect_scale
    weight = line.shipped * line.per_finished * line.net_cost / master.money_scale
    short = steps[weight[steps] * np.expm1(exponent[steps]) - x[layout.scrap[steps]] > VIOLATED]
    _scrap_tangents(master, exponent, short)
    return len(short)


def _scrap_counts(master: Master) -> bool:
    return master.problem.objective == COST or master.problem.spend is not None


def _law_tangents(master: Master, chosen: NDArray[np.int64], delta: Array) -> None:
    """cost ≥ (C − C'·δt)·x + C'·δ for every way in `chosen`, touching at `delta`."""
    if len(chosen) == 0:
        return
    ways = master.problem.options.ways
    cost, slope, _ = cv.smooth_slopes(ways.curves.take(chosen), delta)
    for w, constant, rise in zip(chosen.tolist(), cost - slope * delta, slope * ways.delta_high[chosen], strict=True):
        _law_row(master, w, float(constant), float(rise))


def _straight_pieces(master: Master, w: int, delta: Array, cost: Array) -> None:
    ways = master.problem.options.ways
    for i in range(len(delta) - 1):
        slope = (cost[i + 1] - cost[i]) / (delta[i + 1] - delta[i])
        _law_row(master, w, float(cost[i] - slope * delta[i]), float(slope * ways.delta_high[w]))


def _law_row(master: Master, w: int, constant: float, rise: float) -> None:
    places, scale = master.layout, master.money_scale
    master.upper.add(
        {int(places.pick[w]): constant / scale, int(places.amount[w]): rise / scale, int(places.law[w]): -1.0}, 0.0
    )


def _scrap_tangents(master: Master, exponent: Array, steps: NDArray[np.int64]) -> None:
    """scrap ≥ G·q·κ·(exp(S̄)·(1 + S − S̄) − 1), touching at S̄ = `exponent`."""
    if not _scrap_counts(master):
        return
    layout, line = master.layout, master.problem.line
    weight = line.shipped * line.per_finished * line.net_cost / master.money_scale
    for i in steps.tolist():
        if layout.scrap[i] < 0:
            continue
        at = float(np.exp(exponent[i]))
        master.upper.add(
            {int(layout.exponent[i]): weight[i] * at * master.defect_scale, int(layout.scrap[i]): -1.0},
            float(-weight[i] * (at * (1.0 - exponent[i]) - 1.0)),
        )
