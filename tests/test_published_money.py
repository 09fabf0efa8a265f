"""Do prices become the yearly costs of published interest tables and worked comparisons?

Values and sources: published/interest_factors.csv.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from allocator.money import annual_cost, capital_recovery
from tests.published.lines import command, line, plan, rows, step

FACTORS: dict[str, Callable[[float, float], float]] = {
    "A/P": capital_recovery,
    # Received at the end of the life, a resale of 1 saves the sinking fund factor each year.
    "A/F": lambda rate, years: -annual_cost(0.0, 0.0, 1.0, rate, years),
    "P/A": lambda rate, years: 1.0 / capital_recovery(rate, years),
}
WHOLE_UNITS = 1.0
"""The worked comparisons use interest factors of four or five digits and print whole units of money."""
TABLE = rows("interest_factors.csv")
TODAY, BETTER = {"defect_rate": 0.1}, {"defect_rate": 0.001}


def name_of(row: dict[str, Any]) -> str:
    return f"{row['factor']},{row['rate']:g},{row['years']:g}"


@pytest.mark.parametrize("row", TABLE, ids=name_of)
def test_interest_factors_are_those_of_the_tables(row: dict[str, Any]) -> None:
    # Half a unit of the last digit, and the float nearest to it.
    allowed = row["rounding"] * (1.0 + 1e-9)
    factor = FACTORS[row["factor"]](row["rate"], row["years"])
    assert factor == pytest.approx(row["printed"], rel=0, abs=allowed), row["source"]


@pytest.mark.parametrize("row", [row for row in TABLE if row["factor"] == "A/P"], ids=name_of)
def test_a_price_costs_its_capital_recovery_per_year(row: dict[str, Any]) -> None:
    machine = {"name": "machine", "price": 1000.0, "capability": BETTER}
    demand = {"shipped_per_year": 1, "years": row["years"], "discount_rate": row["rate"]}
    answer = plan(line(step("drill", TODAY, alternative=[machine]), demand=demand, target={"rolled_yield": 0.99}))
    allowed = 1000.0 * row["rounding"] * (1.0 + 1e-9)
    assert answer.rows[0].improvement == pytest.approx(1000.0 * row["printed"], rel=0, abs=allowed), row["source"]
    assert answer.capital == 1000.0


Machine = dict[str, Any]
Comparison = tuple[float, Machine, Machine]
"""Discount rate, the better machine, the other one."""
BLANK: Comparison = (
    0.12,
    {"name": "X", "price": 30_000, "per_year": 18_000, "resale": 7_000, "life_years": 4},
    {"name": "Y", "price": 50_000, "per_year": 16_000, "resale": 9_000, "life_years": 6},
)
"""After Blank and Tarquin, Engineering Economy: annual worth -26,412 and -27,052, choose X."""
METHODS: Comparison = (
    0.15,
    {"name": "method 2", "price": 15_000, "per_year": 7_000, "resale": 3_000, "life_years": 2},
    {"name": "method 1", "price": 20_000, "per_year": 8_500, "resale": 5_000, "life_years": 3},
)
"""Solved problem of engineering economy at 15 %: 14,831.2 and 15,820 a year, choose method 2."""


@pytest.mark.parametrize(
    ("case", "cheaper", "dearer"), [(BLANK, 26_412.0, 27_052.0), (METHODS, 14_831.2, 15_820.0)], ids=["X-Y", "methods"]
)
def test_unequal_lives_are_compared_by_the_year(case: Comparison, cheaper: float, dearer: float) -> None:
    rate, better, worse = case

    def chosen(*machines: Machine) -> tuple[str, float]:
        offered = [{**machine, "capability": BETTER} for machine in machines]
        demand = {"shipped_per_year": 1, "years": 10, "discount_rate": rate}
        answer = plan(line(step("drill", TODAY, alternative=offered), demand=demand, target={"rolled_yield": 0.99}))
        assert answer.money is not None
        assert answer.money.total == answer.rows[0].improvement
        return answer.rows[0].alternatives[0], answer.rows[0].improvement

    assert chosen(better) == (better["name"], pytest.approx(cheaper, abs=WHOLE_UNITS))
    assert chosen(worse) == (worse["name"], pytest.approx(dearer, abs=WHOLE_UNITS))
    assert chosen(worse, better) == (better["name"], pytest.approx(cheaper, abs=WHOLE_UNITS))


# ---------------------------------------------------------------- through the capital case


def case(folder: Path, machine: Machine, rate: float, years: float, *others: Machine) -> dict[str, Any]:
    """The first comparison that `allocator case` makes for this machine, on a line where nothing else costs money."""
    offered = [{**own, "capability": BETTER} for own in (machine, *others)]
    demand = {"shipped_per_year": 1, "years": years, "discount_rate": rate}
    answer = command(folder, "case", line(step("drill", TODAY, alternative=offered), demand=demand), machine["name"])
    return answer | {"case": answer["cases"][0]}


@pytest.mark.parametrize("row", [row for row in TABLE if row["factor"] == "P/A"], ids=name_of)
def test_a_yearly_saving_is_worth_its_present_worth_factor(tmp_path: Path, row: dict[str, Any]) -> None:
    seen = case(tmp_path, {"name": "cheaper tool", "per_year": -1000}, row["rate"], row["years"])["case"]
    allowed = 1000.0 * row["rounding"] * (1.0 + 1e-9)
    assert seen["npv"] == pytest.approx(1000.0 * row["printed"], rel=0, abs=allowed), row["source"]
    assert seen["irr"] is None


@pytest.mark.parametrize(
    "row", [row for row in TABLE if row["factor"] == "A/P" and row["rate"] >= 0.1 and row["years"] > 1], ids=name_of
)
def test_what_saves_its_capital_recovery_returns_the_rate_of_the_table(tmp_path: Path, row: dict[str, Any]) -> None:
    """Paid 1,000, saved 1,000·A/P a year: nothing is gained at the table's rate, which is the internal rate."""
    machine = {"name": "machine", "price": 1000, "per_year": -1000 * row["printed"]}
    seen = case(tmp_path, machine, row["rate"], row["years"])["case"]
    saved_to_the_digit = 1000.0 * row["rounding"] * (1.0 + 1e-6)
    assert seen["worth_per_year"] == pytest.approx(0.0, abs=saved_to_the_digit)
    assert seen["npv"] == pytest.approx(0.0, abs=saved_to_the_digit / capital_recovery(row["rate"], row["years"]))
    # A saving that is off by the rounding moves the rate by less than its own share of the capital.
    assert seen["irr"] == pytest.approx(row["rate"], abs=2.0 * row["rounding"])
    assert seen["payback_years"] == pytest.approx(1.0 / row["printed"], rel=1e-9)


