"""Is a capability given in exactly one form, and do its own figures fit together."""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cache

from allocator.scenario.model import Capability

Remark = tuple[str, str, str]
"""Key within the capability ("" for the whole), what was found, what is allowed."""

FORMS = (
    "give exactly one of { sigma_level }, { cp }, { cp, cpk }, { cpk }, { pp, ppk }, { ppk }, { lsl, usl, mean, std } "
    "(one limit alone = one-sided), { yield }, { defect_rate }, { dpmo }, { item_yield }, { ppm }, { bad, of }, "
    "{ data, column, lsl, usl }"
)
FAMILIES: dict[str, frozenset[str]] = {
    "sigma_level": frozenset({"sigma_level"}),
    "indices": frozenset({"cp", "cpk"}),
    "long": frozenset({"pp", "ppk"}),
    "limits": frozenset({"lsl", "usl", "mean", "std"}),
    "yield": frozenset({"yield"}),
    "defect_rate": frozenset({"defect_rate"}),
    "dpmo": frozenset({"dpmo"}),
    "item_yield": frozenset({"item_yield"}),
    "ppm": frozenset({"ppm"}),
    "count": frozenset({"bad", "of"}),
    "data": frozenset({"data", "column", "subgroup"}),
}
ORDER = [key for family in FAMILIES.values() for key in sorted(family, key="lsl usl mean std bad of".find)]
BESIDE = ("shift", "k", "sides", "sample")
ROUNDING = 1e-12
LEAST_CHANCE, MOST_EXPONENT = 1e-300, 36.0
"""A defect probability p is told from 0 above the first, from 1 while −ln(1 − p) is below the second."""


def form_remarks(capability: Capability, opportunities: float) -> list[Remark]:
    """Return what is wrong with a capability of items with so many opportunities, taken by itself."""
    fields = frozenset(capability.model_fields_set)
    wrong = _key_remarks(fields)
    if wrong:
        return list(wrong)
    if capability.sides is not None:
        return _side_remarks(capability) + _figure_remarks(capability, fields, opportunities)
    return _figure_remarks(capability, fields, opportunities)


@cache
def _key_remarks(fields: frozenset[str]) -> tuple[Remark, ...]:
    """Return what is wrong with which keys are given; the same few sets recur on every step."""
    keys = frozenset(name.rstrip("_") for name in fields)
    used = [name for name, family in FAMILIES.items() if keys & family]
    if "data" in used and "limits" in used:
        used.remove("limits")
    if not used:
        beside = [key for key in BESIDE if key in keys]
        return (("", f"only {_and(beside)}" if beside else "an empty table", FORMS),)
    if len(used) > 1:
        return (("", _and([key for key in ORDER if key in keys]), f"these do not combine: {FORMS}"),)
    return tuple(_incomplete(used[0], keys) + _beside(keys))


def _incomplete(family: str, keys: frozenset[str]) -> list[Remark]:
    limits = [key for key in ("lsl", "usl") if key in keys]
    if family == "count" and len(keys & {"bad", "of"}) < 2:
        given = "bad" if "bad" in keys else "of"
        return [("", f"{given} alone", "give both: { bad, of }, the bad items and the sample they were found in")]
    if family == "long" and "ppk" not in keys:
        return [("", "pp alone", "give { pp, ppk } or { ppk }")]
    if family == "data":
        return _incomplete_data(keys, limits)
    if family != "limits":
        return []
    if not limits:
        figures = _and([key for key in ("mean", "std") if key in keys])
        return [("", f"{figures} without a limit", "give lsl, usl or both beside them")]
    missing: list[Remark] = [] if "std" in keys else [("std", "nothing", "limits need the standard deviation std")]
    if "mean" not in keys and not (len(limits) == 2 and "k" in keys):
        missing.append(("mean", "nothing", "limits need the mean (two limits may have k, the offset, instead)"))
    return missing


def _incomplete_data(keys: frozenset[str], limits: Sequence[str]) -> list[Remark]:
    if "data" not in keys:
        alone = "column" if "column" in keys else "subgroup"
        return [("data", "nothing", f'{alone} needs data = "file.csv" beside it')]
    return [] if limits else [("", "data without a limit", "give lsl, usl or both beside it")]


def _beside(keys: frozenset[str]) -> list[Remark]:
    """Return what may not stand beside the form: it is already settled by it."""
    remarks: list[Remark] = []
    if keys & {"pp", "ppk"} and "shift" in keys:
        remarks.append(
            ("shift", "a shift beside pp or ppk", "leave it out: a long-term figure holds the drift already")
        )
    two_limits = {"lsl", "usl"} <= keys
    if "k" in keys and keys >= {"cp", "cpk"}:
        remarks.append(("k", "k beside cp and cpk", "leave it out: k = 1 − cpk/cp is already given"))
    if "k" in keys and keys >= {"pp", "ppk"}:
        remarks.append(("k", "k beside pp and ppk", "leave it out: k = 1 − ppk/pp is already given"))
    if "k" in keys and keys & {"mean", "data"}:
        where = "limits with mean" if two_limits else "a single limit"
        allowed = "leave it out: the mean and the limits already say where the process stands"
        remarks.append(("k", f"k beside {where}", allowed))
    return remarks


