"""Where does the verdict on a purchase turn: the price, the volume and the capability at which it is worth nothing."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from allocator.asker import Track, ask, law_slope_at_start, takes, total_at, total_of, value_of_defects
from allocator.capability import log_defects, sigma_from_log_defects
from allocator.changed import at_law_price, at_level, at_price, at_volume, level_of
from allocator.problem import CAPITAL, Problem, within
from allocator.roots import root_between
from allocator.scenario.level import Level
from allocator.solve.fixed import solve_fixed
from allocator.solve.road import BRANCHED, Solved
from allocator.variants import LAW, Thing, forced

FURTHEST_VOLUME = 100.0
"""Volumes are looked at from a hundredth to a hundred times today's."""
PER_DECADE = 3
"""Volumes per decade at which the plan is made to see where it changes."""
FOUND = 1e-4
"""A volume, a price factor or a level is found when the verdict turns within this share of it."""
ROOT = 0.25 * FOUND
"""Share of a price within which its root is found, to be stepped back to the side that pays."""
SAME = 2e-7
"""Totals that differ by less than this share are the same: each is solved to 1e-7."""
CHEAPEST = 1e-4
"""Share of its stated scale below which a law is as good as free."""
DEAREST = 1e9
"""Factor of its scale at which no law is used."""
TURNS = 24
FLAWLESS = math.log(1e-12)
"""ln of the defect probability that stands for a machine that makes no mistakes."""


@dataclass
class Plans:
    """The plan at today's volume, and at other volumes as factors of it; all of them allow the same choices."""

    problem: Problem
    plan: Solved
    track: Track

    def at(self, factor: float) -> Solved:
        """Return the plan at `factor` times today's volume."""
        solved = self.track.at(factor)
        assert solved is not None, "what can be reached does not depend on the volume"
        return solved

    def question(self, factor: float) -> Problem:
        """Return the question at `factor` times today's volume."""
        return self.track.asked_at(factor)


def plans_at_volumes(problem: Problem, plan: Solved) -> Plans:
    """Return the plans at other volumes, none of them made yet."""
    return Plans(problem, plan, Track(lambda factor: at_volume(problem, factor), ask, {1.0: plan}, {1.0: problem}))


def volumes_looked_at() -> list[float]:
    """Return the volumes looked at first, as factors of today's."""
    decades = int(math.log10(FURTHEST_VOLUME))
    return [10.0 ** (k / PER_DECADE) for k in range(-decades * PER_DECADE, decades * PER_DECADE + 1)]


def break_even_volume(plans: Plans, thing: Thing) -> float | None:
    """Return the smallest factor of today's volume from which the plan takes a thing.

    0 where it does at the smallest volume looked at, None where it does at none.
    """
    grid = sorted({*volumes_looked_at(), *plans.track.known})
    first = next((i for i, factor in enumerate(grid) if takes(plans.at(factor), thing)), None)
    if first is None:
        return None
    return 0.0 if first == 0 else _turn(plans, thing, grid[first - 1], grid[first])


def _turn(plans: Plans, thing: Thing, low: float, high: float) -> float:
    """Narrow the volumes between which a thing enters the plan, from the side where it is in."""
    for turn in range(TURNS):
        if high / low <= 1.0 + FOUND:
            break
        guess = _guess(plans, thing, low, high) if turn % 3 < 2 else None
        middle = math.sqrt(low * high)
        factor = middle if guess is None else min(max(guess, low * (high / low) ** 0.001), high * (low / high) ** 0.001)
        here = plans.at(factor)
        if guess == factor and thing.kind != LAW and _both_hold(plans, factor, low, high):
            return factor
        low, high = (low, factor) if takes(here, thing) else (factor, high)
    return high


def _both_hold(plans: Plans, here: float, low: float, high: float) -> bool:
    """Return whether the choices of both sides are as good as the best where their costs meet."""
    best = total_of(plans.at(here))
    sides = [total_at(plans.question(here), plans.at(factor)) for factor in (low, high)]
    return max(sides) - best <= SAME * abs(best)


def _guess(plans: Plans, thing: Thing, low: float, high: float) -> float | None:
    """Return where both sides meet if their choices are kept; None where that cannot be said.

    A choice with its levels costs a fixed amount and an amount per unit, so two of them meet at one volume. A law
    starts to be used where its first step costs what a defect less is worth.
    """
    if thing.kind == LAW:
        ends = [_law_pull(plans, thing, factor) for factor in (low, high)]
    else:
        out, taken = plans.at(low), plans.at(high)
        ends = [
            total_of(out) - total_at(plans.question(low), taken),
            total_at(plans.question(high), out) - total_of(taken),
        ]
    left, right = ends
    if left is None or right is None or not left < 0.0 < right:
        return None
    if thing.kind == LAW:
        share = left / (left - right)
        return float(low * (high / low) ** share)
    return float(low + (high - low) * left / (left - right))


def _law_pull(plans: Plans, thing: Thing, factor: float) -> float | None:
    """Return how far a defect less is worth more than the law's first step costs there, as a share."""
    return _pull(plans.at(factor), plans.question(factor), thing)


