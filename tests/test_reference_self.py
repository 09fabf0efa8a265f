"""Is the reference right? Held against hand calculations, 50-digit tails, identities, and a second optimiser."""

from __future__ import annotations

import math

import mpmath
import pytest

from tests.reference.convex import Task, solve
from tests.reference.generate import random_scenario
from tests.reference.line import items_per_unit, lost_per_scrapped_item, net_cost_added, target_yields
from tests.reference.optimum import best_reachable, combinations, optimum
from tests.reference.recount import recount
from tests.reference.slsqp import least_cost
from tests.reference.states import State, settle, state_with, today_state
from tests.reference.tails import exact_group_p, exact_p, group_p, group_slope, log_p, p_of, z_for

EXACT = 1e-12
"""Figures that follow from the same formula by another order of operations."""
SLSQP_AGREES = 1e-6
"""SLSQP with differences for slopes stops about here."""

BLANK = State(z=3.0, k=0.0, s=0.0, sides=2, n=1)


def near(value: float, tolerance: float = EXACT) -> object:
    return pytest.approx(value, rel=tolerance, abs=tolerance)


def line(*steps: dict, **tables: dict) -> dict:
    named = [{"name": "ABCDEF"[i]} | step for i, step in enumerate(steps)]
    return {"demand": {"shipped_per_year": 1000, "years": 5, "discount_rate": 0.0}, "step": named} | tables


# ---- tails -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("z", [0.3, 1.5, 3.0, 6.0, 9.0])
@pytest.mark.parametrize(("k", "s"), [(0.0, 0.0), (0.2, 0.0), (0.0, 1.5), (0.15, 0.7)])
@pytest.mark.parametrize("sides", [1, 2])
def test_tails_agree_with_fifty_digits(z: float, k: float, s: float, sides: int) -> None:
    want = exact_p(z, k, s, sides)
    assert abs(log_p(z, k, s, sides) - float(mpmath.log(want))) <= 1e-13 * max(1, abs(float(mpmath.log(want))))
    assert z_for(float(want), k, s, sides) == pytest.approx(z, rel=1e-12)


def test_six_sigma_with_the_usual_shift_is_3_4_dpmo() -> None:
    # sigma level 6, shift 1.5: the near tail lies 4.5 sigma away, 3.3977 per million; the far one at 7.5 adds nothing
    assert 1e6 * p_of(6, 0, 1.5, 2) == pytest.approx(3.3976731, rel=1e-7)


@pytest.mark.parametrize("p", [0.2, 1e-3, 1e-7])
@pytest.mark.parametrize("copies", [(2, 1, 0.0), (3, 2, 0.1), (4, 2, 0.02)])
def test_copies_agree_with_the_formula_as_written(p: float, copies: tuple[int, int, float]) -> None:
    table = dict(zip(("installed", "needed", "common_cause"), copies, strict=True))
    assert group_p(p, table) == pytest.approx(float(exact_group_p(p, table)), rel=1e-12)
    step = 1e-5 * p
    difference = float((exact_group_p(p + step, table) - exact_group_p(p - step, table)) / (2 * step))
    assert group_slope(p, table) == pytest.approx(difference, rel=1e-7)


def test_two_copies_by_hand() -> None:
    # one of two, p = 0.1, a tenth common: own x = 0.09, both fail 0.0081, common 0.01: 1 − 0.99·0.9919 = 0.018019
    assert group_p(0.1, {"installed": 2, "needed": 1, "common_cause": 0.1}) == near(0.018019)


