"""The cheapest intensities once the ways are chosen: a primal-dual interior-point method with a proof of its own.

The bound does not rest on the method's convergence: for convex functions f(y) ≥ f(x) + ∇f(x)·(y − x), so with any
multipliers λ ≥ 0 the least of f + λ·c over the box is at least its value at x plus what the gradient allows
(Boyd and Vandenberghe, Convex Optimization, sections 3.1.3, 5.1 and 11.7).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from allocator.solve.program import Program

Array = NDArray[np.float64]
GAP = 1e-10
"""Relative gap aimed at."""
ITERATIONS = 120
CENTRING = 10.0
"""By how much the barrier weight grows per iteration."""
INTERIOR = 1e-12
"""A budget with less room than this share of itself, which is the rounding of its figures, is taken as having none."""


@dataclass(frozen=True)
class Point:
    """An answer: intensities v, the objective there, a proven lower bound, and the price of each limit."""

    v: Array
    value: float
    bound: float
    prices: dict[str, float]


@dataclass(frozen=True)
class _Scaled:
    """The program in x from 0 to its wall, objective and limits divided by their own size.

    `span` [defects per item] is one unit of x, about twice the distance of the start from the low end: a tight budget
    leaves only the lowest millionth of a long range, and in units of the range its slopes would dwarf all else.
    """

    program: Program
    objective: str
    limits: dict[str, float]
    size: float
    span: Array
    wall: Array

    def point(self, x: Array) -> Array:
        return np.minimum(self.program.low + self.span * x, self.program.high)

    def all_functions(self, x: Array) -> tuple[list[tuple[float, Array, Array, Array]], Array]:
        """Return objective first, then the limits, each (value, gradient, curvature, scrap weight) in x."""
        span = self.span
        results = []
        v = self.point(x)
        laws = self.program.law_slopes(v)
        for name, limit, size in [
            (self.objective, 0.0, self.size),
            *((n, b, _size(b)) for n, b in self.limits.items()),
        ]:
            value, grad, bend, weight = self.program.derivatives(name, v, laws)
            results.append(((value - limit) / size, grad * span / size, bend * span**2 / size, weight / size))
        return results, span


def _size(limit: float) -> float:
    return max(abs(limit), 1e-300)


def minimise(program: Program, objective: str, limits: dict[str, float], hopeless: float | None = None) -> Point | None:
    """Return the least of one function of the program subject to limits on others, None when no point keeps them.

    Parameters
    ----------
    program : Program
    objective : str
        One of `program.functions`.
    limits : dict
        Upper limit by function name.
    hopeless : float, optional
        Stop as soon as the bound passes this: whoever asks has something better already.
    """
    unpaid = _without_money(program, limits)
    if unpaid is None:
        return None
    program, limits, fixed = unpaid
    point = _minimise(program, objective, limits, hopeless)
    return None if point is None else _with_fixed(point, fixed)


def _minimise(program: Program, objective: str, limits: dict[str, float], hopeless: float | None) -> Point | None:
    rising = {n: b for n, b in limits.items() if not program.functions[n].law.any()}
    falling = {n: b for n, b in limits.items() if n not in rising}
    pinned = _without_room(program, rising)
    if pinned is None:
        return None
    program, rising, fixed = pinned
    if program.size == 0:
        return _only_point(program, objective, {**rising, **falling}, fixed)
    start = _start(program, rising)
    for name, limit in falling.items():
        # Money falls as loads rise, so a point that keeps both is looked for by minimising the money itself.
        others = {**rising, **{n: b for n, b in falling.items() if n != name and program.value(n, start) < b}}
        if program.value(name, start) >= limit:
            cheapest = _solve(program, name, others, start, enough=limit - 1e-6 * abs(limit))
            if program.value(name, cheapest.v) > limit * (1.0 + 1e-12):
                return None
            if program.value(name, cheapest.v) >= limit - INTERIOR * abs(limit):
                value = program.value(objective, cheapest.v)
                return _with_fixed(Point(cheapest.v, value, value, {}), fixed)
            start = cheapest.v
    return _with_fixed(_solve(program, objective, {**rising, **falling}, start, hopeless=hopeless), fixed)


def _without_room(
    program: Program, limits: dict[str, float]
) -> tuple[Program, dict[str, float], tuple[NDArray[np.bool_], Array]] | None:
    """Pin the variables of limits that only the lowest intensities keep; None where not even these do."""
    free = np.ones(program.size, dtype=bool)
    kept = dict(limits)
    for name, limit in limits.items():
        least = program.value(name, program.low)
        if least > limit + 1e-12 * abs(limit) + 4e-16:
            return None
        if least >= limit - INTERIOR * abs(limit):
            free &= program.functions[name].linear == 0.0
            del kept[name]
    if free.all():
        return program, kept, (free, program.low)
    return _pinned(program, free), kept, (free, program.low)


def _without_money(
    program: Program, limits: dict[str, float]
) -> tuple[Program, dict[str, float], tuple[NDArray[np.bool_], Array]] | None:
    """Pin the variables of limits on laws alone that only the highest intensities keep; None where not even these do.

    Where all the money is spent before any law is (a limit on capital of 0, say), no point lies inside the limit.
    """
    free, kept = np.ones(program.size, dtype=bool), dict(limits)
    for name, limit in limits.items():
        f = program.functions[name]
        if f.scrap or f.linear.any() or not f.law.any():
            continue
        least, most = program.value(name, program.high), program.value(name, program.low)
        rounding = INTERIOR * max(most - least, abs(limit))
        if least > limit + rounding:
            return None
        if least >= limit - rounding:
            free &= f.law == 0.0
            del kept[name]
    held = np.where(free, program.low, program.high)
    if free.all():
        return program, kept, (free, held)
    return _pinned(replace(program, low=held), free), kept, (free, held)


def _pinned(program: Program, free: NDArray[np.bool_]) -> Program:
    """Return the program with all but the free variables held at their lowest intensity."""
    held = np.where(free, 0.0, program.low)
    functions = {}
    cost = program.law_slopes(np.maximum(held, np.where(free, program.high, held)))[0] if program.size else np.zeros(0)
    for name, f in program.functions.items():
        constant = f.constant + float(f.linear @ held) + float(f.law[~free] @ cost[~free])
        functions[name] = type(f)(constant, f.linear[free], f.law[free], f.scrap)
    base = program.base.copy()
    np.add.at(base, program.step[~free], program.low[~free])
    return Program(
        step=program.step[free], low=program.low[free], high=program.high[free], curves=program.curves.take(free),
        slope=program.slope[free], base=base, exponent_base=program.exponent_base + program.exponent_slope @ held,
        exponent_slope=program.exponent_slope[:, free], scrap_weight=program.scrap_weight, functions=functions,
    )  # fmt: skip


def _with_fixed(point: Point, fixed: tuple[NDArray[np.bool_], Array]) -> Point:
    free, low = fixed
    v = low.copy()
    v[free] = point.v
    return Point(v, point.value, point.bound, point.prices)


def _only_point(
    program: Program, objective: str, limits: dict[str, float], fixed: tuple[NDArray[np.bool_], Array]
) -> Point | None:
    nothing = np.zeros(0)
    if any(program.value(n, nothing) > b + 1e-12 * abs(b) + 4e-16 for n, b in limits.items()):
        return None
    value = program.value(objective, nothing)
    return _with_fixed(Point(nothing, value, value, {}), fixed)


def _start(program: Program, limits: dict[str, float]) -> Array:
    """Return a point strictly inside the box and the (rising, linear) limits."""
    step = 0.5
    for name, limit in limits.items():
        least = program.value(name, program.low)
        reach = program.value(name, program.high) - least
        if reach > 0.0:
            step = min(step, 0.5 * (limit - least) / reach)
    return program.low + step * (program.high - program.low)


def _solve(
    program: Program,
    objective: str,
    limits: dict[str, float],
    start: Array,
    enough: float | None = None,
    hopeless: float | None = None,
) -> Point:
    """Run the primal-dual iteration from a strictly feasible start."""
    size = max(abs(program.value(objective, start)), 1e-300)
    reach = program.high - program.low
    span = np.minimum(np.maximum(2.0 * (start - program.low), 1e-12 * reach), reach)
    scaled = _Scaled(program, objective, limits, size, span, reach / span)
    x = np.clip((start - program.low) / span, 1e-12, scaled.wall - 1e-12)
    count = 2 * len(x) + len(limits)
    functions, _ = scaled.all_functions(x)
    room = _room(functions, x, scaled.wall)
    multiplier = 1.0 / room
    best: tuple[float, float, Array, Array] = (-np.inf, np.inf, x, multiplier)
    for _ in range(ITERATIONS):
        value, prices = functions[0][0], multiplier[: len(limits)]
        bound = _bound(functions, x, prices, scaled.wall)
        if bound > best[0] or value < best[1]:
            best = _better(best, bound, value, x, multiplier)
        decided = best[1] * size < (-np.inf if enough is None else enough)
        decided = decided or best[0] * size > (np.inf if hopeless is None else hopeless)
        if decided or best[1] - best[0] <= GAP * max(abs(best[1]), 1e-300):
            break
        weight = CENTRING * count / float(room @ multiplier)
        move = _newton(functions, program.exponent_slope * span, x, room, multiplier, weight)
        stepped = _step(scaled, functions, x, multiplier, room, move, weight)
        if stepped is None:
            break
        x, multiplier, functions = stepped
        room = _room(functions, x, scaled.wall)
    bound, value, x, multiplier = best
    named = {name: float(multiplier[i]) * size / _size(limit) for i, (name, limit) in enumerate(limits.items())}
    return Point(scaled.point(x), value * size, bound * size, named)


def _better(
    best: tuple[float, float, Array, Array], bound: float, value: float, x: Array, multiplier: Array
) -> tuple[float, float, Array, Array]:
    """Keep the highest bound and the lowest value seen, with the multipliers of the latest better value."""
    if value <= best[1]:
        return max(bound, best[0]), value, x, multiplier
    return max(bound, best[0]), best[1], best[2], best[3]


def _room(functions: list[tuple[float, Array, Array, Array]], x: Array, wall: Array) -> Array:
    """Return the room left (positive inside) in the limits, the lower and the upper ends of the box."""
    return np.concatenate([[-f[0] for f in functions[1:]], x, wall - x])


def _bound(functions: list[tuple[float, Array, Array, Array]], x: Array, prices: Array, wall: Array) -> float:
    """Return a lower bound of the objective over all points that keep the limits (see the module's first lines)."""
    slope = functions[0][1] + sum((p * f[1] for p, f in zip(prices, functions[1:], strict=True)), np.zeros(len(x)))
    value = functions[0][0] + sum(p * f[0] for p, f in zip(prices, functions[1:], strict=True))
    return float(value + np.sum(np.minimum(-slope * x, slope * (wall - x))))


def _newton(
    functions: list[tuple[float, Array, Array, Array]],
    reach: Array,
    x: Array,
    room: Array,
    multiplier: Array,
    weight: float,
) -> tuple[Array, Array]:
    """Return the Newton step in x and in the multipliers for the centring weight."""
    m, k = len(x), len(functions) - 1
    prices, lower, upper = multiplier[:k], multiplier[k : k + m], multiplier[k + m :]
    gradients = [f[1] for f in functions[1:]]
    diagonal = functions[0][2] + sum((p * f[2] for p, f in zip(prices, functions[1:], strict=True)), np.zeros(m))
    diagonal = diagonal + lower / x + upper / room[k + m :]
    scrap = functions[0][3] + sum((p * f[3] for p, f in zip(prices, functions[1:], strict=True)), 0.0 * functions[0][3])
    hessian = reach.T @ (scrap[:, None] * reach)
    hessian[np.diag_indices(m)] += diagonal
    force = functions[0][1] - (1.0 / weight) * (1.0 / x - 1.0 / room[k + m :])
    for i, g in enumerate(gradients):
        hessian += prices[i] / room[i] * np.outer(g, g)
        force = force + g / (weight * room[i])
    dx = _solve_positive(hessian, -force)
    slopes = np.concatenate([[float(g @ dx) for g in gradients], -dx, dx])
    return dx, (1.0 / weight + multiplier * slopes) / room - multiplier


def _solve_positive(matrix: Array, right: Array) -> Array:
    """Solve with a positive definite matrix, scaled to unit diagonal because intensities differ by many decades."""
    from scipy.linalg import (  # here, because its import takes time that the price road needs not pay
        cho_factor,
        cho_solve,
    )

    scale = 1.0 / np.sqrt(np.diag(matrix))
    scaled = matrix * scale[:, None] * scale[None, :]
    scaled[np.diag_indices(len(scale))] += 1e-15
    try:
        return np.asarray(scale * cho_solve(cho_factor(scaled), scale * right))
    except np.linalg.LinAlgError:
        return np.asarray(scale * np.linalg.lstsq(scaled, scale * right, rcond=None)[0])


def _residual(
    functions: list[tuple[float, Array, Array, Array]], x: Array, multiplier: Array, weight: float, wall: Array
) -> float:
    m, k = len(x), len(functions) - 1
    slope = functions[0][1] - multiplier[k : k + m] + multiplier[k + m :]
    for p, f in zip(multiplier[:k], functions[1:], strict=True):
        slope = slope + p * f[1]
    return float(np.sqrt(np.sum(slope**2) + np.sum((multiplier * _room(functions, x, wall) - 1.0 / weight) ** 2)))


def _step(
    scaled: _Scaled, functions: list[tuple[float, Array, Array, Array]], x: Array, multiplier: Array, room: Array,
    move: tuple[Array, Array], weight: float,
) -> tuple[Array, Array, list[tuple[float, Array, Array, Array]]] | None:  # fmt: skip
    """Go along the step as far as everything stays positive and the residual falls; None when no step helps."""
    dx, dm = move
    shrinking = dm < 0.0
    length = min(1.0, 0.995 * float(np.min(-multiplier[shrinking] / dm[shrinking], initial=np.inf)))
    walls = np.concatenate([-x[dx < 0.0] / dx[dx < 0.0], (scaled.wall - x)[dx > 0.0] / dx[dx > 0.0]])
    length = min(length, 0.995 * float(np.min(walls, initial=np.inf)))
    before = _residual(functions, x, multiplier, weight, scaled.wall)
    for _ in range(60):
        moved, changed = x + length * dx, multiplier + length * dm
        new, _ = scaled.all_functions(moved)
        inside = all(np.isfinite(f[0]) for f in new) and bool(np.all(_room(new, moved, scaled.wall) > 0.0))
        if inside and _residual(new, moved, changed, weight, scaled.wall) <= (1.0 - 0.01 * length) * before:
            return moved, changed, new
        length *= 0.6
    return None
