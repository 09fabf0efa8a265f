"""What the user wrote: the tables of a scenario as plain, frozen records (no files, no maths)."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field

Share = Annotated[float, Field(ge=0.0, le=1.0)]
Nonnegative = Annotated[float, Field(ge=0.0, allow_inf_nan=False)]
Positive = Annotated[float, Field(gt=0.0, allow_inf_nan=False)]
Finite = Annotated[float, Field(allow_inf_nan=False)]
Evidence = Literal["measured", "quoted", "judged"]
YieldName = Literal["final_yield", "rolled_yield", "shipped_yield"]
YIELD_NAMES: tuple[YieldName, ...] = ("final_yield", "rolled_yield", "shipped_yield")


class Table(BaseModel):
    """Any table of the scenario; the three remarks are allowed everywhere."""

    model_config = ConfigDict(frozen=True, extra="forbid", populate_by_name=True)

    source: str | None = None
    evidence: Evidence | None = None
    note: str | None = None


class Capability(Table):
    """A capability as quoted, in exactly one of the accepted forms (see `level.resolve`)."""

    sigma_level: Finite | None = None
    cp: Positive | None = None
    cpk: Finite | None = None
    pp: Positive | None = None
    ppk: Finite | None = None
    lsl: Finite | None = None
    usl: Finite | None = None
    mean: Finite | None = None
    std: Positive | None = None
    yield_: float | None = Field(None, gt=0.0, lt=1.0, alias="yield")
    defect_rate: float | None = Field(None, gt=0.0, lt=1.0)
    dpmo: float | None = Field(None, gt=0.0, lt=1e6)
    item_yield: float | None = Field(None, gt=0.0, lt=1.0)
    ppm: float | None = Field(None, gt=0.0, lt=1e6)
    bad: int | None = Field(None, ge=0)
    of: int | None = Field(None, ge=1)
    data: str | None = None
    column: str | None = None
    shift: Nonnegative | None = None
    k: float | None = Field(None, ge=0.0, lt=1.0)
    sides: Literal[1, 2] | None = None
    sample: int | None = Field(None, ge=2)


class Inspection(Table):
    """A gate's inspection; `share_inspected` multiplies finds, earlier, rejects_good and per_item."""

    finds: Share = 1.0
    earlier: Share = 0.0
    rejects_good: float = Field(0.0, ge=0.0, lt=1.0)
    rejects_lost: Share = 1.0
    per_item: Nonnegative = 0.0
    share_inspected: Share = 1.0


class Rework(Table):
    """What happens to an item that a gate finds bad: the share reworked and the cost per rework."""

    share: Share = 0.0
    cost: Nonnegative = 0.0


class Floor(Table):
    """A level that binds whatever money says; exactly one of the three."""

    cpk: Finite | None = None
    sigma_level: Finite | None = None
    dpmo: float | None = Field(None, gt=0.0, lt=1e6)


class Quote(Capability):
    """One quoted level of a `quotes` law and its price on the law's scale."""

    price: Nonnegative | None = None
    per_year: Nonnegative | None = None
    per_item: Nonnegative | None = None


class Law(Table):
    """A continuous cost of improvement; exactly one of price, per_year, per_item (for quotes: in every point)."""

    law: Literal["power", "exponential", "decade", "quotes"]
    exponent: Positive | None = None
    rate: Positive | None = None
    price: Nonnegative | None = None
    per_year: Nonnegative | None = None
    per_item: Nonnegative | None = None
    life_years: Positive | None = None
    at: Capability | None = None
    up_to: Finite | Capability | None = None
    points: tuple[Quote, ...] = ()


class Copies(Table):
    """Redundancy: `installed` items of which `needed` must be good, with a common-cause share."""

    installed: int = Field(ge=1)
    needed: int = Field(ge=1)
    common_cause: Share = 0.0


class Costs(Table):
    """What a purchase or an alternative costs."""

    price: Nonnegative = 0.0
    trade_in: Nonnegative = 0.0
    life_years: Positive | None = None
    resale: Nonnegative = 0.0
    per_year: Finite = 0.0


class Purchase(Costs):
    """Bought once, used by every alternative that names it."""

    name: str


class Alternative(Costs):
    """One thing a step could change, in a group of which at most one is chosen."""

    name: str
    group: str = "machine"
    uses: str | None = None
    per_item: Finite = 0.0
    price_allowance: Finite = 0.0
    capability: Capability | None = None
    k: float | None = Field(None, ge=0.0, lt=1.0)
    shift: Nonnegative | None = None
    widen: float | None = Field(None, ge=1.0, allow_inf_nan=False)
    opportunities: float | None = Field(None, gt=0.0, allow_inf_nan=False)
    copies: Copies | None = None
    inspection: Inspection | None = None
    rework: Rework | None = None


class Step(Table):
    """One step (or bought part): it ends in a gate and feeds exactly one later step."""

    name: str
    supplier: str | None = None
    feeds: str | None = None
    per_unit: Positive = 1.0
    opportunities: Positive = 1.0
    scrap_cost: Nonnegative | None = None
    cost_added: Nonnegative | None = None
    salvage: Nonnegative = 0.0
    capability: Capability
    inspection: Inspection | None = None
    rework: Rework | None = None
    at_least: Floor | None = None
    safety: bool = False
    fixed: bool = False
    improve: Law | None = None
    alternative: tuple[Alternative, ...] = ()


class Demand(Table):
    """How many good units are shipped per year, and over which horizon money is counted."""

    shipped_per_year: Positive
    years: Positive | None = None
    discount_rate: float | None = Field(None, ge=0.0, allow_inf_nan=False)


class Target(Table):
    """The promise, already turned into yields and their losses (1 − yield, exact for many nines)."""

    final_yield: float | None = None
    rolled_yield: float | None = None
    shipped_yield: float | None = None
    losses: dict[YieldName, float] = Field(default_factory=dict)
    escape_cost: Nonnegative = 0.0


class Limits(Table):
    """Limits on money."""

    capital: Nonnegative | None = None


class Default(Table):
    """Set for the whole line where a step says nothing."""

    inspection: Inspection | None = None
    rework: Rework | None = None
    shift: Nonnegative | None = None


class Scenario(Table):
    """One product, one volume: everything the user wrote, already checked."""

    title: str = ""
    currency: str = "EUR"
    demand: Demand
    target: Target = Field(default_factory=Target)
    limits: Limits = Field(default_factory=Limits)
    default: Default = Field(default_factory=Default)
    purchase: tuple[Purchase, ...] = ()
    step: tuple[Step, ...] = Field(min_length=1)
    file: str = ""