# ---- capabilities ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("quoted", "z", "k", "s"),
    [
        ({"cp": 1.5}, 4.5, 0.0, 0.0),
        ({"cp": 1.5, "cpk": 1.2}, 4.5, 0.2, 0.0),
        ({"pp": 1.5, "ppk": 1.2, "shift": 1.5}, 4.5, 0.2, 0.0),
        # half-width 2, mean half a unit off: z = 2/0.5 = 4, k = 0.25
        ({"lsl": 8, "usl": 12, "mean": 10.5, "std": 0.5, "shift": 1.0}, 4.0, 0.25, 1.0),
        ({"usl": 12, "mean": 10.5, "std": 0.5}, 3.0, 0.0, 0.0),
        ({"cpk": 1.2, "k": 0.2}, 4.5, 0.2, 0.0),
    ],
)
def test_measured_capabilities_by_hand(quoted: dict, z: float, k: float, s: float) -> None:
    state = settle(quoted, BLANK)
    assert (state.z, state.k, state.s) == (near(z), near(k), near(s))


@pytest.mark.parametrize(
    ("quoted", "p"),
    [
        ({"yield": 0.98}, 0.02),
        ({"defect_rate": 0.02}, 0.02),
        ({"dpmo": 20000, "k": 0.1, "shift": 1.5, "sides": 2}, 0.02),
        # 4 opportunities per item: 1 − 0.98^(1/4)
        ({"item_yield": 0.98}, 0.005037947),
        ({"ppm": 20000}, 0.005037947),
        ({"bad": 4, "of": 200}, 0.005037947),
        # none bad of 100: 1 − 0.5^(1/100) per item, a quarter of the exponent per opportunity
        ({"bad": 0, "of": 100}, -math.expm1(math.log(0.5) / 400)),
    ],
)
def test_a_quoted_probability_is_met_exactly(quoted: dict, p: float) -> None:
    step = {"name": "A", "opportunities": 4, "capability": quoted}
    state = today_state({"step": [step]}, step)
    assert state.p(state.z) == pytest.approx(p, rel=1e-6)


def test_alternatives_are_applied_in_order() -> None:
    step = {"name": "A", "opportunities": 4, "capability": {"cp": 1.0, "cpk": 0.8}}
    better = {"name": "a", "capability": {"cpk": 1.2}, "widen": 1.25}
    centred = {"name": "b", "group": "setting", "k": 0.1, "opportunities": 2}
    state = state_with({"step": [step]}, step, [centred, better])
    # cpk inherits k = 0.2: z = 3·1.2/0.8 = 4.5; then k = 0.1; then widened by 1.25: z = 5.625, k = 0.08
    assert (state.z, state.k, state.n) == (near(5.625), near(0.08), 2)


# ---- flows and money by hand -----------------------------------------------------------------------------------------


def test_two_serial_steps_by_hand() -> None:
    scenario = line({"capability": {"yield": 0.9}, "cost_added": 10}, {"capability": {"yield": 0.8}, "cost_added": 5})
    result = recount(scenario, {})
    # start 1/0.8 = 1.25 at B and 1.25/0.9 = 1.38889 at A; throw away 0.13889 at 10 and 0.25 at 15: 5.13889 per unit
    assert [s["starts_per_year"] for s in result["steps"]] == [near(1000 / 0.72), near(1250)]
    assert result["annual_cost"]["total"] == near(1000 * (0.1 / 0.72 * 10 + 0.25 * 15))
    assert result["final_yield"] == near(0.72)
    assert result["rolled_yield"] == near(0.72)
    assert result["shipped_yield"] is None


