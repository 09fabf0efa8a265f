"""How far do the steps' laws of improvement take their states."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator import laws
from allocator.curves import Curves
from allocator.scales import LawsInUse
from allocator.scenario.model import Capability, Step
from allocator.states import States, floor_sigmas, sigmas_meant
from allocator.stretch import Stretch, convex_stretches, known_convex

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
Flags = NDArray[np.bool_]
SLACK = 1e-12
"""Relative slack on levels: a floor written as the present level is kept by it."""
NO_LAW, FIXED, QUOTED, STATED, TENTH, HELD = range(6)
CAP_WORDS = (
    "no law of improvement",
    "fixed by the scenario",
    "the best level quoted",
    "up_to (sigma level {:.4g})",
    "one tenth of its starting defects (no up_to is given)",
    "held at the level that was asked for",
)
"""What ends a way, by code; the level that `up_to` states goes into the braces."""


@dataclass(frozen=True)
class Caps:
    """How far each state's law reaches and what stops it (see `CAP_WORDS`), arrays of shape (n_states,)."""

    high: Array
    code: Indices

    def words(self, i: int) -> str:
        return CAP_WORDS[self.code[i]].format(self.high[i])

    def all_words(self, rows: Indices) -> list[str]:
        """Return the words of some states."""
        stated = zip(self.code[rows].tolist(), self.high[rows].tolist(), strict=True)
        return [CAP_WORDS[code].format(high) if code == STATED else CAP_WORDS[code] for code, high in stated]


@dataclass(frozen=True)
class Reaches:
    """The stretches of levels that states reach, in the order of the states.

    Parameters
    ----------
    state : array of int, shape (n_stretches,)
    low, high : shape (n_stretches,) [σ]
    lines : dict
        The straight pieces that stand for the law, by stretch.
    improves : bool, shape (n_states,)
        Where a law pays for better levels.
    caps : Caps
    notes : tuple
        What was noticed on the way.
    """

    state: Indices
    low: Array
    high: Array
    lines: dict[int, tuple[Array, Array]]
    improves: Flags
    caps: Caps
    notes: tuple[str, ...]


def reaches(steps: Sequence[Step], states: States, owner: Indices, in_use: LawsInUse, today: Array) -> Reaches:
    """Return what the states reach; a state that cannot keep its step's floor reaches nothing.

    Parameters
    ----------
    steps : sequence of Step
    states : States
    owner : array of int, shape (n_states,)
        The step of each state.
    in_use : LawsInUse
    today : shape (n_steps,) [σ]
        Sigma level of every step as it stands.
    """
    start, law = states.levels.sigma_level, in_use.kind[owner]
    caps = _caps([step.improve.up_to if step.improve else None for step in steps], states, owner, in_use)
    improves = (law != cv.NONE) & (caps.high > start)
    notes = _beyond_the_cap(steps, start, owner, caps, np.flatnonzero((law != cv.NONE) & ~improves))
    floor = floor_sigmas([step.at_least for step in steps], states, owner)
    low = np.where(floor <= start + SLACK * np.abs(start), start, floor)
    high = np.where(improves, caps.high, start)
    keeps = low <= high + SLACK * np.abs(high)
    low = np.where(improves, np.minimum(low, high), start)
    curves = states.curves(law, in_use.parameter[owner], in_use.scale[owner])
    pieces = {}
    for i in _in_pieces(curves, low, high, keeps & improves).tolist():
        one = curves.take([i])
        if law[i] == cv.LINES:
            step = owner[i].item()
            stretch, above = _quoted_stretch(one, today[step].item(), in_use.knots[step], low[i].item(), high[i].item())
            pieces[i] = [stretch]
            notes += [(i, f"'{steps[step].name}': {words}") for words in above]
        else:
            pieces[i] = convex_stretches(one, low[i].item(), high[i].item())
    fixed = np.array([step.fixed for step in steps], dtype=bool)
    caps = Caps(caps.high, np.where(fixed[owner], FIXED, caps.code))
    told = tuple(note for _, note in sorted(notes, key=lambda note: note[0]))
    return _laid_out(low, high, keeps, pieces, improves, caps, told)


