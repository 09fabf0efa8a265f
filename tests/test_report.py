"""The renderers on awkward results: None, zero, tiny losses, long and hostile names, right-to-left text."""

from __future__ import annotations

import csv
import io
import json
import math
from dataclasses import replace
from typing import Any

import pytest
from rich.cells import cell_len

from allocator.report import words
from allocator.report.paper import LOG_WIDTH, MOST_ROWS
from allocator.report.plan_text import answer
from allocator.report.render import render
from allocator.results import (
    BestReachable,
    Binding,
    Bought,
    Caution,
    Check,
    Level,
    Money,
    Nines,
    NinesPoint,
    Plan,
    Proof,
    RuleOutcome,
    StepTarget,
    StepToday,
    Today,
    TodayLine,
    Understood,
    Yields,
)

MARKUP = "[red]Press[/red] :boom:"
ESCAPES = "Weld\x1b[31m\u202e\nline"
ARABIC = "\u0644\u062d\u0627\u0645 \u0627\u0644\u0625\u0637\u0627\u0631"
LONG = "Supercalibrated" * 12
NAMES = ("Weld", MARKUP, ESCAPES, ARABIC, LONG)


def keys(text: str) -> set[str]:
    return set(text.split())


PLAN_KEYS = keys(
    "reached targets rolled_yield final_yield shipped_yield loss annual_cost cost_per_unit today capital purchases "
    "lower_bound gap price_of_defect_budget cost_of_next_nine assumed best_reachable binding steps"
)
PLAN_ADDED = keys(
    "title currency question split_yield dpu method seconds binding_reasons least_needed rules rules_note restraint "
    "confidence cautions"
)
STEP_KEYS = keys(
    "step supplier alternatives sigma_level shift k cp cpk cpk_after_shift dpmo ppm budget_share starts_per_year scrap "
    "improvement capital at_cap"
)
POINT_KEYS = keys("nines target_yield yield total extra price_of_defect_budget changes")
YIELD_KEYS = keys("rolled_yield final_yield shipped_yield")
COST_KEYS = keys("total scrap rework escapes inspection improvement")


def level(sigma: float = 4.4, cp: float | None = 1.4667) -> Level:
    return Level(
        sigma_level=sigma, shift=1.5, k=0.0, sides=2, cp=cp, cpk=sigma / 3, cpk_after_shift=(sigma - 1.5) / 3,
        dpmo=1865.8, ppm=1e-6, dpu=0.0019,
    )  # fmt: skip


def yields(loss: float = 0.005, shipped: bool = True) -> Yields:
    there = (1.0 - loss / 10, loss / 10) if shipped else (None, None)
    return Yields(1.0 - loss * 2, 1.0 - loss, there[0], loss * 2, loss, there[1])


def money(scrap: float = 350_000.0) -> Money:
    return Money(scrap=scrap, rework=0.0, escapes=1_234.5, inspection=0.001, improvement=-60_765.5)


def today_line(known: bool = True) -> TodayLine:
    reason = None if known else "the flow exponent is above 700"
    lots = ((100, 2.5), (1_000, 25.0), (10_000, 250.0))
    return TodayLine(yields(0.025), money(560_000.0) if known else None, reason, 0.034, lots, ())


def step_target(name: str, **changes: Any) -> StepTarget:
    step = StepTarget(
        step=name, supplier=None, today=level(3.9, None), target=level(), alternatives=(), law=None, budget_share=0.2,
        starts_per_year=50_251.3, scrap=1234.5, rework=0.0, inspection=0.0, improvement=0.0, capital=0.0, at_cap=False,
        cap=None, floor=None, floor_distance=None, floor_binds=False, safety=False, first_pass_yield=1.0,
        feeds=None, found=0.0019,
    )  # fmt: skip
    return replace(step, **changes)


RULE = RuleOutcome("equal split", "textbook", 498_000.0, 0.995, 0.005, True, 86_000.0, ("floor of 'Weld'",))
MISSED = replace(RULE, rule="raise the worst", meets_target=False, saving=None, broken=())
CAUTION = Caution("small_sample", NAMES, "30 parts say little about a tail", "measure 100 parts")


