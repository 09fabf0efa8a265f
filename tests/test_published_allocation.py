"""Do cheapest plans agree with the closed forms of separable allocation and with published costs of tolerances?

Closed forms: convex separable allocation under one constraint (Everett 1963; Ibaraki and Katoh 1988; from memory), the
figures by hand. A cost of −k·ln p is the law `decade` at k·ln 10 per tenfold cut.

Left out: the minimum-cost tolerance sets themselves (Chase and Greenwood 1988, and T ∝ √b, T ∝ b^(1/3) of Spotts 1973).
Their constraint is the sum of the tolerances, or of their squares; a line's is its defects. What a tolerance costs can
be said here (T ∝ 1/z), so the published costs of their sets are checked. Proportional scaling of variances is no
allocation by cost and is left out as well.
"""

from __future__ import annotations

import itertools
import math

import mpmath
import pytest

from allocator import laws
from allocator.nines import price_nines
from allocator.scenario.read import scenario_from_dict
from tests.published.lines import line, plan, step

PLAN = 1e-6
"""The proven gap that a continuous plan promises (relative)."""
PRICE = 1e-5
"""Price and levels follow from a total that is proven to within 1e-6, here to first order."""
START = 0.1
"""Defect probability of every step today."""
WEIGHTS = (1.0, 2.0, 5.0)
"""k_i of the cost −k_i·ln p_i."""
LOSS = 0.01


def decades(loss: float) -> dict:
    """Steps whose cost is k·ln(START/p), with that loss of the rolled yield allowed."""
    steps = [
        step(
            f"step {k:g}", {"defect_rate": START},
            improve={"law": "decade", "per_year": k * math.log(10.0), "up_to": {"dpmo": 1e-5}},
        )
        for k in WEIGHTS
    ]  # fmt: skip
    return line(*steps, target={"rolled_yield": {"bad": loss * 1e9, "per": 1e9}})


def price_by_hand(loss: float) -> float:
    """λ of p/(1−p) = k/λ under the exact product: Σ ln(1 + k/λ) = −ln(1 − loss)."""
    with mpmath.workdps(30):
        budget = -mpmath.log(1 - mpmath.mpf(loss))

        def over(price: mpmath.mpf) -> mpmath.mpf:
            return sum(mpmath.log(1 + k / price) for k in WEIGHTS) - budget

        return float(mpmath.findroot(over, sum(WEIGHTS) / budget))


def total_by_hand(loss: float) -> float:
    price = price_by_hand(loss)
    return sum(k * math.log(START * (price + k) / k) for k in WEIGHTS)


def test_the_exact_product_splits_by_odds() -> None:
    """p_i/(1 − p_i) = k_i/λ; for a yield of 0.99: λ = 794.1208945, Σ −k ln p = 44.0220736."""
    answer = plan(decades(LOSS))
    assert answer.money is not None
    p = [target.target.dpmo * 1e-6 for target in answer.rows]
    assert p == pytest.approx([0.00125767, 0.00251218, 0.00625688], rel=PRICE)
    assert answer.price_of_defect_budget == pytest.approx(794.1208945, rel=PRICE)
    assert answer.money.total - sum(WEIGHTS) * math.log(START) == pytest.approx(44.0220736, rel=PLAN)
    assert answer.yields is not None
    assert answer.yields.rolled_loss <= LOSS * (1.0 + 1e-9)  # the target's own rounding


def test_small_budgets_split_in_proportion() -> None:
    """Under Σp ≤ P the split is p_i = P·k_i/Σk at λ = Σk/P; for a loss as small as 1e-5 the product is that sum."""
    loss = 1e-5
    answer = plan(decades(loss))
    p = [target.target.dpmo * 1e-6 for target in answer.rows]
    assert p == pytest.approx([loss * k / sum(WEIGHTS) for k in WEIGHTS], rel=PRICE + loss)
    assert answer.price_of_defect_budget == pytest.approx(sum(WEIGHTS) / loss, rel=PRICE + loss)


def test_a_nine_has_a_constant_price() -> None:
    """Under Σp ≤ P a tenfold smaller P costs Σk·ln 10 = 18.42068, whatever P is; under the product, nearly so."""
    points = price_nines(scenario_from_dict(decades(LOSS))).rows
    whole = [point for point in points if abs(point.nines - round(point.nines)) < 1e-9]
    # From today's 0.6 nines to a defect probability of 1e-11 at every step, their caps.
    assert [round(point.nines) for point in whole] == list(range(1, 11))
    for point in whole:
        assert point.total == pytest.approx(total_by_hand(point.target_loss), rel=PLAN)
    for before, after in itertools.pairwise(whole):
        # Each total is known to within the gap; the product falls short of the sum by its loss at most.
        allowed = PLAN * after.total + 18.42068 * before.target_loss
        assert after.total - before.total == pytest.approx(18.42068, abs=allowed + 5e-6)


