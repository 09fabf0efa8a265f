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
ROOT_TWO_PI = float(np.sqrt(2.0 * np.pi))
NEWTON_STEPS = 30
ONE_STEP_LEFT = 1e-7
"""A step this small [σ] is the last: each one squares what is off."""
LEAST_STEEP = 1e-12
"""Where a law's range starts just where its cost turns convex, it rises there by nothing but rounding [1/σ]."""
SETTLED = 1e-11
"""A level has settled when a step moves it by less than this [σ]; what is left is charged to the bound."""


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
    """

    def __init__(
        self, curves: Curves, z_low: Array, z_high: Array, pieces: dict[int, tuple[Array, Array]] | None = None
    ) -> None:
        self.size, self.scale = len(z_low), curves.scale
        self.straight = np.zeros(self.size, dtype=bool)
        self.straight[list(pieces or ())] = True
        moves = (z_high > z_low) & ~self.straight
        self.decade = np.flatnonzero(moves & (curves.kind == cv.DECADE))
        self.sloped = np.flatnonzero(moves & ((curves.kind == cv.POWER) | (curves.kind == cv.EXPONENTIAL)))
        self.high = cv.intensity(curves, z_low)
        self.low, wide = self.high.copy(), np.flatnonzero(z_high != z_low)
        self.low[wide] = cv.intensity(curves.take(wide), z_high[wide])
        still = ~moves & ~self.straight
        self.still_cost = np.where(still, cv.smooth_cost(curves, z_low), 0.0)
        self.decades = _Decades(curves.take(self.decade), self.low[self.decade], self.high[self.decade])
        self.slopes = _Sloped(curves.take(self.sloped), z_low[self.sloped], z_high[self.sloped])
        self.pieces = _Pieces(pieces or {})
        self.low[self.pieces.rows], self.high[self.pieces.rows] = self.pieces.low, self.pieces.high

    @property
    def still(self) -> bool:
        """Whether no way has a level that moves smoothly."""
        return len(self.decade) + len(self.sloped) == 0

    @property
    def smooth(self) -> bool:
        """Whether no way has straight pieces, so that answers change continuously with the price."""
        return not self.straight.any()

    def answer(self, price: Array, rounds: int = NEWTON_STEPS) -> Answers:
        """Return every way's answer to its own price π > 0 [currency/year per unit of δ], shape (n_ways,)."""
        delta, cost = self.high.copy(), self.still_cost.copy()
        slope, give = -price, np.zeros(self.size)
        for rows, part in ((self.decade, self.decades), (self.sloped, self.slopes), (self.pieces.rows, self.pieces)):
            if len(rows):
                delta[rows], cost[rows], slope[rows], give[rows] = part.answer(price[rows], rounds)
        return Answers(delta, cost, slope, give)

    def cost_at(self, delta: Array, curves: Curves) -> Array:
        """Return the law's cost at given intensities inside each way's range (slow: it inverts the tails)."""
        cost = self.still_cost.copy()
        rows = np.concatenate([self.decade, self.sloped])
        cost[rows] = cv.smooth_slopes(curves.take(rows), delta[rows])[0]
        if len(self.pieces.rows):
            cost[self.pieces.rows] = self.pieces.cost_at(delta[self.pieces.rows])
        return cost


class _Decades:
    """Decade laws: C = c·log10(P0/P) with P = 1 − exp(−δ/n), so C' = −π gives P/(1−P) = c/(n·π·ln 10)."""

    def __init__(self, curves: Curves, low: Array, high: Array) -> None:
        self.n, self.low, self.high = curves.opportunities, low, high
        self.per_e_fold = curves.scale / laws.LOG_TEN
        self.log_start = cv.log_probability(curves, curves.start) if len(low) else np.zeros(0)

    def answer(self, price: Array, rounds: int) -> tuple[Array, Array, Array, Array]:
        del rounds
        with np.errstate(divide="ignore", over="ignore"):
            odds = self.per_e_fold / (self.n * np.maximum(price, 1e-300))
        free = self.n * np.log1p(odds)
        delta = np.clip(free, self.low, self.high)
        bad, good = -np.expm1(-delta / self.n), np.exp(-delta / self.n)
        cost = self.per_e_fold * (self.log_start - np.log(bad))
        slope = -self.per_e_fold * good / (self.n * bad)
        inside = (free > self.low) & (free < self.high)
        with np.errstate(divide="ignore", invalid="ignore"):
            give = np.where(inside, -self.n * bad / np.where(inside, slope, -1.0), 0.0)
        return delta, cost, slope, np.where(np.isfinite(give), give, 0.0)


