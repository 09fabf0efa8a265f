"""How sure is a plan: in what share of the states of nature it holds, what that costs, and what data would help."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Trial:
    """A plan tried on fresh draws: what it costs, and the share of them in which it meets every target."""

    total: float
    holds: float
    holds_low: float
    holds_high: float
    """95 % limits of the share, from the number of draws."""


@dataclass(frozen=True)
class StudyWorth:
    """What a further study of one estimate would be worth."""

    step: str
    alternative: str | None
    """The alternative whose own sample it is; None for the step as it stands."""
    sample: int
    sample_then: int
    saving: float
    """Fall of the plan's yearly total with the larger sample, the estimate kept."""


@dataclass(frozen=True)
class Confidence:
    """The plan under the error of its estimates."""

    confidence: float
    reached: bool
    draws: int
    trial: Trial
    plain: Trial
    """The plan that takes every estimate as exact."""
    own_bounds: Trial | None
    """The plan on each estimate's own bound at the same confidence; None where that is out of reach."""
    cost_share: float
    cost_low: float
    cost_high: float
    """The share `cost_share` of the states of nature and of prices gives a yearly total between these."""
    improvement_low: float
    improvement_high: float
    """The same for what is spent on improvement alone."""
    in_doubt: tuple[str, ...]
    exact: tuple[str, ...]
    """Steps whose capability states no sample and is taken as exact."""
    ranges: int
    """Amounts of this plan with a low or a high."""
    asked: int
    """Plans compared."""
    studies: tuple[StudyWorth, ...]
    studies_left_out: int
    law: str
    method: str
    studies_method: str

    @property
    def price(self) -> float:
        """What the confidence costs per year."""
        return self.trial.total - self.plain.total
