"""Do defects per unit, escapes and the cost of inspections agree with published worked examples?

Left out: clustered defects (negative binomial yields), which are another model altogether.
"""

from __future__ import annotations

import itertools
import math
from pathlib import Path
from typing import Any

import pytest

from allocator.results import Today
from tests.published.lines import command, line, plan, step, today, with_defects

MANY = 1e6
"""Opportunities among which a count per unit is spread, so that it is Poisson as the sources have it."""
SIX_DIGITS = 1e-6
THREE_DIGITS = 5e-4
ABOUT = 0.01
"""The source says "about", in whole percent."""
CENT = 0.005
SPREAD = 1e-6
"""Spreading over a million opportunities is off by n·p²/2, below a millionth of the count."""


def spread(name: str, dpu: float) -> dict[str, Any]:
    """A step with `dpu` defects per unit among a million opportunities: dpmo is then the same number."""
    return step(name, {"dpmo": dpu}, opportunities=MANY)


def rolled(scenario: dict[str, Any]) -> float:
    return today(scenario).line.yields.rolled_yield


def test_rolled_yield_from_defects_per_unit() -> None:
    """M. Harry, published answer on rolled throughput yield, 23 February 2004: 0.10, 0.05, 0.008 give 0.853850.

    The first of its yields, printed 0.904834, is a misprint of 0.904837.
    """
    seen = today(line(*(spread(f"step {dpu}", dpu) for dpu in (0.10, 0.05, 0.008))))
    assert [s.first_pass_yield for s in seen.rows] == pytest.approx([0.904837, 0.951229, 0.992032], abs=SIX_DIGITS)
    assert seen.line.yields.rolled_yield == pytest.approx(0.853850, abs=5e-7)
    assert seen.line.dpu == pytest.approx(0.158, rel=1e-12)


@pytest.mark.parametrize(
    ("dpu", "printed", "tolerance"),
    [
        (165 / 40_000, 0.995883, SIX_DIGITS),  # 165 defects in 40,000 units; ASQ CSSBB handbook, extract
        (0.171, 0.843, THREE_DIGITS),  # nonconformities per unit; same
        (2.3, 0.10, 5e-3),  # chips of 2.3 cm² at 1 defect/cm²; Flynn, Computer Architecture, p. 89
        (1.0, 0.37, 5e-3),  # of 1 cm²; same
    ],
)
def test_yield_from_defects_per_unit(dpu: float, printed: float, tolerance: float) -> None:
    assert rolled(line(spread("unit", dpu))) == pytest.approx(printed, abs=tolerance)


def test_a_board_of_500_components() -> None:
    """Shina, Six Sigma for Electronics Design and Manufacturing, McGraw-Hill 2002, pp. 110 and 123: about 60 %.

    Per component 2.5 solder joints of 100 ppm, assembly 500 ppm, the component itself 300 ppm: 1,050 ppm.
    """
    seen = today(
        line(
            step("component", {"dpmo": 300}, opportunities=500),
            step("assembly", {"dpmo": 500}, opportunities=500),
            step("solder", {"dpmo": 100}, opportunities=1250),
        )
    )
    assert seen.line.dpu == pytest.approx(500 * 1050e-6, rel=1e-12)
    assert seen.line.yields.rolled_yield == pytest.approx(0.60, abs=ABOUT)
    # p. 109: multiplying yields and summing DPU agree; DPU leaves out Σ n·p²/2, here 1.8e-4 at most.
    multiplied = math.prod(s.first_pass_yield for s in seen.rows)
    assert seen.line.yields.rolled_yield == pytest.approx(multiplied, rel=1e-12)
    assert -math.log(multiplied) == pytest.approx(seen.line.dpu, abs=500 * (300e-6**2 + 500e-6**2 + 2.5 * 100e-6**2))


def test_2250_joints_at_100_ppm() -> None:
    """Shina, p. 125: 0.9999^2250 is 80 %."""
    assert rolled(line(step("board", {"dpmo": 100}, opportunities=2250))) == pytest.approx(0.80, abs=ABOUT)


BOARDS = 100_000
AT_CUSTOMER = 500.0
"""Cost of a bad board at the customer, in dollars."""
TESTS = {"visual": (1.0, 1.0), "in-circuit": (3.0, 6.0), "functional": (10.0, 50.0)}
"""Cost of testing and of repairing one board. Shina, section 4.4.2, Tables 4.5 to 4.7, pp. 123 to 125."""
NEARLY_NONE = {"sigma_level": 30.0}
"""A test makes no defects of its own (p below 1e-197)."""


