"""Which levels do many quoted capabilities stand for: `level.resolve` for a whole line at once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from operator import attrgetter
from typing import Any, SupportsIndex

import numpy as np
from numpy.typing import NDArray

from allocator.capability import log_defects, sigma_from_log_defects
from allocator.scenario.level import ATTRIBUTE, MEDIAN_CHANCE, ROUNDED, Level, resolve
from allocator.scenario.model import Capability

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]


@dataclass(frozen=True)
class Levels:
    """Many levels, arrays of shape (n_levels,); an index gives one `Level`."""

    sigma_level: Array
    shift: Array
    k: Array
    sides: NDArray[np.int64]
    attribute: Flags

    def __len__(self) -> int:
        return len(self.sigma_level)

    def __getitem__(self, i: SupportsIndex) -> Level:
        return Level(*(getattr(self, f.name)[i].item() for f in fields(self)))

    def take(self, rows: Any) -> Levels:
        """Return the levels of some rows (a copy)."""
        return Levels(*(getattr(self, f.name)[rows] for f in fields(self)))

    @property
    def log_p(self) -> Array:
        """ln of the defect probability per opportunity."""
        return np.asarray(log_defects(self.sigma_level, self.k, self.shift, self.sides), dtype=float)


def column(tables: Sequence[Any], name: str) -> Array:
    """Return one figure of many tables, nan where it is not given, shape (len(tables),)."""
    values = list(map(attrgetter(name), tables))
    if values.count(None) == len(values):
        return np.full(len(values), np.nan)
    return np.array(values, dtype=float)


def given_in(values: Array) -> Flags:
    """Return where a column holds a figure."""
    return ~np.isnan(values)


def resolve_all(
    capabilities: Sequence[Capability],
    opportunities: Array,
    inherited: Levels | None = None,
    default_shift: float | None = None,
) -> Levels:
    """Return the level of every capability; parameters and rules as in `level.resolve`, one entry per capability.

    Raises
    ------
    RangeError
        As `level.resolve` does, for the first capability that it refuses.
    """
    quoted = _Quoted(capabilities)
    with np.errstate(all="ignore"):
        k, k_refused = _offsets(quoted, inherited)
        shift = _shifts(quoted, inherited, default_shift)
        sides = _sides(quoted, inherited)
        z = _measured(quoted, k)
        attribute = np.logical_or.reduce([quoted.has(name) for name in ATTRIBUTE])
        counted = np.flatnonzero(attribute)
        log_p = np.log(_probability(quoted, opportunities)[counted])
        z[counted] = sigma_from_log_defects(log_p, k[counted], shift[counted], sides[counted])
    for i in np.flatnonzero(k_refused | np.isnan(z) | (quoted["bad"] >= quoted["of"])).tolist():
        before = None if inherited is None else inherited[i]
        resolve(capabilities[i], float(opportunities[i]), before, default_shift)  # raises, with its figures
    return Levels(z, shift, k, sides, attribute)


class _Quoted:
    """The figures of many capabilities by name, each column read once."""

    def __init__(self, capabilities: Sequence[Capability]) -> None:
        self.capabilities = capabilities
        self.given: set[str] = set().union(*[capability.model_fields_set for capability in capabilities])
        self.columns: dict[str, Array] = {}

    def __getitem__(self, name: str) -> Array:
        if name not in self.columns:
            nowhere = np.full(len(self.capabilities), np.nan)
            self.columns[name] = column(self.capabilities, name) if name in self.given else nowhere
        return self.columns[name]

    def has(self, name: str) -> Flags:
        return given_in(self[name])


def _offsets(quoted: _Quoted, inherited: Levels | None) -> tuple[Array, Flags]:
    """Return k as named by each capability, else inherited, else 0, and where its figures allow no process."""
    whole = np.where(quoted.has("cp"), quoted["cp"], quoted["pp"])
    near = np.where(quoted.has("cp"), quoted["cpk"], quoted["ppk"])
    lsl, usl, mean = quoted["lsl"], quoted["usl"], quoted["mean"]
    by_limits = np.abs(mean - 0.5 * (lsl + usl)) / (0.5 * (usl - lsl))
    by_indices = 1.0 - near / whole
    worked_out = np.where(given_in(by_indices), by_indices, by_limits)
    worked_out = np.where((worked_out >= -ROUNDED) & (worked_out < 0.0), 0.0, worked_out)
    k = np.where(given_in(worked_out), worked_out, quoted["k"])
    otherwise = 0.0 if inherited is None else np.where(quoted.has("lsl") | quoted.has("usl"), 0.0, inherited.k)
    k = np.where(given_in(k), k, otherwise)
    return k, ~((k >= 0.0) & (k < 1.0))


def _shifts(quoted: _Quoted, inherited: Levels | None, default_shift: float | None) -> Array:
    otherwise = inherited.shift if inherited is not None else (default_shift or 0.0)
    shift = np.where(quoted.has("shift"), quoted["shift"], otherwise)
    return np.where(quoted.has("pp") | quoted.has("ppk"), 0.0, shift)


def _sides(quoted: _Quoted, inherited: Levels | None) -> NDArray[np.int64]:
    limits = quoted.has("lsl").astype(np.int64) + quoted.has("usl")
    near_tail_only = ~(quoted.has("cp") | quoted.has("pp") | quoted.has("sigma_level"))
    otherwise = np.where(near_tail_only, 1, 2) if inherited is None else inherited.sides
    sides = np.where(quoted.has("sides"), quoted["sides"], np.where(limits > 0, limits, otherwise))
    return sides.astype(np.int64)


def _measured(quoted: _Quoted, k: Array) -> Array:
    """Return the sigma level of measured capabilities, nan where none is given."""
    whole = np.where(quoted.has("cp"), quoted["cp"], quoted["pp"])
    near = np.where(quoted.has("cpk"), quoted["cpk"], quoted["ppk"])
    lsl, usl, mean, std = quoted["lsl"], quoted["usl"], quoted["mean"], quoted["std"]
    distance = np.where(quoted.has("usl"), usl - mean, mean - lsl)
    by_limits = np.where(quoted.has("lsl") & quoted.has("usl"), 0.5 * (usl - lsl), distance) / std
    return _first(quoted["sigma_level"], 3.0 * whole, 3.0 * near / (1.0 - k), by_limits)


def _probability(quoted: _Quoted, opportunities: Array) -> Array:
    """Return p per opportunity of capabilities given as a probability or a count, nan for measured ones."""
    none_bad = -np.expm1(np.log(MEDIAN_CHANCE) / quoted["of"])
    share = np.where(quoted["bad"] == 0.0, none_bad, quoted["bad"] / quoted["of"])
    per_item = _first(1.0 - quoted["item_yield"], quoted["ppm"] * 1e-6, share)
    # p = 1 − (1 − x)^(1/n), by log1p and expm1 because x is often a few ppm.
    from_items = -np.expm1(np.log1p(-per_item) / opportunities)
    return _first(1.0 - quoted["yield_"], quoted["defect_rate"], quoted["dpmo"] * 1e-6, from_items)


def _first(*columns: Array) -> Array:
    """Return the first figure given in each row."""
    found = columns[0]
    for more in columns[1:]:
        found = np.where(given_in(found), found, more)
    return found
