"""Results as JSON: full precision, null for what is not known, the keys that the README lists."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import Any

from allocator.report.plain import Told, today_line_json, yields_json
from allocator.report.plain import best_json as _best
from allocator.report.plain import cautions_json as _cautions
from allocator.report.plain import cost_json as _cost
from allocator.report.plain import pick as _pick
from allocator.report.words import nines_of
from allocator.results import (
    Check,
    Confidence,
    Nines,
    NinesPoint,
    Plan,
    Today,
)

LEVEL_KEYS = ("sigma_level", "shift", "k", "cp", "cpk", "cpk_after_shift", "dpmo", "ppm")
FULL_LEVEL_KEYS = (*LEVEL_KEYS[:3], "sides", *LEVEL_KEYS[3:], "dpu")


TARGET_BEFORE = ("step", "supplier", "alternatives")
TARGET_AFTER = ("budget_share", "starts_per_year", "scrap", "improvement", "capital", "at_cap")
TODAY_BEFORE = ("step", "supplier")
TODAY_AFTER = (
    "first_pass_yield", "starts_per_year", "scrap", "rework", "inspection", "defect_share", "money_share",
)  # fmt: skip
CHECK_BEFORE = ("step", "supplier", "feeds", "items_per_unit", "opportunities", "given")
CHECK_AFTER = ("lost_when_scrapped", "net_cost_added", "ways", "improves", "inspection")


def _keys(before: Sequence[str], level: str, level_keys: Sequence[str], after: Sequence[str]) -> dict[str, str]:
    """Return the keys of a step's record, those of its level among them, and where each figure stands."""
    own = [(key, key) for key in before], [(key, key) for key in after]
    return dict([*own[0], *((key, f"{level}.{key}") for key in level_keys), *own[1]])


def plan_json(plan: Plan) -> dict[str, Any]:
    """The plan; at an unreachable target the same keys, with `reached` false and the best reachable plan."""
    rules = ("rule", "source", "total", "yield_reached", "loss_reached", "meets_target", "saving", "broken")
    return {
        **_pick(plan, ("title", "currency", "question", "reached")),
        "split_yield": plan.split,
        "targets": plan.targets,
        **yields_json(plan.yields),
        "annual_cost": _cost(plan.money),
        **_pick(plan, ("cost_per_unit", "dpu")),
        "today": today_line_json(plan.today),
        "capital": plan.capital,
        "purchases": [_pick(bought, ("name", "price", "per_year_cost")) for bought in plan.purchases],
        **_proof(plan),
        **_pick(plan, ("price_of_defect_budget", "cost_of_next_nine", "assumed")),
        "best_reachable": _best(plan.best_reachable),
        "least_needed": None if plan.least_needed is None else asdict(plan.least_needed),
        "binding": [held.step for held in plan.binding],
        "binding_reasons": [_pick(held, ("step", "reason")) for held in plan.binding],
        "steps": Told(plan.rows, _keys(TARGET_BEFORE, "target", LEVEL_KEYS, TARGET_AFTER)),
        "rules": [_pick(rule, rules) for rule in plan.rules],
        "rules_note": plan.rules_note,
        "restraint": _restraint(plan),
        "confidence": _confidence(plan.confidence),
        "cautions": _cautions(plan.cautions),
    }


def _confidence(sure: Confidence | None) -> dict[str, Any] | None:
    if sure is None:
        return None
    return {
        **_pick(sure, ("confidence", "reached", "draws")),
        **asdict(sure.trial),
        "price_of_confidence": sure.price,
        "plain": asdict(sure.plain),
        "own_bounds": None if sure.own_bounds is None else asdict(sure.own_bounds),
        "cost": {"share": sure.cost_share, "low": sure.cost_low, "high": sure.cost_high},
        "improvement": {"share": sure.cost_share, "low": sure.improvement_low, "high": sure.improvement_high},
        **_pick(sure, ("ranges", "in_doubt", "exact", "asked")),
        "what_to_measure": [asdict(study) for study in sure.studies],
        **_pick(sure, ("studies_left_out", "law", "method", "studies_method")),
    }


def _restraint(plan: Plan) -> dict[str, Any] | None:
    """What the plan was told to keep to, and what that costs; null where it was told nothing."""
    if plan.restraint is None:
        return None
    kept = _pick(plan.restraint, ("what", "total_unrestrained", "loss_unrestrained"))
    return {**kept, "cost_of_restraint": plan.cost_of_restraint}


def _proof(plan: Plan) -> dict[str, Any]:
    keys = ("lower_bound", "gap", "method", "seconds")
    return dict.fromkeys(keys) if plan.proof is None else _pick(plan.proof, keys)


def nines_json(nines: Nines) -> dict[str, Any]:
    highest, optimum = nines.highest, None
    if nines.optimum_total is not None:
        optimum = {"yield": nines.optimum_yield, "loss": nines.optimum_loss, "total": nines.optimum_total}
    return {
        **_pick(nines, ("title", "currency")),
        "split_yield": nines.split,
        "today_nines": nines.today_nines,
        "points": [_point(point) for point in nines.rows],
        "highest_reachable": None
        if highest is None
        else {
            "nines": nines_of(highest.loss),
            **(_best(highest) or {}),
            "binding": [held.step for held in highest.binding],
            "binding_reasons": [_pick(held, ("step", "reason")) for held in highest.binding],
        },
        "missed_target_loss": nines.missed_target_loss,
        "economic_optimum": optimum,
        "assumed": nines.assumed,
        "cautions": _cautions(nines.cautions),
    }


def _point(point: NinesPoint) -> dict[str, Any]:
    return {
        **_pick(point, ("label", "nines", "target_yield", "target_loss")),
        "yield": point.yield_,
        **_pick(point, ("loss", "total", "extra", "price_of_defect_budget", "changes", "gap")),
    }


def today_json(today: Today) -> dict[str, Any]:
    return {
        **_pick(today, ("title", "currency", "shipped_per_year", "targets")),
        **today_line_json(today.line),
        "steps": Told(today.rows, _keys(TODAY_BEFORE, "level", FULL_LEVEL_KEYS, TODAY_AFTER)),
        "assumed": today.assumed,
        "cautions": _cautions(today.cautions),
    }


def check_json(check: Check) -> dict[str, Any]:
    return {
        "sound": True,
        **_pick(check, ("title", "currency", "shipped_per_year", "file", "targets")),
        "steps": Told(check.rows, _keys(CHECK_BEFORE, "level", FULL_LEVEL_KEYS, CHECK_AFTER)),
        "assumed": check.assumed,
        "cautions": _cautions(check.cautions),
    }
