"""The same question with a purchase banned or forced, or a step held at a level: rows of the flat table are masked."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from allocator import curves as cv
from allocator.errors import RangeError
from allocator.problem import Problem
from allocator.reach import HELD, NO_LAW, SLACK
from allocator.scenario.faults import did_you_mean, listed
from allocator.scenario.model import Capability
from allocator.state import floor_words
from allocator.states import floor_sigmas, sigmas_meant
from allocator.ways import Lines, Ways, law_cost

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
Flags = NDArray[np.bool_]
LAW, ALTERNATIVE, PURCHASE = "law", "alternative", "purchase"
IMPROVE = "improve"
"""What the law of a step is called where alternatives have names."""
HELD_AS = ("sigma_level", "cpk", "dpmo", "ppm")
"""The figures that a step's level may be held at."""
LARGEST_HELD = {"sigma_level": 40.0, "cpk": 13.0, "dpmo": 1e6, "ppm": 1e6}
LEVEL_KEYS = ("sigma_level", "shift", "k", "sides")
MOST_LISTED = 8


@dataclass(frozen=True)
class Thing:
    """What can be banned or forced: an alternative or the law of a step, or a shared purchase.

    `step` is the index of its step (−1 for a purchase); `place` its index among all alternatives, purchases or steps.
    """

    kind: str
    name: str
    step: int
    place: int


def things(problem: Problem) -> tuple[Thing, ...]:
    """Return everything that can be banned or forced, in file order, shared purchases first."""
    shared = [Thing(PURCHASE, name, -1, p) for p, name in enumerate(problem.options.purchase_names)]
    own, place = [], 0
    for i, step in enumerate(problem.scenario.step):
        for alternative in step.alternative:
            own.append(Thing(ALTERNATIVE, alternative.name, i, place))
            place += 1
        if step.improve is not None:
            own.append(Thing(LAW, IMPROVE, i, i))
    return (*shared, *own)


def find_thing(problem: Problem, text: str) -> Thing:
    """Return what a user means by "NAME", or by "STEP: NAME" or "STEP=NAME" where several steps use the name.

    Raises
    ------
    RangeError
        When nothing bears the name (with the nearest one), or more than one thing does.
    """
    known = things(problem)
    found = [thing for thing in known if text in (thing.name, *_full_names(problem, thing))]
    if len(found) == 1:
        return found[0]
    if found:
        names = [_full_names(problem, thing)[0] for thing in found]
        raise RangeError(f"'{text}' is the name of {len(found)} things; say which: {_some(names)}")
    names = [thing.name for thing in known if thing.kind != LAW] + [_full_names(problem, t)[0] for t in known]
    otherwise = f"there are {_some([_full_names(problem, t)[0] for t in known])}" if known else "the scenario has none"
    raise RangeError(f"'{text}' is no alternative, purchase or law; {did_you_mean(text, names, otherwise)}")


def _full_names(problem: Problem, thing: Thing) -> tuple[str, str]:
    owner = PURCHASE if thing.kind == PURCHASE else problem.scenario.step[thing.step].name
    return f"{owner}: {thing.name}", f"{owner}={thing.name}"


def _some(names: Sequence[str]) -> str:
    more = f" and {len(names) - MOST_LISTED} more" if len(names) > MOST_LISTED else ""
    return listed(names[:MOST_LISTED]) + more


def without(problem: Problem, thing: Thing) -> Problem:
    """Return the question with one thing banned; steps that are left without a way are named in `no_way`."""
    ways = problem.options.ways
    if thing.kind != LAW:
        return _with_ways(
            problem, ways.take(np.flatnonzero(~ways_that_take(problem, thing))), f"'{thing.name}' is not to be had"
        )
    mine = ways.step == thing.step
    first = np.flatnonzero(mine & _first_of_pick(ways))
    first = first[ways.z_low[first] <= ways.curves.start[first] * (1.0 + SLACK)]
    table = ways.take(np.union1d(np.flatnonzero(~mine), first))
    at = np.flatnonzero(table.step == thing.step)
    still = _held_still(table, at, np.minimum(table.curves.start[at], table.z_low[at]), NO_LAW)
    return _with_ways(problem, still, "its law of improvement is not to be had")


