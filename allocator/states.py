"""How do all steps stand, today and with what is chosen: the states of a line as one table."""

from __future__ import annotations

import sys
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields, replace
from operator import attrgetter
from typing import Any, SupportsIndex

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator import redundancy
from allocator.capability import log_good, sigma_from_log_defects
from allocator.curves import Curves
from allocator.flow import Gates, gate_table
from allocator.picks import Picks
from allocator.scenario.levels import Levels, column, given_in, resolve_all
from allocator.scenario.model import Capability, Floor, Scenario
from allocator.state import State

Array = NDArray[np.float64]
Objects = NDArray[np.object_]


@dataclass(frozen=True)
class States:
    """Many states, arrays of shape (n_states,); an index gives one `State`, made when it is asked for."""

    levels: Levels
    opportunities: Array
    installed: NDArray[np.int64]
    needed: NDArray[np.int64]
    common_cause: Array
    inspection: Objects
    rework: Objects

    def __len__(self) -> int:
        return len(self.opportunities)

    def __getitem__(self, i: SupportsIndex) -> State:
        return State(
            self.levels[i], self.opportunities[i].item(), self.installed[i].item(), self.needed[i].item(),
            self.common_cause[i].item(), self.inspection[i], self.rework[i],
        )  # fmt: skip

    def __iter__(self) -> Iterator[State]:
        return (self[i] for i in range(len(self)))

    def take(self, rows: Any) -> States:
        """Return the states of some rows (a copy)."""
        return States(self.levels.take(rows), *(getattr(self, f.name)[rows] for f in fields(self)[1:]))

    def columns(self) -> list[NDArray[Any]]:
        """Return all the arrays, in one order for all tables of states."""
        return [getattr(part, f.name) for part in (self.levels, self) for f in fields(part) if f.name != "levels"]

    @property
    def copied(self) -> NDArray[np.bool_]:
        return np.asarray(self.installed > 1)

    @property
    def has_cp(self) -> NDArray[np.bool_]:
        """Cp compares two limits with the spread; one limit alone and counted defects have none."""
        return np.asarray((self.levels.sides == 2) & ~self.levels.attribute)

    def log_p_at(self, z: Array) -> Array:
        """ln of the defect probability of one opportunity (of the set, with copies) if one item stood at level z."""
        log_p = replace(self.levels, sigma_level=z).log_p
        some = np.flatnonzero(self.copied)
        if len(some):
            fails = redundancy.failure(np.exp(log_p[some]), *self._copies(some))
            log_p[some] = np.log(np.maximum(fails, sys.float_info.min))
        return log_p

    def sigma_at(self, log_p: Array) -> Array:
        """Sigma level of one item at which the opportunity has the defect probability exp(log_p)."""
        some = np.flatnonzero(self.copied)
        if len(some):
            log_p = log_p.copy()
            log_p[some] = redundancy.one_copy(np.exp(log_p[some]), *self._copies(some))
        levels = self.levels
        return np.asarray(sigma_from_log_defects(log_p, levels.k, levels.shift, levels.sides), dtype=float)

    def _copies(self, rows: NDArray[np.int64]) -> tuple[Any, Any, Any]:
        return self.installed[rows], self.needed[rows], self.common_cause[rows]

    def intensity(self) -> Array:
        """δ [defects per item] of every state as it stands."""
        good: Array = log_good(self.log_p_at(self.levels.sigma_level))
        return -self.opportunities * good

    def gates(self) -> Gates:
        """The gate of every state."""
        return gate_table(self.inspection, self.rework)

    def curves(self, kind: Any = cv.NONE, parameter: Any = 0.0, scale: Any = 0.0) -> Curves:
        """Return the curves of the states under a law (none unless named)."""
        n, levels = len(self), self.levels
        return Curves(
            levels.k, levels.shift, levels.sides, self.opportunities, self.installed, self.needed, self.common_cause,
            levels.sigma_level, np.full(n, kind, dtype=np.int64), np.full(n, parameter, dtype=float),
            np.full(n, scale, dtype=float),
        )  # fmt: skip


def states_today(scenario: Scenario) -> States:
    """Return the state of every step as it stands, the line's defaults filled in."""
    steps, default = scenario.step, scenario.default
    n, opportunities = len(steps), column(steps, "opportunities")
    return States(
        levels=resolve_all([step.capability for step in steps], opportunities, None, default.shift),
        opportunities=opportunities,
        installed=np.ones(n, dtype=np.int64),
        needed=np.ones(n, dtype=np.int64),
        common_cause=np.zeros(n),
        inspection=_objects([s.inspection if s.inspection is not None else default.inspection for s in steps]),
        rework=_objects([s.rework if s.rework is not None else default.rework for s in steps]),
    )


