"""The second pass: do the keys of a scenario fit each other; pure functions on the records, returning what is wrong."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
from math import prod

from allocator.scenario.faults import Damage, Finding, Owner, did_you_mean, listed
from allocator.scenario.forms import Remark, form_remarks
from allocator.scenario.keys import NAMELESS
from allocator.scenario.law_rules import law_remarks, range_remarks, start_remarks, start_remarks_of
from allocator.scenario.level import ATTRIBUTE, given
from allocator.scenario.line_rules import cost_key_findings, feeds_findings, net_cost_findings
from allocator.scenario.model import Alternative, Capability, Costs, Floor, Law, Scenario, Step

MOST_COMBINATIONS = 10_000
EXCLUSIVE = ("capability", "k", "shift", "widen", "opportunities", "copies", "inspection", "rework")
"""Keys of an alternative that two groups of a step may not both set."""
NO_DAMAGE: Damage = set()


def cross_findings(scenario: Scenario, damage: Damage = NO_DAMAGE) -> list[Finding]:
    """Return everything that is wrong between keys that are each possible.

    Parameters
    ----------
    scenario : Scenario
        Names may repeat and figures contradict each other; each key by itself is sound, or is a stand-in.
    damage : set
        Topics already reported by the first pass; nothing more is said about them.
    """
    topics = {topic for _, topic in damage}
    findings = _repeated("step", [step.name for step in scenario.step])
    findings += _repeated("purchase", [purchase.name for purchase in scenario.purchase])
    for i, purchase in enumerate(scenario.purchase):
        findings += _under("", ("purchase", i), range_remarks(purchase))
    findings += feeds_findings(scenario, "name" not in topics)
    for i, step in enumerate(scenario.step):
        findings += _step_findings(i, step, scenario)
    line_unsound = {f.topic[1] for f in findings} & {"feeds", "cost"} or topics & {"name", "feeds", "per_unit", "cost"}
    if not line_unsound:
        findings += net_cost_findings(scenario)
    findings += _horizon_findings(scenario, damage)
    if "inspection" not in topics and "default" not in topics:
        findings += _shipped_findings(scenario)
    return [finding for finding in findings if finding.topic not in damage]


def _repeated(kind: str, names: Sequence[str], within: Owner = ()) -> list[Finding]:
    """Return a finding for every name after its first use, under the owner (kind, *within, position)."""
    if len(set(names)) == len(names):
        return []
    first: dict[str, int] = {}
    findings: list[Finding] = []
    for i, name in enumerate(names):
        if first.setdefault(name, i) != i and name != NAMELESS:
            found = f"the name of {kind} {first[name] + 1} again"
            findings.append(Finding((kind, *within, i), "name", found, "give every one its own name"))
    return findings


def _step_findings(i: int, step: Step, scenario: Scenario) -> Iterator[Finding]:
    owner = ("step", i)
    yield from cost_key_findings(i, step)
    unsound = form_remarks(step.capability, step.opportunities)
    if unsound:
        yield from _under("capability", owner, unsound)
    if step.improve is not None:
        remarks = law_remarks(step.improve, step.opportunities)
        if not remarks and not unsound:
            remarks = start_remarks(step, step.improve, scenario.default.shift)
        if remarks:
            yield from _under("improve", owner, remarks)
    if step.at_least is not None:
        yield from _floor_findings(owner, step.at_least)
    if step.safety or step.fixed:
        yield from _promise_findings(owner, step)
    if step.alternative:
        yield from _alternatives_findings(i, step, scenario, not unsound)


def _under(key: str, owner: Owner, remarks: Sequence[Remark]) -> Iterator[Finding]:
    for below, found, allowed in remarks:
        yield Finding(owner, f"{key}.{below}".strip("."), found, allowed)


def _floor_findings(owner: Owner, floor: Floor) -> Iterator[Finding]:
    keys = [key for key in ("cpk", "sigma_level", "dpmo") if getattr(floor, key) is not None]
    if len(keys) != 1:
        found = " and ".join(keys) or "an empty table"
        yield Finding(owner, "at_least", found, "give exactly one of { cpk }, { sigma_level }, { dpmo }")


def _promise_findings(owner: Owner, step: Step) -> Iterator[Finding]:
    if step.safety and step.at_least is None:
        yield Finding(owner, "safety", "true without a floor", "give at_least, as at_least = { cpk = 1.67 }")
    if step.fixed and step.alternative:
        names = listed(a.name for a in step.alternative)
        yield Finding(owner, "fixed", f"true beside alternative {names}", "leave out one of the two")
    if step.fixed and step.improve is not None:
        yield Finding(owner, "fixed", "true beside improve", "leave out one of the two")


def _alternatives_findings(i: int, step: Step, scenario: Scenario, sound: bool) -> Iterator[Finding]:
    yield from _repeated("alternative", [a.name for a in step.alternative], (i,))
    purchases = [purchase.name for purchase in scenario.purchase]
    for j, alternative in enumerate(step.alternative):
        owner = ("alternative", i, j)
        yield from _under("", owner, range_remarks(alternative))
        if alternative.capability is not None:
            remarks = form_remarks(alternative.capability, step.opportunities)
            if not remarks and sound:
                remarks = start_remarks_of(alternative.capability, step, scenario.default.shift)
            yield from _under("capability", owner, remarks)
        if alternative.uses is not None and alternative.uses not in purchases:
            otherwise = "name a [[purchase]] of this file" if purchases else "add a [[purchase]] of that name"
            allowed = did_you_mean(alternative.uses, purchases, otherwise)
            yield Finding(owner, "uses", f"'{alternative.uses}', which is no purchase", allowed)
        copies = alternative.copies
        if copies is not None and copies.needed > copies.installed:
            found = f"{copies.needed} needed of {copies.installed} installed"
            yield Finding(owner, "copies.needed", found, "give at most as many as are installed")
        if alternative.widen is not None:
            yield from _widen_findings(owner, alternative, step)
    yield from _group_findings(("step", i), step)


def _widen_findings(owner: Owner, alternative: Alternative, step: Step) -> Iterator[Finding]:
    if step.safety:
        allowed = "leave it out: the limits of a step with safety = true are not for sale"
        yield Finding(owner, "widen", f"{alternative.widen:g}", allowed)
    for capability, whose in _capabilities_met(alternative, step):
        counted = given(capability, ATTRIBUTE)
        if counted:
            found = f"{alternative.widen:g}, where {whose} is {' and '.join(key.rstrip('_') for key in counted)}"
            allowed = "only a measured capability has limits to widen: state it by cp, limits or a sigma level"
            yield Finding(owner, "widen", found, allowed)
            return


def _capabilities_met(alternative: Alternative, step: Step) -> Iterator[tuple[Capability, str]]:
    """Yield every capability that an alternative can be applied to, with its name."""
    if alternative.capability is not None:
        yield alternative.capability, "its own capability"
        return
    yield step.capability, "the step's capability"
    for other in step.alternative:
        if other.group != alternative.group and other.capability is not None:
            yield other.capability, f"the capability of '{other.name}'"


def _group_findings(owner: Owner, step: Step) -> Iterator[Finding]:
    groups = Counter(alternative.group for alternative in step.alternative)
    for key in EXCLUSIVE:
        setting = list(dict.fromkeys(a.group for a in step.alternative if getattr(a, key) is not None))
        if len(setting) > 1:
            allowed = "put these alternatives into one group: one is chosen per group, and both cannot hold at once"
            yield Finding(owner, f"alternative.{key}", f"the key in the groups {listed(setting)}", allowed)
    combinations = prod(count + 1 for count in groups.values())
    if combinations > MOST_COMBINATIONS:
        counts = ", ".join(f"{count} in '{group}'" for group, count in groups.items())
        allowed = f"at most {MOST_COMBINATIONS:,} are weighed (per group: its alternatives, or none): merge groups"
        yield Finding(owner, "alternative", f"{combinations:,} combinations ({counts})", allowed)


def _horizon_findings(scenario: Scenario, damage: Damage) -> list[Finding]:
    if ((), "demand") in damage:
        return []
    keys = [key for key in ("years", "discount_rate") if (("demand",), key) not in damage]
    missing = [key for key in keys if getattr(scenario.demand, key) is None]
    place = next(_priced_places(scenario), None) if missing else None
    if place is None:
        return []
    found = f"nothing, but {place} has a price"
    allowed = "state years (the horizon) and discount_rate (0.08 is 8 % a year): a price is spread over time"
    return [Finding(("demand",), " and ".join(missing), found, allowed)]


def _priced_places(scenario: Scenario) -> Iterator[str]:
    for step in scenario.step:
        for alternative in step.alternative:
            if _has_price(alternative):
                yield f"alternative '{alternative.name}' of step '{step.name}'"
        if step.improve is not None and _law_has_price(step.improve):
            yield f"improve of step '{step.name}'"
    for purchase in scenario.purchase:
        if _has_price(purchase):
            yield f"purchase '{purchase.name}'"


def _has_price(costs: Costs) -> bool:
    return costs.price != 0.0 or costs.trade_in != 0.0 or costs.resale != 0.0


def _law_has_price(law: Law) -> bool:
    return law.price is not None or any(point.price is not None for point in law.points)


def _shipped_findings(scenario: Scenario) -> list[Finding]:
    if "shipped_yield" not in scenario.target.losses or scenario.default.inspection is not None:
        return []
    stated = (s.inspection is not None or any(a.inspection is not None for a in s.alternative) for s in scenario.step)
    if any(stated):
        return []
    found = "a target, but no step states an inspection"
    allowed = "state what they find (inspection = { finds = 0.9 }), or set final_yield: nothing could escape here"
    return [Finding(("target",), "shipped_yield", found, allowed)]
