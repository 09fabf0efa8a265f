"""Where the line stands, and which cautions a scenario calls for: identities, overflow, each caution with its cause."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from strategies import Drawn, lines, plain_line, quick
from typer.testing import CliRunner

from allocator.check import check_scenario
from allocator.cli import app
from allocator.flow import OVERFLOW
from allocator.results import Caution
from allocator.scenario.read import scenario_from_dict
from allocator.today import see_today

EXACT = 1e-11
"""Sums of a few dozen terms in two orders."""


# ---------------------------------------------------------------- today


@quick(50)
@given(lines(most=6))
def test_identities_of_today(scenario: Drawn) -> None:
    read = scenario_from_dict(scenario)
    today, check = see_today(read), check_scenario(read)
    assert sum(step.defect_share for step in today.rows) == pytest.approx(1.0, rel=EXACT)
    assert sum(step.money_share for step in today.rows) == pytest.approx(1.0, rel=EXACT)
    assert today.line.dpu == pytest.approx(
        sum(u.items_per_unit * u.opportunities * u.level.dpmo * 1e-6 for u in check.rows), rel=EXACT
    )
    money = today.line.money
    assert money is not None
    for kind in ("scrap", "rework", "inspection"):
        assert sum(getattr(s, kind) for s in today.rows) == pytest.approx(getattr(money, kind), rel=EXACT, abs=1e-9)
    assert money.improvement == 0.0
    for lot, bad in today.line.bad_per_lot:
        assert bad == pytest.approx(lot * (1.0 - today.line.yields.final_yield), rel=1e-9)
    for lot, bad in today.line.escaped_per_lot:
        assert bad == pytest.approx(lot * today.line.yields.shipped_loss, rel=1e-9)
    assert bool(today.line.escaped_per_lot) == (today.line.yields.shipped_yield is not None)


@quick(30)
@given(lines(most=6, tree=False, gates=False))
def test_first_pass_yields_multiply_to_the_rolled_yield(scenario: Drawn) -> None:
    """On a serial line whose gates find their own defects and reject no good item."""
    today = see_today(scenario_from_dict(scenario))
    assert math.prod(step.first_pass_yield for step in today.rows) == pytest.approx(
        today.line.yields.rolled_yield, rel=EXACT
    )
    assert today.line.yields.shipped_yield is None


def test_defects_and_money_are_lost_in_different_places() -> None:
    """Where most defects arise and where most money is thrown away: 2 % of a cheap item, 1 % of a dear one."""
    scenario = plain_line(0.02, 0.01)
    scenario["step"][1]["scrap_cost"] = 50.0
    first, second = see_today(scenario_from_dict(scenario)).rows
    assert first.defect_share == pytest.approx(2 / 3)
    assert second.money_share == pytest.approx(50 * 0.01 / 0.99 / (50 * 0.01 / 0.99 + 1 * 0.02 / 0.98 / 0.99))


HOPELESS = plain_line(*[0.9] * 310)
"""310 steps that spoil nine of ten: one shipped unit needs 10^310 started."""


def test_beyond_the_overflow_money_is_left_out_with_the_reason() -> None:
    line = see_today(scenario_from_dict(HOPELESS)).line
    assert line.money is None
    assert line.money_reason is not None
    assert str(int(OVERFLOW)) in line.money_reason
    assert line.yields.rolled_loss == 1.0


def test_just_below_the_overflow_money_is_a_number() -> None:
    line = see_today(scenario_from_dict(plain_line(*[0.9] * 300))).line
    assert line.money is not None
    assert math.isfinite(line.money.total)
    assert line.money_reason is None


def test_today_of_a_hopeless_line_is_sound_json(tmp_path: Path) -> None:
    rows = "".join(f"s{i},1,0.9\n" for i in range(310))
    (tmp_path / "steps.csv").write_text("name,scrap_cost,defect_rate\n" + rows)
    file = tmp_path / "line.toml"
    file.write_text('steps_from = "steps.csv"\n[demand]\nshipped_per_year = 1000\n')
    result = CliRunner().invoke(app, ["today", str(file), "--json"])
    assert result.exit_code == 0, result.output
    assert "NaN" not in result.stdout
    assert "Infinity" not in result.stdout
    answer = json.loads(result.stdout)
    assert answer["annual_cost"] is None
    assert "flow exponent" in answer["annual_cost_reason"]
    text = CliRunner().invoke(app, ["today", str(file)])
    assert text.exit_code == 0
    assert "nan" not in text.stdout.lower().split()


# ---------------------------------------------------------------- check


@quick(30)
@given(lines(most=6))
def test_check_says_what_a_scrapped_item_costs(scenario: Drawn) -> None:
    """κ of the steps, times items per unit, is what a finished unit cost, less what its last gate gives back."""
    steps = check_scenario(scenario_from_dict(scenario)).rows
    by_hand = sum(s.items_per_unit * s.net_cost_added for s in steps)
    assert by_hand == pytest.approx(steps[-1].lost_when_scrapped, rel=EXACT)


def cautions_of(scenario: Drawn) -> dict[str, Caution]:
    return {caution.code: caution for caution in check_scenario(scenario_from_dict(scenario)).cautions}


def step_with(**keys: Any) -> Drawn:
    """Two sound steps, the second with these keys."""
    scenario = plain_line(0.002, 0.001)
    scenario["step"][1] |= keys
    return scenario


def offering(**keys: Any) -> Drawn:
    """Two sound steps, the second with an alternative of these keys."""
    return step_with(alternative=[{"name": "other", "price": 100.0} | keys])


def quoting(*quotes: tuple[float, float]) -> Drawn:
    """Two sound steps, the second (1,000 dpmo today) with these quotes: dpmo and yearly cost."""
    points = [{"dpmo": dpmo, "per_year": cost} for dpmo, cost in quotes]
    return step_with(improve={"law": "quotes", "points": points})


def looked_at(**keys: Any) -> Drawn:
    """Two steps with imperfect inspections that reject some good items; the second with these keys."""
    gate = {"finds": 0.9, "rejects_good": 0.001}
    scenario = plain_line(0.002, 0.001, inspection=gate) | {"target": {"escape_cost": 5.0}}
    scenario["step"][1] |= keys
    return scenario


GATE = {"finds": 0.9, "rejects_good": 0.001}
LAW = {"law": "decade", "per_year": 10.0, "up_to": {"dpmo": 200}}
MEASURED = {"cp": 1.4, "cpk": 1.3, "shift": 0.5}

CAUSES: list[tuple[str, Drawn, Drawn]] = [
    ("safety", step_with(safety=True, at_least={"dpmo": 2000}), step_with(at_least={"dpmo": 2000})),
    ("inspection_assumed", step_with(), looked_at()),
    ("gate_assumed_perfect", step_with(inspection=GATE), looked_at()),
    (
        "bought_part_without_inspection",
        {**looked_at(), "step": [plain_line(0.01)["step"][0] | {"supplier": "A"}, looked_at()["step"][1]]},
        looked_at(supplier="A"),
    ),
    ("inspection_stated_perfect", looked_at(inspection={"finds": 1.0}), looked_at(inspection={"finds": 0.99})),
    (
        "no_false_rejects",
        plain_line(0.01, 0.01, inspection={"finds": 0.9}),
        looked_at(inspection={"finds": 0.9}),
    ),
    (
        "repeated_inspection",
        plain_line(0.01, 0.01, inspection={"finds": 0.9, "earlier": 0.5}),
        looked_at(inspection={"finds": 0.9, "earlier": 0.5}),
    ),
    (
        "false_rejects",
        looked_at(inspection={"finds": 0.9, "rejects_good": 0.0021}) | {"target": {"final_yield": 0.99}},
        looked_at() | {"target": {"final_yield": 0.99}},
    ),
    ("escapes_cost_nothing", looked_at() | {"target": {}}, looked_at() | {"target": {"shipped_yield": 0.9}}),
    (
        "long_term_with_shift",
        offering(group="setting", shift=0.5) | {"step": [*step_with()["step"][:1], offering(shift=0.5)["step"][1] | {
            "capability": {"ppk": 1.1}}]},
        step_with(capability={"ppk": 1.1}),
    ),
    (
        "long_term_keeps_no_shift",
        step_with(capability={"ppk": 1.1}) | {"default": {"shift": 1.5}},
        step_with(capability={"ppk": 1.1}),
    ),
    ("no_drift_allowance", step_with(capability={"cp": 1.4}), step_with(capability=MEASURED)),
    (
        "mixed_shifts",
        {**step_with(), "step": [step_with(capability=MEASURED | {"shift": s})["step"][1] | {"name": f"m{s}"}
                                 for s in (0.5, 1.5)]},
        step_with(capability=MEASURED),
    ),
    (
        "small_sample",
        step_with(capability=MEASURED | {"sample": 50}),
        step_with(capability=MEASURED | {"sample": 51}),
    ),
    (
        "beyond_the_data",
        step_with(capability={"cp": 2.0, "sample": 100}),
        step_with(capability={"cp": 0.9, "sample": 100}),
    ),
    ("zero_bad", step_with(capability={"bad": 0, "of": 300}), step_with(capability={"bad": 5, "of": 300})),
    ("few_bad", step_with(capability={"bad": 4, "of": 300}), step_with(capability={"bad": 5, "of": 300})),
    ("near_tail_only", step_with(capability={"cpk": 1.2}), step_with(capability={"cp": 1.3, "cpk": 1.2})),
    ("one_opportunity", plain_line(0.01, 0.01, 0.01), plain_line(0.01, 0.01, 0.01, opportunities=2)),
    (
        "three_sigma_each",
        plain_line(0.01, 0.01, capability={"cp": 1.0}),
        plain_line(0.01, 0.01, capability={"cp": 1.01}),
    ),
    (
        "copies_without_common_cause",
        offering(copies={"installed": 2, "needed": 1}),
        offering(copies={"installed": 2, "needed": 1, "common_cause": 0.05}),
    ),
    ("no_up_to", step_with(improve={"law": "decade", "per_year": 10.0}), step_with(improve=LAW)),
    (
        "at_beyond_cap",
        step_with(improve=LAW | {"at": {"dpmo": 100}}),
        step_with(improve=LAW | {"at": {"dpmo": 300}}),
    ),
    ("judged", step_with(evidence="judged"), step_with(evidence="quoted")),
    (
        "wider_spec",
        offering(widen=1.2) | {"step": [*step_with()["step"][:1], offering(widen=1.2)["step"][1] | {
            "capability": {"cp": 1.2}}]},
        step_with(capability={"cp": 1.2}),
    ),
    ("free_rework", step_with(rework={"share": 0.5}), step_with(rework={"share": 0.5, "cost": 1.0})),
    ("nothing_to_choose", step_with(), step_with(improve=LAW)),
    ("free_alternative", offering(price=0.0, capability={"dpmo": 90}), offering(capability={"dpmo": 90})),
    ("free_alternative", offering(price=0.0, capability={"dpmo": 90}), offering(price=0.0)),
    ("alternative_changes_nothing", offering(price=0.0), offering(price=0.0, capability={"dpmo": 90})),
    ("alternative_changes_nothing", offering(capability={"defect_rate": 0.001}), offering(per_item=-0.01)),
    ("alternative_changes_nothing", offering(k=0.0), offering(inspection={"finds": 0.9})),
    ("alternative_worse_than_today", offering(capability={"dpmo": 1200}),
        offering(capability={"dpmo": 1200}, per_item=-0.01)),
    ("alternative_worse_than_today", offering(capability={"dpmo": 1200}, price=0.0),
        offering(capability={"dpmo": 900})),
    ("mostly_bad", step_with(capability={"mean": 10.0, "std": 34.0, "lsl": 9.9, "usl": 10.1}),
        step_with(capability={"mean": 10.0, "std": 0.034, "lsl": 9.9, "usl": 10.1})),
    ("floor_out_of_reach", offering(capability={"dpmo": 90}) | {"step": [
        *step_with()["step"][:1], offering(capability={"dpmo": 90})["step"][1] | {"at_least": {"dpmo": 80}}]},
        step_with(at_least={"dpmo": 200}, improve=LAW)),
    ("quote_no_better_than_today", quoting((900, 5.0), (1000, 2.0)), quoting((900, 5.0), (990, 2.0))),
    ("quote_beaten_by_another", quoting((900, 5.0), (950, 6.0)), quoting((900, 5.0), (950, 4.9))),
    ("quote_beaten_by_another", quoting((900, 5.0), (900, 5.0)), quoting((900, 5.0), (800, 5.1))),
    ("purchase_without_use", step_with() | {"purchase": [{"name": "rig", "price": 1.0}]},
        offering(uses="rig", capability={"dpmo": 90}) | {"purchase": [{"name": "rig", "price": 1.0}]}),
]  # fmt: skip


@pytest.mark.parametrize(("code", "cause", "_without"), CAUSES, ids=[code for code, _, _ in CAUSES])
def test_each_caution_is_given_for_its_cause(code: str, cause: Drawn, _without: Drawn) -> None:
    caution = cautions_of(cause)[code]
    assert caution.reason
    assert caution.fix
    names = {step["name"] for step in cause["step"]}
    assert set(caution.steps) <= names


@pytest.mark.parametrize(("code", "_cause", "without"), CAUSES, ids=[code for code, _, _ in CAUSES])
def test_and_not_without_it(code: str, _cause: Drawn, without: Drawn) -> None:
    assert code not in cautions_of(without)


def test_a_caution_numbers_the_quotes_it_is_about() -> None:
    found = cautions_of(quoting((900, 5.0), (1000, 2.0), (950, 6.0), (850, 7.0), (860, 7.0)))
    assert found["quote_no_better_than_today"].reason.startswith("quote 2 of 's1' is no better than the step stands")
    assert found["quote_beaten_by_another"].reason.startswith("quote 3 of 's1', quote 5 of 's1' are each no better")


@pytest.mark.parametrize(
    ("code", "cause"), [(code, cause) for code, cause, _ in CAUSES if code in ("judged", "zero_bad", "free_rework")]
)
def test_a_caution_names_the_step_it_is_about(code: str, cause: Drawn) -> None:
    assert cautions_of(cause)[code].steps == ("s1",)
