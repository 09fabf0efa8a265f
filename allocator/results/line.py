"""What is said of a line as it stands: yields, money, levels, cautions."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Yields:
    """The three yields, with their losses 1 − yield kept exact for many nines.

    `shipped_yield` is None when no step states an inspection (the gates are then only assumed perfect).
    """

    rolled_yield: float
    final_yield: float
    shipped_yield: float | None
    rolled_loss: float
    final_loss: float
    shipped_loss: float | None


@dataclass(frozen=True)
class Money:
    """Cost per year by kind [currency/year]."""

    scrap: float
    rework: float
    escapes: float
    inspection: float
    improvement: float

    @property
    def total(self) -> float:
        return self.scrap + self.rework + self.escapes + self.inspection + self.improvement


@dataclass(frozen=True)
class Level:
    """Where one step stands or shall stand.

    `cp` is None for one-sided and attribute steps; `cpk` is the study index, without the drift allowance;
    `cpk_after_shift` is what is left of it after the shift. `dpmo` counts opportunities, `ppm` items.
    """

    sigma_level: float
    shift: float
    k: float
    sides: int
    cp: float | None
    cpk: float
    cpk_after_shift: float
    dpmo: float
    ppm: float
    dpu: float
    """Expected defects of this step per finished unit, Σ q·n·p."""


@dataclass(frozen=True)
class Caution:
    """Something sound but risky in the input or the answer: where, why it matters, what to do."""

    code: str
    """A short stable word for programs, as 'small_sample'."""
    steps: tuple[str, ...]
    reason: str
    fix: str


@dataclass(frozen=True)
class TodayLine:
    """The line as it stands: nothing bought, nothing improved."""

    yields: Yields
    money: Money | None
    """None when the flow overflows (flow exponent above 700); then `money_reason` says so."""
    money_reason: str | None
    dpu: float
    bad_per_lot: tuple[tuple[int, float], ...]
    """Units started that do not come out good (the loss of the final yield), by lot size."""
    escaped_per_lot: tuple[tuple[int, float], ...]
    """Units shipped with a defect, by lot size; none where the shipped yield is unknown."""