def boards(start: float, after: dict[str, float]) -> dict[str, Any]:
    """A board line of this yield at the start, and after each of its tests.

    A yield of 60 % means here, as in the source, 40 bad boards in 100 with one defect each: 0.4 defects per board. A
    test that raises 60 to 80 % finds half of them; what it finds is repaired, the rest goes on.
    """
    steps = [step("assembly", with_defects(1.0 - start), inspection={"finds": 0.0})]
    before = start
    for name, reached in after.items():
        test, repair = TESTS[name]
        found = (reached - before) / (1.0 - before)
        inspection = {"finds": 0.0, "earlier": found, "per_item": test}
        steps.append(step(name, NEARLY_NONE, inspection=inspection, rework={"share": 1.0, "cost": repair}))
        before = reached
    return line(*steps, demand={"shipped_per_year": BOARDS}, target={"escape_cost": AT_CUSTOMER})


def per_board(seen: Today) -> float:
    assert seen.line.money is not None
    return seen.line.money.total / BOARDS


THREE_TESTS = {"visual": 0.80, "in-circuit": 0.95, "functional": 0.998}


def test_three_tests_in_a_row() -> None:
    """Scenario 1, first strategy; defective before 40,000/20,000/5,000/200, repaired 20,000/15,000/4,800/200."""
    seen = today(boards(0.60, THREE_TESTS))
    money = seen.line.money
    assert money is not None
    assert [s.inspection for s in seen.rows[1:]] == pytest.approx([100_000, 300_000, 1_000_000])
    assert money.inspection == pytest.approx(1_400_000)
    repaired = [s.rework / TESTS[s.step][1] for s in seen.rows[1:]]
    assert repaired == pytest.approx([20_000, 15_000, 4_800])
    assert money.escapes / AT_CUSTOMER == pytest.approx(200)
    assert money.scrap == 0.0
    assert per_board(seen) == pytest.approx(18.50, abs=CENT)


def test_without_the_visual_test_it_is_a_tie() -> None:
    """Scenario 1, second strategy: the in-circuit test alone raises 60 to 95 %; the total is the same (by hand)."""
    assert per_board(today(boards(0.60, {"in-circuit": 0.95, "functional": 0.998}))) == pytest.approx(18.50, abs=CENT)


def test_a_better_assembly_with_two_tests() -> None:
    """Scenario 2: 80 to 95 %, 95 to 99.99 %, no visual test: $16.45 per board."""
    assert per_board(today(boards(0.80, {"in-circuit": 0.95, "functional": 0.9999}))) == pytest.approx(16.45, abs=0.01)


@pytest.mark.parametrize(("bad", "decision"), [(0.03, "inspect"), (0.0161, "inspect"), (0.0159, "leave")])
def test_inspect_all_or_none(bad: float, decision: str) -> None:
    """Stevenson, Operations Management: 20 units and $8 an hour, $25 per defect: inspect all from p = 0.40/25 = 0.016.

    At 0.03 inspection saves $0.35 a unit.
    """
    every_unit = {
        "name": "inspect every unit", "inspection": {"finds": 1.0, "per_item": 8.0 / 20.0},
        "rework": {"share": 1.0, "cost": 0.0},
    }  # fmt: skip
    unit = step("unit", with_defects(bad), inspection={"finds": 0.0}, alternative=[every_unit])
    answer = plan(line(unit, demand={"shipped_per_year": 1000}, target={"escape_cost": 25.0}))
    assert bool(answer.rows[0].alternatives) == (decision == "inspect")
    if bad == 0.03:
        assert answer.today.money is not None
        assert answer.money is not None
        assert (answer.today.money.total - answer.money.total) / 1000 == pytest.approx(0.35, rel=1e-9)


def test_the_capital_case_of_inspecting_all(tmp_path: Path) -> None:
    """The same numbers as a case: $15 of defects an hour avoided on 20 units, $0.40 a unit spent, $0.35 gained."""
    every_unit = {
        "name": "inspect every unit", "inspection": {"finds": 1.0, "per_item": 0.40},
        "rework": {"share": 1.0, "cost": 0.0},
    }  # fmt: skip
    unit = step("unit", with_defects(0.03), inspection={"finds": 0.0}, alternative=[every_unit])
    hour = {"shipped_per_year": 20, "years": 1, "discount_rate": 0}
    seen = command(tmp_path, "case", line(unit, demand=hour, target={"escape_cost": 25.0}), "inspect every unit")
    assert seen["verdict"] == "buy"
    case = seen["cases"][0]
    assert case["savings"]["escapes"] == pytest.approx(15.0, rel=1e-9)
    assert case["savings"]["inspection"] == pytest.approx(-0.40 * 20, rel=1e-9)
    assert case["worth_per_year"] == pytest.approx(0.35 * 20, rel=1e-9)


@pytest.mark.parametrize(("bad", "decision"), [(0.1601, "inspect"), (0.1599, "leave")])
def test_the_kp_rule(bad: float, decision: str) -> None:
    """All or none by k1/k2: inspect for $1, else replace later for $6.25, indifferent at p = 0.16.

    Rule: Barlow, Engineering Reliability (SIAM 1998), section 5.3; figures of a textbook problem, answer 1/6.25.
    """
    all_of_it = {
        "name": "inspect", "inspection": {"finds": 1.0, "per_item": 1.0}, "rework": {"share": 1.0, "cost": 0.0},
    }  # fmt: skip
    unit = step("unit", with_defects(bad), inspection={"finds": 0.0}, alternative=[all_of_it])
    answer = plan(line(unit, demand={"shipped_per_year": 1000}, target={"escape_cost": 6.25}))
    assert bool(answer.rows[0].alternatives) == (decision == "inspect")


