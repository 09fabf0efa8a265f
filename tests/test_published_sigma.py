"""Do sigma levels turn into the trade's ppm, deep tails and rolled yields?

Values and sources: published/sigma_levels.csv, deep_tails.csv and rolled_yield_by_steps.csv. Known misprints of the
table by number of steps are left out: 7 steps at 5 σ, 150 at 4 and 5, 1,200 at 5, 3,000 at 5.
"""

from __future__ import annotations

from typing import Any

import mpmath
import pytest

from tests.published.lines import line, rows, step, today

EXACT = 1e-12
"""Rounding of a power by way of logarithms, against 50 digits."""
SHIFT = 1.5
"""The drift allowance of the table by number of steps, one-sided [σ]."""
SEPARATE = [row for row in rows("rolled_yield_by_steps.csv") if row["steps"] in (7, 60, 200)]


def one_sided(sigma_level: float) -> dict[str, Any]:
    return {"sigma_level": sigma_level, "shift": SHIFT, "sides": 1}


def name_of(row: dict[str, Any]) -> str:
    return ",".join(f"{key}={row[key]:g}" for key in row if isinstance(row[key], float))


@pytest.mark.parametrize("row", rows("sigma_levels.csv"), ids=name_of)
def test_a_sigma_level_has_the_ppm_of_the_table(row: dict[str, Any]) -> None:
    capability = {"sigma_level": row["sigma_level"], "shift": row["shift"], "sides": int(row["sides"])}
    level = today(line(step("part", capability))).rows[0].level
    assert level.dpmo == pytest.approx(row["ppm"], rel=0, abs=row["tolerance"]), row["source"]


@pytest.mark.parametrize("row", rows("deep_tails.csv"), ids=name_of)
def test_deep_tails_lose_no_digit(row: dict[str, Any]) -> None:
    seen = today(line(step("part", {"sigma_level": row["sigma_level"], "sides": 1})))
    assert seen.rows[0].level.dpmo * 1e-6 == pytest.approx(row["tail"], rel=0, abs=row["tolerance"]), row["source"]
    with mpmath.workdps(50):
        exact = float(mpmath.ncdf(-mpmath.mpf(row["sigma_level"])))
    assert seen.rows[0].level.dpmo * 1e-6 == pytest.approx(exact, rel=EXACT)
    # The loss of the line's yield is the same number, not 1 less a number close to 1.
    assert seen.line.yields.rolled_loss == pytest.approx(seen.rows[0].level.dpmo * 1e-6, rel=EXACT)


@pytest.mark.parametrize("row", rows("rolled_yield_by_steps.csv"), ids=name_of)
def test_many_opportunities_roll_up_to_the_yield_of_the_table(row: dict[str, Any]) -> None:
    yields = today(line(step("part", one_sided(row["sigma_level"]), opportunities=row["steps"]))).line.yields
    assert 100.0 * yields.rolled_yield == pytest.approx(row["percent"], rel=0, abs=row["last_digit"]), row["source"]
    with mpmath.workdps(50):
        exact = mpmath.ncdf(mpmath.mpf(row["sigma_level"]) - SHIFT) ** int(row["steps"])
        assert yields.rolled_yield == pytest.approx(float(exact), rel=EXACT)
        assert yields.rolled_loss == pytest.approx(float(1 - exact), rel=EXACT)


@pytest.mark.parametrize("row", SEPARATE, ids=name_of)
def test_so_do_as_many_steps(row: dict[str, Any]) -> None:
    steps = [step(f"part {i}", one_sided(row["sigma_level"])) for i in range(int(row["steps"]))]
    rolled = today(line(*steps)).line.yields.rolled_yield
    assert 100.0 * rolled == pytest.approx(row["percent"], rel=0, abs=row["last_digit"]), row["source"]