def a_plan(**changes: Any) -> Plan:
    steps = [step_target(name) for name in NAMES]
    steps[0] = replace(
        steps[0],
        alternatives=("Grinder [bold]B",),
        law="power",
        capital=90_000.0,
        floor="Cpk 1.33",
        floor_distance="at the floor",
        floor_binds=True,
    )
    steps[1] = replace(steps[1], law="decade", at_cap=True, cap="up_to 4.4 sigma")
    plan = Plan(
        title="Frame line", currency="EUR", shipped_per_year=50_000.0, question="cheapest", reached=True,
        split="final_yield", targets={"final_yield": 0.995}, target_losses={"final_yield": 0.005}, yields=yields(),
        money=money(), dpu=0.0101, capital=90_000.0, purchases=(Bought("Laser cell", 250_000.0, 61_000.0),),
        rows=tuple(steps), today=today_line(), proof=Proof(290_469.0, 290_468.9, 3.4e-7, "price road", 0.012),
        price_of_defect_budget=-2.5e6, cost_of_next_nine=34_000.0, binding=(),
        best_reachable=BestReachable("final_yield", 0.9998, 2e-4, 510_000.0, (Binding("Weld", "at its cap"),)),
        rules=(RULE, MISSED), rules_note="", assumed=("gates find all of their own defects",), cautions=(CAUTION,),
    )  # fmt: skip
    return replace(plan, **changes)


def out_of_reach(**changes: Any) -> Plan:
    binding = (Binding(MARKUP, "sits at its cap of 4.4 sigma"),)
    return a_plan(reached=False, cost_of_next_nine=None, binding=binding, **changes)


def nothing_possible() -> Plan:
    return out_of_reach(
        yields=None, money=None, dpu=None, capital=None, purchases=(), rows=(), proof=None, best_reachable=None,
        rules=(), rules_note="no plan to compare with",
    )  # fmt: skip


def some_nines(**changes: Any) -> Nines:
    first = NinesPoint("today", 1.6, 0.975, 0.025, 0.975, 0.025, 557_000.0, None, None, (), 0.0)
    last = NinesPoint("highest reachable", 11.7, 1.0, 2e-12, 1.0, 1.5e-12, 9e5, 3e5, math.inf, NAMES * 3, 1e-9)
    highest = BestReachable("final_yield", 1.0, 2e-12, 9e5, (Binding(MARKUP, "at its cap"),))
    answered = Nines(
        "Frame line", "EUR", "final_yield", 1.6, (first, last), highest, None, 0.99, 0.01, 2e5, (), (CAUTION,)
    )
    return replace(answered, **changes)


def a_today(known: bool = True) -> Today:
    steps = tuple(StepToday(name, None, level(), 0.998, 5e4, 1e3, 0.0, 0.0, 0.2, 0.2, None, 0.0) for name in NAMES)
    return Today("Frame line", "EUR", 5e4, today_line(known), steps, {}, {}, ("shift of 1.5",), (CAUTION,))


def a_check() -> Check:
    steps = tuple(
        Understood(name, None, None, 1.0, 4.0, level(), "{cpk = 1.33}", 12.5, 0.0, 3, None, "assumed") for name in NAMES
    )
    steps = (replace(steps[0], supplier="Acme", improves="power, up to 5 sigma", inspection="finds 90 %"), *steps[1:])
    return Check("Frame line", "EUR", 5e4, "line.toml", steps, {"final_yield": 0.995}, {"final_yield": 0.005}, (), ())


BARE = a_plan(
    targets={}, target_losses={}, question="optimum", purchases=(), rules=(), rules_note="", title="",
    best_reachable=None, proof=None, yields=yields(1e-12, shipped=False), capital=None, cautions=(), assumed=(),
)  # fmt: skip
RESULTS = {
    "plan": a_plan(),
    "bare plan": BARE,
    "best yield": a_plan(question="best yield", today=today_line(False)),
    "out of reach": out_of_reach(),
    "nothing possible": nothing_possible(),
    "nines": some_nines(),
    "empty nines": some_nines(rows=(), highest=None, optimum_total=None),
    "today": a_today(),
    "today, overflow": a_today(False),
    "check": a_check(),
}