def operations(count: int, bad: float, cost: float, each: float, final: float | None, batch: int) -> dict[str, Any]:
    """A batch through alike operations, inspected after each (`each` a piece), or once at the end (`final` a piece).

    Inspection is charged on the pieces that reach it, as the source has it: it is part of the cost added.
    """
    own = with_defects(-math.log1p(-bad))
    seen = {"finds": 1.0} if final is None else {"finds": 0.0}
    steps = [step(f"operation {i}", own, cost_added=cost + each, inspection=seen) for i in range(count)]
    for one in steps:
        one.pop("scrap_cost")
    if final is not None:
        sorting = step("sort", NEARLY_NONE, cost_added=final, inspection={"finds": 0.0, "earlier": 1.0})
        sorting.pop("scrap_cost")
        steps.append(sorting)
    good = batch * (1.0 - bad) ** count
    return line(*steps, demand={"shipped_per_year": good})


def cost_of_batch(scenario: dict[str, Any]) -> float:
    """What is spent on all pieces started: on the good ones, and on those thrown away."""
    money = today(scenario).line.money
    assert money is not None
    added = sum(one["cost_added"] for one in scenario["step"])
    return scenario["demand"]["shipped_per_year"] * added + money.scrap


def test_inspection_after_every_operation_or_once_at_the_end() -> None:
    """Groover, Automation, Production Systems, and CIM: 100 pieces, 20 operations at $1.00, 3 % bad at each.

    One final inspection at $2.00 a piece: $2,200. $0.10 after each operation: about $1,673 (100·1.10·(1−0.97^20)/0.03
    = 1,672.75). The printed results are from memory.
    """
    final = cost_of_batch(operations(20, 0.03, 1.0, 0.0, 2.0, 100))
    distributed = cost_of_batch(operations(20, 0.03, 1.0, 0.10, None, 100))
    assert final == pytest.approx(2_200, rel=1e-9)
    assert distributed == pytest.approx(1_673, abs=0.5)
    assert distributed == pytest.approx(110 * (1 - 0.97**20) / 0.03, rel=1e-9)


def test_ten_operations_break_even_with_the_final_station() -> None:
    """Problem after Groover: 10 operations at $1.00 + $0.30, 4 % bad: $10.893 a piece started, by the formula.

    A final station may then cost 10.893 − 10 a piece.
    """
    distributed = cost_of_batch(operations(10, 0.04, 1.0, 0.30, None, 1))
    assert distributed == pytest.approx(10.892939, abs=5e-7)
    for station, dearer in ((0.892939 - 0.01, False), (0.892939 + 0.01, True)):
        assert (cost_of_batch(operations(10, 0.04, 1.0, 0.0, station, 1)) > distributed) == dearer


FOUND = {"visual": 0.5, "in-circuit": 0.75, "functional": 0.96}
"""Of what is still bad, from the yields of scenario 1: 60 to 80, 80 to 95, 95 to 99.8 %."""


@pytest.mark.parametrize("start", [0.60, 0.80, 0.98, 0.998])
def test_the_program_places_the_tests_as_enumeration_does(start: float) -> None:
    """Shina's boards and prices; which tests to keep, out of all eight placements, the shares found held.

    The cost of each placement is written out here: tests, repairs of what they find, and $500 for what is left.
    """

    def cost(kept: tuple[str, ...]) -> float:
        spent, bad = 0.0, 1.0 - start
        for name in kept:
            test, repair = TESTS[name]
            spent += test + repair * bad * FOUND[name]
            bad *= 1.0 - FOUND[name]
        return spent + AT_CUSTOMER * bad

    steps = [step("assembly", with_defects(1.0 - start), inspection={"finds": 0.0})]
    for name, found in FOUND.items():
        test, repair = TESTS[name]
        bench = {
            "name": name, "inspection": {"finds": 0.0, "earlier": found, "per_item": test},
            "rework": {"share": 1.0, "cost": repair},
        }  # fmt: skip
        steps.append(step(f"{name} test", NEARLY_NONE, inspection={"finds": 0.0}, alternative=[bench]))
    answer = plan(line(*steps, demand={"shipped_per_year": BOARDS}, target={"escape_cost": AT_CUSTOMER}))
    placements = [tuple(kept) for n in range(4) for kept in itertools.combinations(FOUND, n)]
    best = min(placements, key=cost)
    assert answer.money is not None
    assert answer.money.total / BOARDS == pytest.approx(cost(best), rel=1e-9)
    assert tuple(name for row in answer.rows for name in row.alternatives) == best
