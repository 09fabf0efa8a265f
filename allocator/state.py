"""One way a step can stand: its capability, opportunities, copies and gate."""

from __future__ import annotations

import math
import sys
from dataclasses import dataclass

from allocator import redundancy
from allocator.capability import log_defects, sigma_from_log_defects
from allocator.scenario.level import Level
from allocator.scenario.model import Floor, Inspection, Rework


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


def floor_words(floor: Floor | None) -> str | None:
    """Return the floor as people write it."""
    if floor is None:
        return None
    if floor.cpk is not None:
        return f"Cpk at least {floor.cpk:g}"
    if floor.sigma_level is not None:
        return f"sigma level at least {floor.sigma_level:g}"
    return f"at most {floor.dpmo:g} dpmo"
