"""Do the keys of a law of improvement fit together, and does its `at` lie above today's level."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

from allocator.errors import RangeError
from allocator.scenario.forms import Remark, form_remarks
from allocator.scenario.level import Level, given, resolve
from allocator.scenario.model import Capability, Costs, Law, Step
from allocator.scenario.schema import REMARKS

SCALES = ("price", "per_year", "per_item")
RANGES = frozenset(f"{key}_{end}" for key in SCALES for end in ("low", "high"))
PARAMETER = {"power": "exponent", "exponential": "rate"}
ONE_SCALE = "give exactly one of price, per_year, per_item"


def law_remarks(law: Law, opportunities: float) -> list[Remark]:
    """Return what is wrong with the keys of a law, taken by itself."""
    if _sound_keys(frozenset(law.model_fields_set), law.law):
        return []
    remarks = _parameter_remarks(law)
    remarks += _quote_remarks(law, opportunities) if law.law == "quotes" else _scale_remarks(law)
    remarks += range_remarks(law)
    for key, level in (("at", law.at), ("up_to", law.up_to)):
        if isinstance(level, Capability):
            remarks += quoted_remarks(key, level, opportunities)
    return remarks


@cache
def _sound_keys(given: frozenset[str], law: str) -> bool:
    """Return whether these keys make a law sound, whatever their values; the same few sets recur on every step."""
    needed = {PARAMETER[law]} if law in PARAMETER else set()
    scales = given.intersection(SCALES)
    rest = given - scales - {"law", "life_years", *REMARKS}
    return law != "quotes" and len(scales) == 1 and rest == needed


def range_remarks(costs: Law | Costs) -> list[Remark]:
    """Return what is wrong with how far the amounts of a law, an alternative or a purchase may turn out otherwise."""
    if RANGES.isdisjoint(costs.model_fields_set):
        return []
    remarks: list[Remark] = []
    for key in SCALES:
        amount = getattr(costs, key, None)
        for end, sign in (("low", 1.0), ("high", -1.0)):
            bound = getattr(costs, f"{key}_{end}", None)
            if bound is None:
                continue
            if amount is None:
                remarks.append((f"{key}_{end}", f"{bound:g} without {key}", f"give {key} itself beside it"))
            elif sign * (amount - bound) < 0.0:
                side = "at most" if end == "low" else "at least"
                remarks.append((f"{key}_{end}", f"{bound:g} with {key} {amount:g}", f"give {side} the {key} itself"))
            elif amount == 0.0 != bound and isinstance(costs, Law):
                remarks.append((f"{key}_{end}", f"{bound:g} with {key} 0", f"give a {key} above 0: the law is scaled"))
    return remarks


def quoted_remarks(key: str, level: Capability, opportunities: float) -> list[Remark]:
    """Return what is wrong with a level quoted inside a law."""
    if level.data is not None:
        return [(f"{key}.data", "a file of measurements", "quote the level itself, as { cpk = 1.67 } or { dpmo = 20 }")]
    return [
        (f"{key}.{below}".rstrip("."), found, allowed) for below, found, allowed in form_remarks(level, opportunities)
    ]


def _parameter_remarks(law: Law) -> list[Remark]:
    needed = PARAMETER.get(law.law)
    remarks: list[Remark] = []
    for key, value in (("exponent", law.exponent), ("rate", law.rate)):
        if key == needed and value is None:
            remarks.append((key, "nothing", f"law '{law.law}' needs it, a number above 0"))
        if key != needed and value is not None:
            takes = f"takes {needed}" if needed else "takes neither exponent nor rate"
            remarks.append((key, f"{value:g}", f"leave it out: law '{law.law}' {takes}"))
    return remarks


def _scales(law: object) -> list[str]:
    return [key for key in SCALES if getattr(law, key) is not None]


def _scale_remarks(law: Law) -> list[Remark]:
    remarks: list[Remark] = []
    if law.points:
        remarks.append(("points", "a list", f"leave it out: only law 'quotes' takes points, this is '{law.law}'"))
    scales = _scales(law)
    if len(scales) != 1:
        remarks.append(("", " and ".join(scales) or "no price, per_year or per_item", ONE_SCALE))
    return remarks


def _quote_remarks(law: Law, opportunities: float) -> list[Remark]:
    remarks: list[Remark] = []
    if law.at is not None:
        remarks.append(("at", "a table", "leave it out: law 'quotes' takes its levels from its points"))
    remarks += [(key, f"{getattr(law, key):g}", "leave it out: every point states its own") for key in _scales(law)]
    if not law.points:
        remarks.append(("points", "nothing", "give at least one, as points = [{ cpk = 1.67, price = 80_000 }]"))
    kinds = [_scales(point) for point in law.points]
    for number, (point, scales) in enumerate(zip(law.points, kinds, strict=True), start=1):
        remarks += quoted_remarks(f"points.{number}", point, opportunities)
        if len(scales) != 1:
            found = " and ".join(scales) or "no price, per_year or per_item"
            remarks.append((f"points.{number}", found, ONE_SCALE))
    return remarks + _mixed_scales(kinds)


def _mixed_scales(kinds: Sequence[list[str]]) -> list[Remark]:
    used = dict.fromkeys(key for scales in kinds if len(scales) == 1 for key in scales)
    if len(used) < 2:
        return []
    return [("points", " in one point, ".join(used) + " in another", "state all points of a law on the same scale")]


def start_remarks(step: Step, law: Law, default_shift: float | None) -> list[Remark]:
    """Return what is wrong between a sound law and the step's sound capability: where the law starts from."""
    needs_positive = law.law == "power" and _may_be_negative(step.capability)
    if law.at is None and not needs_positive:
        return []
    try:
        today = resolve(step.capability, step.opportunities, None, default_shift)
        remarks = _power_remarks(today) if needs_positive else []
        return remarks + (_at_remarks(law.at, step, today) if law.at is not None else [])
    except RangeError as error:
        return [("at", str(error), "check the figures")]


