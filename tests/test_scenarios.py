"""Every shipped scenario through every command, and the latch against its hand calculation."""

from __future__ import annotations

import csv
import io
import json
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner, Result

from allocator import make_plan, read_scenario
from allocator.cli import app
from allocator.results import Plan

FOLDER = Path(__file__).parent.parent / "scenarios"
SCENARIOS = sorted(FOLDER.glob("*.toml"), key=lambda path: path.name)
MANY_PLANS = {(name, command) for name in ("pump", "parcels") for command in ("nines", "case")}
ANSWERS = [
    pytest.param(
        str(path), command, id=f"{path.stem}-{command}", marks=[pytest.mark.long] * ((path.stem, command) in MANY_PLANS)
    )
    for path in SCENARIOS
    for command in ("check", "today", "plan", "nines", "case")
]
WIDTH = 80
"""Columns of a terminal, and of a log."""
MONEY = 0.01
"""The hand calculation's figures are kept to the cent."""


def run(*arguments: str) -> Result:
    result = CliRunner().invoke(app, list(arguments))
    assert result.exit_code == 0, result.output
    return result


def refuse(word: str) -> Any:
    raise AssertionError(f"{word} is no JSON")


@pytest.fixture(params=SCENARIOS, ids=lambda path: path.stem)
def file(request: pytest.FixtureRequest) -> str:
    return str(request.param)


def test_scenarios_are_shipped() -> None:
    assert {path.stem for path in SCENARIOS} >= {"bracket", "latch", "parcels", "pump"}


@pytest.mark.parametrize(("file", "command"), ANSWERS)
def test_text_fits_a_terminal(file: str, command: str) -> None:
    text = run(command, file).stdout
    assert text.strip()
    assert [line for line in text.splitlines() if len(line) > WIDTH] == []
    assert not {"nan", "inf", "None"} & set(text.split())


@pytest.mark.parametrize(("file", "command"), ANSWERS)
def test_json_parses_and_holds_no_nan(file: str, command: str) -> None:
    answer = json.loads(run(command, file, "--json").stdout, parse_constant=refuse)
    assert answer["title"] == read_scenario(file).title


def test_plan_csv_has_a_row_per_step(file: str) -> None:
    rows = list(csv.DictReader(io.StringIO(run("plan", file, "--csv").stdout)))
    assert [row["step"] for row in rows] == [step.name for step in read_scenario(file).step]
    assert sum(float(row["budget_share"]) for row in rows) == pytest.approx(1.0)
    assert all(float(row["dpmo"]) <= float(row["dpmo_today"]) * (1 + 1e-9) or row["alternatives"] for row in rows)


def test_a_shipped_plan_meets_its_targets_with_a_closed_gap(file: str) -> None:
    answer = json.loads(run("plan", file, "--json").stdout)
    assert answer["reached"] is True
    assert answer["gap"] <= 1e-4
    assert answer["lower_bound"] <= answer["annual_cost"]["total"]
    for name, target in answer["targets"].items():
        assert answer[name] >= target - 1e-9 * (1 - target)


# ---------------------------------------------------------------- the latch, followed by hand


@pytest.fixture(scope="module")
def latch() -> Plan:
    return make_plan(read_scenario(FOLDER / "latch.toml"))


def test_latch_parts_stand_as_their_prices(latch: Plan) -> None:
    """Cost/p is nearly the same at every step, so parts per million go 1 : 2 : 5 as 2,000 : 4,000 : 10,000 do."""
    ppm = [step.target.ppm for step in latch.rows]
    assert ppm == pytest.approx([1_000.0, 2_000.0, 5_000.0], rel=0.01)
    assert latch.yields is not None
    assert latch.yields.final_loss == pytest.approx(0.008, rel=1e-9)


def test_latch_leaves_the_riveter(latch: Plan) -> None:
    assert all(step.alternatives == () for step in latch.rows)
    assert latch.capital == 0.0


def test_latch_money(latch: Plan) -> None:
    """Exact figures: the same three intensities by SLSQP on the formulas written out, apart from this program."""
    assert latch.money is not None
    assert latch.money.total == pytest.approx(12_930.43, abs=MONEY)
    assert latch.price_of_defect_budget == pytest.approx(823_161, rel=1e-3)
    assert latch.cost_of_next_nine == pytest.approx(15_722.78, abs=MONEY)


def test_latch_money_adds_up_by_hand(latch: Plan) -> None:
    """0.40 EUR per latch thrown away anywhere, and each step's decades at their yearly price."""
    assert latch.money is not None
    assert latch.money.scrap == pytest.approx(100_000 * 0.40 * (1 / 0.992 - 1), rel=1e-9)
    for step, price in zip(latch.rows, (2_000.0, 4_000.0, 10_000.0), strict=True):
        assert 10 ** (step.improvement / price) == pytest.approx(20_000 / step.target.dpmo, rel=1e-9)
