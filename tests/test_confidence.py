"""A plan with confidence: does it hold as often as it says, at what price, and do its laws agree with known ones?

The truth is drawn here anew, by formulas of this file alone (normal tails by scipy.stats, yields multiplied).
"""

from __future__ import annotations

import json
import math
from typing import Any

import numpy as np
import pytest
import scipy.stats
from scipy.optimize import minimize
from typer.testing import CliRunner

from allocator.choice import Choice, evaluate
from allocator.cli import app
from allocator.demonstrate import lower_bound_cpk, parts_needed
from allocator.doubt import Nature, draw_nature, find_doubts, seen_in, true_intensity
from allocator.errors import RangeError
from allocator.plan import make_plan
from allocator.problem import Problem, pose
from allocator.report.render import render
from allocator.results import Confidence, Plan
from allocator.scenario.read import scenario_from_dict
from allocator.tighten import Search
from tests.published.lines import line, plan, step

DRAWS = 40_000
MONTE_CARLO = 4.0 * math.sqrt(0.25 / DRAWS)
"""Four standard errors of a share from so many draws."""
FIGURES = 1e-3
"""Quantiles of stratified draws: their own error."""
DEMAND = {"shipped_per_year": 100_000, "years": 5, "discount_rate": 0.08}

Array = np.ndarray[Any, Any]


def three(**tables: Any) -> dict[str, Any]:
    """Three measured steps of different samples, centred, one and two limits, and a counted one taken on."""
    power = {"law": "power", "exponent": 1.2}
    return line(
        step("turn", {"sigma_level": 3.6, "sample": 30}, improve={**power, "price": 40_000, "up_to": 6.5}),
        step("grind", {"cp": 1.3, "cpk": 1.1, "sample": 50}, improve={**power, "price": 90_000, "up_to": 6.5}),
        step("coat", {"cpk": 1.1, "sample": 200}, improve={**power, "price": 20_000, "up_to": 6.5}),
        step("wire", {"bad": 9, "of": 3000}, improve={"law": "decade", "price": 30_000, "up_to": {"ppm": 30}}),
        demand=DEMAND,
        target={"final_yield": 0.998},
        **tables,
    )


def posed(scenario: dict[str, Any]) -> Problem:
    return pose(scenario_from_dict(scenario))


def sure_of(plan: Plan) -> Confidence:
    assert plan.confidence is not None
    return plan.confidence


@pytest.fixture(scope="module")
def planned() -> Plan:
    return make_plan(scenario_from_dict(three()), confidence=0.9)


def nature_of(capability: dict[str, Any], draws: int = DRAWS) -> tuple[Nature, Array, float]:
    """Stratified draws of one step, its true intensity as it stands, and the estimated one."""
    problem = posed(line(step("only", capability)))
    doubts = find_doubts(problem)
    nature, ways = draw_nature(doubts, draws, 1, stratified=True), problem.options.ways
    exact = Nature(np.ones((1, 1)), np.zeros((1, 1)), np.ones((1, 1)))
    rows, z = np.array([0]), ways.z_low[:1]
    estimate = float(true_intensity(exact, doubts, ways, rows, z)[0, 0])
    return nature, true_intensity(nature, doubts, ways, rows, z)[:, 0], estimate


@pytest.mark.parametrize("confidence", [0.05, 0.5, 0.9, 0.975])
@pytest.mark.parametrize("n", [10, 60])
def test_one_limit_gives_the_noncentral_t_bound(n: int, confidence: float) -> None:
    """With one limit the law of the true index is that of the exact bound (noncentral t), for every confidence."""
    _, delta, estimate = nature_of({"cpk": 1.2, "sample": n})
    assert estimate == pytest.approx(-math.log1p(-scipy.stats.norm.sf(3.6)), rel=1e-9)
    index = scipy.stats.norm.isf(-np.expm1(-delta)) / 3.0
    below = np.mean(index <= lower_bound_cpk(1.2, n, confidence))
    assert below == pytest.approx(1.0 - confidence, abs=MONTE_CARLO)