def _may_be_negative(capability: Capability) -> bool:
    """Only a count of mostly bad opportunities stands for a sigma level of 0 or less."""
    if any(good is not None and good <= 0.5 for good in (capability.yield_, capability.item_yield)):
        return True
    if (capability.defect_rate or 0.0) >= 0.5 or max(capability.dpmo or 0.0, capability.ppm or 0.0) >= 0.5e6:
        return True
    return capability.bad is not None and capability.of is not None and 2 * capability.bad >= capability.of


NO_POWER = "a power needs a level above 0 to start from: use 'exponential', 'decade' or 'quotes'"


def _power_remarks(today: Level) -> list[Remark]:
    if today.sigma_level > 0.0:
        return []
    return [("law", f"law 'power' from a sigma level of {today.sigma_level:.4g}", NO_POWER)]


def start_remarks_of(alternative: Capability, step: Step, default_shift: float | None) -> list[Remark]:
    """Return what is wrong between the step's law and an alternative's sound capability, from which it starts too."""
    if step.improve is None or step.improve.law != "power" or not _may_be_negative(alternative):
        return []
    today = resolve(step.capability, step.opportunities, None, default_shift)
    level = resolve(alternative, step.opportunities, today)
    if level.sigma_level > 0.0:
        return []
    return [("", f"a sigma level of {level.sigma_level:.4g}, from which law 'power' starts", NO_POWER)]


def _at_remarks(at: Capability, step: Step, today: Level) -> list[Remark]:
    """`at` lies above today's level when its defect probability is lower."""
    there = resolve(at, step.opportunities, today)
    if there.log_p < today.log_p:
        return []
    stated = ", ".join(f"{key.rstrip('_')} = {getattr(at, key):g}" for key in given(at, FIGURES))
    found = f"{{ {stated} }}, sigma level {there.sigma_level:.4g}, where today's is {today.sigma_level:.4g}"
    return [("at", found, "the level that the price leads to must lie above today's level")]


FIGURES = (
    "sigma_level", "cp", "cpk", "pp", "ppk", "lsl", "usl", "mean", "std", "yield_", "defect_rate", "dpmo", "item_yield",
    "ppm", "bad", "of",
)  # fmt: skip
