"""Is money paid and saved year by year summed up as engineering economy does it?

Factors and worked comparisons: published/interest_factors.csv, and the sources named in test_published_money.py.
"""

from __future__ import annotations

import numpy as np
import pytest

from allocator.cash import (
    NO_OUTLAY,
    NO_RETURN,
    SEVERAL,
    by_year,
    discounted,
    each_year,
    irr,
    last_year,
    life_left,
    npv,
    paid_and_resold,
    payback,
)
from allocator.errors import RangeError
from allocator.money import annual_cost, capital_recovery
from allocator.results import Asset
from tests.published.lines import rows

FACTORS = rows("interest_factors.csv")


def machine(price: float, life: float, resale: float = 0.0, trade_in: float = 0.0) -> Asset:
    return Asset("machine", "drill", price, trade_in, resale, life, 0.0, 0.0, 0.0, 0.0)


def flow(price: float, saving: float, years: float) -> np.ndarray:
    net = each_year(saving, years)
    net[0] = -price
    return net


@pytest.mark.parametrize(
    "row", [r for r in FACTORS if r["factor"] == "P/A"], ids=lambda r: f"{r['rate']:g},{r['years']:g}"
)
def test_present_value_of_one_a_year_is_the_printed_factor(row: dict[str, float]) -> None:
    allowed = row["rounding"] * (1 + 1e-9)
    assert npv(row["rate"], each_year(1.0, row["years"])) == pytest.approx(row["printed"], rel=0, abs=allowed)


@pytest.mark.parametrize(
    "row",
    [r for r in FACTORS if r["factor"] == "A/P" and r["years"] > 1],
    ids=lambda r: f"{r['rate']:g},{r['years']:g}",
)
def test_what_saves_the_printed_capital_recovery_returns_the_table_s_rate(row: dict[str, float]) -> None:
    """Paid 1, saved A/P a year: the internal rate is the rate of the table, as far as its last digit carries."""
    rate, note = irr(flow(1.0, row["printed"], row["years"]))
    assert rate is not None
    assert note == ""
    step = 1e-6
    exact = capital_recovery(row["rate"], row["years"])
    slope = (capital_recovery(row["rate"] + step, row["years"]) - exact) / step
    assert rate == pytest.approx(row["rate"], rel=0, abs=1.01 * row["rounding"] / slope)


@pytest.mark.parametrize(("price", "saving", "years"), [(1000, 300, 5), (1e6, 1.2e5, 20), (80, 9, 12), (500, 90, 5)])
def test_present_value_at_the_internal_rate_is_nothing(price: float, saving: float, years: float) -> None:
    net = flow(price, saving, years)
    rate, _ = irr(net)
    assert rate is not None
    assert npv(rate, net) == pytest.approx(0.0, abs=1e-8 * price)


def test_payback_by_hand() -> None:
    """1,000 paid, 300 a year: after three years 100 are open, a third of a year; at 10 % the fifth year is needed."""
    net = flow(1000.0, 300.0, 6)
    assert payback(net) == pytest.approx(3 + 1 / 3, rel=1e-12)
    today = discounted(0.10, net)
    four = 300 * sum(1.1**-n for n in range(1, 5))
    assert payback(today) == pytest.approx(4 + (1000 - four) / (300 * 1.1**-5), rel=1e-12)
    assert payback(flow(1000.0, 300.0, 3)) is None
    assert payback(flow(0.0, 300.0, 3)) == 0.0


def test_a_part_year_saves_its_part() -> None:
    assert last_year(2.5) == 3
    assert each_year(100.0, 2.5).tolist() == [0.0, 100.0, 100.0, 50.0]
    assert each_year(100.0, 0.5).tolist() == [0.0, 50.0]