def test_the_price_of_the_next_nine_is_the_difference() -> None:
    answer = plan(decades(LOSS))
    assert answer.cost_of_next_nine == pytest.approx(total_by_hand(LOSS / 10.0) - total_by_hand(LOSS), rel=PRICE)


def test_equal_costs_take_equal_shares() -> None:
    steps = [
        step(f"step {i}", {"defect_rate": START}, improve={"law": "decade", "per_year": 1.0, "up_to": {"dpmo": 1}})
        for i in range(4)
    ]
    answer = plan(line(*steps, target={"rolled_yield": 0.96}))
    assert [target.budget_share for target in answer.rows] == pytest.approx([0.25] * 4, rel=PRICE)


def test_exponential_costs_are_stationary() -> None:
    """b·e^(mz) in sigma level, one-sided, shift 1.5: b·m·e^(mz) = λ·φ(z − 1.5)/Φ(z − 1.5) at every step."""
    figures = ((1.0, 0.5), (3.0, 0.8), (0.2, 1.4))
    steps = [
        step(
            f"step {i}", {"sigma_level": 3.0, "shift": 1.5, "sides": 1},
            improve={"law": "exponential", "rate": m, "per_year": b * math.exp(3.0 * m), "up_to": 8.0},
        )
        for i, (b, m) in enumerate(figures)
    ]  # fmt: skip
    answer = plan(line(*steps, target={"rolled_yield": 0.999}))
    assert answer.price_of_defect_budget is not None
    assert not any(target.at_cap for target in answer.rows), "stationary inside, not at an end"
    for target, (b, m) in zip(answer.rows, figures, strict=True):
        x = target.target.sigma_level - 1.5
        hazard = float(mpmath.npdf(x) / mpmath.ncdf(x))
        assert b * m * math.exp(m * (x + 1.5)) == pytest.approx(answer.price_of_defect_budget * hazard, rel=PRICE)


DOLLARS = 0.03
"""Two printed costs, each good to 2 cents: the printed sets are 0.1 to 0.2 % off their optimum."""
PARTS = {"B": (0.15997, 0.43899), "D": (0.07202, 0.46823), "E": (0.12576, 0.46537), "F": (0.07202, 0.46823)}
"""b and k of the cost 1.00 + b·T^−k in dollars, T in inches."""
SETS = {
    "original": ((0.008, 0.002, 0.006, 0.002), 9.34),
    "least cost, worst case": ((0.00254, 0.001736, 0.002498, 0.001736), 11.07),
    "least cost, statistical": ((0.0081, 0.00637, 0.00792, 0.00637), 8.06),
}
"""Shaft and housing: Chase, Minimum-Cost Tolerance Allocation, Brigham Young University, report 99-5 (from memory)."""


@pytest.mark.parametrize("tighter", ["original", "least cost, worst case"])
def test_tighter_tolerances_cost_what_is_published(tighter: str) -> None:
    """From the statistical set at 3 σ, tightened by a floor: with the process following T, z = 3·T0/T."""
    loose, loose_cost = SETS["least cost, statistical"]
    tight, tight_cost = SETS[tighter]
    steps = [
        step(
            part, {"sigma_level": 3.0}, at_least={"sigma_level": 3.0 * start / end},
            improve={"law": "power", "exponent": k, "per_year": b * start**-k, "up_to": 50.0},
        )
        for (part, (b, k)), start, end in zip(PARTS.items(), loose, tight, strict=True)
    ]  # fmt: skip
    answer = plan(line(*steps))
    assert answer.money is not None
    assert answer.money.total == pytest.approx(tight_cost - loose_cost, abs=DOLLARS)
    by_hand = sum(b * (end**-k - start**-k) for (b, k), start, end in zip(PARTS.values(), loose, tight, strict=True))
    assert answer.money.total == pytest.approx(by_hand, rel=PLAN)


@pytest.mark.parametrize(("costs", "exponent"), [((1.0, 4.0, 9.0), 1.0), ((1.0, 8.0, 27.0), 2.0)])
def test_the_reciprocal_families_of_the_literature(costs: tuple[float, ...], exponent: float) -> None:
    """Spotts 1973, worst case: b/T and b/T² under ΣT = 6 give T = 1, 2, 3 at the cost of 6, in closed form.

    The law's cost from T = 6 each (nobody's tolerance can be wider), plus what b/T^a costs there, is that cost.
    """
    widest, start = 6.0, 2.0
    total = sum(costs) / widest**exponent
    for b, t in zip(costs, (1.0, 2.0, 3.0), strict=True):
        total += b / widest**exponent * laws.power(start * widest / t, start, exponent)
    assert total == pytest.approx(6.0, rel=1e-12)
