"""How far may the true defects lie from the estimated ones: states of nature drawn by the laws of estimation error.

What a sample of n parts leaves open: σ² by its chi-square law with n − 1 degrees of freedom, the mean by its normal
law, a share of bad parts by the Beta law (Jeffreys). An improved level inherits the relative error of the level that it
starts from (of σ, or of the defects where they are counted); an alternative with a sample of its own has its own error;
what states no sample is taken as exact.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import betaincinv, chdtri, ndtri

from allocator import redundancy
from allocator.capability import log_defects, log_good
from allocator.choice import Outcome
from allocator.flow import Gates, Line, gradient, run
from allocator.problem import Problem
from allocator.scenario.level import ATTRIBUTE, PER_ITEM, given
from allocator.scenario.model import Capability
from allocator.ways import Ways

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
JEFFREYS = 0.5
EXACT = -1


@dataclass(frozen=True)
class Doubts:
    """The estimates behind a problem that state a sample, and which of them each way rests on.

    Parameters
    ----------
    sample : shape (n_sources,) [parts]
    counted : bool, shape (n_sources,)
        Whether bad ones were counted rather than a characteristic measured.
    bad, chances : shape (n_sources,)
        Of a count: bad ones (a fraction where a share was stated) among so many chances.
    step : array of int, shape (n_sources,)
    names : tuple of str
        Alternative, or "" for the step as it stands.
    of_way : array of int, shape (n_ways,)
        The source that each way rests on, EXACT for none.
    centred : bool, shape (n_ways,)
        Where an alternative sets the offset, so that the error of the mean no longer matters.
    """

    sample: Array
    counted: NDArray[np.bool_]
    bad: Array
    chances: Array
    step: Indices
    names: tuple[str, ...]
    of_way: Indices
    centred: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.sample)


def find_doubts(problem: Problem) -> Doubts:
    """Return the estimates with a sample behind a problem's ways."""
    steps, ways = problem.scenario.step, problem.options.ways
    picks = ways.text.picks
    found: list[tuple[Capability, float, int, str]] = []
    of_step, of_alternative = np.full(len(steps), EXACT), np.full(len(picks.alternatives) + 1, EXACT)
    for i, step in enumerate(steps):
        if sample_of(step.capability) is not None:
            of_step[i] = len(found)
            found.append((step.capability, step.opportunities, i, ""))
    replaces, sets_k = (np.zeros(len(picks.alternatives) + 1, dtype=bool) for _ in range(2))
    for a, alternative in enumerate(picks.alternatives):
        sets_k[a] = alternative.k is not None
        if alternative.capability is None:
            continue
        replaces[a] = True
        if sample_of(alternative.capability) is not None:
            of_alternative[a] = len(found)
            step = steps[int(picks.owner[a])]
            found.append((alternative.capability, step.opportunities, int(picks.owner[a]), alternative.name))
    of_way, centred = of_step[ways.step], np.zeros(len(ways), dtype=bool)
    for chosen in picks.members[ways.text.pick].T:
        of_way = np.where(replaces[chosen], of_alternative[chosen], of_way)
        centred |= sets_k[chosen]
    counts = [_count(capability, opportunities) for capability, opportunities, _, _ in found]
    return Doubts(
        sample=np.array([sample_of(capability) for capability, _, _, _ in found], dtype=float),
        counted=np.array([bool(given(capability, ATTRIBUTE)) for capability, _, _, _ in found], dtype=bool),
        bad=np.array([bad for bad, _ in counts]),
        chances=np.array([chances for _, chances in counts]),
        step=np.array([i for _, _, i, _ in found], dtype=np.int64),
        names=tuple(name for _, _, _, name in found),
        of_way=of_way,
        centred=centred,
    )


def sample_of(capability: Capability) -> int | None:
    """Return the parts behind a capability, None where it states none."""
    return capability.of if capability.of is not None else capability.sample