class _Sloped:
    """Power and exponential laws, whose cost is a function of the sigma level."""

    def __init__(self, curves: Curves, z_low: Array, z_high: Array) -> None:
        self.curves, self.z_low, self.z_high = curves, z_low, z_high
        self.z = 0.5 * (z_low + z_high)
        self.is_power = curves.kind == cv.POWER
        self.copied = bool(curves.copied.any())
        self.two = np.flatnonzero(curves.sides == 2)
        a = curves.parameter
        with np.errstate(divide="ignore", invalid="ignore"):
            self.log_lead = np.where(
                self.is_power, np.log(a) - a * np.log(np.abs(curves.start)), np.log(a) - a * curves.start
            )
            self.log_lead += np.log(curves.scale)

    def answer(self, price: Array, rounds: int) -> tuple[Array, Array, Array, Array]:
        z = self.z
        log_price = np.log(np.maximum(price, 1e-300))
        for _ in range(rounds):
            delta, rise, bend = self.intensity(z)
            log_slope, log_slope_rise = self.log_cost_slope(z)
            off = log_slope - np.log(-rise) - log_price
            steep = np.maximum(log_slope_rise - bend / rise, LEAST_STEEP)
            moved = np.clip(z - off / steep, self.z_low, self.z_high)
            step = float(np.max(np.abs(moved - z), initial=0.0))
            if step < SETTLED:
                break  # What is known at z itself serves: nothing is left to gain that counts.
            z = moved
            if step < ONE_STEP_LEFT:
                delta, rise, bend = self.intensity(z)
                log_slope, log_slope_rise = self.log_cost_slope(z)
                break
        else:
            delta, rise, bend = self.intensity(z)
            log_slope, log_slope_rise = self.log_cost_slope(z)
        self.z = z
        slope = np.exp(log_slope) / rise
        inside = (z > self.z_low) & (z < self.z_high)
        # C'' = −C'·(d ln C'(z)/dz − δ''/δ')/δ' … in z terms: dδ/dπ = −δ'/(π·d(off)/dz).
        steep = np.maximum(log_slope_rise - bend / rise, LEAST_STEEP)
        give = np.divide(-rise, np.maximum(price, 1e-300) * steep, out=np.zeros(len(z)), where=inside)
        return delta, self.cost(z), slope, give

    def cost(self, z: Array) -> Array:
        a, start = self.curves.parameter, self.curves.start
        with np.errstate(all="ignore"):
            exponent = np.where(self.is_power, a * np.log(np.abs(z / start)), a * (z - start))
        return self.curves.scale * np.expm1(exponent)

    def log_cost_slope(self, z: Array) -> tuple[Array, Array]:
        """Return ln of the cost's slope in z, and its own slope."""
        a = self.curves.parameter
        with np.errstate(divide="ignore", invalid="ignore"):
            value = self.log_lead + np.where(self.is_power, (a - 1.0) * np.log(np.abs(z)), a * z)
            return value, np.where(self.is_power, (a - 1.0) / z, a)

    def intensity(self, z: Array) -> tuple[Array, Array, Array]:
        """Return δ, dδ/dz, d²δ/dz² by one pass of the tails (without logarithms: ranges end far above 1e-300)."""
        if self.copied:
            return cv.intensity_slopes(self.curves, z)
        c = self.curves
        near = c.shift - z * (1.0 - c.k)
        density = np.exp(-0.5 * near * near) / ROOT_TWO_PI
        p, first = ndtr(near), -(1.0 - c.k) * density
        second = -((1.0 - c.k) ** 2) * near * density
        if len(self.two):
            t = self.two
            far = -(z[t] * (1.0 + c.k[t]) + c.shift[t])
            density = np.exp(-0.5 * far * far) / ROOT_TWO_PI
            p[t] += ndtr(far)
            first[t] -= (1.0 + c.k[t]) * density
            second[t] -= (1.0 + c.k[t]) ** 2 * far * density
        n, good = c.opportunities, 1.0 - p
        rise = first / good
        return -n * np.log1p(-p), n * rise, n * (second / good + rise * rise)


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

    def answer(self, price: Array, rounds: int) -> tuple[Array, Array, Array, Array]:
        del rounds
        best = np.nanargmin(self.cost + price[:, None] * self.delta, axis=1)
        at = np.arange(len(best)), best
        still = np.zeros(len(best))
        # A corner is the exact answer: nothing is left to gain, as if its slope met the price.
        return self.delta[at], self.cost[at], -price, still

    def cost_at(self, delta: Array) -> Array:
        return np.array([np.interp(d, *line) for d, line in zip(delta, self.knots, strict=True)])
