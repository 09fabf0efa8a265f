"""How the steps hang together and what money means: tree, cost lost per item, annual worth, targets."""

from __future__ import annotations

import math

YIELDS = ("final_yield", "rolled_yield", "shipped_yield")
"""In the order in which the split target is looked for."""


def feeds(scenario: dict) -> list[int | None]:
    """Index of the step that each step feeds; None for the last."""
    steps = scenario["step"]
    index = {step["name"]: i for i, step in enumerate(steps)}
    following = [i + 1 for i in range(len(steps) - 1)] + [None]
    return [
        index[step["feeds"]] if step.get("feeds") is not None and following[i] is not None else following[i]
        for i, step in enumerate(steps)
    ]


def children(scenario: dict) -> list[list[int]]:
    """The steps that feed each step."""
    into: list[list[int]] = [[] for _ in scenario["step"]]
    for i, target in enumerate(feeds(scenario)):
        if target is not None:
            into[target].append(i)
    return into


def downstream_first(scenario: dict) -> list[int]:
    """Step indices, each after the step that it feeds."""
    into = children(scenario)
    order = [len(into) - 1]
    for i in order:
        order.extend(into[i])
    return order


def items_per_unit(scenario: dict) -> list[float]:
    """Items of each step in one finished unit, 1 for the last."""
    target, q = feeds(scenario), [1.0] * len(scenario["step"])
    for i in downstream_first(scenario)[1:]:
        q[i] = scenario["step"][i].get("per_unit", 1) * q[target[i]]
    return q


def lost_per_scrapped_item(scenario: dict) -> list[float]:
    """Money lost when one item is scrapped at each gate, everything built into it included."""
    into, steps = children(scenario), scenario["step"]
    accumulated, lost = [0.0] * len(steps), [0.0] * len(steps)
    for i in reversed(downstream_first(scenario)):
        step = steps[i]
        if "scrap_cost" in step:
            accumulated[i] = lost[i] = step["scrap_cost"]
        else:
            brought = sum(steps[c].get("per_unit", 1) * accumulated[c] for c in into[i])
            accumulated[i] = step["cost_added"] + brought
            lost[i] = accumulated[i] - step.get("salvage", 0)
    return lost


def net_cost_added(scenario: dict) -> list[float]:
    """Loss at each gate beyond what was already lost with the items that came in."""
    lost, steps = lost_per_scrapped_item(scenario), scenario["step"]
    into = children(scenario)
    return [lost[i] - sum(steps[c].get("per_unit", 1) * lost[c] for c in into[i]) for i in range(len(steps))]


def recovery(rate: float, years: float) -> float:
    """Yearly payment per unit of money spent now."""
    return 1 / years if rate == 0 else rate / -math.expm1(-years * math.log1p(rate))


def yearly_cost(bought: dict, scenario: dict, q: float) -> float:
    """Yearly cost of an alternative, a purchase (q unused) or anything with the same cost keys."""
    demand = scenario["demand"]
    total = bought.get("per_year", 0.0)
    total += (bought.get("per_item", 0.0) * q + bought.get("price_allowance", 0.0)) * demand["shipped_per_year"]
    if "price" in bought or "trade_in" in bought or "resale" in bought:
        rate = demand["discount_rate"]
        factor = recovery(rate, bought.get("life_years", demand["years"]))
        total += capital_of(bought) * factor - bought.get("resale", 0.0) * (factor - rate)
    return total


def capital_of(bought: dict) -> float:
    """Cash out on the day of purchase."""
    return bought.get("price", 0.0) - bought.get("trade_in", 0.0)


def purchases_used(scenario: dict, alternatives: list[dict]) -> list[dict]:
    """The shared purchases that the chosen alternatives need, each once."""
    wanted = {alternative["uses"] for alternative in alternatives if "uses" in alternative}
    return [purchase for purchase in scenario.get("purchase", []) if purchase["name"] in wanted]


def target_yields(scenario: dict, override: dict | None = None) -> dict[str, float]:
    """Targets as yields, split target first; `override` replaces the scenario's."""
    table = scenario.get("target", {}) if override is None else override
    return {name: yield_of(table[name]) for name in YIELDS if table.get(name) is not None}


def yield_of(stated: float | dict) -> float:
    """A target as a yield, however it is stated."""
    if not isinstance(stated, dict):
        return float(stated)
    if "nines" in stated:
        return 1 - 10.0 ** -stated["nines"]
    if "ppm" in stated:
        return 1 - stated["ppm"] / 1e6
    return 1 - stated["bad"] / stated["per"]


def split_target(scenario: dict) -> str:
    """The yield whose budget is split: the first one set, final yield when none is."""
    return next(iter(target_yields(scenario)), "final_yield")
