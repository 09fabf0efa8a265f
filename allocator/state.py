"""What does a combination of alternatives make of a step: capability, opportunities, copies and gate."""

from __future__ import annotations

import math
import sys
from collections.abc import Sequence
from dataclasses import dataclass, replace

from allocator import redundancy
from allocator.capability import log_defects, sigma_from_log_defects
from allocator.scenario.level import Level, resolve
from allocator.scenario.model import Alternative, Capability, Floor, Inspection, Rework, Scenario, Step


@dataclass(frozen=True)
class State:
    """One way a step can stand, before any law is applied."""

    level: Level
    opportunities: float
    installed: int = 1
    needed: int = 1
    common_cause: float = 0.0
    inspection: Inspection | None = None
    rework: Rework | None = None

    @property
    def log_p(self) -> float:
        """ln of the defect probability of one opportunity (of the set, with copies)."""
        return self.log_p_at(self.level.sigma_level)

    def log_p_at(self, z: float) -> float:
        """ln of the defect probability of one opportunity if one item stood at sigma level z."""
        alone = float(log_defects(z, self.level.k, self.level.shift, self.level.sides))
        if self.installed == 1:
            return alone
        together = redundancy.failure(math.exp(alone), self.installed, self.needed, self.common_cause)
        return math.log(max(float(together), sys.float_info.min))

    def sigma_at(self, log_p: float) -> float:
        """Sigma level of one item at which the opportunity has the defect probability exp(log_p)."""
        if self.installed > 1:
            log_p = float(redundancy.one_copy(math.exp(log_p), self.installed, self.needed, self.common_cause))
        return float(sigma_from_log_defects(log_p, self.level.k, self.level.shift, self.level.sides))


def state_today(scenario: Scenario, step: Step) -> State:
    """Return the state of a step as it stands, the line's defaults filled in."""
    default = scenario.default
    return State(
        level=resolve(step.capability, step.opportunities, None, default.shift),
        opportunities=step.opportunities,
        inspection=step.inspection if step.inspection is not None else default.inspection,
        rework=step.rework if step.rework is not None else default.rework,
    )


def state_with(today: State, chosen: Sequence[Alternative]) -> State:
    """Return the state with the chosen alternatives, applied key by key in the fixed order of the model.

    Groups cannot set the same key twice (checked when read), so the order within a key does not matter.
    """
    level = today.level
    for alternative in chosen:
        if alternative.capability is not None:
            level = resolve(alternative.capability, today.opportunities, level)
    for alternative in chosen:
        if alternative.k is not None:
            level = replace(level, k=alternative.k)
        if alternative.shift is not None:
            level = replace(level, shift=alternative.shift)
    state = replace(today, level=level)
    for alternative in chosen:
        if alternative.widen is not None:
            w = alternative.widen
            level = replace(level, sigma_level=w * level.sigma_level, k=level.k / w)
    state = replace(state, level=level)
    for alternative in chosen:
        state = _with_structure(state, alternative)
    return state


def _with_structure(state: State, alternative: Alternative) -> State:
    if alternative.opportunities is not None:
        state = replace(state, opportunities=alternative.opportunities)
    if alternative.copies is not None:
        copies = alternative.copies
        state = replace(state, installed=copies.installed, needed=copies.needed, common_cause=copies.common_cause)
    if alternative.inspection is not None:
        state = replace(state, inspection=alternative.inspection)
    if alternative.rework is not None:
        state = replace(state, rework=alternative.rework)
    return state


def sigma_meant(quoted: float | Capability, state: State) -> float:
    """Return the sigma level, in this state, that a quoted level stands for (`up_to`, `at`, a quote).

    A number is a sigma level. A capability with the state's own shift, offset and sides gives its z; any other counts
    through its defect probability. A defect probability is that of the opportunity: of the set, with copies.
    """
    if not isinstance(quoted, Capability):
        return float(quoted)
    level = resolve(quoted, state.opportunities, state.level)
    same_terms = (level.k, level.shift, level.sides) == (state.level.k, state.level.shift, state.level.sides)
    if level.attribute:
        return state.sigma_at(level.log_p)
    if same_terms:
        return level.sigma_level
    return float(sigma_from_log_defects(level.log_p, state.level.k, state.level.shift, state.level.sides))


def floor_sigma(floor: Floor | None, state: State) -> float:
    """Return the least sigma level that keeps the floor in this state, −inf without a floor."""
    if floor is None:
        return -math.inf
    if floor.sigma_level is not None:
        return floor.sigma_level
    if floor.cpk is not None:
        return 3.0 * floor.cpk / (1.0 - state.level.k)
    assert floor.dpmo is not None
    return state.sigma_at(math.log(floor.dpmo * 1e-6))


def floor_words(floor: Floor | None) -> str | None:
    """Return the floor as people write it."""
    if floor is None:
        return None
    if floor.cpk is not None:
        return f"Cpk at least {floor.cpk:g}"
    if floor.sigma_level is not None:
        return f"sigma level at least {floor.sigma_level:g}"
    return f"at most {floor.dpmo:g} dpmo"


def has_cp(state: State) -> bool:
    """Cp compares two limits with the spread; one limit alone and counted defects have none."""
    return state.level.sides == 2 and not state.level.attribute