def _count(capability: Capability, opportunities: float) -> tuple[float, float]:
    """Return bad ones and chances behind a counted capability (1 of 2 for a measured one, which has neither)."""
    if not given(capability, ATTRIBUTE):
        return 1.0, 2.0
    sample = float(sample_of(capability) or 0)
    if capability.bad is not None:
        return float(capability.bad), sample
    shares = [1.0 - good for good in (capability.item_yield, capability.yield_) if good is not None]
    shares += [1e-6 * million for million in (capability.ppm, capability.dpmo) if million is not None]
    share = shares[0] if shares else capability.defect_rate or 0.0
    chances = sample if given(capability, PER_ITEM) else sample * opportunities
    return share * chances, chances


@dataclass(frozen=True)
class Nature:
    """Many states of nature: for every source what the truth is relative to the estimate, arrays (n_draws, n_sources).

    `ratio` is the estimated over the true σ, `off` the error of the mean in true σ, `factor` the true over the
    estimated defects of what was counted.
    """

    ratio: Array
    off: Array
    factor: Array


def draw_nature(doubts: Doubts, draws: int, seed: int, stratified: bool = False) -> Nature:
    """Return states of nature.

    Parameters
    ----------
    doubts : Doubts
    draws : int
    seed : int
        The same seed gives the same draws.
    stratified : bool
        Spread the draws of every source evenly over its law (for a search, not for a check).
    """
    n = len(doubts)
    nature = Nature(np.ones((draws, n)), np.zeros((draws, n)), np.ones((draws, n)))
    for s in range(n):
        _draw(nature, doubts, s, 1.0, seed, stratified)
    return nature


def with_larger_samples(nature: Nature, doubts: Doubts, times: Mapping[int, float], seed: int) -> Nature:
    """Return stratified states in which some samples are so many times larger, their estimates kept, all else the same.

    Parameters
    ----------
    nature : Nature
        Stratified, of the same seed.
    times : mapping
        By source.
    """
    larger = Nature(nature.ratio.copy(), nature.off.copy(), nature.factor.copy())
    for s, more in times.items():
        _draw(larger, doubts, s, more, seed, stratified=True)
    return larger


def _draw(nature: Nature, doubts: Doubts, s: int, more: float, seed: int, stratified: bool) -> None:
    """Fill one source's column, each source from its own stream so that the others stay as they are."""
    rng = np.random.default_rng([seed, s])
    chance, second = (_chances(rng, len(nature.ratio), stratified) for _ in range(2))
    if doubts.counted[s]:
        bad, chances = doubts.bad[s] * more, doubts.chances[s] * more
        estimate = doubts.bad[s] / doubts.chances[s] if bad > 0.0 else -np.expm1(np.log(0.5) / doubts.chances[s])
        true = betaincinv(bad + JEFFREYS, chances - bad + JEFFREYS, chance)
        nature.factor[:, s] = np.log1p(-true) / np.log1p(-estimate)
    else:
        sample = doubts.sample[s] * more
        nature.ratio[:, s] = np.sqrt(chdtri(sample - 1.0, chance) / (sample - 1.0))
        nature.off[:, s] = ndtri(second) / np.sqrt(sample)


def _chances(rng: np.random.Generator, draws: int, stratified: bool) -> Array:
    if not stratified:
        return np.asarray(rng.uniform(1e-12, 1.0 - 1e-12, draws))
    return np.asarray((rng.permutation(draws) + rng.random(draws)) / draws).clip(1e-12, 1.0 - 1e-12)


def true_intensity(nature: Nature, doubts: Doubts, ways: Ways, rows: Indices, z: Array) -> Array:
    """Return δ [defects per item] of some ways in doubt at estimated level z in every state, shape (n_draws, n_rows).

    Parameters
    ----------
    rows : array of int
        Ways that rest on a source.
    z : shape (n_rows,) [σ]
        Level that the estimate says.
    """
    source, states = doubts.of_way[rows], ways.states.take(rows)
    levels, two = states.levels, states.levels.sides == 2
    ratio, off = nature.ratio[:, source], nature.off[:, source]
    start = np.maximum(levels.sigma_level, 1e-9)
    # Two limits: the mean's error moves the offset. One limit: it moves the distance to it, and so the level.
    moved = np.where(doubts.centred[rows], 0.0, off / (start * ratio))
    k = np.where(two, np.abs(levels.k + moved), levels.k)
    level = z * np.where(two, ratio, np.maximum(ratio * (1.0 + moved), 0.0))
    counted = doubts.counted[source]
    log_p = log_defects(np.where(counted, z, level), np.where(counted, levels.k, k), levels.shift, levels.sides)
    copied = np.flatnonzero(states.copied)
    if len(copied):
        copies = (getattr(states, name)[copied] for name in ("installed", "needed", "common_cause"))
        log_p[:, copied] = np.log(np.maximum(redundancy.failure(np.exp(log_p[:, copied]), *copies), 1e-300))
    return np.asarray(-states.opportunities * log_good(log_p) * nature.factor[:, source])