def test_sigma_follows_its_chi_square_law() -> None:
    """As the limits of Cp in the NIST/SEMATECH handbook 6.1.6: Cp·√(χ²/ν)."""
    nature, _, _ = nature_of({"cp": 1.2, "sample": 20})
    for tail in (0.025, 0.5, 0.975):
        wanted = math.sqrt(scipy.stats.chi2.ppf(tail, 19) / 19)
        assert np.quantile(nature.ratio, tail) == pytest.approx(wanted, rel=FIGURES)
    assert np.std(nature.off) == pytest.approx(1.0 / math.sqrt(20), rel=FIGURES)


@pytest.mark.parametrize(
    ("capability", "bad", "chances"),
    [
        ({"bad": 4, "of": 900}, 4.0, 900.0),
        ({"ppm": 2000, "sample": 500}, 1.0, 500.0),
        ({"bad": 0, "of": 60}, 0.0, 60.0),
        ({"dpmo": 1000, "sample": 3000}, 3.0, 3000.0),
        ({"yield": 0.99, "sample": 400}, 4.0, 400.0),
    ],
)
def test_counts_follow_the_beta_law(capability: dict[str, Any], bad: float, chances: float) -> None:
    """Jeffreys interval of a share (Brown, Cai and DasGupta, Statistical Science 16, 2001)."""
    _, delta, _ = nature_of(capability)
    for tail in (0.05, 0.5, 0.95):
        wanted = scipy.stats.beta.ppf(tail, bad + 0.5, chances - bad + 0.5)
        assert np.quantile(-np.expm1(-delta), tail) == pytest.approx(wanted, rel=5 * FIGURES)


def test_none_bad_in_the_success_run_is_nearly_its_bound() -> None:
    """59 parts, none bad: 95 % reliability at 95 % by the success-run theorem; Jeffreys is a little less cautious."""
    assert parts_needed(-math.log(0.95), 0.95) == 59
    _, delta, _ = nature_of({"bad": 0, "of": 59})
    assert 0.025 < 1.0 - math.exp(-np.quantile(delta, 0.95)) < 0.05


def true_shares(rng: np.random.Generator, z: list[float]) -> Array:
    """Share of defective units of the three measured steps and the counted one, by this file's own formulas."""
    norm = scipy.stats.norm
    s30, s50, s200 = (np.sqrt(rng.chisquare(n - 1, DRAWS) / (n - 1)) for n in (30, 50, 200))
    off30, off50, off200 = (rng.standard_normal(DRAWS) / math.sqrt(n) for n in (30, 50, 200))
    # `turn` is centred with limits ±T; as estimated T = z·σ̂ today 3.6, and improved by the factor z/3.6.
    turn_mean = off30 / (3.6 * s30)
    turn = norm.sf(z[0] * s30 * (1 - turn_mean)) + norm.sf(z[0] * s30 * (1 + turn_mean))
    grind_mean = (1.0 - 1.1 / 1.3) + off50 / (3.9 * s50)
    grind = norm.sf(z[1] * s50 * (1 - grind_mean)) + norm.sf(z[1] * s50 * (1 + grind_mean))
    coat = norm.sf(z[2] / 3.3 * (3.3 * s200 + off200))
    wire = 1.0 - (1.0 - rng.beta(9.5, 2991.5, DRAWS)) ** (math.log1p(-norm.sf(z[3])) / math.log1p(-0.003))
    return np.asarray(1.0 - (1 - turn) * (1 - grind) * (1 - coat) * (1 - wire))