def forced(problem: Problem, thing: Thing) -> tuple[Problem, ...]:
    """Return the questions whose best answer is the best plan with one thing forced.

    An alternative gives one. A shared purchase is forced when some step uses it: one question for every step that may.
    A law is continuous and may be used as little as one likes, so to force it is to offer it.
    """
    if thing.kind == LAW:
        return (problem,)
    ways, taken = problem.options.ways, ways_that_take(problem, thing)
    asked = []
    for step in np.unique(ways.step[taken]).tolist():
        table = ways.take(np.flatnonzero(taken | (ways.step != step)))
        asked.append(_with_ways(problem, table, f"'{thing.name}' is forced"))
    return tuple(asked)


def ways_that_take(problem: Problem, thing: Thing) -> Flags:
    """Return which ways take an alternative or use a purchase, bool, shape (n_ways,)."""
    ways = problem.options.ways
    if thing.kind == PURCHASE:
        return ways.uses[:, thing.place]
    return np.asarray((ways.text.picks.members[ways.text.pick] == thing.place).any(axis=1))


def held(problem: Problem, step: str, key: str, value: float) -> Problem:
    """Return the question with one step's level fixed at what its supplier insists on.

    Ways that reach the level pay what their law asks for it; a level below today's costs nothing.

    Parameters
    ----------
    problem : Problem
    step : str
    key : str
        "sigma_level", "cpk" (the study index), "dpmo" (per opportunity) or "ppm" (bad items).
    value : float

    Raises
    ------
    RangeError
        When there is no such step, the level lies below the step's floor, or no way reaches it.
    """
    i = find_step(problem, step)
    largest = LARGEST_HELD.get(key)
    if largest is None:
        raise RangeError(f"'{step}' cannot be held at a {key}; allowed are {', '.join(HELD_AS)}")
    if not 0.0 < value < largest:
        raise RangeError(f"'{step}' cannot be held at {key} {value:g}; it must lie above 0 and below {largest:g}")
    ways, rows = problem.options.ways, np.flatnonzero(problem.options.ways.step == i)
    level = sigmas_meant([Capability.model_validate({key: value})] * len(rows), ways.states.take(rows))
    start, today = ways.curves.start[rows], problem.options.today.levels.sigma_level[i]
    room = SLACK * np.abs(level)
    reached = (level <= ways.z_high[rows] + room) & (level >= np.minimum(start, ways.z_low[rows]) - room)
    conceded = (level < start) & (np.abs(start - today) <= SLACK * abs(today))
    return _pinned(problem, i, rows, level, reached | conceded, f"{key} {value:g}")


def held_at_today(problem: Problem, step: str) -> Problem:
    """Return the question with one step's capability as it stands, its gate still free: its supplier refuses.

    Raises
    ------
    RangeError
        When there is no such step, or it stands below its floor today.
    """
    i = find_step(problem, step)
    ways, today = problem.options.ways, problem.options.today
    rows = np.flatnonzero(ways.step == i)
    states, now = ways.states.take(rows), today.take(np.full(len(rows), i))
    same = np.logical_and.reduce(
        [
            *(getattr(states.levels, name) == getattr(now.levels, name) for name in LEVEL_KEYS),
            *(getattr(states, name) == getattr(now, name) for name in ("opportunities", "installed", "needed")),
            states.common_cause == now.common_cause,
        ]
    )  # fmt: skip
    return _pinned(problem, i, rows, now.levels.sigma_level, same, "today's level")


def find_step(problem: Problem, name: str) -> int:
    """Return the index of a step by its name, or refuse with the nearest one (RangeError)."""
    names = [step.name for step in problem.scenario.step]
    if name not in names:
        raise RangeError(f"'{name}' is no step; {did_you_mean(name, names, f'the steps are {_some(names)}')}")
    return names.index(name)


def _pinned(problem: Problem, i: int, rows: Indices, level: Array, fits: Flags, words: str) -> Problem:
    """Keep of one step the ways that fit, once per choice of alternatives, each at its level."""
    step, ways = problem.scenario.step[i], problem.options.ways
    if not fits.any() and not len(rows):
        raise RangeError(f"'{step.name}' has no way left that could be held at {words}")
    floor = floor_sigmas([step.at_least], ways.states.take(rows), np.zeros(len(rows), dtype=np.int64))
    allowed = level >= floor - SLACK * np.abs(floor)
    if not (fits & allowed).any():
        below = bool((fits & ~allowed).any() or not allowed.any())
        raise RangeError(_why_not(problem, i, rows, below, words))
    kept = np.flatnonzero(fits & allowed)
    kept = kept[np.unique(ways.text.pick[rows[kept]], return_index=True)[1]]
    others = np.flatnonzero(ways.step != i)
    table = ways.take(np.union1d(others, rows[kept]))
    return _with_ways(problem, _held_still(table, np.flatnonzero(table.step == i), level[kept], HELD), "")