@pytest.mark.parametrize("name", RESULTS)
@pytest.mark.parametrize("width", [LOG_WIDTH, 60, 120])
def test_text_fits_the_width_and_has_no_control_signs(name: str, width: int) -> None:
    text = render(RESULTS[name], "text", width)
    assert max(cell_len(line) for line in text.split("\n")) <= width
    assert text.endswith("\n")
    assert not text.endswith("\n\n")
    assert not set(text) & {"\x1b", "\u202e", "\r", "\t"}
    assert all(line == line.rstrip() for line in text.split("\n"))
    assert "None" not in text
    assert "nan" not in text.split()


@pytest.mark.parametrize("name", ["plan", "nines", "today", "check"])
def test_names_are_printed_as_written(name: str) -> None:
    text = "".join(render(RESULTS[name], "text", 300).split())
    for part in (MARKUP, ARABIC, LONG, "Weld [31m line"):
        assert "".join(part.split()) in text


def test_plan_opens_with_the_answer() -> None:
    said = answer(a_plan())
    assert said == (
        "For a final yield of 99.50 % (5,000 ppm, 2.30 nines): buy 'Laser cell' (shared), buy 'Grinder [bold]B' at "
        "'Weld' and improve it to 4.40 sigma, raise '[red]Press[/red] :boom:' from 3.90 to 4.40 sigma; it costs "
        "290,469 EUR/year in all (today 500,469)."
    )
    lines = render(a_plan()).split("\n")
    assert lines[0] == "Frame line - 50,000 units shipped per year"
    assert lines[2].startswith("For a final yield of 99.50 %")


def test_plan_without_changes_says_so() -> None:
    assert "buy nothing and change nothing" in answer(a_plan(purchases=(), rows=(step_target("Weld"),)))


def test_out_of_reach_is_said_first_then_what_holds_it() -> None:
    text = " ".join(render(out_of_reach()).split())
    first, best, held = (
        text.index(part) for part in ("cannot be met", "best reachable final yield is 99.98 %", "holds it")
    )
    assert first < best < held < text.index("levels to reach")


def test_no_choice_at_all_prints_no_tables() -> None:
    text = render(nothing_possible())
    assert "No choice at all keeps the floors and the limits." in text
    assert "levels to reach" not in text


@pytest.mark.parametrize("name", ["plan", "out of reach", "nothing possible", "today"])
def test_last_word_is_always_said(name: str) -> None:
    assert "planning figures" in " ".join(render(RESULTS[name]).split())


def test_safety_is_said_in_stronger_words() -> None:
    plan = a_plan(
        rows=(step_target("Brake", safety=True, floor="Cpk 1.67", floor_distance="0.10 Cpk above the floor"),)
    )
    assert "people can be hurt where 'Brake' fails" in " ".join(render(plan).split())
    nines = some_nines(cautions=(replace(CAUTION, code="safety", steps=("Brake",)),))
    assert "people can be hurt where 'Brake' fails" in " ".join(render(nines).split())


def test_an_unknown_shipped_yield_is_explained() -> None:
    text = render(RESULTS["bare plan"])
    assert "not known: no inspection stated" in text
    assert "(final yield here subtracts escapes; the common shop-floor figure does not)" in text
    assert "99.9999999999" in text


def test_long_tables_are_cut_and_counted() -> None:
    plan = a_plan(rows=tuple(step_target(f"S{i}") for i in range(MOST_ROWS + 5)), cautions=())
    text = render(plan)
    assert f"S{MOST_ROWS - 1} " in text
    assert f"S{MOST_ROWS} " not in text
    assert text.count("... and 5 more rows (--csv gives all)") == 2


def test_plan_json_has_the_promised_keys() -> None:
    content = json.loads(render(a_plan(), "json"))
    assert set(content) == PLAN_KEYS | PLAN_ADDED
    assert set(content["loss"]) == YIELD_KEYS
    assert set(content["annual_cost"]) == COST_KEYS
    assert {*YIELD_KEYS, "loss", "annual_cost", "annual_cost_reason"} <= set(content["today"])
    assert set(content["today"]["annual_cost"]) == COST_KEYS
    assert [set(step) for step in content["steps"]] == [STEP_KEYS] * len(NAMES)
    assert [step["step"] for step in content["steps"]] == list(NAMES)
    assert [set(bought) for bought in content["purchases"]] == [{"name", "price", "per_year_cost"}]
    assert {"yield", "total"} <= set(content["best_reachable"])
    assert content["annual_cost"]["total"] == a_plan().money.total  # type: ignore[union-attr]


