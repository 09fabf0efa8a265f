"""How does every way answer a price of defects: all ways at once, in arrays.

At price π per unit of δ a way minimises C(δ) + π·δ over its range. Decade laws answer in closed form; power and
exponential laws by Newton on ln C'(z) − ln(−δ'(z)) = ln π, which is convex and rising in z, from the last answer;
quotes and chords by the corner of their straight pieces.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from allocator import curves as cv
from allocator import laws
from allocator.curves import Curves

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
BLOCK = 8192
"""Ways that are worked on together: what one pass of the tails needs of them stays in the processor's cache."""
ROOT_TWO_PI = float(np.sqrt(2.0 * np.pi))
NEWTON_STEPS = 30
ONE_STEP_LEFT = 1e-7
"""A step this small [σ] is the last: each one squares what is off."""
LEAST_STEEP = 1e-12
"""Where a law's range starts just where its cost turns convex, it rises there by nothing but rounding [1/σ]."""
SETTLED = 1e-12
"""A level has settled when a step moves it by less than this [σ]; what is left is charged to the bound."""

NEXT_TO = 1e-8
"""Share of δ by which it may lie beside an answer for a straight line to tell its level to the last digits."""


@dataclass
class Answers:
    """The answers of all ways at one price: δ, the law's cost C(δ), its slope C'(δ), and −dδ/dπ (0 where pinned)."""

    delta: Array
    cost: Array
    slope: Array
    give: Array


class Market:
    """The ways of a problem as arrays, ready to answer prices again and again.

    Parameters
    ----------
    curves : Curves
        One row per way.
    z_low, z_high : shape (n_ways,) [σ]
    pieces : dict, optional
        Straight pieces (δ, cost) that stand for the law, by way; none for most.
    ends : pair of arrays, shape (n_ways,) [defects per item], optional
        δ at z_high and at z_low, where they are known.
    """

    def __init__(
        self,
        curves: Curves,
        z_low: Array,
        z_high: Array,
        pieces: dict[int, tuple[Array, Array]] | None = None,
        ends: tuple[Array, Array] | None = None,
    ) -> None:
        self.size, self.scale, self._made_of = len(z_low), curves.scale, (curves, z_low, z_high)
        self.straight = np.zeros(self.size, dtype=bool)
        self.straight[list(pieces or ())] = True
        moves = (z_high > z_low) & ~self.straight
        self.low, self.high = ends or (cv.intensity(curves, z_high), cv.intensity(curves, z_low))
        still = np.flatnonzero(~moves & ~self.straight)
        self.still_cost = np.zeros(self.size)
        self.still_cost[still] = cv.smooth_cost(curves.take(still), z_low[still])
        self.decade = np.flatnonzero(moves & (curves.kind == cv.DECADE))
        self.sloped = _alike(curves, moves)
        self.decades = _Decades(curves.take(self.decade), self.low[self.decade], self.high[self.decade])
        self.slopes = [_Sloped(curves.take(rows), z_low[rows], z_high[rows]) for rows in self.sloped]
        self.pieces = _Pieces(pieces or {})
        if len(self.pieces.rows):
            self.low, self.high = self.low.copy(), self.high.copy()
            self.low[self.pieces.rows], self.high[self.pieces.rows] = self.pieces.low, self.pieces.high

    def take(self, rows: slice) -> Market:
        """Return some of the ways, all of them smooth, as a market of their own."""
        curves, z_low, z_high = self._made_of
        return Market(curves.take(rows), z_low[rows], z_high[rows], None, (self.low[rows], self.high[rows]))

    @property
    def still(self) -> bool:
        """Whether no way has a level that moves smoothly."""
        return len(self.decade) == 0 and not self.sloped

    @property
    def smooth(self) -> bool:
        """Whether no way has straight pieces, so that answers change continuously with the price."""
        return not self.straight.any()

    def answer(self, price: Array, rounds: int = NEWTON_STEPS) -> Answers:
        """Return every way's answer to its own price π > 0 [currency/year per unit of δ], shape (n_ways,).

        Fewer rounds leave some levels short of it: `slope` tells the price that they do answer to.
        """
        answers = Answers(self.high.copy(), self.still_cost.copy(), -price, np.zeros(self.size))
        if len(self.decade):
            self.decades.answer(price, self.decade, answers)
        for rows, part in zip(self.sloped, self.slopes, strict=True):
            part.answer(price, rounds, rows, answers)
        if len(self.pieces.rows):
            self.pieces.answer(price, answers)
        return answers

    def levels(self, delta: Array) -> Array:
        """Return the sigma levels at intensities next to the last answers [σ], NaN where they are not known at once."""
        z = np.full(self.size, np.nan)
        for rows, part in zip(self.sloped, self.slopes, strict=True):
            z[rows] = part.levels(delta[rows])
        return z

    def cost_at(self, delta: Array, curves: Curves) -> Array:
        """Return the law's cost at given intensities inside each way's range (slow: it inverts the tails)."""
        cost = self.still_cost.copy()
        rows = np.concatenate([self.decade, *self.sloped])
        cost[rows] = cv.smooth_slopes(curves.take(rows), delta[rows])[0]
        if len(self.pieces.rows):
            cost[self.pieces.rows] = self.pieces.cost_at(delta[self.pieces.rows])
        return cost