def test_a_hidden_defect_by_hand() -> None:
    scenario = line(
        {
            "capability": {"yield": math.exp(-0.2)},
            "cost_added": 10,
            "inspection": {"finds": 0.5},
            "rework": {"share": 0.4, "cost": 2},
        },
        {
            "capability": {"yield": math.exp(-0.1)},
            "cost_added": 5,
            "salvage": 3,
            "inspection": {
                "finds": 0.8, "earlier": 0.5, "rejects_good": 0.02, "rejects_lost": 0.5, "per_item": 0.4,
                "share_inspected": 0.5,
            },
        },
        target={"final_yield": 0.5, "escape_cost": 100},
    )  # fmt: skip
    result = recount(scenario, {})
    # A finds 0.1, hides 0.1; six tenths of what is found is scrapped: exponent 0.06
    # B (half inspected) finds 0.4·0.1 + 0.25·0.1 = 0.065, hides 0.6·0.1 + 0.75·0.1 = 0.135
    # its false rejects are 1 % of the items, half of them lost
    scrap_b = 0.065 - math.log(1 - 0.005)
    start_b = math.exp(scrap_b)
    start_a = math.exp(scrap_b + 0.06)
    assert [s["starts_per_year"] for s in result["steps"]] == [near(1000 * start_a), near(1000 * start_b)]
    assert result["shipped_yield"] == near(math.exp(-0.135))
    assert result["final_yield"] == near(math.exp(-0.06 - scrap_b - 0.135))
    assert result["rolled_yield"] == near(math.exp(-0.3))
    # lost: 10 per item at A, 10 + 5 − 3 = 12 at B
    scrap = 1000 * ((start_a - start_b) * 10 + (start_b - 1) * 12)
    assert result["annual_cost"]["scrap"] == near(scrap)
    assert result["annual_cost"]["rework"] == near(1000 * 2 * 0.4 * 0.1)
    assert result["annual_cost"]["inspection"] == near(1000 * 0.4 * 0.5)
    assert result["annual_cost"]["escapes"] == near(1000 * 100 * 0.135)
    assert result["steps"][0]["first_pass_yield"] == near(math.exp(-0.1))
    assert result["steps"][1]["first_pass_yield"] == near(math.exp(-0.065) * 0.99)
    # A's defects: 0.06 scrapped at A, 0.025 at B, 0.075 shipped; B's: 0.04, 0.06 and its false rejects
    used = [0.16, 0.1 - math.log(0.995)]
    assert [s["budget_share"] for s in result["steps"]] == [near(u / sum(used)) for u in used]


def test_a_tree_by_hand() -> None:
    scenario = line(
        {"capability": {"yield": 0.9}, "cost_added": 4, "feeds": "C", "per_unit": 2},
        {"capability": {"yield": 0.95}, "scrap_cost": 6, "feeds": "C", "per_unit": 3},
        {"capability": {"yield": 0.8}, "cost_added": 10},
    )
    result = recount(scenario, {})
    # 1.25 carts are started for one shipped; they take 2.5 A (2.5/0.9 started) and 3.75 B (3.75/0.95 started)
    assert [s["starts_per_year"] for s in result["steps"]] == [near(2500 / 0.9), near(3750 / 0.95), near(1250)]
    # a scrapped cart loses 2·4 + 3·6 + 10 = 36
    scrap = 1000 * (2.5 / 0.9 * 0.1 * 4 + 3.75 / 0.95 * 0.05 * 6 + 0.25 * 36)
    assert result["annual_cost"]["scrap"] == near(scrap)
    assert result["rolled_yield"] == near(0.9**2 * 0.95**3 * 0.8)
    assert net_cost_added(scenario) == [4, 6, 10]


def test_annual_worth_by_hand() -> None:
    option = {
        "name": "a", "capability": {"yield": 0.99}, "price": 1000, "trade_in": 100, "life_years": 10, "resale": 200,
        "per_year": 5, "per_item": 0.01, "price_allowance": 0.02, "uses": "tester",
    }  # fmt: skip
    scenario = line(
        {"capability": {"yield": 0.9}, "cost_added": 1, "alternative": [option]},
        purchase=[{"name": "tester", "price": 500}],
    )
    scenario["demand"]["discount_rate"] = 0.1
    result = recount(scenario, {"A": {"alternatives": ["a"]}})
    # CRF(10 %, 10 years) = 0.162745395, CRF(10 %, 5 years) = 0.263797481
    want = 900 * 0.162745395 - 200 * (0.162745395 - 0.1) + 5 + 10 + 20 + 500 * 0.263797481
    assert result["annual_cost"]["improvement"] == pytest.approx(want, rel=1e-8)
    assert result["capital"] == near(1400)


