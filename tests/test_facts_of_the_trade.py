"""The figures that everybody in the trade knows by heart, through the commands' JSON (common practice, no source).

Tolerances are half a unit of the last digit as the figure is usually said.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import pytest

from tests.published.lines import command, line, step

THREE_SIGMA = {"sigma_level": 3.0, "sides": 2}
SIX_SHIFTED = {"sigma_level": 6.0, "shift": 1.5, "sides": 1}
TENTH_OF_A_PERCENT = 5e-4
HUNDREDTH_OF_A_PERCENT = 5e-5
TAKEN = -1.0
"""A yearly cost below 0: the alternative pays for itself, so that every plan takes it."""


@pytest.fixture
def seen(tmp_path: Path) -> Any:
    """`allocator today --json` of a line with one characteristic, or with many equal ones."""

    def today(capability: dict[str, Any], opportunities: int = 1) -> dict[str, Any]:
        return command(tmp_path, "today", line(step("part", capability, opportunities=opportunities)))

    return today


def test_three_sigma_is_one_in_370(seen: Any) -> None:
    answer = seen(THREE_SIGMA)
    assert answer["steps"][0]["dpmo"] == pytest.approx(2700, abs=5)  # 0.27 %
    assert 1.0 / answer["loss"]["rolled_yield"] == pytest.approx(370, abs=0.5)
    assert answer["steps"][0]["cp"] == pytest.approx(1.0, rel=1e-12)


@pytest.mark.parametrize(("count", "rolled"), [(60, 0.850), (100, 0.763), (200, 0.582)])
def test_many_characteristics_at_three_sigma(seen: Any, tmp_path: Path, count: int, rolled: float) -> None:
    assert seen(THREE_SIGMA, count)["rolled_yield"] == pytest.approx(rolled, abs=TENTH_OF_A_PERCENT)
    parts = line(*(step(f"part {i}", THREE_SIGMA) for i in range(count)))
    assert command(tmp_path, "today", parts)["rolled_yield"] == pytest.approx(rolled, abs=TENTH_OF_A_PERCENT)


def test_four_and_six_sigma_centred(seen: Any) -> None:
    assert seen({"sigma_level": 4.0, "sides": 2})["steps"][0]["ppm"] == pytest.approx(63, abs=0.5)
    assert 1000.0 * seen({"sigma_level": 6.0, "sides": 2})["steps"][0]["ppm"] == pytest.approx(2, abs=0.5)


def test_six_sigma_with_the_usual_shift(seen: Any) -> None:
    assert seen(SIX_SHIFTED)["steps"][0]["dpmo"] == pytest.approx(3.4, abs=0.05)
    assert seen(SIX_SHIFTED, 200)["rolled_yield"] == pytest.approx(0.9993, abs=HUNDREDTH_OF_A_PERCENT)


def test_a_cp_of_two_is_one_and_a_half_after_the_shift(seen: Any) -> None:
    level = seen({"cp": 2.0, "shift": 1.5})["steps"][0]
    assert level["sigma_level"] == pytest.approx(6.0, rel=1e-12)
    assert (level["cp"], level["cpk"], level["cpk_after_shift"]) == pytest.approx((2.0, 2.0, 1.5), rel=1e-12)
    assert level["dpmo"] == pytest.approx(3.4, abs=0.05)


def test_wider_limits_are_a_better_index(tmp_path: Path) -> None:
    wider = {"name": "wider limits", "widen": 4.0 / 3.0, "per_year": TAKEN}
    hole = step("hole", {"lsl": -3, "usl": 3, "mean": 0, "std": 1}, alternative=[wider])
    answer = command(tmp_path, "plan", line(hole))
    assert answer["steps"][0]["alternatives"] == ["wider limits"]
    assert answer["steps"][0]["cp"] == pytest.approx(1.33, abs=0.005)
    assert answer["steps"][0]["ppm"] == pytest.approx(63, abs=0.5)


def test_wider_limits_leave_the_mean_where_it_is(tmp_path: Path) -> None:
    """A mean 1 off the middle of ±3 is 1 off the middle of ±4: the wider study says the same as the alternative."""
    wider = {"name": "wider limits", "widen": 4.0 / 3.0, "per_year": TAKEN}
    narrow = step("hole", {"lsl": -3, "usl": 3, "mean": 1, "std": 0.7}, alternative=[wider])
    wide = step("hole", {"lsl": -4, "usl": 4, "mean": 1, "std": 0.7})
    widened = command(tmp_path, "plan", line(narrow))["steps"][0]
    studied = command(tmp_path, "today", line(wide))["steps"][0]
    for key in ("sigma_level", "k", "cp", "cpk", "dpmo"):
        assert widened[key] == pytest.approx(studied[key], rel=1e-9), key


@pytest.mark.parametrize(("needed", "works"), [(1, 0.9996), (2, 0.9604)])
def test_two_independent_units_of_98_percent(tmp_path: Path, needed: int, works: float) -> None:
    pair = {"name": "two", "copies": {"installed": 2, "needed": needed}, "per_year": TAKEN}
    answer = command(tmp_path, "plan", line(step("unit", {"yield": 0.98}, alternative=[pair])))
    assert answer["steps"][0]["alternatives"] == ["two"]
    assert answer["rolled_yield"] == pytest.approx(works, rel=1e-12)


def test_a_common_cause_takes_most_of_the_gain(tmp_path: Path) -> None:
    """With one failure in ten common to both, two units of 98 % work 99.77 % of the time: 0.2 % common + 0.03 %."""
    pair = {"name": "two", "copies": {"installed": 2, "needed": 1, "common_cause": 0.1}, "per_year": TAKEN}
    answer = command(tmp_path, "plan", line(step("unit", {"yield": 0.98}, alternative=[pair])))
    assert answer["rolled_yield"] == pytest.approx(0.9977, abs=HUNDREDTH_OF_A_PERCENT)


def test_yields_of_steps_multiply_and_sigma_levels_do_not_average(tmp_path: Path) -> None:
    """Two steps of 2 and 6 σ lose what the worse loses, 4.55 %; two of their mean, 4 σ, lose 0.0127 %."""
    apart = line(step("worse", {"sigma_level": 2.0}), step("better", {"sigma_level": 6.0}))
    answer = command(tmp_path, "today", apart)
    assert answer["loss"]["rolled_yield"] == pytest.approx(0.0455, abs=HUNDREDTH_OF_A_PERCENT)
    even = line(step("one", {"sigma_level": 4.0}), step("other", {"sigma_level": 4.0}))
    assert command(tmp_path, "today", even)["loss"]["rolled_yield"] == pytest.approx(0.000127, abs=5e-7)
    assert answer["rolled_yield"] == pytest.approx(math.prod(s["first_pass_yield"] for s in answer["steps"]), rel=1e-12)