def _laid_out(
    low: Array,
    high: Array,
    keeps: Flags,
    pieces: dict[int, list[Stretch]],
    improves: Flags,
    caps: Caps,
    notes: tuple[str, ...],
) -> Reaches:
    """Put stretches in a row: none where a floor is not kept, several where a law comes in pieces, else one."""
    counts = keeps.astype(np.int64)
    for i, stretches in pieces.items():
        counts[i] = len(stretches)
    first = np.cumsum(counts) - counts
    state = np.repeat(np.arange(len(counts)), counts)
    z_low, z_high, lines = low[state], high[state], {}
    for i, stretches in pieces.items():
        for row, stretch in enumerate(stretches, first[i].item()):
            z_low[row], z_high[row] = stretch.low, stretch.high
            if stretch.lines is not None:
                lines[row] = stretch.lines
    return Reaches(state, z_low, z_high, lines, improves, caps, notes)


def _in_pieces(curves: Curves, low: Array, high: Array, reached: Flags) -> Indices:
    """Return the states whose law has to be looked at on its own: quotes, and what theory does not call convex."""
    unsure = np.flatnonzero(reached & (curves.kind != cv.LINES) & (low != high))
    convex = known_convex(curves.take(unsure), low[unsure])
    return np.union1d(np.flatnonzero(reached & (curves.kind == cv.LINES)), unsure[~convex])


def _caps(up_to: Sequence[float | Capability | None], states: States, owner: Indices, in_use: LawsInUse) -> Caps:
    """Return how far the law of each state's step reaches, its own level where there is no law."""
    law, start = in_use.kind[owner], states.levels.sigma_level
    quoted = law == cv.LINES
    high, code = np.where(law == cv.NONE, start, np.inf), np.where(law == cv.NONE, NO_LAW, QUOTED)
    if in_use.knots:
        best = np.full(len(in_use.kind), np.inf)
        for step, (levels, _) in in_use.knots.items():
            best[step] = levels.max()
        high[quoted] = best[owner[quoted]]
    stated = _stated_caps(up_to, states, owner)
    lower = stated < high
    high, code = np.where(lower, stated, high), np.where(lower, STATED, code)
    open_ended = np.flatnonzero((law != cv.NONE) & ~quoted & np.isnan(stated))
    if len(open_ended):
        here = states.take(open_ended)
        high[open_ended] = here.sigma_at(here.log_p_at(here.levels.sigma_level) - laws.LOG_TEN)
        code[open_ended] = TENTH
    return Caps(high, code)


def _stated_caps(up_to: Sequence[float | Capability | None], states: States, owner: Indices) -> Array:
    """Return the sigma level that `up_to` means in each state, nan where it is not given."""
    of_step = np.array([np.nan if isinstance(cap, Capability) or cap is None else cap for cap in up_to], dtype=float)
    stated = of_step[owner]
    named = {i: cap for i, cap in enumerate(up_to) if isinstance(cap, Capability)}
    if named:
        is_named = np.zeros(len(up_to), dtype=bool)
        is_named[list(named)] = True
        rows = np.flatnonzero(is_named[owner])
        stated[rows] = sigmas_meant([named[i] for i in owner[rows].tolist()], states.take(rows))
    return stated


def _beyond_the_cap(
    steps: Sequence[Step], start: Array, owner: Indices, caps: Caps, rows: Indices
) -> list[tuple[int, str]]:
    """Say for some states that their law ends below them, each with the state's own place."""
    return [
        (
            i,
            f"'{steps[owner[i]].name}': {caps.words(i)} does not lie above sigma level {start[i]:.4g}, where the step "
            "then stands already: the law adds nothing",
        )
        for i in rows.tolist()
    ]


def _quoted_stretch(
    curve: Curves, today: float, knots: tuple[Array, Array], low: float, high: float
) -> tuple[Stretch, list[str]]:
    """Return the envelope of the quotes in a state's own intensity, and in words which quotes lie above it."""
    z, cost = np.append(today, knots[0]), np.append(0.0, knots[1])
    many = curve.take(np.zeros(len(z), dtype=int))
    delta, costs, kept = laws.lower_envelope(cv.intensity(many, z), cost)
    above = [
        f"quote {quote} (sigma level {z[quote]:.4g}) is never used: the others reach its level for no more"
        for quote in np.flatnonzero(~kept)
        if quote > 0
    ]
    ends = cv.intensity(curve.take(np.zeros(2, dtype=int)), np.array([high, low]))
    start = cv.intensity(curve, curve.start)[0]
    inside = (delta > ends[0]) & (delta < ends[1])
    levels = np.unique(np.concatenate([ends, delta[inside]]))
    above_start = np.interp(levels, delta, costs) - np.interp(start, delta, costs)
    return Stretch(low, high, (levels, np.maximum(above_start, 0.0))), above