def _side_remarks(capability: Capability) -> list[Remark]:
    limits = [limit for limit in (capability.lsl, capability.usl) if limit is not None]
    if not limits or capability.sides == len(limits):
        return []
    if len(limits) == 1:
        return [("sides", "sides = 2 beside a single limit", "give both limits, or leave sides out")]
    return [("sides", "sides = 1 beside two limits", "leave out the limit that does not bind, or sides")]


def _figure_remarks(capability: Capability, keys: frozenset[str], opportunities: float) -> list[Remark]:
    if "cpk" in keys:
        return _index_remarks("cp", capability.cp, "cpk", capability.cpk)
    if "ppk" in keys:
        return _index_remarks("pp", capability.pp, "ppk", capability.ppk)
    if "std" in keys:
        return _limit_remarks(capability)
    if "bad" in keys:
        return _count_remarks(capability) or _chance_remarks(capability, opportunities)
    return [] if keys & {"cp", "sigma_level"} else _chance_remarks(capability, opportunities)


def _index_remarks(whole_key: str, whole: float | None, near_key: str, near: float | None) -> list[Remark]:
    if near is None:
        return []
    k = 0.0 if whole is None else 1.0 - near / whole
    if near > 0.0 and -ROUNDING <= k < 1.0:
        return []
    found = f"{near:g}"
    if whole is not None:
        found += f" with {whole_key} {whole:g}, so k = 1 − {near_key}/{whole_key} = {k:.4g}"
    if near <= 0.0 or k >= 1.0:
        allowed = f"{near_key} must be above 0: at 0 or below the mean lies on or outside a limit (0 ≤ k < 1)"
        return [(near_key, found, allowed)]
    return [(near_key, found, f"{near_key} cannot exceed {whole_key} (0 ≤ k < 1): check which is which")]


def _limit_remarks(capability: Capability) -> list[Remark]:
    lsl, usl, mean = capability.lsl, capability.usl, capability.mean
    key = "data" if capability.data is not None else "mean"
    if lsl is not None and usl is not None:
        if lsl >= usl:
            return [("lsl", f"lsl {lsl:g} and usl {usl:g}", "the lower limit must lie below the upper one")]
        k = 0.0 if mean is None else abs(mean - 0.5 * (lsl + usl)) / (0.5 * (usl - lsl))
        if mean is not None and k >= 1.0:
            found = f"mean {mean:g} with limits {lsl:g} and {usl:g}, so k = {k:.4g}"
            allowed = "the mean must lie between the limits (0 ≤ k < 1); check the figures, or state a defect rate"
            return [(key, found, allowed)]
        return []
    if mean is None:
        return []
    if usl is not None and mean >= usl:
        return [(key, f"mean {mean:g} with usl {usl:g}", "the mean must lie below the upper limit")]
    if lsl is not None and mean <= lsl:
        return [(key, f"mean {mean:g} with lsl {lsl:g}", "the mean must lie above the lower limit")]
    return []


def _chance_remarks(capability: Capability, opportunities: float) -> list[Remark]:
    """Refuse what leaves a defect probability per opportunity that rounds to 0 or 1: no sigma level stands for it."""
    rate = capability.defect_rate if capability.dpmo is None else capability.dpmo * 1e-6
    if rate is not None:
        exponent = rate
    elif capability.yield_ is not None:
        return []
    else:
        exponent = -math.log1p(-_bad_share(capability)) / opportunities
    if LEAST_CHANCE < exponent < MOST_EXPONENT:
        return []
    chance = -math.expm1(-exponent)
    found = f"a defect probability per opportunity of {chance:g} ({opportunities:g} opportunities per item)"
    return [("", found, "it must lie between 0 and 1: check the figure, and opportunities")]


def _bad_share(capability: Capability) -> float:
    if capability.item_yield is not None:
        return 1.0 - capability.item_yield
    if capability.ppm is not None:
        return capability.ppm * 1e-6
    return (capability.bad or 0.5) / (capability.of or 1)


def _count_remarks(capability: Capability) -> list[Remark]:
    bad, of = capability.bad, capability.of
    if bad is None or of is None or bad < of:
        return []
    if bad > of:
        return [("bad", f"{bad} bad of {of}", "bad cannot exceed of, the sample they were found in")]
    return [("bad", f"all {of} of {of} bad", "no good item is left to build on; check the count")]


def _and(names: list[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]