def _alike(curves: Curves, moves: NDArray[np.bool_]) -> list[Indices]:
    """Return the moving ways whose cost is a function of the sigma level, those of one kind of pass together."""
    kinds = np.where(moves, 4 * curves.kind + 2 * (curves.sides == 2) + curves.copied, -1)
    wanted = [4 * kind + more for kind in (cv.POWER, cv.EXPONENTIAL) for more in range(4)]
    found = (np.flatnonzero(kinds == kind) for kind in wanted)
    return [rows for rows in found if len(rows)]


class _Decades:
    """Decade laws: C = c·log10(P0/P) with P = 1 − exp(−δ/n), so C' = −π gives P/(1−P) = c/(n·π·ln 10)."""

    def __init__(self, curves: Curves, low: Array, high: Array) -> None:
        self.n, self.low, self.high = curves.opportunities, low, high
        self.per_e_fold = curves.scale / laws.LOG_TEN
        self.log_start = cv.log_probability(curves, curves.start) if len(low) else np.zeros(0)

    def answer(self, price: Array, rows: Indices, answers: Answers) -> None:
        """Put the answers into their rows."""
        for start in range(0, len(rows), BLOCK):
            b = slice(start, start + BLOCK)
            some = rows[b]
            n, per_e_fold = self.n[b], self.per_e_fold[b]
            with np.errstate(divide="ignore", over="ignore", invalid="ignore"):
                free = n * np.log1p(per_e_fold / (n * np.maximum(price[some], 1e-300)))
            delta = np.clip(free, self.low[b], self.high[b])
            bad, good = -np.expm1(-delta / n), np.exp(-delta / n)
            slope = -per_e_fold * good / (n * bad)
            inside = (free > self.low[b]) & (free < self.high[b])
            with np.errstate(divide="ignore", invalid="ignore"):
                give = np.where(inside, -n * bad / np.where(inside, slope, -1.0), 0.0)
            answers.delta[some], answers.slope[some] = delta, slope
            answers.cost[some] = per_e_fold * (self.log_start[b] - np.log(bad))
            answers.give[some] = np.where(np.isfinite(give), give, 0.0)


