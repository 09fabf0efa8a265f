"""What each step could become: levels, caps, prices, floors and envelopes, each against a figure worked out by hand."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from scipy.stats import norm
from strategies import Drawn

from allocator import curves as cv
from allocator.flow import build_line
from allocator.problem import Problem, pose
from allocator.scenario.read import scenario_from_dict
from allocator.solve.fixed import solve_fixed
from allocator.solve.reduce import without_dominated
from allocator.solve.road import solve
from allocator.ways import Options, Ways, build_options, law_cost

EXACT = 1e-10
"""Levels and probabilities come back from their inverses within this."""


def scenario_of(*steps: Drawn, **more: Any) -> Drawn:
    named = [{"name": f"s{i}", "scrap_cost": 10.0 * (i + 1)} | step for i, step in enumerate(steps)]
    return {"demand": {"shipped_per_year": 1_000, "years": 10, "discount_rate": 0.0}, "step": named} | more


def options_of(*steps: Drawn, **more: Any) -> Options:
    scenario = scenario_from_dict(scenario_of(*steps, **more))
    return build_options(scenario, build_line(scenario))


def ways_of(*steps: Drawn, **more: Any) -> Ways:
    return options_of(*steps, **more).ways


def with_alternatives(capability: Drawn, *alternatives: Drawn, **step: Any) -> Drawn:
    return {"capability": capability, "alternative": list(alternatives)} | step


def way(ways: Ways, *alternatives: str) -> int:
    """The one way that takes exactly these alternatives."""
    (found,) = [w for w in range(len(ways)) if set(ways.text[w].alternatives) == set(alternatives)]
    return found


def dpmo_at(ways: Ways, w: int, z: float) -> float:
    return 1e6 * math.exp(ways.states[w].log_p_at(z))


def cost_at(ways: Ways, w: int, z: float) -> float:
    return float(law_cost(ways, np.array([w]), np.array([z]))[0])


OFF_CENTRE = {"cp": 1.5, "cpk": 1.2, "shift": 0.5}
DECADE: Drawn = {"law": "decade", "per_year": 100.0}
SET = {"installed": 3, "needed": 2, "common_cause": 0.1}


# ---------------------------------------------------------------- where a law ends, and what it costs


@pytest.mark.parametrize(
    ("up_to", "z"),
    [
        (5.5, 5.5),
        ({"sigma_level": 5.5}, 5.5),
        ({"cp": 1.75}, 3 * 1.75),
        ({"cpk": 1.44}, 3 * 1.44 / 0.8),
        ({"cpk": 1.35, "cp": 1.6875}, 3 * 1.35 / 0.8),
    ],
)
def test_up_to_is_a_sigma_level_or_any_capability(up_to: Any, z: float) -> None:
    ways = ways_of({"capability": OFF_CENTRE, "improve": DECADE | {"up_to": up_to}})
    assert (ways.z_low[0], ways.z_high[0]) == pytest.approx((4.5, z), rel=EXACT)


@pytest.mark.parametrize("quoted", [{"dpmo": 20.0}, {"defect_rate": 2e-5}, {"yield": 1 - 2e-5}, {"ppm": 20.0}])
def test_up_to_a_defect_rate_ends_exactly_there_on_an_off_centre_step(quoted: Drawn) -> None:
    ways = ways_of({"capability": OFF_CENTRE, "improve": DECADE | {"up_to": quoted}})
    assert dpmo_at(ways, 0, ways.z_high[0]) == pytest.approx(20.0, rel=1e-9)


def test_up_to_dpmo_is_of_the_set_of_copies() -> None:
    offered = {"name": "spare", "copies": SET, "per_year": 1.0}
    ways = ways_of(with_alternatives({"dpmo": 9000.0}, offered, improve=DECADE | {"up_to": {"dpmo": 400.0}}))
    w = way(ways, "spare")
    p = norm.sf(ways.z_high[w])  # one item's, one-sided
    bad = 0.9 * p
    together = 1 - (1 - 0.1 * p) * ((1 - bad) ** 3 + 3 * (1 - bad) ** 2 * bad)
    assert together == pytest.approx(400e-6, rel=1e-9)
    assert dpmo_at(ways, w, ways.z_high[w]) == pytest.approx(400.0, rel=1e-9)


@pytest.mark.parametrize("law", [DECADE, {"law": "power", "exponent": 1.0, "per_year": 9.0}])
@pytest.mark.parametrize("copied", [False, True])
def test_without_up_to_a_law_reaches_one_tenth_of_its_starting_defects(law: Drawn, copied: bool) -> None:
    offered = {"name": "spare", "copies": SET, "per_year": 1.0}
    ways = ways_of(with_alternatives(OFF_CENTRE, offered, improve=law))
    w = way(ways, "spare") if copied else way(ways)
    assert ways.z_low[w] == 4.5
    assert dpmo_at(ways, w, ways.z_high[w]) == pytest.approx(0.1 * dpmo_at(ways, w, 4.5), rel=1e-9)


@pytest.mark.parametrize(
    "law",
    [
        {"law": "power", "exponent": 1.7},
        {"law": "exponential", "rate": 0.8},
        {"law": "decade"},
    ],
)
@pytest.mark.parametrize(("at", "z"), [({"cp": 1.6}, 4.8), ({"cpk": 1.36}, 5.1), ({"dpmo": 30.0}, None)])
def test_getting_to_the_level_in_at_costs_the_stated_price(law: Drawn, at: Drawn, z: float | None) -> None:
    ways = ways_of({"capability": OFF_CENTRE, "improve": law | {"at": at, "up_to": 6.0, "price": 5_000.0}})
    level = ways.states[0].sigma_at(math.log(30e-6)) if z is None else z
    assert cost_at(ways, 0, level) == pytest.approx(500.0, rel=1e-9)  # over ten years without interest
    assert cost_at(ways, 0, level) * ways.capital_per_cost[0] == pytest.approx(5_000.0, rel=1e-9)


def test_a_decade_costs_its_scale_and_per_item_counts_the_items_of_a_year() -> None:
    law = {"law": "decade", "per_item": 0.02}
    first = {"capability": {"dpmo": 4000.0}, "improve": law, "per_unit": 3}
    ways = ways_of(first, {"capability": {"dpmo": 10.0}, "scrap_cost": 90.0})
    assert dpmo_at(ways, 0, ways.z_high[0]) == pytest.approx(400.0, rel=1e-9)
    assert cost_at(ways, 0, ways.z_high[0]) == pytest.approx(0.02 * 3 * 1_000, rel=1e-9)
    assert ways.capital_per_cost[0] == 0.0


def test_a_law_starts_from_the_level_of_the_alternative() -> None:
    law = {"law": "power", "exponent": 2.0, "per_year": 80.0, "up_to": 6.0}
    offered = {"name": "press", "capability": {"sigma_level": 4.0}, "per_year": 7.0}
    ways = ways_of(with_alternatives({"sigma_level": 3.0}, offered, improve=law))
    w = way(ways, "press")
    assert ways.z_low[w] == 4.0
    assert cost_at(ways, w, 6.0) == pytest.approx(80.0 * (1.5**2 - 1), rel=1e-12)
    assert cost_at(ways, way(ways), 6.0) == pytest.approx(80.0 * (2.0**2 - 1), rel=1e-12)


def test_a_cap_below_the_level_at_hand_means_no_improvement_and_is_said() -> None:
    law = DECADE | {"up_to": {"sigma_level": 4.0}}
    offered = {"name": "press", "capability": {"sigma_level": 5.0}, "per_year": 7.0}
    options = options_of(with_alternatives({"sigma_level": 3.0}, offered, improve=law))
    w = way(options.ways, "press")
    assert options.ways.z_low[w] == options.ways.z_high[w] == 5.0
    assert any("up_to" in note and "the law adds nothing" in note for note in options.notes)


# ---------------------------------------------------------------- alternatives


def test_alternatives_apply_in_their_order_whatever_the_order_in_the_file() -> None:
    """Capability, then k, then widening: z = 1.2·5, k = 0.06/1.2; then opportunities, copies, inspection, rework."""
    offers = [
        {"name": "copies", "group": "a", "copies": SET},
        {"name": "wider", "group": "b", "widen": 1.2},
        {"name": "fewer", "group": "c", "opportunities": 2},
        {"name": "setting", "group": "d", "k": 0.06},
        {"name": "machine", "group": "e", "capability": {"cp": 5 / 3, "cpk": 1.2}},
        {"name": "look", "group": "f", "inspection": {"finds": 0.5}},
        {"name": "mend", "group": "g", "rework": {"share": 0.3, "cost": 1.0}},
    ]
    for order in itertools.islice(itertools.permutations(offers), 0, 5040, 700):
        ways = ways_of(with_alternatives(OFF_CENTRE, *order, opportunities=9))
        state = ways.states[way(ways, *(offer["name"] for offer in offers))]
        assert (state.level.sigma_level, state.level.k) == pytest.approx((6.0, 0.05), rel=1e-12)
        assert (state.opportunities, state.installed, state.needed) == (2, 3, 2)
        assert state.inspection is not None
        assert state.rework is not None
        assert (state.inspection.finds, state.rework.share) == (0.5, 0.3)


def test_one_alternative_per_group_or_none() -> None:
    offers = [{"name": name, "group": name[0], "k": 0.1 * i} for i, name in enumerate(["a1", "a2", "a3"], 1)]
    offers += [{"name": name, "group": "b", "shift": 0.2 * i} for i, name in enumerate(["b1", "b2"], 1)]
    assert len(ways_of(with_alternatives(OFF_CENTRE, *offers))) == (3 + 1) * (2 + 1)


def test_shift_offset_and_sides_are_inherited_unless_named() -> None:
    quiet = {"name": "plain", "capability": {"cp": 2.0}}
    named = {"name": "named", "capability": {"cp": 2.0, "shift": 1.0, "k": 0.3}}
    long_term = {"name": "long", "capability": {"pp": 2.0, "ppk": 1.8}}
    ways = ways_of(with_alternatives(OFF_CENTRE, quiet, named, long_term))
    levels = [ways.states[way(ways, name)].level for name in ("plain", "named", "long")]
    assert [(x.k, x.shift, x.sides) for x in levels] == [
        (pytest.approx(0.2), 0.5, 2),
        (0.3, 1.0, 2),
        (pytest.approx(0.1), 0.0, 2),
    ]


def test_the_offset_of_a_setting_wins_over_the_one_that_a_capability_brings() -> None:
    machine = {"name": "machine", "capability": {"cp": 1.8, "cpk": 1.26}}
    setting = {"name": "setting", "group": "setting", "k": 0.05}
    ways = ways_of(with_alternatives(OFF_CENTRE, machine, setting))
    assert ways.states[way(ways, "machine")].level.k == pytest.approx(0.3)
    both = ways.states[way(ways, "machine", "setting")].level
    assert (both.sigma_level, both.k) == (pytest.approx(5.4), 0.05)


def test_widening_keeps_the_mean_where_it_was() -> None:
    """Mean 0.2·T off, T grows by w: the near limit moves from z(1 − k) to z(w − k) standard deviations away."""
    ways = ways_of(with_alternatives(OFF_CENTRE, {"name": "wider", "widen": 1.25, "price_allowance": 0.3}))
    w = way(ways, "wider")
    level = ways.states[w].level
    assert level.sigma_level * (1 - level.k) == pytest.approx(4.5 * (1.25 - 0.2), rel=1e-12)
    assert level.sigma_level * (1 + level.k) == pytest.approx(4.5 * (1.25 + 0.2), rel=1e-12)
    assert level.sigma_level * level.k == pytest.approx(4.5 * 0.2, rel=1e-12)
    assert ways.fixed_cost[w] == pytest.approx(0.3 * 1_000)


@pytest.mark.parametrize("quoted", [{"dpmo": 35.0}, {"defect_rate": 35e-6}, {"item_yield": 1 - 35e-6}, {"ppm": 35.0}])
def test_a_quoted_defect_rate_on_an_off_centre_step_stays_what_was_quoted(quoted: Drawn) -> None:
    ways = ways_of(with_alternatives(OFF_CENTRE, {"name": "new", "capability": quoted}))
    w = way(ways, "new")
    level = ways.states[w].level
    assert (level.k, level.shift, level.sides) == (pytest.approx(0.2), 0.5, 2)
    assert dpmo_at(ways, w, level.sigma_level) == pytest.approx(35.0, rel=1e-9)
    p = norm.cdf(-(level.sigma_level * 0.8 - 0.5)) + norm.cdf(-(level.sigma_level * 1.2 + 0.5))
    assert p == pytest.approx(35e-6, rel=1e-9)


def test_costs_of_alternatives_and_purchases_by_hand() -> None:
    """Without interest over ten years: (5,000 − 1,000)/10 − 500/10 + 40 + 0.1·1,000."""
    offered = {"name": "press", "capability": {"cp": 2.0}, "price": 5_000, "trade_in": 1_000, "resale": 500,
               "per_year": 40, "per_item": 0.1, "uses": "hall"}  # fmt: skip
    options = options_of(
        with_alternatives(OFF_CENTRE, offered), purchase=[{"name": "hall", "price": 900, "life_years": 3}]
    )
    w = way(options.ways, "press")
    assert options.ways.fixed_cost[w] == pytest.approx(400 - 50 + 40 + 100)
    assert options.ways.capital[w] == 4_000
    assert options.purchase_cost.tolist() == [300.0]
    assert options.ways.uses[:, 0].tolist() == [False, True]


# ---------------------------------------------------------------- quotes

QUOTES: Drawn = {
    "law": "quotes",
    "points": [
        {"dpmo": 5_000.0, "per_year": 100.0},
        {"dpmo": 3_000.0, "per_year": 900.0},
        {"dpmo": 1_000.0, "per_year": 1_000.0},
    ],
}


def test_quotes_are_joined_by_their_lower_envelope_and_the_rest_is_reported() -> None:
    """From (10,000, 0): the line from (5,000, 100) to (1,000, 1,000) passes 3,000 dpmo at 550, below the quoted 900."""
    options = options_of({"capability": {"dpmo": 10_000.0}, "improve": QUOTES})
    ways = options.ways
    delta, cost = ways.lines[0] or (np.zeros(0), np.zeros(0))
    assert 1e6 * -np.expm1(-delta) == pytest.approx([1_000.0, 5_000.0, 10_000.0], rel=1e-9)
    assert cost == pytest.approx([1_000.0, 100.0, 0.0], abs=1e-9)
    between = ways.states[0].sigma_at(math.log(3_000e-6))
    share = (math.log1p(-3e-3) - math.log1p(-5e-3)) / (math.log1p(-1e-3) - math.log1p(-5e-3))
    assert cost_at(ways, 0, between) == pytest.approx(100 + share * 900, rel=1e-9)
    assert any("quote 2" in note and "never used" in note for note in options.notes)


def test_quotes_that_all_lie_on_the_envelope_are_not_reported() -> None:
    convex = QUOTES | {"points": [QUOTES["points"][0], QUOTES["points"][2]]}
    assert not any("never used" in note for note in options_of({"capability": {"dpmo": 1e4}, "improve": convex}).notes)


def test_quotes_on_top_of_an_alternative_cost_what_lies_between() -> None:
    """A machine at 5,000 dpmo has behind it the 100 that the quote for 5,000 would cost."""
    offered = {"name": "machine", "capability": {"dpmo": 5_000.0}, "per_year": 30.0}
    ways = ways_of(with_alternatives({"dpmo": 10_000.0}, offered, improve=QUOTES))
    w = way(ways, "machine")
    assert cost_at(ways, w, ways.z_low[w]) == 0.0
    assert cost_at(ways, w, ways.z_high[w]) == pytest.approx(1_000.0 - 100.0, rel=1e-9)
    assert dpmo_at(ways, w, ways.z_high[w]) == pytest.approx(1_000.0, rel=1e-9)


# ---------------------------------------------------------------- floors and fixed steps


@pytest.mark.parametrize(
    ("floor", "z"),
    [({"cpk": 1.4}, 3 * 1.4 / 0.8), ({"sigma_level": 5.0}, 5.0), ({"dpmo": 40.0}, None)],
)
def test_a_floor_cuts_off_ways_and_lifts_laws(floor: Drawn, z: float | None) -> None:
    """Cp 1.5 with Cpk 1.2 misses each floor; the rebuilt press (Cp 1.51) too, the new one (Cp 2) keeps it."""
    offers = [{"name": "rebuilt", "capability": {"cp": 1.51}}, {"name": "new", "capability": {"cp": 2.0}}]
    ways = ways_of(with_alternatives(OFF_CENTRE, *offers, at_least=floor))
    assert [text.alternatives for text in ways.text] == [("new",)]
    ways = ways_of(with_alternatives(OFF_CENTRE, *offers, at_least=floor, improve=DECADE | {"up_to": 5.9}))
    least = ways.states[0].sigma_at(math.log(40e-6)) if z is None else z
    for name in ((), ("rebuilt",)):
        assert ways.z_low[way(ways, *name)] == pytest.approx(least, rel=EXACT)
        assert cost_at(ways, way(ways, *name), least) > 0.0
    assert ways.z_low[way(ways, "new")] == ways.z_high[way(ways, "new")] == 6.0


def test_a_floor_in_cpk_asks_for_less_spread_from_a_recentred_step() -> None:
    setting = {"name": "setting", "group": "setting", "k": 0.0}
    law = DECADE | {"up_to": 6.5}
    ways = ways_of(with_alternatives(OFF_CENTRE, setting, at_least={"cpk": 1.6}, improve=law))
    assert ways.z_low[way(ways)] == pytest.approx(3 * 1.6 / 0.8)
    assert ways.z_low[way(ways, "setting")] == pytest.approx(3 * 1.6)


def test_a_floor_that_no_way_keeps_is_named() -> None:
    options = options_of({"capability": OFF_CENTRE, "at_least": {"cpk": 1.9}, "improve": DECADE | {"up_to": 5.0}})
    assert len(options.ways) == 0
    ((step, reason),) = options.no_way
    assert step == "s0"
    assert "Cpk at least 1.9" in reason


def test_a_floor_equal_to_todays_level_changes_nothing() -> None:
    ways = ways_of({"capability": OFF_CENTRE, "at_least": {"cpk": 1.2}})
    assert ways.z_low.tolist() == ways.z_high.tolist() == [4.5]


def test_a_fixed_step_has_one_way() -> None:
    ways = ways_of({"capability": OFF_CENTRE, "fixed": True})
    assert len(ways) == 1
    assert not ways.moves.any()
    assert "fixed" in ways.text[0].cap


# ---------------------------------------------------------------- dominated ways


def kept(problem: Problem) -> set[tuple[str, ...]]:
    return {text.alternatives for text in without_dominated(problem).options.ways.text}


def posed(*offers: Drawn, step: Drawn | None = None, **more: Any) -> Problem:
    """A step with offers, and one before it whose defects come in half hidden."""
    before = {"capability": {"dpmo": 8_000.0}, "inspection": {"finds": 0.5}}
    offered = with_alternatives({"dpmo": 9_000.0}, *offers) | (step or {})
    return pose(scenario_from_dict(scenario_of(before, offered, **more)))


WORSE = {"name": "worse", "capability": {"dpmo": 900.0}, "per_year": 60.0}
BETTER = {"name": "better", "capability": {"dpmo": 500.0}, "per_year": 50.0}


def test_a_way_beaten_in_every_respect_is_dropped() -> None:
    assert kept(posed(WORSE, BETTER)) == {(), ("better",)}


@pytest.mark.parametrize(
    ("worse", "better", "more"),
    [
        pytest.param({}, {"price": 9_000.0, "per_year": -850.0}, {}, id="it binds more capital"),
        pytest.param({}, {"uses": "hall"}, {"purchase": [{"name": "hall", "price": 9e5}]}, id="it needs a purchase"),
        pytest.param({}, {"inspection": {"finds": 0.1}}, {}, id="its gate finds less"),
        pytest.param({}, {"rework": {"share": 0.0}}, {}, id="its gate mends nothing"),
        pytest.param({}, {"per_year": 61.0}, {}, id="it costs more"),
        pytest.param({}, {"capability": {"dpmo": 901.0}}, {}, id="it makes more defects"),
    ],
)
def test_a_way_that_is_better_in_one_respect_stays(worse: Drawn, better: Drawn, more: Drawn) -> None:
    step = {"inspection": {"finds": 0.9, "earlier": 0.5}, "rework": {"share": 0.5, "cost": 0.1}}
    problem = posed(WORSE | worse, BETTER | better, step=step, **more)
    assert ("worse",) in kept(problem)
    assert ("better",) in kept(problem)


def test_a_way_with_a_law_beats_none_and_is_never_dropped() -> None:
    """From the worse machine the law is cheaper: exponential from 900 dpmo, capped where the better machine stands."""
    problem = posed(WORSE, BETTER, step={"improve": DECADE | {"up_to": {"dpmo": 400.0}}})
    assert kept(problem) == {(), ("worse",), ("better",)}


def test_a_better_way_at_the_cost_of_a_tight_capital_limit_is_not_preferred() -> None:
    """Dropping by yearly cost alone would leave no choice at all under this limit."""
    worse = WORSE | {"price": 100.0}
    better = BETTER | {"price": 900.0, "per_year": -70.0}
    target = {"final_yield": 0.99}
    problem = posed(worse, better, limits={"capital": 500.0}, target=target)
    solved = solve(problem)
    assert solved.outcome is not None
    assert solved.problem.options.ways.text[solved.outcome.choice.rows[1]].alternatives == ("worse",)


@pytest.mark.parametrize("capital", [None, 700.0, 1_500.0])
@pytest.mark.parametrize("escape_cost", [0.0, 50.0])
def test_dropping_never_changes_the_best_plan(capital: float | None, escape_cost: float) -> None:
    """Every choice of the full table, one by one, against the solve that drops."""
    offers = [
        WORSE | {"price": 400.0},
        BETTER | {"price": 1_200.0},
        {"name": "cheap", "capability": {"dpmo": 4_000.0}, "per_year": 5.0},
        {"name": "same but dearer", "capability": {"dpmo": 4_000.0}, "per_year": 6.0, "price": 30.0},
        {"name": "blind", "capability": {"dpmo": 300.0}, "inspection": {"finds": 0.0}},
    ]
    step = {"inspection": {"finds": 0.9, "earlier": 0.5}}
    problem = replace(posed(*offers, step=step, target={"escape_cost": escape_cost}), capital=capital)
    assert ("same but dearer",) not in kept(problem)
    by_step = [np.flatnonzero(problem.options.ways.step == i) for i in range(2)]
    answers = [solve_fixed(problem, np.array(rows)) for rows in itertools.product(*by_step)]
    best = min(answer.outcome.money.total for answer in answers if answer is not None)
    solved = solve(problem)
    assert solved.outcome is not None
    assert solved.outcome.money.total == pytest.approx(best, rel=1e-12)


def test_two_levels_of_the_table_agree() -> None:
    """δ at the ends of a way is the intensity of its curve there."""
    ways = ways_of({"capability": OFF_CENTRE, "improve": DECADE, "opportunities": 7})
    assert cv.intensity(ways.curves, ways.z_low) == pytest.approx(ways.delta_high, rel=1e-14)
    assert cv.intensity(ways.curves, ways.z_high) == pytest.approx(ways.delta_low, rel=1e-14)
