"""What measurements say about a process: its indices with their limits, what is outside, and what looks odd."""

from __future__ import annotations

from dataclasses import dataclass

from allocator.shown import shown


@dataclass(frozen=True)
class Index:
    """A capability index with its two-sided confidence limits; all None where the characteristic has none."""

    value: float | None
    lower: float | None
    upper: float | None


@dataclass(frozen=True)
class Indices:
    """The four indices (short-term cp, cpk; of all parts pp, ppk) and the parts outside by the model."""

    cp: Index
    cpk: Index
    pp: Index
    ppk: Index
    modelled_ppm: float


@dataclass(frozen=True)
class Signal:
    """A rule of the control chart that the measurements break, and where (subgroups, or rows of the file)."""

    chart: str
    rule: str
    where: tuple[str, ...]


@dataclass(frozen=True)
class Outlier:
    """A value that does not belong with the others; it stays in every figure."""

    row: int
    value: float


@dataclass(frozen=True)
class Fit:
    """How well a distribution describes the values: the Anderson-Darling statistic, adjusted to the sample."""

    family: str
    """'normal', 'lognormal' or 'Weibull'."""
    statistic: float
    p: float | None
    """Chance of a worse fit if the family were right; None where only a critical value is known."""
    doubtful: bool


@shown
@dataclass(frozen=True)
class Study:
    """A capability study: figures of all values in the file, none removed."""

    file: str
    column: str
    subgroup: str | None
    lsl: float | None
    usl: float | None
    n: int
    n_subgroups: int | None
    mean: float
    std_within: float
    within_method: str
    std_total: float
    confidence: float
    indices: Indices
    cpk_method: str
    cpk_at_least: float | None
    ppk_at_least: float | None
    """One-sided lower limits at the same confidence; None for a fitted family."""
    counted: int
    modelled_is_beyond_data: bool
    gauge_share: float | None
    without_gauge: Indices | None
    fit: Fit | None
    """None with too few parts to tell."""
    signals: tuple[Signal, ...]
    outliers: tuple[Outlier, ...] | None
    """None with too few parts to tell."""
    capability_line: str | None
    notes: tuple[str, ...]

    @property
    def counted_ppm(self) -> float:
        return 1e6 * self.counted / self.n

    @property
    def modelled_ppm(self) -> float:
        return self.indices.modelled_ppm
