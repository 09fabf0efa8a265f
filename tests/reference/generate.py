"""Random small scenarios that use every part of the format, as plain dicts."""

from __future__ import annotations

import math
import random

from tests.reference import capabilities
from tests.reference.combination import ways_of
from tests.reference.improvements import improvement
from tests.reference.line import YIELDS, items_per_unit, lost_per_scrapped_item
from tests.reference.optimum import combinations
from tests.reference.states import selections, settle, today_state

MOST_COMBINATIONS = 300
MOST_PER_STEP = 12


def random_scenario(seed: int, hard: bool = False) -> dict:
    """A scenario for this seed; `hard` leaves the region in which the laws are convex and quotes are plain."""
    rng = random.Random(seed)
    scenario = _bare_line(rng, hard)
    _gates(rng, scenario)
    _purchases(rng, scenario)
    for i, step in enumerate(scenario["step"]):
        if rng.random() < 0.12:
            step["fixed"] = True
            continue
        if rng.random() < 0.65:
            step["improve"] = improvement(rng, scenario, i, yearly_loss(scenario, i), hard)
        if rng.random() < 0.6:
            _alternatives(rng, scenario, i, hard)
    _few_combinations(rng, scenario)
    for i in range(len(scenario["step"])):
        _floor(rng, scenario, i)
    _targets(rng, scenario)
    return scenario


def rounded(value: float, digits: int = 4) -> float:
    """To significant digits, as a person would write it."""
    return float(f"{value:.{digits}g}")


def yearly_loss(scenario: dict, i: int) -> float:
    """Rough yearly loss by the defects of a step: the scale for what improving it may cost."""
    state = today_state(scenario, scenario["step"][i])
    q, lost = items_per_unit(scenario)[i], lost_per_scrapped_item(scenario)[i]
    return scenario["demand"]["shipped_per_year"] * q * lost * state.delta(state.z)


def _bare_line(rng: random.Random, hard: bool) -> dict:
    size = rng.choice([1, 2, 2, 3, 3, 3, 4, 4, 5, 6])
    demand = {
        "shipped_per_year": rng.choice([500, 5000, 20000, 100000]),
        "years": rng.choice([3, 5, 8]),
        "discount_rate": rng.choice([0.0, 0.06, 0.1]),
    }
    scenario: dict = {"title": "random", "currency": "EUR", "demand": demand}
    if rng.random() < 0.25:
        scenario["default"] = {"shift": rng.choice([0.5, 1.0, 1.5])}
    tree = rng.random() < 0.5
    scenario["step"] = [{"name": f"step {i + 1}", "capability": {"sigma_level": 3.0}} for i in range(size)]
    for i, step in enumerate(scenario["step"]):
        if i < size - 1 and tree:
            step["feeds"] = f"step {rng.randint(i + 1, size - 1) + 1}"
            step["per_unit"] = rng.choice([1, 1, 2, 3, 4])
        if rng.random() < 0.5:
            step["opportunities"] = rng.choice([2, 5, 12, 40])
        if rng.random() < 0.2:
            step["supplier"] = rng.choice(["Alpha", "Beta"])
    q = items_per_unit(scenario)
    for i, step in enumerate(scenario["step"]):
        p = math.exp(rng.uniform(math.log(1.5e-3), math.log(0.15))) / (step.get("opportunities", 1) * q[i])
        if hard and rng.random() < 0.6:
            p, step["opportunities"] = rng.uniform(0.1, 0.44), 1
        shift = scenario.get("default", {}).get("shift", 0.0)
        step["capability"] = capabilities.today(rng, p, step.get("opportunities", 1), shift)
    _costs(rng, scenario)
    return scenario


def _costs(rng: random.Random, scenario: dict) -> None:
    for step in scenario["step"]:
        step["cost_added"] = rounded(math.exp(rng.uniform(0, 4)), 3)
    for i, step in enumerate(scenario["step"]):
        if rng.random() < 0.4:
            # enough to cover what the parts brought along, so that no step has a negative net cost
            whole = rounded(lost_per_scrapped_item(scenario)[i], 6)
            del step["cost_added"]
            step["scrap_cost"] = whole
        elif rng.random() < 0.3:
            step["salvage"] = rounded(step["cost_added"] * rng.uniform(0.05, 0.6), 2)


def _gates(rng: random.Random, scenario: dict) -> None:
    style = rng.choice(["none", "none", "default", "some", "some"])
    if style == "default":
        scenario.setdefault("default", {})["inspection"] = inspection(rng)
    if style == "some":
        for step in scenario["step"]:
            if rng.random() < 0.6:
                step["inspection"] = inspection(rng)
    if rng.random() < 0.3:
        scenario.setdefault("default", {})["rework"] = _rework(rng)
    for step in scenario["step"]:
        if rng.random() < 0.3:
            step["rework"] = _rework(rng)