def test_the_plan_holds_in_a_simulation_of_its_own(planned: Plan) -> None:
    levels = [row.target.sigma_level for row in planned.rows]
    lost = true_shares(np.random.default_rng(4), levels)
    sure = sure_of(planned)
    assert np.mean(lost <= 0.002) == pytest.approx(0.9, abs=MONTE_CARLO)
    assert np.mean(lost <= 0.002) == pytest.approx(sure.trial.holds, abs=MONTE_CARLO)
    assert sure.trial.holds_high >= 0.9
    assert sure.reached
    plain = make_plan(scenario_from_dict(three()))
    levels = [row.target.sigma_level for row in plain.rows]
    assert plain.money is not None
    assert sure.plain.total == pytest.approx(plain.money.total, rel=1e-6)
    assert np.mean(true_shares(np.random.default_rng(5), levels) <= 0.002) == pytest.approx(
        sure.plain.holds, abs=MONTE_CARLO
    )
    assert sure.plain.holds < 0.6


def test_one_step_is_planned_on_its_own_bound() -> None:
    """With one step in doubt the answer is known: the level whose exact lower bound just meets the target."""
    law = {"law": "power", "exponent": 1, "price": 1000, "up_to": 8.0}
    found = plan(
        line(step("only", {"cpk": 1.1, "sample": 40}, improve=law), demand=DEMAND, target={"final_yield": 0.9999}),
        confidence=0.9,
    )
    needed = scipy.stats.norm.isf(1e-4) * 1.1 / lower_bound_cpk(1.1, 40, 0.9)
    assert found.rows[0].target.sigma_level == pytest.approx(needed, rel=5e-3)  # the quantile's own error
    sure = sure_of(found)
    assert sure.own_bounds is not None
    assert sure.own_bounds.total == pytest.approx(sure.trial.total, rel=2e-3)


def test_nothing_much_cheaper_holds(planned: Plan) -> None:
    """Against a direct search over all levels for the least cost at the same share: within 3 % of the price paid."""
    problem = posed(three())
    search, ways = Search(problem, find_doubts(problem), 0.9), problem.options.ways
    fewer = draw_nature(search.doubts, 4000, 3, stratified=True)

    def judged(free: Array) -> tuple[float, float]:
        z = np.clip(free, ways.z_low, ways.z_high)
        outcome = evaluate(problem.line, problem.options, Choice(np.arange(4), z))
        return outcome.money.total, search.used(outcome, fewer)

    start = np.array([row.target.sigma_level for row in planned.rows])
    ours, allowed = judged(start)

    def penalised(free: Array) -> float:
        total, used = judged(free)
        return total + 3e6 * max(used - allowed, 0.0)

    options = {"maxfev": 400, "initial_simplex": simplex(start)}
    total, used = judged(minimize(penalised, start, method="Nelder-Mead", options=options).x)
    assert used <= allowed * 1.001
    assert ours - total <= 0.03 * sure_of(planned).price


def simplex(start: Array) -> Array:
    return np.vstack([start, *(start + 0.15 * np.eye(len(start)))])


@pytest.mark.parametrize("seed", [1, *(pytest.param(seed, marks=pytest.mark.long) for seed in (0, 2))])
def test_never_dearer_than_own_bounds_unless_those_fail(seed: int) -> None:
    """Random lines with alternatives: where the plan on every estimate's own bound holds, ours costs no more."""
    rng = np.random.default_rng(seed)
    steps = []
    for i in range(4):
        law = {
            "law": "power",
            "exponent": 0.8 + rng.random(),
            "price": float(rng.integers(10, 90)) * 1000,
            "up_to": 7.0,
        }
        other = {"name": "new", "capability": {"cp": 1.7, "sample": int(rng.integers(25, 200))}, "price": 30_000.0}
        capability = {"cp": float(rng.uniform(1.0, 1.4)), "sample": int(rng.integers(20, 300))}
        steps.append(
            step(f"s{i}", capability, improve=law, alternative=[other] if i % 2 else [], scrap_cost=3.0 * seed)
        )
    found = plan(line(*steps, demand=DEMAND, target={"final_yield": 0.99}), confidence=0.9)
    sure = sure_of(found)
    assert sure.reached
    assert sure.trial.holds_high >= 0.9
    assert sure.price >= 0.0
    assert sure.own_bounds is not None
    if sure.own_bounds.holds_low >= 0.9:
        assert sure.trial.total <= sure.own_bounds.total * (1.0 + 1e-9)