@pytest.mark.parametrize(
    ("compared", "printed", "together"),
    [(BLANK, 27_052.0 - 26_412.0, 12), (METHODS, 15_820.0 - 14_831.2, 6)],
    ids=["X-Y", "methods"],
)
def test_the_case_of_unequal_lives_is_their_difference_by_the_year(
    tmp_path: Path, compared: Comparison, printed: float, together: int
) -> None:
    """A promise that either keeps: one is needed, and the better is worth the printed difference against the other.

    Over the common multiple of the lives, replacements and resales in cash say the same.
    """
    rate, better, worse = compared
    offered = [{**own, "capability": BETTER} for own in (better, worse)]
    demand = {"shipped_per_year": 1, "years": together, "discount_rate": rate}
    drill = step("drill", TODAY, alternative=offered)
    scenario = line(drill, demand=demand, target={"rolled_yield": 0.99})
    for machine, sign, verdict in ((better, 1.0, "buy"), (worse, -1.0, "leave")):
        answer = command(tmp_path, "case", scenario, machine["name"])
        seen = answer["cases"][0]
        assert answer["verdict"] == verdict
        assert seen["against"] == "the cheapest plan without it"
        assert seen["worth_per_year"] == pytest.approx(sign * printed, abs=2 * WHOLE_UNITS)
        assert seen["npv"] * capital_recovery(rate, together) == pytest.approx(seen["worth_per_year"], rel=1e-9)
        assert seen["life_left"] == 0.0


def test_a_hundred_years_are_nearly_a_perpetuity(tmp_path: Path) -> None:
    """10,000 a year for 100 years at 10 %: 99,990 with a factor of five digits (exact 99,992.74), 100,000 for ever.

    Solved problem of engineering economy.
    """
    seen = case(tmp_path, {"name": "lease", "per_year": -10_000}, 0.10, 100)["case"]
    assert seen["npv"] == pytest.approx(99_990, abs=5)
    assert seen["npv"] == pytest.approx(99_992.743, abs=1e-3)
    assert seen["npv"] < 100_000