def _why_not(problem: Problem, i: int, rows: Indices, below_floor: bool, words: str) -> str:
    step, ways = problem.scenario.step[i], problem.options.ways
    if below_floor:
        kind = "safety floor" if step.safety else "floor"
        return (
            f"'{step.name}' cannot be held at {words}: its {kind} is {floor_words(step.at_least)}, which binds "
            "whatever is agreed; hold it at the floor or above"
        )
    least, most = ways.z_low[rows].min(), ways.z_high[rows].max()
    return (
        f"'{step.name}' cannot be held at {words}: what the scenario offers there reaches sigma level {least:.4g} to "
        f"{most:.4g}; offer an alternative or a higher up_to that leads there"
    )


def _first_of_pick(ways: Ways) -> Flags:
    """Return the first way of every combination of alternatives, the one with the lowest levels."""
    return np.asarray(np.diff(ways.text.pick, prepend=-1) != 0)


def _held_still(table: Ways, at: Indices, z: Array, cap: int) -> Ways:
    """Return the table with some ways held at sigma level z; what their law costs there becomes a fixed cost."""
    caps = table.text.caps
    code = caps.code.copy()
    code[table.text.pick[at]] = cap
    paid = law_cost(table, at, z)
    curves = table.curves
    kind, parameter, scale = curves.kind.copy(), curves.parameter.copy(), curves.scale.copy()
    kind[at], parameter[at], scale[at] = cv.NONE, 0.0, 0.0
    curves = replace(curves, kind=kind, parameter=parameter, scale=scale)
    delta = cv.intensity(curves.take(at), z)
    pieces = {w: piece for w, piece in table.lines.pieces.items() if w not in set(at.tolist())}
    return replace(
        table, curves=curves, lines=Lines(len(table), pieces),
        text=replace(table.text, caps=replace(caps, code=code)),
        z_low=_put(table.z_low, at, z), z_high=_put(table.z_high, at, z),
        delta_low=_put(table.delta_low, at, delta), delta_high=_put(table.delta_high, at, delta),
        fixed_cost=_put(table.fixed_cost, at, table.fixed_cost[at] + paid),
        capital=_put(table.capital, at, table.capital[at] + table.capital_per_cost[at] * paid),
    )  # fmt: skip


def _put(values: Array, at: Indices, new: Array) -> Array:
    changed = values.copy()
    changed[at] = new
    return changed


def _with_ways(problem: Problem, ways: Ways, reason: str) -> Problem:
    found = np.bincount(ways.step, minlength=problem.line.n_steps)
    emptied = tuple(
        (problem.scenario.step[i].name, f"no way to run it is left that keeps its floor ({reason})")
        for i in np.flatnonzero(found == 0).tolist()
    )
    return replace(problem, options=replace(problem.options, ways=ways, no_way=emptied))


def restrained(
    problem: Problem,
    hold: Mapping[str, Mapping[str, float]] | None = None,
    banned: Sequence[str] = (),
    wanted: Sequence[str] = (),
) -> tuple[Problem, ...]:
    """Return the questions whose best answer keeps every restraint (several where a purchase serves several steps).

    Parameters
    ----------
    problem : Problem
    hold : mapping, optional
        By step, the one figure it is held at, as {"weld": {"cpk": 1.33}}.
    banned, wanted : sequence of str
        Names as `find_thing` reads them.

    Raises
    ------
    RangeError
        When a name is unknown or unclear, or a step cannot be held there.
    """
    for step, level in (hold or {}).items():
        if len(level) != 1:
            raise RangeError(f"'{step}' must be held at one figure, as {{'cpk': 1.33}}; found {len(level)}")
        ((key, value),) = level.items()
        problem = held(problem, step, key, value)
    for name in banned:
        problem = without(problem, find_thing(problem, name))
    asked: tuple[Problem, ...] = (problem,)
    for name in wanted:
        thing = find_thing(problem, name)
        asked = tuple(more for one in asked for more in forced(one, thing))
        if not asked:
            raise RangeError(f"'{name}' cannot be forced: with the other restraints kept no step can take it")
    return asked


def restraint_words(
    hold: Mapping[str, Mapping[str, float]] | None, banned: Sequence[str], wanted: Sequence[str]
) -> tuple[str, ...]:
    """Return the restraints as people read them, one each."""
    kept = [f"'{step}' held at {key} {value:g}" for step, level in (hold or {}).items() for key, value in level.items()]
    return (*kept, *(f"without '{name}'" for name in banned), *(f"with '{name}'" for name in wanted))