def _pull(solved: Solved, problem: Problem, thing: Thing) -> float | None:
    """Return (worth of a defect less)/(cost of the law's first step) − 1; None where one of them is unknown.

    `problem` is the question in which the law is on offer.
    """
    assert solved.outcome is not None
    row = _row_with_law(solved, problem, thing)
    slope = None if row is None else law_slope_at_start(problem.options.ways, row, solved)
    worth = value_of_defects(solved, thing.step)
    return None if slope is None or worth is None else worth / slope - 1.0


def _row_with_law(solved: Solved, problem: Problem, thing: Thing) -> int | None:
    """Return the first way that offers the law on top of what an answer chooses in the step."""
    assert solved.outcome is not None
    ways = problem.options.ways
    pick = solved.problem.options.ways.text.pick[solved.outcome.choice.rows[thing.step]]
    row = int(np.searchsorted(ways.text.pick, pick))
    return row if row < len(ways) and bool(ways.text.pick[row] == pick and ways.moves[row]) else None


def break_even_law(problem: Problem, plan: Solved, banned: Solved, thing: Thing) -> float | None:
    """Return the factor of its scale up to which a law is worth using; None where it never is.

    Found with the equipment of the two plans. Where neither took branch and bound, it is then confirmed, or lifted,
    by planning anew; elsewhere equipment of a third kind might stretch it further.

    Parameters
    ----------
    problem : Problem
        With the law on offer.
    plan, banned : Solved
        The best plans with the law on offer and without it.
    """
    pull, without = _pull(banned, problem, thing), total_of(banned)
    factor = CHEAPEST if pull is None else 1.0 + pull
    if takes(plan, thing) and without - total_of(plan) > SAME * abs(without):
        factor = max(factor, _last_factor(problem, plan, thing, without * (1.0 - math.copysign(SAME, without))))
    if factor > 0.0 and BRANCHED not in plan.method:
        factor = _confirmed(problem, plan, banned, thing, factor)
    return factor if factor > CHEAPEST else None


def _last_factor(problem: Problem, plan: Solved, thing: Thing, without: float) -> float:
    """Return the highest factor of a law's scale at which a plan's own choice still pays for using it.

    The least total of a choice is concave in the factor, so its tangent meets the total without the law too early,
    never late: Newton's method comes nearer from below. A limit on capital can bend it; what then goes too far is
    narrowed between both sides.
    """
    assert plan.outcome is not None
    factor, known, price = 1.0, plan.outcome, plan.price
    rows = problem.options.ways.find(plan.problem.options.ways, known.choice.rows)
    row = rows[thing.step]
    ways = problem.options.ways
    for _ in range(TURNS):
        own_cost = float(known.improvement[thing.step] - ways.fixed_cost[row])
        bound_up = (price or {}).get(CAPITAL, 0.0) * float(ways.capital_per_cost[row])
        rise = own_cost * (1.0 + bound_up) / factor
        ahead = factor + (without - known.money.total) / rise if rise > 0.0 else DEAREST
        if ahead - factor <= ROOT * factor or ahead >= DEAREST:
            return min(ahead, DEAREST)
        answer = solve_fixed(at_law_price(problem, thing.step, ahead), rows, near=plan.near)
        if answer is None or answer.outcome.money.total > without:
            return _last_that_pays(
                lambda f: _kept_total(at_law_price(problem, thing.step, f), plan), factor, ahead, without
            )
        factor, known, price = ahead, answer.outcome, answer.price
    return factor


def _confirmed(problem: Problem, plan: Solved, banned: Solved, thing: Thing, factor: float) -> float:
    """Return the factor, lifted as long as a plan made anew just beyond it still gains from the law."""
    track = Track(lambda f: at_law_price(problem, thing.step, f), ask, {1.0: plan, DEAREST: banned}, {})
    without = total_of(banned)
    for _ in range(TURNS):
        tried = factor * (1.0 + FOUND)
        offered = track.at(tried)
        assert offered is not None, "the plan without the law keeps every limit"
        saved = without - total_of(offered)
        if not takes(offered, thing) or saved <= SAME * abs(without):
            break
        # The least total is concave in the factor, so its tangent meets the plan without the law too early, never late.
        spent = total_of(offered) - total_at(at_law_price(problem, thing.step, 0.0), offered)
        factor = tried * (1.0 + saved / spent)
    return factor


def break_even_price(
    problem: Problem, thing: Thing, price: float, per_price: float, without: float, taken: Solved
) -> float | None:
    """Return the price at which a thing is worth nothing, None where it would not be taken for nothing.

    The yearly cost of the plan that takes it is linear in the price, unless a limit on capital binds before.
    """
    even = price + (without - total_of(taken)) / per_price
    if even < 0.0:
        return None
    assert taken.outcome is not None
    if problem.capital is None or within(taken.outcome.capital + max(even - price, 0.0), problem.capital):
        return even
    return _price_within_capital(problem, thing, price, even, without, taken)