def _objects(values: Sequence[object]) -> Objects:
    # fromiter, because assigning to a slice asks every record first whether it is an array.
    return np.fromiter(values, dtype=object, count=len(values))


def states_with(today: States, picks: Picks) -> States:
    """Return the state that every combination makes of its step, key by key in the fixed order of the model.

    Groups cannot set the same key twice (checked when read), so the order within a key does not matter.
    """
    states = today.take(picks.step)
    if not picks.alternatives:
        return states
    levels = _with_capabilities(states.levels, today, picks)
    for name in ("k", "shift"):
        for rows, values in _set(picks, column(picks.alternatives, name)):
            getattr(levels, name)[rows] = values
    for rows, w in _set(picks, column(picks.alternatives, "widen")):
        levels.sigma_level[rows] *= w
        levels.k[rows] /= w
    states = replace(states, levels=levels)
    for rows, values in _set(picks, column(picks.alternatives, "opportunities")):
        states.opportunities[rows] = values
    for rows, copies in _set_objects(picks, "copies"):
        for name in ("installed", "needed", "common_cause"):
            getattr(states, name)[rows] = column(copies.tolist(), name)
    for name in ("inspection", "rework"):
        for rows, tables in _set_objects(picks, name):
            getattr(states, name)[rows] = tables
    return states


def _with_capabilities(levels: Levels, today: States, picks: Picks) -> Levels:
    """Put the capabilities of what is chosen in the place of today's."""
    own = np.array([a.capability is not None for a in picks.alternatives], dtype=bool)
    those = np.flatnonzero(own)
    if len(those) == 0:
        return levels
    steps = picks.owner[those]
    quoted: list[Any] = [picks.alternatives[a].capability for a in those.tolist()]
    bought = resolve_all(quoted, today.opportunities[steps], today.levels.take(steps))
    place = np.full(len(own) + 1, -1)
    place[those] = np.arange(len(those))
    for chosen in picks.columns():
        rows = np.flatnonzero(place[chosen] >= 0)
        for f in fields(levels):
            getattr(levels, f.name)[rows] = getattr(bought, f.name)[place[chosen[rows]]]
    return levels


def _set(picks: Picks, figures: Array) -> Iterator[tuple[NDArray[np.int64], Array]]:
    """Yield where a figure is set by what is chosen, and to what."""
    figures = np.append(figures, np.nan)  # what −1 stands for
    if not given_in(figures).any():
        return
    for chosen in picks.columns():
        rows = np.flatnonzero(given_in(figures[chosen]))
        yield rows, figures[chosen[rows]]


def _set_objects(picks: Picks, name: str) -> Iterator[tuple[NDArray[np.int64], Objects]]:
    """Yield where a whole table is set by what is chosen, and to which."""
    tables = _objects([*map(attrgetter(name), picks.alternatives), None])
    given = np.array([table is not None for table in tables], dtype=bool)
    if not given.any():
        return
    for chosen in picks.columns():
        rows = np.flatnonzero(given[chosen])
        yield rows, tables[chosen[rows]]


def sigmas_meant(quoted: Sequence[Capability], states: States) -> Array:
    """Return the sigma level that each quoted capability stands for in its state (see `state.sigma_meant`)."""
    own = states.levels
    levels = resolve_all(quoted, states.opportunities, own)
    same_terms = (levels.k == own.k) & (levels.shift == own.shift) & (levels.sides == own.sides)
    z = levels.sigma_level.copy()
    for rows, inverted in ((levels.attribute, States.sigma_at), (~levels.attribute & ~same_terms, _one_item_at)):
        some = np.flatnonzero(rows)
        if len(some):
            z[some] = inverted(states.take(some), levels.take(some).log_p)
    return z


def _one_item_at(states: States, log_p: Array) -> Array:
    levels = states.levels
    return np.asarray(sigma_from_log_defects(log_p, levels.k, levels.shift, levels.sides), dtype=float)


def floor_sigmas(floors: Sequence[Floor | None], states: States, owner: NDArray[np.int64]) -> Array:
    """Return the least sigma level that keeps the floor of each state's step, −inf without one, shape (n_states,)."""
    least = np.full(len(states), -np.inf)
    stated = [floor for floor in floors if floor is not None]
    if not stated:
        return least
    place = np.cumsum([floor is not None for floor in floors]) - 1
    rows = np.flatnonzero(np.array([floor is not None for floor in floors])[owner])
    here = states.take(rows)
    sigma_level, cpk, dpmo = (column(stated, name)[place[owner[rows]]] for name in ("sigma_level", "cpk", "dpmo"))
    kept = np.where(given_in(sigma_level), sigma_level, 3.0 * cpk / (1.0 - here.levels.k))
    counted = np.flatnonzero(given_in(dpmo))
    kept[counted] = here.take(counted).sigma_at(np.log(dpmo[counted] * 1e-6))
    least[rows] = kept
    return least