# ---- laws ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("law", "want"),
    [
        ({"law": "power", "exponent": 2.0, "per_year": 100.0, "up_to": 5.0}, 100 * ((4 / 3) ** 2 - 1)),
        ({"law": "exponential", "rate": 0.5, "per_year": 100.0, "up_to": 5.0}, 100 * (math.exp(0.5) - 1)),
        ({"law": "exponential", "rate": 0.5, "per_year": 70.0, "at": {"cp": 4 / 3}, "up_to": 5.0}, 70.0),
        ({"law": "quotes", "points": [{"cp": 4 / 3, "price": 50}, {"sigma_level": 5, "price": 900}]}, 10.0),
        # the first quote lies above the line from today to the second: only the line counts
        (
            {"law": "quotes", "points": [{"sigma_level": 4, "price": 800}, {"sigma_level": 5, "price": 500}]},
            100 * (p_of(3) - p_of(4)) / (p_of(3) - p_of(5)),
        ),
    ],
)
def test_laws_by_hand(law: dict, want: float) -> None:
    step = {"capability": {"sigma_level": 3.0}, "cost_added": 1, "improve": law}
    result = recount(line(step), {"A": {"z": 4.0}})
    # quotes are prices, one fifth a year; the line is straight in δ, not in p: equal to 1e-3 here
    tolerance = 2e-3 if law["law"] == "quotes" else EXACT
    assert result["annual_cost"]["improvement"] == pytest.approx(want, rel=tolerance)


def test_a_law_without_up_to_stops_at_a_tenth() -> None:
    law = {"law": "decade", "per_year": 100.0}
    scenario = line({"capability": {"dpmo": 5000}, "cost_added": 1e6, "improve": law})
    best = optimum(scenario)
    figures = best["recount"]["steps"][0]
    assert figures["dpmo"] == pytest.approx(500, rel=1e-9)
    assert figures["at_cap"]
    assert best["recount"]["annual_cost"]["improvement"] == pytest.approx(100, rel=1e-9)


# ---- optima by hand --------------------------------------------------------------------------------------------------


def test_the_economic_optimum_of_one_step_in_closed_form() -> None:
    # total = L·(1/(1 − p) − 1) + c·log10(p0/p), L = 1000·20, c = 30; stationary where L·p·ln 10 = c·(1 − p)²
    law = {"law": "decade", "per_year": 30.0, "up_to": {"dpmo": 1}}
    scenario = line({"capability": {"yield": 0.95}, "cost_added": 20, "improve": law})
    a = 20000 * math.log(10) / 30
    p = ((2 + a) - math.sqrt((2 + a) ** 2 - 4)) / 2
    best = optimum(scenario)
    assert best["total"] == pytest.approx(20000 * p / (1 - p) + 30 * math.log10(0.05 / p), rel=1e-8)
    assert best["recount"]["steps"][0]["dpmo"] == pytest.approx(1e6 * p, rel=1e-3)


def test_a_shared_purchase_is_paid_once() -> None:
    option = {"name": "a", "capability": {"yield": 0.99}, "uses": "tester"}
    step = {"capability": {"yield": 0.9}, "cost_added": 10, "alternative": [option]}
    scenario = line(step, step, purchase=[{"name": "tester", "price": 8000}], target={"final_yield": 0.85})
    # as it is 10·(1/0.81 − 1) + 10·(1/0.9 − 1) = 3456.8; one better (B) 2232 + tester 1600; both better 304.1 + 1600
    best = optimum(scenario)
    assert [c["alternatives"] for c in best["choice"].values()] == [["a"], ["a"]]
    assert best["total"] == near(10000 * (1 / 0.99**2 - 1) + 10000 * (1 / 0.99 - 1) + 1600)
    assert optimum(scenario, targets={"final_yield": 0.99})["choice"] is None
    assert best_reachable(scenario)["yield"] == near(0.99**2)