def test_replacements_fall_within_the_horizon() -> None:
    paid, resold = paid_and_resold(machine(1000.0, 4, resale=100.0, trade_in=50.0), 10)
    assert {year: cash for year, cash in enumerate(paid.tolist()) if cash} == {0: 950.0, 4: 1000.0, 8: 1000.0}
    assert {year: cash for year, cash in enumerate(resold.tolist()) if cash} == {4: 100.0, 8: 100.0}
    paid, resold = paid_and_resold(machine(1000.0, 5, resale=100.0), 10)
    assert [year for year, cash in enumerate(paid.tolist()) if cash] == [0, 5]
    assert [year for year, cash in enumerate(resold.tolist()) if cash] == [5, 10]
    half, _ = paid_and_resold(machine(1000.0, 2.5), 10)
    assert [year for year, cash in enumerate(half.tolist()) if cash] == [0, 3, 5, 8]


BLANK = 0.12, ((machine(30_000, 4, 7_000), 18_000.0, 26_412.0), (machine(50_000, 6, 9_000), 16_000.0, 27_052.0))
"""After Blank and Tarquin, Engineering Economy: X and Y, unequal lives."""
METHODS = 0.15, ((machine(20_000, 3, 5_000), 8_500.0, 15_820.0), (machine(15_000, 2, 3_000), 7_000.0, 14_831.2))
"""Solved problem of engineering economy at 15 %."""


@pytest.mark.parametrize(("case", "common"), [(BLANK, 12), (METHODS, 6)], ids=["X-Y", "methods"])
def test_replaced_over_the_common_multiple_of_lives_it_is_the_printed_annual_worth(
    case: tuple[float, tuple[tuple[Asset, float, float], ...]], common: int
) -> None:
    """Present worth of all replacements over the common multiple, times capital recovery, is the annual worth."""
    rate, machines = case
    for asset, running, printed in machines:
        paid, resold = paid_and_resold(asset, common)
        worth = npv(rate, resold - paid - each_year(running, common))
        assert -worth * capital_recovery(rate, common) == pytest.approx(printed, abs=1.0)


@pytest.mark.parametrize("life", [1, 2, 3, 4, 6, 9, 12, 25])
@pytest.mark.parametrize("rate", [0.0, 0.08])
def test_with_the_life_left_the_present_value_is_that_of_the_yearly_cost(life: int, rate: float) -> None:
    asset, years = machine(1000.0, life, resale=120.0), 12
    paid, resold = paid_and_resold(asset, years)
    yearly = annual_cost(1000.0, 0.0, 120.0, rate, life)
    worth = npv(rate, resold - paid) + life_left(asset, rate, years)
    assert worth == pytest.approx(-yearly / capital_recovery(rate, years), rel=1e-12)


def test_no_single_rate_of_return() -> None:
    """100 paid, 230 back, 132 paid: 10 % and 20 % both fit (from memory; 100·1.1·1.2 = 132 checks it)."""
    assert irr(np.array([-100.0, 230.0, -132.0])) == (None, SEVERAL)
    assert irr(np.array([100.0, 50.0])) == (None, NO_OUTLAY)
    assert irr(np.array([0.0, 50.0])) == (None, NO_OUTLAY)
    assert irr(np.array([-100.0, 0.0])) == (None, NO_RETURN)
    rate, _ = irr(np.array([-100.0, 60.0, -20.0, 120.0]))
    assert rate is not None


def test_a_replacement_does_not_hide_the_one_rate() -> None:
    """The running sum changes sign once: the rate is the only one above 0, though the cash changes sign three times."""
    net = np.array([-100.0, 80.0, 80.0, -60.0, 80.0, 80.0])
    rate, note = irr(net)
    assert rate is not None
    assert note == ""
    assert npv(rate, net) == pytest.approx(0.0, abs=1e-9)


def test_cash_by_year_runs_up_to_the_present_value() -> None:
    net = flow(1000.0, 300.0, 5)
    table = by_year(0.1, -np.minimum(net, 0.0), np.zeros(6), np.maximum(net, 0.0))
    assert table[-1].cumulative == pytest.approx(500.0)
    assert table[-1].cumulative_discounted == pytest.approx(npv(0.1, net), rel=1e-12)


def test_horizons_and_lives_beyond_reason_are_refused() -> None:
    with pytest.raises(RangeError, match="at most 200 years"):
        last_year(1e9)
    with pytest.raises(RangeError, match="would be replaced"):
        paid_and_resold(machine(1.0, 1e-6), 10)