def test_plan_json_out_of_reach_keeps_its_keys() -> None:
    content = json.loads(render(nothing_possible(), "json"))
    assert set(content) == PLAN_KEYS | PLAN_ADDED
    assert content["reached"] is False
    assert content["binding"] == [MARKUP]
    assert content["loss"] == dict.fromkeys(YIELD_KEYS)
    assert content["annual_cost"] is None
    overflow = json.loads(render(RESULTS["best yield"], "json"))
    assert overflow["today"]["annual_cost"] is None
    assert overflow["today"]["annual_cost_reason"] == "the flow exponent is above 700"


def test_nines_json_has_the_promised_keys() -> None:
    content = json.loads(render(some_nines(), "json"))
    assert {"points", "highest_reachable", "economic_optimum"} <= set(content)
    assert all(set(point) >= POINT_KEYS for point in content["points"])
    assert content["points"][0]["extra"] is None
    assert content["points"][1]["price_of_defect_budget"] is None  # It was infinite.
    assert content["points"][1]["loss"] == 1.5e-12
    assert content["highest_reachable"]["nines"] == pytest.approx(12 - math.log10(2))
    assert content["highest_reachable"]["binding"] == [MARKUP]
    assert {"yield", "total"} <= set(content["economic_optimum"])


@pytest.mark.parametrize("name", RESULTS)
def test_json_is_strict(name: str) -> None:
    def refuse(word: str) -> None:
        raise AssertionError(word)

    json.loads(render(RESULTS[name], "json"), parse_constant=refuse)


ROWS = {"plan": 5, "nines": 2, "today": 5, "check": 5, "nothing possible": 0}


@pytest.mark.parametrize(("name", "rows"), ROWS.items())
def test_csv_is_one_plain_table(name: str, rows: int) -> None:
    table = list(csv.reader(io.StringIO(render(RESULTS[name], "csv"))))
    assert len(table) == rows + 1
    assert {len(row) for row in table} == {len(table[0])}


def test_csv_keeps_names_units_and_digits() -> None:
    row = next(csv.DictReader(io.StringIO(render(a_plan(), "csv"))))
    assert row["scrap_EUR_per_year"] == "1234.5"
    assert (row["cp"], row["supplier"], row["floor_binds"]) == ("1.4667", "", "true")
    assert float(row["cpk"]) == 4.4 / 3
    names = [row["step"] for row in csv.DictReader(io.StringIO(render(a_plan(), "csv")))]
    assert names == list(NAMES)


@pytest.mark.parametrize(
    ("yield_", "loss", "want"),
    [
        (0.995, 0.005, "99.50 % (5,000 ppm, 2.30 nines)"),
        (0.95, 0.05, "95.00 % (50,000 ppm, 1.30 nines)"),
        (0.999997, 3e-6, "99.9997 % (3.00 ppm, 5.52 nines)"),
        (1 - 2e-9, 2e-9, "99.9999998 % (0.0020 ppm, 8.70 nines)"),
        (1.0, 1e-12, "99.9999999999 % (1.0e-06 ppm, 12.00 nines)"),
        (1.0, 1e-20, ">99.9999999999 % (1.0e-14 ppm, 20.00 nines)"),
        (0.02, 0.98, "2.00 % (980,000 ppm, 0.01 nines)"),
        (0.0, 1.0, "0 % (1,000,000 ppm, 0.00 nines)"),
        (None, None, "not known"),
        (math.nan, math.nan, "not known (not known ppm, not known nines)"),
    ],
)
def test_yields_keep_their_loss_visible(yield_: float | None, loss: float | None, want: str) -> None:
    assert words.yield_in_full(yield_, loss) == want


@pytest.mark.parametrize("exponent", [x / 7 for x in range(1, 84)])
def test_no_loss_above_a_billionth_of_a_ppm_prints_as_perfect(exponent: float) -> None:
    loss = 10.0**-exponent
    shown = words.percent(1.0 - loss, loss)
    assert float(shown.removesuffix(" %").removeprefix(">")) < 100.0