def inspection(rng: random.Random) -> dict:
    """An inspection with a few of its keys."""
    table: dict = {"finds": rounded(rng.uniform(0.4, 1.0), 2)}
    if rng.random() < 0.6:
        table["earlier"] = rounded(rng.uniform(0.1, 0.95), 2)
    if rng.random() < 0.4:
        table["rejects_good"] = rounded(rng.uniform(0.001, 0.02), 2)
        if rng.random() < 0.5:
            table["rejects_lost"] = rounded(rng.uniform(0, 1), 2)
    if rng.random() < 0.6:
        table["per_item"] = rounded(rng.uniform(0.01, 0.3), 2)
    if rng.random() < 0.25:
        table["share_inspected"] = rounded(rng.uniform(0.2, 1), 2)
    return table


def _rework(rng: random.Random) -> dict:
    return {"share": rounded(rng.uniform(0.1, 0.95), 2), "cost": rounded(rng.uniform(0.2, 15), 2)}


def _purchases(rng: random.Random, scenario: dict) -> None:
    for number in range(rng.choice([0, 0, 1, 2])):
        worth = yearly_loss(scenario, rng.randrange(len(scenario["step"]))) * scenario["demand"]["years"]
        bought = {"name": f"purchase {number + 1}", "price": rounded(worth * rng.uniform(0.05, 0.8) + 1, 3)}
        if rng.random() < 0.3:
            bought["trade_in"] = rounded(bought["price"] * rng.uniform(0, 0.3), 2)
        if rng.random() < 0.3:
            bought["per_year"] = rounded(bought["price"] * rng.uniform(-0.05, 0.1), 2)
        if rng.random() < 0.3:
            bought["life_years"] = rng.choice([4, 10])
        scenario.setdefault("purchase", []).append(bought)


def _alternatives(rng: random.Random, scenario: dict, i: int, hard: bool) -> None:
    step = scenario["step"][i]
    machine = ["capability", "capability", "opportunities"]
    if _may_widen(step, hard):
        machine.append("widen")
    setting = ["k", "shift", "inspection", "rework", "copies"]
    for group, keys in (("machine", machine), ("setting", setting))[: rng.choice([1, 2])]:
        for _ in range(rng.choice([1, 1, 2])):
            name = f"option {len(step.get('alternative', [])) + 1}"
            alternative = {"name": name} | ({} if group == "machine" else {"group": group})
            for key in rng.sample(keys, rng.choice([1, 1, 2])):
                _effect(rng, scenario, i, alternative, key)
            if len(alternative) > (1 if group == "machine" else 2):
                _price(rng, scenario, i, alternative)
                step.setdefault("alternative", []).append(alternative)


def _may_widen(step: dict, hard: bool) -> bool:
    measured = any(key in step["capability"] for key in ("sigma_level", "cp", "pp", "std"))
    return measured and (hard or step.get("improve", {}).get("law") != "quotes")


def _effect(rng: random.Random, scenario: dict, i: int, alternative: dict, key: str) -> None:
    step = scenario["step"][i]
    state = today_state(scenario, step)
    if key == "capability":
        quoted = capabilities.better(rng, step, state)
        if "widen" not in alternative or not settle(quoted, state).attribute:
            alternative[key] = quoted
    elif key == "widen" and not settle(alternative.get("capability", step["capability"]), state).attribute:
        alternative[key] = rounded(rng.uniform(1.03, 1.3), 3)
        alternative["price_allowance"] = rounded(lost_per_scrapped_item(scenario)[-1] * rng.uniform(0, 0.01), 2)
    elif key == "opportunities" and state.n > 1:
        alternative[key] = max(1, int(state.n * rng.uniform(0.4, 0.9)))
    elif key == "k" and state.k > 0.01:
        alternative[key] = rounded(state.k * rng.uniform(0, 0.8), 2)
    elif key == "shift" and state.s > 0.1 and not _long_term(step):
        alternative[key] = rounded(state.s * rng.uniform(0, 0.8), 2)
    elif key == "inspection":
        alternative[key] = inspection(rng)
    elif key == "rework":
        alternative[key] = _rework(rng)
    elif key == "copies" and rng.random() < 0.7:
        needed = rng.choice([1, 1, 2])
        beta = rng.choice([0.0, 0.05, 0.2])
        alternative[key] = {"installed": needed + 1, "needed": needed, "common_cause": beta}


def _long_term(step: dict) -> bool:
    return "ppk" in step["capability"] or any("ppk" in a.get("capability", {}) for a in step.get("alternative", []))