def test_surer_costs_more(planned: Plan) -> None:
    more = sure_of(plan(three(), confidence=0.97))
    assert sure_of(planned).plain.total < sure_of(planned).trial.total < more.trial.total
    assert more.trial.holds == pytest.approx(0.97, abs=0.003)


def test_a_recentred_mean_is_no_longer_in_doubt() -> None:
    """Setting k takes the place of the estimated mean; what is left is the error of σ."""
    setting = {"name": "set", "group": "setting", "k": 0.0, "price": 1.0}
    problem = posed(line(step("only", {"cp": 1.2, "cpk": 1.0, "sample": 30}, alternative=[setting]), demand=DEMAND))
    doubts = find_doubts(problem)
    nature = draw_nature(doubts, 2000, 1)
    ways = problem.options.ways
    delta = true_intensity(nature, doubts, ways, np.array([0, 1]), ways.z_low[:2])
    wanted = -np.log1p(-2.0 * scipy.stats.norm.sf(3.6 * nature.ratio[:, 0]))
    assert delta[:, 1] == pytest.approx(wanted, rel=1e-9)
    assert np.median(delta[:, 0]) > np.median(delta[:, 1])


def test_an_alternative_without_a_sample_is_exact() -> None:
    other = {"name": "new", "capability": {"cp": 1.5}, "price": 1.0}
    problem = posed(line(step("only", {"cp": 1.2, "sample": 30}, alternative=[other]), demand=DEMAND))
    doubts = find_doubts(problem)
    assert doubts.of_way.tolist() == [0, -1]
    chosen = evaluate(problem.line, problem.options, Choice(np.array([1]), problem.options.ways.z_low[1:]))
    assert seen_in(draw_nature(doubts, 10, 1), doubts, problem, chosen).delta.shape == (10, 0)


def test_a_plan_that_takes_an_alternative_without_a_sample_takes_it_as_exact() -> None:
    """The present machine's sample says nothing of the one that replaces it."""
    other = {"name": "new", "capability": {"cp": 1.6}, "price": 1.0}
    steps = step("cut", {"cp": 0.9, "sample": 30}, alternative=[other]), step("turn", {"cp": 1.5, "sample": 100})
    sure = sure_of(plan(line(*steps, demand=DEMAND, target={"final_yield": 0.99}), confidence=0.9))
    assert (sure.exact, sure.in_doubt) == (("cut",), ("turn",))


def test_what_to_measure_names_the_smallest_sample_first(planned: Plan) -> None:
    """The law of errors says so here: `turn` rests on 30 parts, and much of the budget is spent on that."""
    studies = sure_of(planned).studies
    assert {study.step for study in studies} == {"turn", "grind", "coat", "wire"}
    assert studies[0].step in ("turn", "grind")
    assert studies[0].saving > 0.0
    assert [study.sample_then for study in studies] == [4 * study.sample for study in studies]
    assert sum(study.saving for study in studies) < 2.0 * sure_of(planned).price


def test_out_of_reach_is_said_with_the_surest_plan() -> None:
    law = {"law": "power", "exponent": 1, "price": 1000, "up_to": 4.0}
    scenario = line(step("only", {"cp": 1.1, "sample": 10}, improve=law), demand=DEMAND, target={"final_yield": 0.999})
    found = plan(scenario, confidence=0.99)
    assert not found.reached
    assert sure_of(found).trial.holds < 0.99
    assert "99 % sure" in render(found)
    assert not plan(line(step("a", {"cp": 1.0, "sample": 9}), target={"final_yield": 0.9999}), confidence=0.9).reached


