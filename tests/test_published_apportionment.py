"""Do the apportionment rules reproduce the examples of MIL-HDBK-338B, 1 October 1998, section 6.3?

What a rule allots to one step is read off its total: improvement of that step alone costs anything, 1 per tenfold cut
of the defect probability, so the total is log10(p today / p allotted).

Left out: feasibility of objectives (6.3.4) and the AGREE method weigh subsystems by ratings and module counts that a
line of steps does not have.
"""

from __future__ import annotations

import math

import pytest

from allocator.results import RuleOutcome
from tests.published.lines import line, plan, step

HANDBOOK = 5e-3
"""The handbook prints two digits, and ARINC's from a rounded failure rate."""
EFFORT = 5e-4
"""The handbook prints three digits."""
EXACT = 1e-9
"""Closed forms; the probability is recovered from a logarithm in money."""

ARINC_RATES = (0.003, 0.001, 0.004)
"""Failures per hour, 6.3.3, Example 6."""
HOURS = 20.0
EFFORT_TODAY = (0.90, 0.80, 0.85)
"""6.3.5, Example 8 (numbers from memory)."""
EFFORT_GOAL = 0.70


def priced(today: tuple[float, ...], goal: float, prices: tuple[float, ...]) -> dict:
    """Steps of these yields today, each with its price of a tenfold cut."""
    steps = [
        step(f"subsystem {i}", {"yield": good}, improve={"law": "decade", "per_year": price, "up_to": {"dpmo": 1}})
        for i, (good, price) in enumerate(zip(today, prices, strict=True))
    ]
    return line(*steps, target={"rolled_yield": goal})


def outcome(today: tuple[float, ...], goal: float, rule: str, prices: tuple[float, ...]) -> RuleOutcome:
    return {o.rule: o for o in plan(priced(today, goal, prices)).rules}[rule]


def allotted(today: tuple[float, ...], goal: float, rule: str) -> list[float]:
    """The reliability that a rule asks of every subsystem."""
    found = []
    for i, good in enumerate(today):
        alone = tuple(1.0 if j == i else 0.0 for j in range(len(today)))
        found.append(1.0 - (1.0 - good) * 10.0 ** -outcome(today, goal, rule, alone).total)
    return found


def test_equal_apportionment() -> None:
    """6.3.2, Example 5 (numbers from memory): three subsystems, goal 0.729, each 0.90."""
    assert allotted((0.80, 0.85, 0.70), 0.729, "equal split") == pytest.approx([0.9, 0.9, 0.9], abs=EXACT)


def test_arinc_apportionment_as_printed() -> None:
    """6.3.3, Example 6 (inputs seen, reliabilities from memory): 0.96, 0.99 and 0.95 for the goal of 0.90."""
    today = tuple(math.exp(-rate * HOURS) for rate in ARINC_RATES)
    assert allotted(today, 0.90, "pro rata to today") == pytest.approx([0.96, 0.99, 0.95], abs=HANDBOOK)


def test_arinc_apportionment_with_the_handbook_s_rounded_rate() -> None:
    """6.3.3, Example 6: the goal of 0.90 becomes 0.005 failures per hour, hence 0.001875, 0.000625, 0.0025 per hour.

    The rounding over-satisfies the goal: exp(−0.005·20) is 0.9048.
    """
    today = tuple(math.exp(-rate * HOURS) for rate in ARINC_RATES)
    reliability = allotted(today, math.exp(-0.005 * HOURS), "pro rata to today")
    rates = [-math.log(good) / HOURS for good in reliability]
    assert rates == pytest.approx([0.001875, 0.000625, 0.0025], rel=EXACT)


def test_minimum_effort_raises_the_worst_to_one_level() -> None:
    """6.3.5, Example 8 (numbers from memory): 0.90, 0.80, 0.85 with goal 0.70 become 0.90, 0.882, 0.882."""
    reliability = allotted(EFFORT_TODAY, EFFORT_GOAL, "raise the worst")
    assert reliability == pytest.approx([0.90, 0.882, 0.882], abs=EFFORT)
    level = math.sqrt(EFFORT_GOAL / 0.90)  # r2 of the handbook's algorithm
    assert reliability == pytest.approx([0.90, level, level], abs=EXACT)


def test_where_effort_costs_the_same_everywhere_minimum_effort_is_the_cheapest_plan() -> None:
    """6.3.5: with one cost curve for all, the rule is the optimum.

    A tenfold cut that costs the same at every step is such a curve (reverse water-filling: Cover and Thomas, Elements
    of Information Theory, parallel Gaussian sources, from memory).
    """
    answer = plan(priced(EFFORT_TODAY, EFFORT_GOAL, (1.0, 1.0, 1.0)))
    level = math.sqrt(EFFORT_GOAL / 0.90)
    reached = [1.0 - target.target.dpmo * 1e-6 for target in answer.rows]
    assert reached == pytest.approx([0.90, level, level], abs=1e-6)  # the plan's promised gap
    by_rule = outcome(EFFORT_TODAY, EFFORT_GOAL, "raise the worst", (1.0, 1.0, 1.0))
    assert answer.money is not None
    assert answer.money.total == pytest.approx(by_rule.total, rel=1e-6)  # the plan's promised gap
    assert answer.money.total == pytest.approx(math.log10(0.2 / (1 - level)) + math.log10(0.15 / (1 - level)), rel=1e-6)


@pytest.mark.parametrize(
    ("rule", "reached"),
    [
        ("pro rata to today", EFFORT_GOAL),
        ("raise the worst", EFFORT_GOAL),
        # A third of the goal each is 0.7^(1/3) = 0.888; the best subsystem is at 0.90 already and stays there.
        ("equal split", 0.90 * EFFORT_GOAL ** (2.0 / 3.0)),
    ],
)
def test_the_rules_reach_the_goal(rule: str, reached: float) -> None:
    made = outcome(EFFORT_TODAY, EFFORT_GOAL, rule, (1.0, 2.0, 3.0))
    assert made.yield_reached == pytest.approx(reached, abs=EXACT)
    assert made.meets_target