def _price(rng: random.Random, scenario: dict, i: int, alternative: dict) -> None:
    loss, q = yearly_loss(scenario, i) + 1, items_per_unit(scenario)[i]
    demand = scenario["demand"]
    worth = loss * math.exp(rng.uniform(-3, 0.6))
    kind = rng.choice(["price", "price", "price", "per_year", "per_item"])
    if kind == "price":
        alternative["price"] = rounded(worth * demand["years"] * 0.7, 3)
        if rng.random() < 0.3:
            alternative["trade_in"] = rounded(alternative["price"] * rng.uniform(0, 0.3), 2)
        if rng.random() < 0.3:
            alternative["resale"] = rounded(alternative["price"] * rng.uniform(0, 0.3), 2)
        if rng.random() < 0.4:
            alternative["life_years"] = rng.choice([2, 4, 10])
        if rng.random() < 0.3:
            alternative["per_year"] = rounded(worth * rng.uniform(-0.2, 0.2), 2)
    elif kind == "per_year":
        alternative["per_year"] = rounded(worth, 3)
    else:
        alternative["per_item"] = rounded(worth / demand["shipped_per_year"] / q, 3)
    if "purchase" in scenario and rng.random() < 0.5:
        alternative["uses"] = rng.choice(scenario["purchase"])["name"]


def _few_combinations(rng: random.Random, scenario: dict) -> None:
    def count() -> int:
        return math.prod(len(selections(step)) for step in scenario["step"])

    while count() > MOST_COMBINATIONS or max(len(selections(step)) for step in scenario["step"]) > MOST_PER_STEP:
        rich = [step for step in scenario["step"] if step.get("alternative")]
        step = max(rich, key=lambda s: len(selections(s)))
        step["alternative"].pop(rng.randrange(len(step["alternative"])))
        if not step["alternative"]:
            del step["alternative"]


def _floor(rng: random.Random, scenario: dict, i: int) -> None:
    step = scenario["step"][i]
    if rng.random() > 0.25:
        return
    state = today_state(scenario, step)
    kind = rng.choice(["cpk", "sigma_level", "dpmo"])
    level = state.z * rng.uniform(0.85, 1.15)
    values = {"cpk": level * (1 - state.k) / 3, "sigma_level": level, "dpmo": 1e6 * state.p(level)}
    step["at_least"] = {kind: rounded(values[kind], 4)}
    if rng.random() < 0.4 and not any("widen" in a for a in step.get("alternative", [])):
        step["safety"] = True
    if not ways_of(scenario, i):
        step.pop("safety", None)
        del step["at_least"]


def _targets(rng: random.Random, scenario: dict) -> None:
    inspected = "inspection" in scenario.get("default", {}) or any("inspection" in s for s in scenario["step"])
    names = list(YIELDS) if inspected else list(YIELDS[:2])
    wanted = rng.sample(names, min(len(names), rng.choice([0, 1, 1, 1, 1, 1, 2, 2, 3])))
    table: dict = {}
    if inspected and rng.random() < 0.5:
        table["escape_cost"] = rounded(lost_per_scrapped_item(scenario)[-1] * rng.uniform(0.5, 20), 3)
    problems = list(combinations(scenario))
    today = next(problem.high for problem in problems)
    fate = rng.choices(["between", "barely", "beyond"], [0.84, 0.08, 0.08])[0]
    for name in wanted:
        least = min(problem.exponent(name, problem.low) for problem in problems)
        now = problems[0].exponent(name, today)
        if least > 1e-9 and now > 1e-9:
            table[name] = _stated(rng, _budget(rng, least, max(now, least), fate))
    if table:
        scenario["target"] = table
    if rng.random() < 0.3 and (wanted or rng.random() < 0.5):
        name = next((n for n in YIELDS if n in table), "final_yield")
        best = min(problems, key=lambda problem: problem.exponent(name, problem.low))
        spent = best.capital(best.low)
        if spent > 0:
            scenario["limits"] = {"capital": rounded(spent * rng.uniform(0.3, 1.1), 3)}


def _budget(rng: random.Random, least: float, now: float, fate: str) -> float:
    if fate == "barely":
        return least * (1 + 1e-4)
    if fate == "beyond":
        return least * 0.8
    share = rng.uniform(0.05, 0.85)
    return math.exp((1 - share) * math.log(now) + share * math.log(least)) * 1.0005


def _stated(rng: random.Random, budget: float) -> float | dict:
    loss = -math.expm1(-budget)
    form = rng.choice(["number", "number", "nines", "ppm", "bad"])
    if form == "nines":
        return {"nines": -math.log10(loss)}
    if form == "ppm":
        return {"ppm": 1e6 * loss}
    if form == "bad":
        return {"bad": max(1, round(loss * 10**9)), "per": 10**9}
    return 1 - loss
