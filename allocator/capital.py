"""What does one way to run the line earn against another, in the money terms that a capital committee reads?"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from allocator.cash import by_year, discounted, each_year, irr, life_left, npv, paid_and_resold, payback
from allocator.flow import scrap_cost
from allocator.levers import Subject, levers
from allocator.problem import Problem
from allocator.results import Asset, Capacity, CashCase, Savings, ScrapView
from allocator.stands import Stand, rate_of, yearly
from allocator.variants import IMPROVE

Array = NDArray[np.float64]
SAME_START = 1e-9
"""Starts saved below this share of the starts are the rounding of a solve."""
SMALL = 1e-6
"""A law used further by less than this share of the total is the rounding of a solve, and not listed."""
ACCUMULATED = "what is entered for the step where the item is thrown away: all cost up to there, less salvage"
MATERIAL = "what the first steps of every branch cost (the steps that nothing feeds); nothing for the work done since"
FULL_UNIT = "an item lost anywhere counts as its share of a whole finished unit, at the last step's value"


def cash_case(
    problem: Problem, against: str, ours: Stand, theirs: Stand, subject: Subject, steps: frozenset[str]
) -> CashCase:
    """Return the case of one line against another over the scenario's horizon.

    Parameters
    ----------
    problem : Problem
        Its targets tell whether our line keeps the promise.
    against : str
        What the other line is called.
    ours, theirs : Stand
    subject : frozenset of (step, name)
        What is argued for; its price and life are varied in the sensitivity.
    steps : frozenset of str
        The steps that it changes, whose defects are varied.
    """
    rate, years = rate_of(problem), horizon(problem)
    saved = _savings(ours, theirs)
    paid, resold = _difference_by_year(ours.assets, theirs.assets, years)
    saving = each_year(saved.cash, years)
    net = resold + saving - paid
    rate_of_return, note = irr(net)
    present = npv(rate, net)
    annual = _sum(ours.assets, "equivalent_annual_cost") - _sum(theirs.assets, "equivalent_annual_cost")
    return CashCase(
        against=against,
        keeps_promise=ours.keeps(problem.budgets),
        savings=saved,
        capital=float(paid[0]),
        equivalent_annual_capital=annual,
        worth_per_year=theirs.money.total - ours.money.total,
        npv=present,
        npv_with_escapes=present + npv(rate, each_year(saved.escapes, years)),
        life_left=sum(life_left(a, rate, years) for a in ours.assets)
        - sum(life_left(a, rate, years) for a in theirs.assets),
        irr=rate_of_return,
        irr_note=note,
        payback_years=payback(net),
        discounted_payback_years=payback(discounted(rate, net)),
        years=by_year(rate, paid, resold, saving),
        assets=_not_in(ours, theirs),
        avoided=_not_in(theirs, ours),
        scrap_views=_scrap_views(problem, ours, theirs, present),
        capacity=_capacity(problem, ours, theirs),
        levers=levers(problem, ours, theirs, subject, steps),
    )


def horizon(problem: Problem) -> float:
    """Return the years over which cash is listed; one where nothing has a price and no horizon is stated."""
    return problem.scenario.demand.years or 1.0


def _savings(ours: Stand, theirs: Stand) -> Savings:
    def less(name: str) -> float:
        return _sum(theirs.assets, name) - _sum(ours.assets, name)

    mine, its = ours.money, theirs.money
    return Savings(
        scrap=its.scrap - mine.scrap,
        rework=its.rework - mine.rework,
        inspection=its.inspection - mine.inspection,
        running=less("per_year"),
        per_item=less("per_item"),
        price_allowance=less("price_allowance"),
        escapes=its.escapes - mine.escapes,
    )


def _sum(assets: tuple[Asset, ...], name: str) -> float:
    return float(sum(getattr(asset, name) for asset in assets))


def _difference_by_year(ours: tuple[Asset, ...], theirs: tuple[Asset, ...], years: float) -> tuple[Array, Array]:
    paid, resold = np.zeros((2, len(each_year(0.0, years))))
    for sign, assets in ((1.0, ours), (-1.0, theirs)):
        for asset in assets:
            its_paid, its_resold = paid_and_resold(asset, years)
            paid, resold = paid + sign * its_paid, resold + sign * its_resold
    return paid, resold


def _not_in(stand: Stand, other: Stand) -> tuple[Asset, ...]:
    """Return what is paid for here and not there; a law used further than there counts with the difference."""
    there = {(a.step, a.name): a for a in other.assets}
    least = SMALL * max(abs(stand.money.total), abs(other.money.total))
    found = []
    for asset in stand.assets:
        same = there.get((asset.step, asset.name))
        more = asset if same is None else _more(asset, same)
        if yearly(more, 0.0) > least or (same is None and asset.name != IMPROVE):
            found.append(more)
    return tuple(found)


def _more(asset: Asset, than: Asset) -> Asset:
    names = ("price", "per_year", "per_item", "equivalent_annual_cost")
    return replace(asset, **{name: getattr(asset, name) - getattr(than, name) for name in names})


def _scrap_views(problem: Problem, ours: Stand, theirs: Stand, present: float) -> tuple[ScrapView, ...]:
    """Return the saving under three valuations; all else as it is, so that the difference is the valuation alone."""
    rate, years = rate_of(problem), horizon(problem)
    worth, entered = theirs.money.total - ours.money.total, theirs.money.scrap - ours.money.scrap
    views = []
    for name, meaning, value in (
        ("accumulated", ACCUMULATED, _accumulated),
        ("material only", MATERIAL, _material),
        ("full unit", FULL_UNIT, _full_unit),
    ):
        saving = value(theirs) - value(ours)
        other = npv(rate, each_year(saving - entered, years))
        views.append(ScrapView(name, meaning, saving, present + other, worth + saving - entered))
    return tuple(views)


def _accumulated(stand: Stand) -> float:
    return stand.money.scrap


def _material(stand: Stand) -> float:
    """Return yearly scrap with only what the first steps add counted [currency/year]."""
    line = stand.line
    first = np.ones(line.n_steps, dtype=bool)
    first[line.feeds[line.feeds >= 0]] = False
    return float(scrap_cost(line, stand.flow.exponent)[first].sum())


def _full_unit(stand: Stand) -> float:
    """Return yearly scrap with every item lost counted as its share of a finished unit [currency/year]."""
    line, flow = stand.line, stand.flow
    passed = flow.exponent - flow.scrap_intensity
    shares = np.exp(passed) * np.expm1(flow.scrap_intensity)
    return float(line.shipped * line.lost[-1] * shares.sum())


def _capacity(problem: Problem, ours: Stand, theirs: Stand) -> tuple[Capacity, ...]:
    line = problem.line
    starts = [line.shipped * line.per_finished * np.exp(stand.flow.exponent) for stand in (ours, theirs)]
    saved = np.where(np.abs(starts[1] - starts[0]) > SAME_START * starts[1], starts[1] - starts[0], 0.0)
    return tuple(
        Capacity(step.name, float(less)) for step, less in zip(problem.scenario.step, saved, strict=True) if less != 0.0
    )