def test_a_budget_is_split_where_both_steps_pay_the_same_for_a_defect() -> None:
    # decade laws, scrap worth nothing beside them: cost c·log10(p0/p); the split has δ in the ratio of the two c
    law = {"law": "decade", "up_to": {"dpmo": 0.01}}
    scenario = line(
        {"capability": {"yield": 0.99}, "cost_added": 1e-9, "improve": law | {"per_year": 100.0}},
        {"capability": {"yield": 0.99}, "cost_added": 1e-9, "improve": law | {"per_year": 300.0}},
        target={"rolled_yield": {"nines": 4}},
    )
    ppm = [s["ppm"] for s in optimum(scenario)["recount"]["steps"]]
    assert ppm == [pytest.approx(25, rel=1e-3), pytest.approx(75, rel=1e-3)]
    assert sum(ppm) == pytest.approx(100, rel=1e-4)


# ---- identities on random scenarios ----------------------------------------------------------------------------------


@pytest.mark.parametrize("seed", range(40))
def test_counts_and_closed_formulas_agree(seed: int) -> None:
    scenario = random_scenario(seed)
    q, kappa = items_per_unit(scenario), net_cost_added(scenario)
    assert min(kappa) >= -1e-6 * max(lost_per_scrapped_item(scenario))
    for problem in list(combinations(scenario))[:6]:
        for x in (problem.low, problem.high):
            result = recount(scenario, problem.choice(scenario, x))
            for counted in result["counted"]:
                assert counted.started == near(counted.passed + counted.scrapped)
            units = scenario["demand"]["shipped_per_year"]
            starts = [s["starts_per_year"] / units for s in result["steps"]]
            closed = units * sum(k * (start - per_unit) for k, start, per_unit in zip(kappa, starts, q, strict=True))
            assert result["annual_cost"]["scrap"] == pytest.approx(closed, rel=1e-9)
            assert result["annual_cost"]["total"] == pytest.approx(problem.cost(x), rel=1e-11, abs=1e-9)
            assert result["capital"] == pytest.approx(problem.capital(x), rel=1e-11, abs=1e-9)
            for name in ("final_yield", "rolled_yield", "shipped_yield"):
                assert result["exponents"][name] == pytest.approx(problem.exponent(name, x), rel=1e-11, abs=1e-15)
            assert sum(s["budget_share"] for s in result["steps"]) == near(1.0) or math.isnan(
                result["steps"][0]["budget_share"]
            )


@pytest.mark.parametrize("seed", range(40, 60))
def test_without_rework_and_false_rejects_final_is_rolled(seed: int) -> None:
    scenario = random_scenario(seed)
    for table in [scenario.get("default", {}), *scenario["step"]]:
        table.pop("rework", None)
        table.get("inspection", {}).pop("rejects_good", None)
    result = recount(scenario, {})
    assert result["exponents"]["final_yield"] == near(result["exponents"]["rolled_yield"])


@pytest.mark.parametrize("seed", [5, 8, 9, 12, 21, 23, 28, 38, 40, 46, 55, 61, 76])
def test_a_second_optimiser_finds_the_same(seed: int) -> None:
    scenario = random_scenario(seed)
    budgets = {name: -math.log(goal) for name, goal in target_yields(scenario).items()}
    limit = scenario.get("limits", {}).get("capital")
    for problem in [p for p in combinations(scenario) if p.moving][:2]:
        ours = solve(Task(problem, budgets, limit))
        if ours.x is None:
            continue
        theirs = least_cost(scenario, problem, budgets, starts=3)
        assert theirs >= ours.lower - 1e-7 * abs(ours.lower)
        assert theirs == pytest.approx(ours.value, rel=SLSQP_AGREES)
