"""Which sigma level, shift, offset and sides does a quoted capability stand for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from allocator.capability import log_defects, sigma_from_log_defects
from allocator.errors import RangeError
from allocator.scenario.model import Capability

LONG_TERM = ("pp", "ppk")
PER_OPPORTUNITY = ("yield_", "defect_rate", "dpmo")
PER_ITEM = ("item_yield", "ppm", "bad")
ATTRIBUTE = PER_OPPORTUNITY + PER_ITEM
ROUNDED = 1e-4
"""A Cpk above its Cp by no more than this share is a rounding of the same figure."""
MEDIAN_CHANCE = 0.5
"""With 0 bad in n, the rate is taken at which none in n had an even chance."""


@dataclass(frozen=True)
class Level:
    """A capability resolved: sigma level z, drift allowance [σ], offset k, sides; attribute = counted, not measured."""

    sigma_level: float
    shift: float
    k: float
    sides: int
    attribute: bool

    @property
    def log_p(self) -> float:
        """ln of the defect probability per opportunity."""
        return float(log_defects(self.sigma_level, self.k, self.shift, self.sides))


def given(capability: Capability, names: tuple[str, ...]) -> list[str]:
    """Return which of the named keys the user gave."""
    return [name for name in names if getattr(capability, name) is not None]


def resolve(
    capability: Capability, opportunities: float, inherited: Level | None = None, default_shift: float | None = None
) -> Level:
    """Return the level that a quoted capability stands for.

    Shift, k and sides are inherited unless the capability names them; `{cp, cpk}` and limits with a mean name k,
    limits name the sides. A long-term figure (pp, ppk) already holds the drift: its shift is 0.

    Parameters
    ----------
    capability : Capability
        Exactly one form, as checked when read.
    opportunities : float
        Opportunities per item, for forms quoted per item.
    inherited : Level, optional
        The level that this one replaces; None for a step's own capability.
    default_shift : float, optional [σ]
        The line's shift, for a step's own capability.

    Raises
    ------
    RangeError
        When the figures give an offset outside 0 ≤ k < 1 or a probability outside 0 to 1.
    """
    k = _offset(capability, inherited)
    shift = _shift(capability, inherited, default_shift)
    sides = _sides(capability, inherited)
    attribute = bool(given(capability, ATTRIBUTE))
    if attribute:
        log_p = _log_quoted(capability, opportunities)
        z = float(sigma_from_log_defects(log_p, k, shift, sides))
    else:
        z = _measured_sigma(capability, k)
    return Level(z, shift, k, sides, attribute)


def _shift(capability: Capability, inherited: Level | None, default_shift: float | None) -> float:
    if given(capability, LONG_TERM):
        return 0.0
    if capability.shift is not None:
        return capability.shift
    return inherited.shift if inherited is not None else (default_shift or 0.0)


def _sides(capability: Capability, inherited: Level | None) -> int:
    if capability.sides is not None:
        return capability.sides
    limits = len(given(capability, ("lsl", "usl")))
    if limits:
        return limits
    if inherited is not None:
        return inherited.sides
    near_tail_only = capability.cp is None and capability.pp is None and capability.sigma_level is None
    return 1 if near_tail_only else 2


def _offset(capability: Capability, inherited: Level | None) -> float:
    """Return k as named by the capability, else inherited, else 0."""
    whole, near = (capability.cp, capability.cpk) if capability.cp is not None else (capability.pp, capability.ppk)
    if whole is not None and near is not None:
        return checked_offset(1.0 - near / whole, f"1 − {near:g}/{whole:g}")
    if capability.lsl is not None and capability.usl is not None and capability.mean is not None:
        middle, half = 0.5 * (capability.lsl + capability.usl), 0.5 * (capability.usl - capability.lsl)
        return checked_offset(abs(capability.mean - middle) / half, f"|{capability.mean:g} − {middle:g}|/{half:g}")
    if capability.k is not None:
        return capability.k
    if inherited is not None and not given(capability, ("lsl", "usl")):
        return inherited.k
    return 0.0


def checked_offset(k: float, figures: str) -> float:
    """Return k, or say with its figures why no process can have it (RangeError)."""
    if -ROUNDED <= k < 0.0:
        return 0.0
    if not 0.0 <= k < 1.0:
        raise RangeError(f"offset k = {figures} = {k:.4g}, outside 0 ≤ k < 1 (the mean must lie between the limits)")
    return k


def _measured_sigma(capability: Capability, k: float) -> float:
    if capability.sigma_level is not None:
        return capability.sigma_level
    whole = capability.cp if capability.cp is not None else capability.pp
    if whole is not None:
        return 3.0 * whole
    near = capability.cpk if capability.cpk is not None else capability.ppk
    if near is not None:
        return 3.0 * near / (1.0 - k)
    return _sigma_from_limits(capability)


def _sigma_from_limits(capability: Capability) -> float:
    lsl, usl, mean, std = capability.lsl, capability.usl, capability.mean, capability.std
    if std is None or (mean is None and (lsl is None or usl is None)):
        raise RangeError("limits need std, and a single limit needs mean as well")
    if lsl is not None and usl is not None:
        return 0.5 * (usl - lsl) / std
    assert mean is not None
    distance = usl - mean if usl is not None else mean - lsl  # type: ignore[operator]
    return distance / std


def _log_quoted(capability: Capability, opportunities: float) -> float:
    """Return ln p per opportunity of a capability given as a probability or a count."""
    if given(capability, PER_OPPORTUNITY):
        return float(np.log(_quoted_per_opportunity(capability)))
    bad_share = _quoted_per_item(capability)
    # p = 1 − (1 − x)^(1/n), by log1p and expm1 because x is often a few ppm.
    return float(np.log(-np.expm1(np.log1p(-bad_share) / opportunities)))


def _quoted_per_opportunity(capability: Capability) -> float:
    if capability.yield_ is not None:
        return 1.0 - capability.yield_
    if capability.defect_rate is not None:
        return capability.defect_rate
    assert capability.dpmo is not None
    return capability.dpmo * 1e-6


def _quoted_per_item(capability: Capability) -> float:
    if capability.item_yield is not None:
        return 1.0 - capability.item_yield
    if capability.ppm is not None:
        return capability.ppm * 1e-6
    assert capability.bad is not None
    assert capability.of is not None
    if capability.bad == 0:
        return float(-np.expm1(np.log(MEDIAN_CHANCE) / capability.of))
    if capability.bad >= capability.of:
        raise RangeError(f"{capability.bad} bad of {capability.of} leaves no good item to build on")
    return capability.bad / capability.of
