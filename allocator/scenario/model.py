"""What the user wrote: the tables of a scenario as plain, frozen records (no files, no maths)."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Discriminator, Field, Tag

LARGEST = 1e30
"""Beyond every figure a line can have, and small enough that no product of a few of them overflows."""
MOST_COUNTED = 10**12
MOST_COPIES = 1000
STEEPEST = 100.0
"""Largest exponent or rate of a law: a tenth of a sigma already multiplies its cost."""

# Strict: "1.2" in quotes and true are no numbers; 1 is one.
Finite = Annotated[float, Field(strict=True, allow_inf_nan=False, ge=-LARGEST, le=LARGEST)]
Nonnegative = Annotated[Finite, Field(ge=0.0)]
Positive = Annotated[Finite, Field(gt=0.0)]
Share = Annotated[Finite, Field(ge=0.0, le=1.0)]
OpenShare = Annotated[Finite, Field(gt=0.0, lt=1.0)]
BelowOne = Annotated[Finite, Field(ge=0.0, lt=1.0)]
PerMillion = Annotated[Finite, Field(gt=0.0, lt=1e6)]
Factor = Annotated[Finite, Field(ge=1.0)]
Count = Annotated[int, Field(strict=True, ge=1, le=MOST_COUNTED)]
CopyCount = Annotated[int, Field(strict=True, ge=1, le=MOST_COPIES)]
Steepness = Annotated[Finite, Field(gt=0.0, le=STEEPEST)]
Flag = Annotated[bool, Field(strict=True)]
Name = Annotated[str, Field(strict=True, min_length=1)]
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

    sigma_level: Positive | None = None
    cp: Positive | None = None
    cpk: Finite | None = None
    pp: Positive | None = None
    ppk: Finite | None = None
    lsl: Finite | None = None
    usl: Finite | None = None
    mean: Finite | None = None
    std: Positive | None = None
    yield_: OpenShare | None = Field(None, alias="yield")
    defect_rate: OpenShare | None = None
    dpmo: PerMillion | None = None
    item_yield: OpenShare | None = None
    ppm: PerMillion | None = None
    bad: int | None = Field(None, strict=True, ge=0, le=MOST_COUNTED)
    of: Count | None = None
    data: str | None = None
    column: str | None = None
    subgroup: str | None = None
    shift: Nonnegative | None = None
    k: BelowOne | None = None
    sides: Literal[1, 2] | None = None
    sample: int | None = Field(None, strict=True, ge=2, le=MOST_COUNTED)


class Inspection(Table):
    """A gate's inspection; `share_inspected` multiplies finds, earlier, rejects_good and per_item."""

    finds: Share = 1.0
    earlier: Share = 0.0
    rejects_good: BelowOne = 0.0
    rejects_lost: Share = 1.0
    per_item: Nonnegative = 0.0
    share_inspected: Share = 1.0


class Rework(Table):
    """What happens to an item that a gate finds bad: the share reworked and the cost per rework."""

    share: Share = 0.0
    cost: Nonnegative = 0.0


class Floor(Table):
    """A level that binds whatever money says; exactly one of the three."""

    cpk: Positive | None = None
    sigma_level: Positive | None = None
    dpmo: PerMillion | None = None


class Quote(Capability):
    """One quoted level of a `quotes` law and its price on the law's scale."""

    price: Nonnegative | None = None
    per_year: Nonnegative | None = None
    per_item: Nonnegative | None = None


NUMBER_TAG, TABLE_TAG = "<number>", "<table>"
"""Names of the two forms of `up_to` in pydantic's errors; no key can be spelled like them."""


def _form_of_cap(value: object) -> str:
    return TABLE_TAG if isinstance(value, (dict, Capability)) else NUMBER_TAG


class Law(Table):
    """A continuous cost of improvement; exactly one of price, per_year, per_item (for quotes: in every point)."""

    law: Literal["power", "exponential", "decade", "quotes"]
    exponent: Steepness | None = None
    rate: Steepness | None = None
    price: Nonnegative | None = None
    per_year: Nonnegative | None = None
    per_item: Nonnegative | None = None
    price_low: Nonnegative | None = None
    price_high: Nonnegative | None = None
    per_year_low: Nonnegative | None = None
    per_year_high: Nonnegative | None = None
    per_item_low: Nonnegative | None = None
    per_item_high: Nonnegative | None = None
    life_years: Positive | None = None
    at: Capability | None = None
    up_to: (
        Annotated[
            Annotated[Positive, Tag(NUMBER_TAG)] | Annotated[Capability, Tag(TABLE_TAG)], Discriminator(_form_of_cap)
        ]
        | None
    ) = None
    points: tuple[Quote, ...] = ()


class Copies(Table):
    """Redundancy: `installed` items of which `needed` must be good, with a common-cause share."""

    installed: CopyCount
    needed: CopyCount
    common_cause: Share = 0.0


class Costs(Table):
    """What a purchase or an alternative costs; `…_low` and `…_high` say how far an amount may turn out otherwise."""

    price: Nonnegative = 0.0
    price_low: Nonnegative | None = None
    price_high: Nonnegative | None = None
    trade_in: Nonnegative = 0.0
    life_years: Positive | None = None
    resale: Nonnegative = 0.0
    per_year: Finite = 0.0
    per_year_low: Finite | None = None
    per_year_high: Finite | None = None


class Purchase(Costs):
    """Bought once, used by every alternative that names it."""

    name: Name


class Alternative(Costs):
    """One thing a step could change, in a group of which at most one is chosen."""

    name: Name
    group: Name = "machine"
    uses: str | None = None
    per_item: Finite = 0.0
    per_item_low: Finite | None = None
    per_item_high: Finite | None = None
    price_allowance: Finite = 0.0
    capability: Capability | None = None
    k: BelowOne | None = None
    shift: Nonnegative | None = None
    widen: Factor | None = None
    opportunities: Positive | None = None
    copies: Copies | None = None
    inspection: Inspection | None = None
    rework: Rework | None = None


class Step(Table):
    """One step (or bought part): it ends in a gate and feeds exactly one later step."""

    name: Name
    supplier: str | None = None
    feeds: str | None = None
    per_unit: Positive = 1.0
    opportunities: Positive = 1.0
    clustering: Positive | None = None
    scrap_cost: Nonnegative | None = None
    cost_added: Nonnegative | None = None
    salvage: Nonnegative = 0.0
    capability: Capability
    inspection: Inspection | None = None
    rework: Rework | None = None
    at_least: Floor | None = None
    safety: Flag = False
    fixed: Flag = False
    improve: Law | None = None
    alternative: tuple[Alternative, ...] = ()


class Demand(Table):
    """How many good units are shipped per year, and over which horizon money is counted."""

    shipped_per_year: Positive
    years: Positive | None = None
    discount_rate: BelowOne | None = None


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


class Head(Table):
    """Everything of a scenario but its steps."""

    title: str = ""
    currency: str = "EUR"
    demand: Demand
    target: Target = Field(default_factory=Target)
    limits: Limits = Field(default_factory=Limits)
    default: Default = Field(default_factory=Default)
    purchase: tuple[Purchase, ...] = ()


class Scenario(Head):
    """One product, one volume: everything the user wrote, already checked."""

    step: tuple[Step, ...] = Field(min_length=1)
    file: str = ""

    def __repr__(self) -> str:
        return f"Scenario({self.title!r}, {len(self.step):,} steps, from {self.file!r})"
