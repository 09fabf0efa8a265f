"""What is a step once some alternatives are chosen: sigma level, fixed offset, shift, opportunities, copies, gate?"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, replace

from scipy.optimize import brentq

from tests.reference.tails import FARTHEST_TAIL, dp_dz, group_p, group_slope, log_p, p_of

PER_OPPORTUNITY = ("yield", "defect_rate", "dpmo")
PER_ITEM = ("item_yield", "ppm", "bad")
GATE = {"finds": 1, "earlier": 0, "rejects_good": 0, "rejects_lost": 1, "per_item": 0, "share_inspected": 1}
EFFECTS = ("capability", "k", "shift", "widen", "opportunities", "copies", "inspection", "rework")


@dataclass(frozen=True)
class State:
    """One way to run a step, before any law: everything its defects and its gate depend on."""

    z: float
    k: float
    s: float
    sides: int
    n: float
    attribute: bool = False
    copies: dict | None = None
    inspection: dict | None = None
    rework: dict | None = None

    def p(self, z: float) -> float:
        """Defect probability of the opportunity (of the copies together, where there are copies)."""
        return group_p(p_of(z, self.k, self.s, self.sides), self.copies)

    def delta(self, z: float) -> float:
        """Defect intensity of one item."""
        return -self.n * math.log1p(-self.p(z))

    def delta_slope(self, z: float) -> float:
        """Change of the intensity with z."""
        one = p_of(z, self.k, self.s, self.sides)
        along = group_slope(one, self.copies) * dp_dz(z, self.k, self.s, self.sides)
        return self.n * along / (1 - group_p(one, self.copies))

    def z_at_p(self, p: float) -> float:
        """Sigma level at which the opportunity fails with probability p."""
        goal = math.log(p)

        def miss(z: float) -> float:
            if self.copies is None:
                return log_p(z, self.k, self.s, self.sides) - goal
            return math.log(max(self.p(z), 1e-320)) - goal

        low = 0.0 if self.sides == 2 else -FARTHEST_TAIL
        high = (FARTHEST_TAIL + self.s) / (1 - self.k)
        return float(brentq(miss, low, high, xtol=1e-14, rtol=8.9e-16, maxiter=500))

    def gate(self) -> dict:
        """Shares of the gate after `share_inspected`; without an inspection all own defects are found."""
        table = {**GATE, **(self.inspection or {})}
        seen = table["share_inspected"]
        again = {"share": 0, "cost": 0, **(self.rework or {})}
        return {
            "finds": table["finds"] * seen,
            "earlier": table["earlier"] * seen,
            "rejects": table["rejects_good"] * seen,
            "lost": table["rejects_lost"],
            "per_item": table["per_item"] * seen,
            "reworked": again["share"],
            "rework_cost": again["cost"],
        }


def level_of(quoted: float | dict, state: State) -> float:
    """Sigma level meant by a number or any capability, with k, shift, sides, opportunities and copies of `state`."""
    if not isinstance(quoted, dict):
        return float(quoted)
    if "sigma_level" in quoted:
        return float(quoted["sigma_level"])
    for whole, near in (("cp", "cpk"), ("pp", "ppk")):
        if whole in quoted:
            return 3.0 * quoted[whole]
        if near in quoted:
            return 3.0 * quoted[near] / (1 - state.k)
    if "std" in quoted:
        return _half_width(quoted)[0] / quoted["std"]
    return state.z_at_p(probability(quoted, state.n))


def probability(quoted: dict, opportunities: float) -> float:
    """Defect probability of one opportunity, where a capability is given as a probability."""
    if "yield" in quoted:
        return 1 - quoted["yield"]
    if "defect_rate" in quoted:
        return float(quoted["defect_rate"])
    if "dpmo" in quoted:
        return quoted["dpmo"] / 1e6
    if "item_yield" in quoted:
        item = 1 - quoted["item_yield"]
    elif "ppm" in quoted:
        item = quoted["ppm"] / 1e6
    else:
        item = quoted["bad"] / quoted["of"] if quoted["bad"] else -math.expm1(math.log(0.5) / quoted["of"])
    return -math.expm1(math.log1p(-item) / opportunities)


def _half_width(quoted: dict) -> tuple[float, float, int]:
    """Half-width T, k and sides from limits and a mean."""
    if "lsl" in quoted and "usl" in quoted:
        half = (quoted["usl"] - quoted["lsl"]) / 2
        return half, abs(quoted["mean"] - (quoted["usl"] + quoted["lsl"]) / 2) / half, 2
    limit = quoted.get("lsl", quoted.get("usl"))
    return abs(limit - quoted["mean"]), 0.0, 1


def settle(quoted: dict, before: State) -> State:
    """The state after a capability; what it does not name is inherited from `before`."""
    attribute = any(key in quoted for key in PER_OPPORTUNITY + PER_ITEM)
    k, sides = before.k, before.sides
    if "std" in quoted:
        _, k, sides = _half_width(quoted)
    for whole, near in (("cp", "cpk"), ("pp", "ppk")):
        if whole in quoted and near in quoted:
            k = 1 - quoted[near] / quoted[whole]
    # a long-term figure already holds the drift
    s = 0.0 if "ppk" in quoted else quoted.get("shift", before.s)
    named = replace(
        before, k=quoted.get("k", k), s=s, sides=quoted.get("sides", sides), attribute=attribute, copies=None
    )
    return replace(named, z=level_of(quoted, named))


def today_state(scenario: dict, step: dict) -> State:
    """The step as it runs today."""
    default = scenario.get("default", {})
    quoted = step["capability"]
    near_only = ("cpk" in quoted and "cp" not in quoted) or ("ppk" in quoted and "pp" not in quoted)
    one_sided = near_only or any(key in quoted for key in PER_OPPORTUNITY + PER_ITEM)
    blank = State(
        z=math.nan,
        k=0.0,
        s=default.get("shift", 0.0),
        sides=1 if one_sided else 2,
        n=step.get("opportunities", 1),
        inspection=step.get("inspection", default.get("inspection")),
        rework=step.get("rework", default.get("rework")),
    )
    return settle(quoted, blank)


def state_with(scenario: dict, step: dict, chosen: list[dict]) -> State:
    """The step with the chosen alternatives, their effects applied key by key in the stated order."""
    state = today_state(scenario, step)
    told = {key: alternative[key] for alternative in chosen for key in EFFECTS if key in alternative}
    if "capability" in told:
        state = settle(told["capability"], state)
    if "k" in told:
        state = replace(state, k=told["k"])
    if "shift" in told:
        state = replace(state, s=told["shift"])
    if "widen" in told:
        state = replace(state, z=state.z * told["widen"], k=state.k / told["widen"])
    for key, field in (
        ("opportunities", "n"),
        ("copies", "copies"),
        ("inspection", "inspection"),
        ("rework", "rework"),
    ):
        if key in told:
            state = replace(state, **{field: told[key]})
    return state


def selections(step: dict) -> list[list[dict]]:
    """Every way to choose one alternative, or none, in each group of the step."""
    groups: dict[str, list[dict | None]] = {}
    for alternative in step.get("alternative", []):
        groups.setdefault(alternative.get("group", "machine"), [None]).append(alternative)
    return [[a for a in pick if a is not None] for pick in itertools.product(*groups.values())]


def named_alternatives(step: dict, names: list[str]) -> list[dict]:
    """The alternatives of the step with these names."""
    found = {alternative["name"]: alternative for alternative in step.get("alternative", [])}
    return [found[name] for name in names]


def floor_level(step: dict, state: State) -> float:
    """Lowest sigma level that `at_least` allows; −inf without a floor."""
    floor = step.get("at_least")
    if not floor:
        return -math.inf
    if "cpk" in floor:
        return 3 * floor["cpk"] / (1 - state.k)
    if "sigma_level" in floor:
        return float(floor["sigma_level"])
    return state.z_at_p(floor["dpmo"] / 1e6)
