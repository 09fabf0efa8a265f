"""How firmly does the verdict stand: one figure at a time changed, the choice and every level kept.

Nothing is planned anew here: both lines are priced as they are at the changed figure. (Where a re-plan would do better
at the changed figure, the break-even figures of a re-planned comparison lie further out.)
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from allocator.flow import money, run
from allocator.money import capital_recovery
from allocator.problem import Problem
from allocator.results import Asset, Lever
from allocator.roots import root_between
from allocator.stands import Stand, rate_of

QUARTER = (0.75, 1.25)
TWOFOLD = (0.5, 2.0)
FURTHEST = 100.0
"""The verdict's turn is looked for between a hundredth and a hundred times the base, nearest first."""
GRID = 60
RATES = (0.0, 0.05)
"""Ends of the discount rate where the base is 0, so that half and twice are no change."""
HIGHEST_RATE = 1.0
BEYOND = 1e300

Array = NDArray[np.float64]
Subject = frozenset[tuple[str | None, str]]


@dataclass(frozen=True)
class _Changed:
    """What the figures are multiplied by; the discount rate is a value."""

    rate: float
    volume: float = 1.0
    scrap: float = 1.0
    price: float = 1.0
    life: float = 1.0
    defects: float = 1.0


def levers(problem: Problem, ours: Stand, theirs: Stand, subject: Subject, steps: frozenset[str]) -> tuple[Lever, ...]:
    """Return what each figure does to the worth per year of our line against theirs, the largest swing first.

    Parameters
    ----------
    problem : Problem
    ours, theirs : Stand
    subject : frozenset of (step, name)
        What is argued for: price and life are its own.
    steps : frozenset of str
        The steps that it changes: the defects after are theirs.
    """
    weighed = _Weighed(problem, ours, theirs, subject, steps)
    return tuple(sorted(weighed.levers(), key=lambda lever: -lever.swing))


@dataclass(frozen=True)
class _Weighed:
    problem: Problem
    ours: Stand
    theirs: Stand
    subject: Subject
    steps: frozenset[str]

    def levers(self) -> Iterator[Lever]:
        line, rate = self.problem.line, rate_of(self.problem)
        yield self._factor("volume shipped", "units/year", line.shipped, QUARTER, lambda f: _Changed(rate, volume=f))
        yield self._factor("cost of scrap", "times as entered", 1.0, QUARTER, lambda f: _Changed(rate, scrap=f))
        own = [asset for asset in self.ours.assets if (asset.step, asset.name) in self.subject]
        price = sum(asset.price for asset in own)
        if price > 0.0:
            yield self._factor("price", "currency", price, QUARTER, lambda f: _Changed(rate, price=f))
            priced = [asset for asset in own if asset.price > 0.0]
            same = len({asset.life_years for asset in priced}) == 1
            life, unit = (priced[0].life_years, "years") if same else (1.0, "times as entered")
            yield self._factor("life", unit, life, QUARTER, lambda f: _Changed(rate, life=f))
        if self._changed_steps().any():
            yield self._factor("defects after", "times as planned", 1.0, TWOFOLD, lambda f: _Changed(rate, defects=f))
        if any(asset.price > 0.0 for asset in (*self.ours.assets, *self.theirs.assets)):
            yield self._rate(rate)

    def _factor(
        self, figure: str, unit: str, base: float, ends: tuple[float, float], change: Callable[[float], _Changed]
    ) -> Lever:
        further = np.geomspace(1.0, FURTHEST, GRID)
        turns = _nearest_root(lambda f: self.worth(change(f)), 1.0, np.concatenate([1.0 / further[:0:-1], further]))
        return self._lever(figure, unit, base, ends, change, None if turns is None else turns * base)

    def _rate(self, rate: float) -> Lever:
        ends = (rate * TWOFOLD[0], rate * TWOFOLD[1]) if rate > 0.0 else RATES
        low, middle, high = (self.worth(_Changed(r)) for r in (ends[0], rate, ends[1]))
        grid = np.linspace(0.0, HIGHEST_RATE, 4 * GRID + 1)
        turns = _nearest_root(lambda r: self.worth(_Changed(r)), rate, grid)
        return Lever("discount rate", "per year", ends[0], rate, ends[1], low, middle, high, turns, False)

    def _lever(
        self, figure: str, unit: str, base: float, ends: tuple[float, float], change: Callable[[float], _Changed],
        turns: float | None,
    ) -> Lever:  # fmt: skip
        low, middle, high = (self.worth(change(f)) for f in (ends[0], 1.0, ends[1]))
        upper = change(ends[1])
        missed = upper.defects != 1.0 and not self._ours_at(upper).keeps(self.problem.budgets)
        return Lever(figure, unit, base * ends[0], base, base * ends[1], low, middle, high, turns, missed)

    def worth(self, changed: _Changed) -> float:
        """Return their yearly total less ours with the figures changed."""
        mine, its = self._paid
        difference = _total(self.theirs, its, changed) - _total(self._ours_at(changed), mine, changed)
        # Where more defects leave hardly a good unit the cost overflows: beyond every other, and still a number.
        return difference if math.isfinite(difference) else -BEYOND

    @cached_property
    def _paid(self) -> tuple[_Paid, _Paid]:
        return _paid(self.ours.assets, self.subject), _paid(self.theirs.assets, frozenset())

    def _ours_at(self, changed: _Changed) -> Stand:
        if changed.defects == 1.0:
            return self.ours
        line, flow = self.ours.line, self.ours.flow
        times = np.where(self._changed_steps(), changed.defects, 1.0)
        moved = run(line, flow.intensity * times, flow.gates)
        return replace(self.ours, flow=moved, money=money(line, moved, self.ours.money.improvement))

    def _changed_steps(self) -> NDArray[np.bool_]:
        here, there = self.ours.flow.intensity, self.theirs.flow.intensity
        named = np.array([step.name in self.steps for step in self.problem.scenario.step])
        return np.asarray(named & (here != there))


