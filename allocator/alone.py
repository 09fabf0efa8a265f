"""What is the line with one thing added and nothing else, and which is the best plan that takes it?"""

from __future__ import annotations

import numpy as np

from allocator.asker import ask, total_of
from allocator.problem import Problem
from allocator.solve.road import Solved, solve
from allocator.stands import Stand, stand_of, stand_with_only
from allocator.variants import ALTERNATIVE, LAW, PURCHASE, Thing, forced, things, without


def answer(problem: Problem, wider: Solved | None = None) -> Solved | None:
    """Return the best plan of a question, None where nothing keeps its targets, floors and limits.

    Parameters
    ----------
    problem : Problem
    wider : Solved, optional
        The best plan of the same question with more to choose from: where it is still to be had it is the best here
        too, else the search starts near it.
    """
    if wider is not None:
        return wider if _still_there(problem, wider) else ask(problem, wider)
    if problem.options.no_way:
        return None
    solved = solve(problem)
    return None if solved.outcome is None else solved


def _still_there(problem: Problem, wider: Solved) -> bool:
    assert wider.outcome is not None
    return bool((problem.options.ways.find(wider.problem.options.ways, wider.outcome.choice.rows) >= 0).all())


def best_with(problem: Problem, thing: Thing) -> Solved | None:
    """Return the best plan that takes a thing, all else planned anew; None where there is none."""
    answers = [solved for asked in forced(problem, thing) if (solved := answer(asked)) is not None]
    return min(answers, key=total_of, default=None)


def with_only(problem: Problem, step: int, thing: Thing | None) -> Problem:
    """Return the question with one step run by one thing and no other alternative (None: as it is), the rest free.

    On top of an alternative the step's law stays free: a better machine may be improved further.
    """
    asked = problem if thing is None or thing.kind == LAW else forced(problem, thing)[0]
    for other in things(problem):
        if other.step == step and other != thing and not (other.kind == LAW and thing is not None):
            asked = without(asked, other)
    return asked


def stand(problem: Problem, solved: Solved) -> Stand:
    """Return the line as an answer runs it."""
    assert solved.outcome is not None
    return stand_of(problem, solved.problem.options.ways, solved.outcome)


def users(thing: Thing, best: Solved) -> list[int]:
    """Return the steps whose way in a plan uses a shared purchase."""
    assert best.outcome is not None
    uses = best.problem.options.ways.uses[best.outcome.choice.rows, thing.place]
    return [int(i) for i in np.flatnonzero(uses)]


def line_alone(problem: Problem, thing: Thing, best: Solved | None) -> Stand | None:
    """Return today's line with the one thing added and nothing else; None where no way of its step is that alone.

    A shared purchase needs a plan to say which steps use it, a law to say how far it goes.
    """
    if best is None and thing.kind != ALTERNATIVE:
        return None
    rows = {}
    for i in users(thing, best) if thing.kind == PURCHASE and best is not None else [thing.step]:
        found = _row_alone(problem, thing, i, best)
        if found is None:
            return None
        rows[i] = (problem.options.ways, *found)
    return stand_with_only(problem, rows) if rows else None


def _row_alone(problem: Problem, thing: Thing, i: int, best: Solved | None) -> tuple[int, float] | None:
    """Return the way and level of one step that take the thing and nothing else there."""
    ways, names = problem.options.ways, _names_alone(problem, thing, i, best)
    mine = [int(w) for w in np.flatnonzero(ways.step == i) if ways.text[w].alternatives == names]
    if not mine:
        return None
    if thing.kind != LAW or best is None or best.outcome is None:
        return mine[0], float(ways.z_low[mine[0]])
    wanted = float(best.outcome.choice.z[i])
    row = next((w for w in mine if ways.z_low[w] <= wanted <= ways.z_high[w]), mine[-1])
    return row, float(np.clip(wanted, ways.z_low[row], ways.z_high[row]))


def _names_alone(problem: Problem, thing: Thing, i: int, best: Solved | None) -> tuple[str, ...]:
    if thing.kind == ALTERNATIVE:
        return (thing.name,)
    if thing.kind == LAW or best is None or best.outcome is None:
        return ()
    taken = best.problem.options.ways.text[int(best.outcome.choice.rows[i])].alternatives
    return tuple(a.name for a in problem.scenario.step[i].alternative if a.name in taken and a.uses == thing.name)
