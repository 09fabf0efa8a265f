"""Do copies fail as published, and does the plan find the published optima of redundancy allocation?

Values and sources: published/copies.csv, fyffe_components.csv, fyffe_optima.csv.

Left out of the Nakagawa and Miyazaki figures: W = 190, 189 and 187 (their designs exceed the cost limit) and W = 183
(their value is below the optimum). Left out altogether: problems that choose reliabilities together with copies
(Dhingra 1992; the overspeed protection of a gas turbine); their cost is a function of both at once.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Sequence
from typing import Any

import pytest

from allocator import redundancy
from tests.published.lines import line, plan, rows, step

TAKEN = -1.0
"""A yearly cost below 0: the alternative pays for itself, so that every plan takes it."""
SAME = 1e-12
"""Two roads to the same probability."""
DESIGN = 1e-9
"""Rounding of a yield that two programs multiply up."""


def allowed(row: dict[str, Any]) -> float:
    """Rounding of the printed figure, and the two roads' known difference.

    The published form adds the two ways to fail, βp + I with I the independent part; ours takes off that both happen,
    −βp·I, so that no probability can pass 1.
    """
    together = row["common_cause"] * row["one_fails"]
    return row["rounding"] + together * row["set_fails"]


def name_of(row: dict[str, Any]) -> str:
    return f"{row['needed']:g}of{row['installed']:g},{row['common_cause']:g}"


@pytest.mark.parametrize("row", rows("copies.csv"), ids=name_of)
def test_copies_fail_as_published(row: dict[str, Any]) -> None:
    arguments = row["one_fails"], int(row["installed"]), int(row["needed"]), row["common_cause"]
    printed = pytest.approx(row["set_fails"], rel=0, abs=allowed(row))
    assert float(redundancy.failure(*arguments)) == printed, row["source"]
    copies = dict(zip(("installed", "needed", "common_cause"), arguments[1:], strict=True))
    installed = {"name": "copies", "copies": copies, "per_year": TAKEN}
    answer = plan(line(step("unit", {"defect_rate": row["one_fails"]}, alternative=[installed])))
    assert answer.rows[0].alternatives == ("copies",)
    assert answer.yields is not None
    assert answer.yields.rolled_loss == printed, row["source"]


def test_a_common_cause_and_chance_are_not_counted_twice() -> None:
    """By hand, p = 0.2 and β = 0.5: common 0.1, both by chance 0.1² = 0.01, either 1 − 0.9·0.99 = 0.109 (not 0.11)."""
    assert float(redundancy.failure(0.2, 2, 1, 0.5)) == pytest.approx(0.109, rel=SAME)


def test_two_items_of_one_in_a_thousand_meet_one_in_a_million_only_when_independent() -> None:
    """Signoret and Leroy, Reliability Assessment of Safety and Production Systems, Springer 2020, chapter 5."""
    fails = [float(redundancy.failure(1e-3, 2, 1, common_cause)) for common_cause in (0.0, 1e-4, 1e-3, 0.01, 0.1)]
    assert fails[0] == pytest.approx(1e-6, rel=SAME)
    assert all(fail > 1e-6 for fail in fails[1:])
    assert fails == sorted(fails)


Resource = Callable[[int, int], float]
"""What stage j with n copies uses up."""


def stages(
    reliability: Sequence[float], most: int, capital: Resource, yearly: Resource, limit: float
) -> dict[str, Any]:
    """Stages in series with 1 to `most` copies each; one resource enters as capital, the other as yearly cost.

    A price of c for one year costs c that year, so that the yearly cost beside it is the difference.
    """
    steps = []
    for j, good in enumerate(reliability):
        more = [
            {
                "name": f"{n}", "copies": {"installed": n, "needed": 1}, "price": capital(j, n) - capital(j, 1),
                "per_year": yearly(j, n) - yearly(j, 1) - capital(j, n) + capital(j, 1),
            }
            for n in range(2, most + 1)
        ]  # fmt: skip
        steps.append(step(f"stage {j}", {"yield": good}, alternative=more))
    used = sum(capital(j, 1) for j in range(len(reliability)))
    return line(*steps, limits={"capital": limit - used})


def test_the_four_stage_problem() -> None:
    """Tillman, Hwang, Kuo, Optimization of Systems Reliability, after Kettelle (from memory): (5, 6, 5, 4), 0.99747."""
    reliability, cost, weight = (0.80, 0.70, 0.75, 0.85), (1.2, 2.3, 3.4, 4.5), (5, 4, 8, 7)
    scenario = stages(reliability, 9, lambda j, n: cost[j] * n, lambda j, n: weight[j] * n, 56.0)
    answer = plan(scenario, of="rolled_yield", spend=120.0 - sum(weight))
    assert [target.alternatives for target in answer.rows] == [("5",), ("6",), ("5",), ("4",)]
    assert answer.yields is not None
    assert answer.yields.rolled_yield == pytest.approx(0.99747, abs=5e-6)
    assert answer.capital == pytest.approx(54.8 - sum(cost), abs=DESIGN)
    assert answer.money is not None
    assert answer.money.total == pytest.approx(117.0 - sum(weight), abs=DESIGN)


def test_the_five_stage_problem() -> None:
    """Tillman, Hwang and Kuo, Optimization of Systems Reliability (from memory): (3, 2, 2, 3, 3), 0.9045.

    Its third constraint, Σ p·x² ≤ 110, has no place in a scenario. The optimum without it keeps it (83), so it is the
    optimum with it.
    """
    reliability, third = (0.80, 0.85, 0.90, 0.65, 0.75), (1, 2, 3, 4, 2)
    cost, weight = (7, 7, 5, 9, 4), (7, 8, 8, 6, 9)

    def heavy(j: int, n: int) -> float:
        return weight[j] * n * math.exp(n / 4)

    scenario = stages(reliability, 6, lambda j, n: cost[j] * (n + math.exp(n / 4)), heavy, 175.0)
    answer = plan(scenario, of="rolled_yield", spend=200.0 - sum(heavy(j, 1) for j in range(5)))
    copies = [int(target.alternatives[0]) for target in answer.rows]
    assert copies == [3, 2, 2, 3, 3]
    assert sum(p * n**2 for p, n in zip(third, copies, strict=True)) == 83
    assert answer.yields is not None
    assert answer.yields.rolled_yield == pytest.approx(0.9045, abs=5e-5)


COST_LIMIT = 130.0
"""Fyffe, Hines and Lee 1968."""
MOST_COPIES = 6
"""More of one component than the published designs ever use (4)."""


def designs(components: list[dict[str, Any]], mixed: bool) -> list[dict[str, Any]]:
    """What one subsystem could consist of: 1 to 6 components in parallel, of one kind or mixed."""
    found = []
    for n in range(1, MOST_COPIES + 1):
        for chosen in itertools.combinations_with_replacement(components, n):
            if not mixed and len({part["choice"] for part in chosen}) > 1:
                continue
            fails = math.prod(1.0 - part["reliability"] for part in chosen)
            cost, weight = (sum(part[key] for part in chosen) for key in ("cost", "weight"))
            name = "".join(f"{part['choice']:g}" for part in chosen)
            found.append((fails, cost, weight, name))
    best: list[tuple[float, float, float, str]] = []
    for design in sorted(found):
        if not any(other[1] <= design[1] and other[2] <= design[2] for other in best):
            best.append(design)
    return [
        {"name": name, "capability": {"defect_rate": fails}, "price": cost, "per_year": weight - cost}
        for fails, cost, weight, name in best
    ]


def fyffe(mixed: bool) -> dict[str, Any]:
    """The 14 subsystems; a step that chooses no design would stay at nine defects in ten."""
    parts = rows("fyffe_components.csv")
    steps = []
    for subsystem in sorted({part["subsystem"] for part in parts}):
        own = [part for part in parts if part["subsystem"] == subsystem]
        steps.append(step(f"subsystem {subsystem:g}", {"defect_rate": 0.9}, alternative=designs(own, mixed)))
    return line(*steps, limits={"capital": COST_LIMIT})


FYFFE = {"yes": fyffe(True), "no": fyffe(False)}
OPTIMA = [row for row in rows("fyffe_optima.csv") if row["mixed"] == "no" or row["weight"] % 4 == 3]
"""Every fourth of the mixed ones, from 191 down to 159: they take a quarter of a second each."""


@pytest.mark.parametrize("row", OPTIMA, ids=lambda row: f"{row['weight']:g},mixed={row['mixed']}")
def test_the_fourteen_subsystems_reach_the_published_optimum(row: dict[str, Any]) -> None:
    answer = plan(FYFFE[row["mixed"]], of="rolled_yield", spend=row["weight"])
    assert answer.yields is not None
    assert answer.yields.rolled_yield == pytest.approx(row["reliability"], rel=0, abs=row["last_digit"]), row["source"]
    assert answer.capital is not None
    assert answer.capital <= COST_LIMIT * (1.0 + SAME)
    assert answer.money is not None
    assert answer.money.total <= row["weight"] * (1.0 + SAME)