@dataclass(frozen=True)
class _Paid:
    """What is paid for, one entry per asset; `own` marks what is argued for."""

    price: Array
    trade_in: Array
    resale: Array
    life: Array
    per_year: float
    by_volume: float
    own: NDArray[np.bool_]

    def yearly(self, changed: _Changed) -> float:
        """Return what all of it costs per year with the figures changed."""
        price = np.where(self.own, changed.price, 1.0) * self.price
        lives, at = np.unique(np.where(self.own, changed.life, 1.0) * self.life, return_inverse=True)
        crf = np.array([capital_recovery(changed.rate, life) for life in lives.tolist()])[at]
        owning = (price - self.trade_in) * crf - self.resale * (crf - changed.rate)
        return float(owning.sum()) + self.per_year + changed.volume * self.by_volume


def _paid(assets: tuple[Asset, ...], subject: Subject) -> _Paid:
    def column(name: str) -> Array:
        return np.array([getattr(asset, name) for asset in assets], dtype=float)

    return _Paid(
        column("price"), column("trade_in"), column("resale"), column("life_years"), float(column("per_year").sum()),
        float(column("per_item").sum() + column("price_allowance").sum()),
        np.array([(asset.step, asset.name) in subject for asset in assets], dtype=bool),
    )  # fmt: skip


def _total(stand: Stand, paid: _Paid, changed: _Changed) -> float:
    spent = stand.money
    by_volume = changed.scrap * spent.scrap + spent.rework + spent.escapes + spent.inspection
    return changed.volume * by_volume + paid.yearly(changed)


def _nearest_root(worth: Callable[[float], float], base: float, grid: NDArray[np.float64]) -> float | None:
    values = [worth(float(x)) for x in grid]
    crossings = [i for i in range(len(grid) - 1) if values[i] * values[i + 1] <= 0.0 and values[i] != values[i + 1]]
    roots = [root_between(worth, grid[i], grid[i + 1], relative=1e-12) for i in crossings]
    return min(roots, key=lambda root: _distance(root, base), default=None)


def _distance(root: float, base: float) -> float:
    return abs(np.log(root / base)) if root > 0.0 and base > 0.0 else abs(root - base)
