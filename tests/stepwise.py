"""The ways of a line worked out one step, one state and one law at a time: what the tables must come to."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np

from allocator import curves as cv
from allocator import laws
from allocator.capability import sigma_from_log_defects
from allocator.curves import Curves
from allocator.flow import Line
from allocator.money import annual_cost, capital_recovery
from allocator.scenario.level import resolve
from allocator.scenario.model import Alternative, Capability, Costs, Floor, Law, Scenario, Step
from allocator.state import State
from allocator.stretch import Stretch, convex_stretches

SLACK = 1e-12


def state_today(scenario: Scenario, step: Step) -> State:
    """Return the state of a step as it stands, the line's defaults filled in."""
    default = scenario.default
    return State(
        level=resolve(step.capability, step.opportunities, None, default.shift),
        opportunities=step.opportunities,
        inspection=step.inspection if step.inspection is not None else default.inspection,
        rework=step.rework if step.rework is not None else default.rework,
    )


def state_with(today: State, chosen: Sequence[Alternative]) -> State:
    """Return the state with the chosen alternatives, applied key by key in the fixed order of the model.

    Groups cannot set the same key twice (checked when read), so the order within a key does not matter.
    """
    level = today.level
    for alternative in chosen:
        if alternative.capability is not None:
            level = resolve(alternative.capability, today.opportunities, level)
    for alternative in chosen:
        if alternative.k is not None:
            level = replace(level, k=alternative.k)
        if alternative.shift is not None:
            level = replace(level, shift=alternative.shift)
    state = replace(today, level=level)
    for alternative in chosen:
        if alternative.widen is not None:
            w = alternative.widen
            level = replace(level, sigma_level=w * level.sigma_level, k=level.k / w)
    state = replace(state, level=level)
    for alternative in chosen:
        state = _with_structure(state, alternative)
    return state


def _with_structure(state: State, alternative: Alternative) -> State:
    if alternative.opportunities is not None:
        state = replace(state, opportunities=alternative.opportunities)
    if alternative.copies is not None:
        copies = alternative.copies
        state = replace(state, installed=copies.installed, needed=copies.needed, common_cause=copies.common_cause)
    if alternative.inspection is not None:
        state = replace(state, inspection=alternative.inspection)
    if alternative.rework is not None:
        state = replace(state, rework=alternative.rework)
    return state


def sigma_meant(quoted: float | Capability, state: State) -> float:
    """Return the sigma level, in this state, that a quoted level stands for (`up_to`, `at`, a quote).

    A number is a sigma level. A capability with the state's own shift, offset and sides gives its z; any other counts
    through its defect probability. A defect probability is that of the opportunity: of the set, with copies.
    """
    if not isinstance(quoted, Capability):
        return float(quoted)
    level = resolve(quoted, state.opportunities, state.level)
    same_terms = (level.k, level.shift, level.sides) == (state.level.k, state.level.shift, state.level.sides)
    if level.attribute:
        return state.sigma_at(level.log_p)
    if same_terms:
        return level.sigma_level
    return float(sigma_from_log_defects(level.log_p, state.level.k, state.level.shift, state.level.sides))


def floor_sigma(floor: Floor | None, state: State) -> float:
    """Return the least sigma level that keeps the floor in this state, −inf without a floor."""
    if floor is None:
        return -math.inf
    if floor.sigma_level is not None:
        return floor.sigma_level
    if floor.cpk is not None:
        return 3.0 * floor.cpk / (1.0 - state.level.k)
    assert floor.dpmo is not None
    return state.sigma_at(math.log(floor.dpmo * 1e-6))


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
        notes.append(
            f"'{step.name}': {words} does not lie above sigma level {start:.4g}, "
            "where the step then stands already: the law adds nothing"
        )
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
            place = f"'{step.name}': quote {quote} (sigma level {z[quote]:.4g})"
            notes.append(f"{place} is never used: the others reach its level for no more")
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


@dataclass
class Row:
    """One way under construction."""

    step: int
    state: State
    stretch: Stretch
    kind: int
    start: float
    parameter: float
    scale: float
    fixed_cost: float
    capital: float
    capital_per_cost: float
    uses: tuple[str, ...]
    alternatives: tuple[str, ...]
    law: str | None
    cap: str


def yearly_cost(scenario: Scenario, costs: Costs) -> float:
    """Return what a purchase or alternative costs per year, apart from what is charged per item [currency/year]."""
    total = costs.per_year
    if costs.price or costs.trade_in or costs.resale:
        years, rate = horizon(scenario, costs.life_years)
        total += annual_cost(costs.price, costs.trade_in, costs.resale, rate, years)
    return total


def combinations(step: Step) -> Iterator[tuple[Alternative, ...]]:
    """Yield every choice of at most one alternative per group, nothing chosen first."""
    groups: dict[str, list[Alternative | None]] = {}
    for alternative in step.alternative:
        groups.setdefault(alternative.group, [None]).append(alternative)
    for combination in itertools.product(*groups.values()):
        yield tuple(a for a in combination if a is not None)


def ways_of_step(
    scenario: Scenario, step: Step, index: int, today: State, items: float, notes: list[str]
) -> Iterator[Row]:
    law = law_in_use(scenario, step, today, items) if step.improve is not None else None
    for chosen in combinations(step):
        state = state_with(today, chosen)
        fixed = sum(
            yearly_cost(scenario, a) + a.per_item * items + a.price_allowance * scenario.demand.shipped_per_year
            for a in chosen
        )
        capital = sum(a.price - a.trade_in for a in chosen)
        uses = tuple(a.uses for a in chosen if a.uses is not None)
        names = tuple(a.name for a in chosen)
        floor = floor_sigma(step.at_least, state)
        for reach in reaches(step, state, today, law, floor, notes):
            yield Row(
                index, state, reach.stretch, reach.kind, state.level.sigma_level, reach.parameter, reach.scale,
                fixed, capital, reach.capital_per_cost, uses, names, reach.law, reach.cap,
            )  # fmt: skip


def stepwise(scenario: Scenario, line: Line) -> tuple[list[Row], list[str]]:
    """Every way of a line, in order, and what was noticed on the way."""
    rows: list[Row] = []
    notes: list[str] = []
    for i, step in enumerate(scenario.step):
        today = state_today(scenario, step)
        rows += ways_of_step(scenario, step, i, today, line.per_finished[i] * line.shipped, notes)
    return rows, list(dict.fromkeys(notes))