def slopes(line: Line, gates: Gates, name: str) -> Array:
    """Return by how much the load of a yield rises with each step's defects, shape (n_steps,)."""
    q = line.per_finished
    if name == "rolled_yield":
        return q
    found = np.zeros(line.n_steps) if name == "shipped_yield" else q * (1.0 - gates.reworked)
    return gradient(line, gates, found, 1.0)


@dataclass(frozen=True)
class Shown:
    """A choice in every state of nature: the steps in doubt and their δ, shape (n_draws, n_in_doubt)."""

    steps: Indices
    delta: Array


def seen_in(nature: Nature, doubts: Doubts, problem: Problem, outcome: Outcome) -> Shown:
    """Return the defects of an evaluated choice of the problem's own ways in every state of nature."""
    rows, ways = outcome.choice.rows, problem.options.ways
    steps = np.flatnonzero(doubts.of_way[rows] != EXACT)
    delta = true_intensity(nature, doubts, ways, rows[steps], outcome.choice.z[steps])
    return Shown(steps, delta)


def budget_used(shown: Shown, problem: Problem, outcome: Outcome) -> Array:
    """Return the used part of the tightest budget in every state, 1 = just met, shape (n_draws,)."""
    used = []
    for name, budget in problem.budgets.items():
        slope = slopes(problem.line, outcome.flow.gates, name)[shown.steps]
        more = (shown.delta - outcome.flow.intensity[shown.steps]) @ slope
        used.append((outcome.loads[name] + more) / budget)
    return np.asarray(np.max(np.stack(used), axis=0))


def inflated(problem: Problem, factor: Array, priced_at: Outcome | None = None) -> Problem:
    """Return the problem with the defects of every way multiplied; levels, laws and floors stay.

    Parameters
    ----------
    factor : shape (n_ways,)
    priced_at : Outcome, optional
        A choice at which scrap, rework and escapes shall cost what they do with the defects as they are, so that only
        the budgets see more of them.
    """
    ways, line = problem.options.ways, problem.line
    gates = ways.gates
    if priced_at is not None:
        gates = replace(gates, rework_cost=gates.rework_cost / factor)
        line = _priced_alike(line, priced_at, factor[priced_at.choice.rows])
    lines = {w: (knots * factor[w], costs) for w, (knots, costs) in ways.lines.pieces.items()}
    more = replace(
        ways,
        curves=replace(ways.curves, opportunities=ways.curves.opportunities * factor),
        delta_low=ways.delta_low * factor,
        delta_high=ways.delta_high * factor,
        gates=gates,
        lines=replace(ways.lines, pieces=lines),
    )
    return replace(problem, line=line, options=replace(problem.options, ways=more))


def _priced_alike(line: Line, outcome: Outcome, factor: Array) -> Line:
    """Return the line with scrap and escapes priced so that the multiplied defects cost what the estimated ones do."""
    seen = outcome.flow
    more = run(line, seen.intensity * factor, seen.gates)
    with np.errstate(all="ignore"):
        scrap = np.nan_to_num(np.expm1(seen.exponent) / np.expm1(more.exponent), nan=1.0, posinf=1.0)
        escapes = float(np.nan_to_num(np.divide(seen.escapes, more.escapes), nan=1.0, posinf=1.0))
    return replace(line, net_cost=line.net_cost * scrap, escape_cost=line.escape_cost * escapes)