class _Sloped:
    """Power or exponential laws, whose cost is a function of the sigma level: of one kind, with as many limits.

    What the last answer knows of every way is kept, so that a price nearby is one pass of the tails away. Ways go
    through it in blocks that stay in the processor's cache.
    """

    def __init__(self, curves: Curves, z_low: Array, z_high: Array) -> None:
        self.curves, self.z_low, self.z_high = curves, z_low, z_high
        self.is_power = bool(curves.kind[0] == cv.POWER)
        self.two, self.copied = bool(curves.sides[0] == 2), bool(curves.copied[0])
        self.z = 0.5 * (z_low + z_high)
        self.delta, self.rise, self.own, self.steep = (np.zeros(len(z_low)) for _ in range(4))
        """δ, dδ/dz, ln of the price that this level answers, and how that rises in z, all at `z`."""
        a = curves.parameter
        with np.errstate(divide="ignore", invalid="ignore"):
            lead = np.log(np.abs(curves.start)) if self.is_power else curves.start
            self.log_lead = np.log(a) - a * lead + np.log(curves.scale)
        for block in self._blocks():
            self._look(block, self.z[block])

    def answer(self, price: Array, rounds: int, rows: Indices, answers: Answers) -> None:
        """Put the answers into their rows."""
        for block in self._blocks():
            some = rows[block]
            self._settle(block, np.log(np.maximum(price[some], 1e-300)), rounds)
            z, own = self.z[block], np.exp(self.own[block])
            inside = (z > self.z_low[block]) & (z < self.z_high[block])
            answers.delta[some], answers.cost[some], answers.slope[some] = self.delta[block], self.cost(block), -own
            answers.give[some] = np.where(inside, -self.rise[block] / (own * self.steep[block]), 0.0)

    def levels(self, delta: Array) -> Array:
        """Return the levels at δ by their slope at the last answers, NaN where that is too far away."""
        move = delta - self.delta
        return np.where(np.abs(move) <= NEXT_TO * self.delta, self.z + move / self.rise, np.nan)

    def _blocks(self) -> list[slice]:
        return [slice(start, start + BLOCK) for start in range(0, len(self.z), BLOCK)]

    def _settle(self, block: slice, log_price: Array, rounds: int) -> None:
        """Move a block to its answers by at most so many Newton steps."""
        low, high = self.z_low[block], self.z_high[block]
        for _ in range(rounds):
            z = self.z[block]
            moved = np.clip(z - (self.own[block] - log_price) / self.steep[block], low, high)
            step = float(np.max(np.abs(moved - z)))
            if step < SETTLED:
                return
            self.z[block] = moved
            self._look(block, moved)
            if step < ONE_STEP_LEFT:
                return

    def _look(self, block: slice, z: Array) -> None:
        """Note what is known at levels z: d ln(price)/dz = d ln C'(z)/dz − δ''/δ'."""
        delta, rise, bend = self._intensity(block, z)
        a = self.curves.parameter[block]
        with np.errstate(divide="ignore", invalid="ignore"):
            log_slope, log_slope_rise = (a - 1.0) * np.log(np.abs(z)) if self.is_power else a * z, a
            if self.is_power:
                log_slope_rise = (a - 1.0) / z
        self.delta[block], self.rise[block] = delta, rise
        self.own[block] = self.log_lead[block] + log_slope - np.log(-rise)
        self.steep[block] = np.maximum(log_slope_rise - bend, LEAST_STEEP)

    def cost(self, block: slice) -> Array:
        """Return the law's cost of a block at its levels."""
        z, a, start = self.z[block], self.curves.parameter[block], self.curves.start[block]
        with np.errstate(all="ignore"):
            exponent = a * np.log(np.abs(z / start)) if self.is_power else a * (z - start)
        return self.curves.scale[block] * np.expm1(exponent)

    def _intensity(self, block: slice, z: Array) -> tuple[Array, Array, Array]:
        """Return δ, dδ/dz and δ''/δ' by one pass of the tails (without logarithms: ranges end far above 1e-300)."""
        c = self.curves
        if self.copied:
            delta, rise, bend = cv.intensity_slopes(c.take(block), z)
            return delta, rise, bend / rise
        k, shift, n = c.k[block], c.shift[block], c.opportunities[block]
        near = shift - z * (1.0 - k)
        p, first, second = _tail(near, 1.0 - k)
        if self.two:
            far = _tail(-(z * (1.0 + k) + shift), 1.0 + k)
            p, first, second = p + far[0], first + far[1], second + far[2]
        rise = first / (1.0 - p)
        return -n * np.log1p(-p), n * rise, second / first + rise


def _tail(x: Array, factor: Array) -> tuple[Array, Array, Array]:
    """Return Φ(x) for x falling by `factor` per σ, and its first and second derivative in the sigma level."""
    first = np.exp(-0.5 * x * x) * factor / -ROOT_TWO_PI
    return ndtr(x), first, first * x * factor


class _Pieces:
    """Quotes and chords: straight pieces, flattened over all ways that have them."""

    def __init__(self, pieces: dict[int, tuple[Array, Array]]) -> None:
        self.rows = np.array(sorted(pieces), dtype=np.int64)
        self.knots = [pieces[row] for row in self.rows.tolist()]
        self.low = np.array([delta[0] for delta, _ in self.knots])
        self.high = np.array([delta[-1] for delta, _ in self.knots])
        width = max((len(delta) for delta, _ in self.knots), default=0)
        self.delta, self.cost = np.full((len(self.rows), width), np.nan), np.full((len(self.rows), width), np.nan)
        for i, (delta, cost) in enumerate(self.knots):
            self.delta[i, : len(delta)], self.cost[i, : len(cost)] = delta, cost

    def answer(self, price: Array, answers: Answers) -> None:
        """Put the answers into their rows; a corner is exact, as if its slope met the price."""
        best = np.nanargmin(self.cost + price[self.rows, None] * self.delta, axis=1)
        at = np.arange(len(best)), best
        answers.delta[self.rows], answers.cost[self.rows] = self.delta[at], self.cost[at]

    def cost_at(self, delta: Array) -> Array:
        return np.array([np.interp(d, *line) for d, line in zip(delta, self.knots, strict=True)])
