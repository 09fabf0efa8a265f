"""How far, and at what price, does a step's law of improvement take one of its states."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator import laws
from allocator.curves import Curves
from allocator.money import capital_recovery
from allocator.scenario.model import Law, Scenario, Step
from allocator.state import State, sigma_meant
from allocator.stretch import Stretch, convex_stretches

Array = NDArray[np.float64]
SLACK = 1e-12
"""Relative slack on levels: a floor written as the present level is kept by it."""


@dataclass(frozen=True)
class LawInUse:
    """A law with its scale worked out: kind, parameter, yearly cost and capital per unit of shape."""

    law: Law
    kind: int
    parameter: float
    scale: float
    capital: float
    knots: tuple[tuple[float, float], ...]
    """For quotes: (sigma level, yearly cost) of every quote, in the order written."""


@dataclass(frozen=True)
class Reach:
    """A stretch of levels that one state reaches, with the law that pays for it."""

    stretch: Stretch
    kind: int = cv.NONE
    parameter: float = 0.0
    scale: float = 0.0
    capital_per_cost: float = 0.0
    law: str | None = None
    cap: str = "no law of improvement"


def reaches(
    step: Step, state: State, today: State, law: LawInUse | None, floor: float, notes: list[str]
) -> Iterator[Reach]:
    start = state.level.sigma_level
    low = start if floor <= start + SLACK * abs(start) else floor
    high, cap = (start, "no law of improvement") if law is None else _cap(step, state, law, notes)
    if step.fixed:
        cap = "fixed by the scenario"
    if low > high + SLACK * abs(high):
        return
    if law is None or high <= start:
        yield Reach(Stretch(start, start, None), cap=cap)
        return
    ratio = law.capital / law.scale if law.scale else 0.0
    curve = _one_curve(state, law)
    if law.kind == cv.LINES:
        stretches = [_quoted_stretch(step, state, today, law, min(low, high), high, curve, notes)]
    else:
        stretches = convex_stretches(curve, min(low, high), high)
    for stretch in stretches:
        yield Reach(stretch, law.kind, law.parameter, law.scale, ratio, law.law.law, cap)


def _cap(step: Step, state: State, law: LawInUse, notes: list[str]) -> tuple[float, str]:
    """Return how far the law reaches in this state, and what stops it."""
    start = state.level.sigma_level
    high, words = math.inf, ""
    if law.kind == cv.LINES:
        high, words = max(z for z, _ in law.knots), "the best level quoted"
    if law.law.up_to is not None:
        stated = sigma_meant(law.law.up_to, state)
        if stated < high:
            high, words = stated, f"up_to (sigma level {stated:.4g})"
    elif law.kind != cv.LINES:
        high, words = (
            state.sigma_at(state.log_p - laws.LOG_TEN),
            "one tenth of its starting defects (no up_to is given)",
        )
    if high <= start:
        notes.append(f"'{step.name}': {words} does not lie above the level at hand ({start:.4g}): no improvement there")
        return start, words
    return high, words


def _one_curve(state: State, law: LawInUse) -> Curves:
    """Return the curve of one state under a law, as a table of one row."""
    level = state.level
    return Curves(
        k=np.array([level.k]),
        shift=np.array([level.shift]),
        sides=np.array([level.sides]),
        opportunities=np.array([state.opportunities]),
        installed=np.array([state.installed]),
        needed=np.array([state.needed]),
        common_cause=np.array([state.common_cause]),
        start=np.array([level.sigma_level]),
        kind=np.array([law.kind]),
        parameter=np.array([law.parameter]),
        scale=np.array([law.scale]),
    )


def law_in_use(scenario: Scenario, step: Step, today: State, items: float) -> LawInUse:
    law = step.improve
    assert law is not None
    kind = {"power": cv.POWER, "exponential": cv.EXPONENTIAL, "decade": cv.DECADE, "quotes": cv.LINES}[law.law]
    parameter = law.exponent or law.rate or 0.0
    knots: tuple[tuple[float, float], ...] = ()
    if kind == cv.LINES:
        priced = any(point.price is not None for point in law.points)
        yearly, capital = _per_unit_of_scale(
            scenario, law, priced, items, any(p.per_item is not None for p in law.points)
        )
        knots = tuple((sigma_meant(p, today), yearly * _amount(p.price, p.per_year, p.per_item)) for p in law.points)
        return LawInUse(law, kind, parameter, yearly, capital, knots)
    stated = _amount(law.price, law.per_year, law.per_item)
    if law.at is not None:
        stated /= _shape_at(law, kind, parameter, today)
    yearly, capital = _per_unit_of_scale(scenario, law, law.price is not None, items, law.per_item is not None)
    return LawInUse(law, kind, parameter, stated * yearly, stated * capital, knots)


def _amount(*stated: float | None) -> float:
    return next((x for x in stated if x is not None), 0.0)


def _per_unit_of_scale(scenario: Scenario, law: Law, priced: bool, items: float, per_item: bool) -> tuple[float, float]:
    """Return yearly cost and capital of one unit on the law's scale (price, per_year or per_item)."""
    if priced:
        years, rate = horizon(scenario, law.life_years)
        return capital_recovery(rate, years), 1.0
    return (items, 0.0) if per_item else (1.0, 0.0)


def _shape_at(law: Law, kind: int, parameter: float, today: State) -> float:
    """Return the law's shape at its `at` level, so that getting there from today costs the stated amount."""
    assert law.at is not None
    there, here = sigma_meant(law.at, today), today.level.sigma_level
    if kind == cv.POWER:
        return float(laws.power(there, here, parameter))
    if kind == cv.EXPONENTIAL:
        return float(laws.exponential(there, here, parameter))
    return float(laws.decade(today.log_p_at(there), today.log_p))


def _quoted_stretch(
    step: Step, state: State, today: State, law: LawInUse, low: float, high: float, curve: Curves, notes: list[str]
) -> Stretch:
    """Return the envelope of the quotes in this state's own intensity, from its level (or floor) to the cap."""
    z = np.array([today.level.sigma_level, *(z for z, _ in law.knots)])
    cost = np.array([0.0, *(c for _, c in law.knots)])
    many = curve.take(np.zeros(len(z), dtype=int))
    delta, costs, kept = laws.lower_envelope(cv.intensity(many, z), cost)
    for quote in np.flatnonzero(~kept):
        if quote > 0:
            notes.append(f"'{step.name}': quote {quote} (sigma level {z[quote]:.4g}) lies above the others' envelope")
    ends = cv.intensity(curve.take(np.zeros(2, dtype=int)), np.array([high, low]))
    start = cv.intensity(curve, curve.start)[0]
    inside = (delta > ends[0]) & (delta < ends[1])
    knots = np.unique(np.concatenate([ends, delta[inside]]))
    above_start = np.interp(knots, delta, costs) - np.interp(start, delta, costs)
    return Stretch(low, high, (knots, np.maximum(above_start, 0.0)))


def horizon(scenario: Scenario, life_years: float | None) -> tuple[float, float]:
    """Return life [year] and discount rate [1/year] of something paid once."""
    years = life_years if life_years is not None else scenario.demand.years
    rate = scenario.demand.discount_rate
    assert years is not None, "checked when read"
    assert rate is not None, "checked when read"
    return years, rate