def _price_within_capital(
    problem: Problem, thing: Thing, price: float, even: float, without: float, taken: Solved
) -> float | None:
    """Return the highest price at which the best plan that takes a thing is worth it and keeps the limit on capital.

    A choice that pays at a price shows it there; only where the choices known so far stop paying is the plan made anew.
    """
    pays = price if even > price else 0.0
    best: Solved | None = taken if even > price else with_it(at_price(problem, thing, 0.0), thing, taken)
    for _ in range(TURNS):
        if best is None or total_of(best) > without:
            return pays or None
        kept = best
        pays = _price_kept(problem, thing, kept, pays, even, without)
        beyond = pays * (1.0 + FOUND)
        if beyond >= even:
            return pays or None
        best = with_it(at_price(problem, thing, beyond), thing, kept)
        pays = beyond if best is not None and total_of(best) <= without else pays
    return pays or None


def _price_kept(problem: Problem, thing: Thing, kept: Solved, low: float, high: float, without: float) -> float:
    """Return the highest price up to which an answer's own choice pays."""
    return _last_that_pays(lambda price: _kept_total(at_price(problem, thing, price), kept), low, high, without)


def _last_that_pays(total: Callable[[float], float], low: float, high: float, without: float) -> float:
    """Return the highest price up to which one choice, its levels worked out anew, costs no more than going without."""
    loss = {high: total(high) - without}
    if loss[high] <= 0.0:
        return high
    while not math.isfinite(loss[high]) and high - low > ROOT * high:
        middle = 0.5 * (low + high)
        loss[middle] = total(middle) - without
        low, high = (middle, high) if loss[middle] <= 0.0 else (low, middle)
    if not math.isfinite(loss[high]) or loss.setdefault(low, total(low) - without) >= 0.0:
        return low
    even = root_between(
        lambda price: loss[price] if price in loss else total(price) - without, low, high, relative=ROOT
    )
    return max(low, even * (1.0 - ROOT))


def _kept_total(problem: Problem, solved: Solved) -> float:
    """Return the least total of an answer's choice in another question, infinite where it keeps no limit there."""
    assert solved.outcome is not None
    rows = problem.options.ways.find(solved.problem.options.ways, solved.outcome.choice.rows)
    fixed = None if (rows < 0).any() else solve_fixed(problem, rows, near=solved.near)
    return math.inf if fixed is None else fixed.outcome.money.total


def with_it(problem: Problem, thing: Thing, near: Solved) -> Solved | None:
    """Return the best plan that takes a thing; None where no choice that takes it keeps the limits."""
    answers = [ask(one, near) for one in forced(problem, thing)]
    return min((a for a in answers if a is not None), key=total_of, default=None)


def break_even_level(problem: Problem, thing: Thing, without: float, taken: Solved) -> Level | None:
    """Return how good an alternative must really be to be worth its price.

    None where it pays even at today's level, or where even a flawless one does not.

    Parameters
    ----------
    problem : Problem
    thing : Thing
        An alternative that brings a capability.
    without : float [currency/year]
        Total of the best plan without it.
    taken : Solved
        The best plan with it, as quoted.
    """
    stated = level_of(problem, thing)[0]
    today = float(problem.options.today.levels.sigma_level[thing.step])
    track = Track(
        lambda z: at_level(problem, thing, z), lambda asked, near: with_it(asked, thing, near),
        {stated.sigma_level: taken},
    )  # fmt: skip

    def gain(z: float) -> float:
        solved = track.at(z)
        return -math.inf if solved is None else without - total_of(solved)

    if gain(stated.sigma_level) >= 0.0:
        low, high = min(today, stated.sigma_level - 0.5), stated.sigma_level
    else:
        low, high = stated.sigma_level, max(_flawless(stated), stated.sigma_level)
    if gain(low) >= 0.0 or gain(high) < 0.0:
        return None
    return replace(stated, sigma_level=_level_between(gain, stated, low, high, SAME * abs(without)))


def _flawless(level: Level) -> float:
    return float(sigma_from_log_defects(FLAWLESS, level.k, level.shift, level.sides))


def _level_between(gain: Callable[[float], float], level: Level, low: float, high: float, enough: float) -> float:
    """Return the level at which the gain is 0; it is nearly straight in the defect probability, so that is halved."""
    below, above = gain(low), gain(high)
    for turn in range(TURNS):
        if abs(above) <= enough or high - low <= FOUND:
            break
        p_low, p_high = (math.exp(float(log_defects(z, level.k, level.shift, level.sides))) for z in (low, high))
        share = above / (above - below) if math.isfinite(below) and turn % 3 < 2 else 0.5
        z = _sigma(level, p_high + (p_low - p_high) * min(max(share, 0.001), 0.999))
        if not low < z < high:
            z = 0.5 * (low + high)
        found = gain(z)
        if found >= 0.0:
            high, above = z, found
        else:
            low, below = z, found
    return high


def _sigma(level: Level, p: float) -> float:
    return float(sigma_from_log_defects(math.log(p), level.k, level.shift, level.sides))