@pytest.mark.parametrize(
    ("scenario", "asked", "message"),
    [
        (
            line(step("a", {"cp": 1.0}), target={"final_yield": 0.9}),
            {"confidence": 0.9},
            "no capability states a sample",
        ),
        (line(step("a", {"cp": 1.0, "sample": 9})), {"confidence": 0.9}, "needs a target"),
        (three(), {"confidence": 0.3}, "from 0.5 to 0.999"),
        (three(), {"confidence": 0.9, "spend": 1.0}, "leave out the yearly spend"),
    ],
)
def test_questions_without_sense_are_refused(scenario: dict[str, Any], asked: dict[str, Any], message: str) -> None:
    with pytest.raises(RangeError, match=message):
        plan(scenario, **asked)


def test_ranges_of_prices_give_the_range_of_the_cost() -> None:
    """One price from 80 to 150, stated 100: the triangular law's own 5 and 95 % points, at a factor of one."""
    new = {
        "name": "new",
        "capability": {"cp": 2.0, "sample": 100},
        "price": 100.0,
        "price_low": 80.0,
        "price_high": 150.0,
    }
    scenario = line(step("a", {"cp": 1.0, "sample": 100}, alternative=[new]), target={"final_yield": 0.999})
    sure = sure_of(plan(scenario, confidence=0.9))
    law = scipy.stats.triang(20 / 70, 80.0, 70.0)
    assert sure.ranges == 1
    assert (sure.improvement_low, sure.improvement_high) == pytest.approx((law.ppf(0.05), law.ppf(0.95)), rel=5e-3)
    assert (sure.cost_low, sure.cost_high) == pytest.approx((law.ppf(0.05), law.ppf(0.95)), rel=5e-2)


def test_ranges_of_laws_and_yearly_costs_are_scaled() -> None:
    law = {"law": "decade", "per_item": 0.02, "per_item_high": 0.03}
    shared = {"name": "oven", "price": 0.0, "per_year": 500.0, "per_year_low": 400.0}
    other = {"name": "oven cure", "uses": "oven", "capability": {"dpmo": 200, "sample": 9000}}
    scenario = line(
        step("a", {"dpmo": 5000, "sample": 4000}, improve=law),
        step("b", {"dpmo": 9000, "sample": 900}, alternative=[other]),
        target={"final_yield": 0.998},
        purchase=[shared],
        demand=DEMAND,
    )
    found = plan(scenario, confidence=0.9)
    sure, spent = sure_of(found), found.rows[0].improvement
    assert sure.ranges == 2
    rng = np.random.default_rng(6)
    drawn = rng.triangular(spent, spent, 1.5 * spent, DRAWS) + rng.triangular(400.0, 500.0, 500.0, DRAWS)
    wanted = np.quantile(drawn, [0.05, 0.95])
    assert (sure.improvement_low, sure.improvement_high) == pytest.approx(wanted, rel=1e-2)


def test_json_tells_how_sure(planned: Plan) -> None:
    told = json.loads(render(planned, "json"))["confidence"]
    wanted = (
        "confidence reached total holds holds_low holds_high price_of_confidence plain own_bounds cost what_to_measure"
    )
    assert set(wanted.split()) <= set(told)
    assert told["price_of_confidence"] == pytest.approx(told["total"] - told["plain"]["total"])


def test_the_sheet_fits_eighty_columns_and_says_its_law(planned: Plan) -> None:
    text = render(planned)
    assert max(map(len, text.splitlines())) <= 80
    for said in ("To be 90 % sure", "chi-square", "What to measure next", "fresh draws", "no lower bound is proven"):
        assert said in text
    assert "next nine" not in text
    assert "is taken as exact; its 95 % lower limit" not in text


def test_the_command_line_refuses_in_its_own_words() -> None:
    answer = CliRunner().invoke(app, ["plan", "x.toml", "--confidence", "90"])
    assert answer.exit_code == 2
    assert "give a probability from 0.5 to 0.999 (90 % is 0.9)" in answer.stderr
