"""Do prices become the yearly costs of published interest tables and worked comparisons?

Values and sources: published/interest_factors.csv.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest

from allocator.money import annual_cost, capital_recovery
from tests.published.lines import line, plan, rows, step

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
