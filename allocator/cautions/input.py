"""Which cautions does a scenario itself call for, before anything is solved."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from functools import cache
from typing import get_args

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel

from allocator.capability import study_index
from allocator.cautions.clusters import cautions_of_clusters
from allocator.cautions.offered import (
    cautions_of_alternatives,
    cautions_of_floors,
    cautions_of_purchases,
    cautions_of_quotes,
)
from allocator.problem import Problem, inspection_stated
from allocator.results import Caution
from allocator.scenario.level import LONG_TERM
from allocator.scenario.levels import column, given_in
from allocator.scenario.model import Alternative, Inspection, Step
from allocator.standing import flow_today
from allocator.states import sigmas_meant

Flags = NDArray[np.bool_]
SMALL_SAMPLE = 50
FEW_BAD = 5
MOSTLY = 0.5
"""Share of bad items above which a capability is more likely a slip of units than a process."""
LARGE_SHARE = 0.25
"""False rejects that use this share of the budget are worth saying."""
Z_95 = 1.6448536269514722
"""Normal 95 % point, for one-sided lower limits."""


def cautions_of_input(problem: Problem) -> tuple[Caution, ...]:
    """Return the cautions that the scenario calls for, each once, with the steps that it concerns."""
    found = [caution for look in LOOKS for caution in look(problem)]
    return tuple(found)


def lower_cpk(cpk: float, sample: int) -> float:
    """Return the approximate one-sided 95 % lower limit of Cpk from `sample` parts (Bissell 1990).

    >>> round(lower_cpk(1.33, 50), 4)
    1.0958
    """
    return cpk - Z_95 * math.sqrt(1.0 / (9.0 * sample) + cpk**2 / (2.0 * (sample - 1)))


def _about(code: str, steps: list[str], reason: str, fix: str) -> Iterator[Caution]:
    if steps:
        yield Caution(code, tuple(steps), reason, fix)


def _steps(problem: Problem, test: Callable[[Step, int], bool]) -> list[str]:
    return [step.name for i, step in enumerate(problem.scenario.step) if test(step, i)]


def _offering(problem: Problem, test: Callable[[Alternative], bool]) -> list[str]:
    """Return the names of the steps with an alternative that passes a test."""
    return [step.name for step in problem.scenario.step if step.alternative and any(map(test, step.alternative))]


def _given(problem: Problem, *names: str) -> Flags:
    """Return where a step's own capability gives any of some keys, shape (n_steps,)."""
    capabilities = [step.capability for step in problem.scenario.step]
    return np.asarray(np.logical_or.reduce([given_in(column(capabilities, name)) for name in names]))


def _counting(problem: Problem, least: int, most: int) -> list[str]:
    """Return the names of the steps that count so many bad items, themselves or in an alternative."""

    def offered(alternative: Alternative) -> bool:
        bad = None if alternative.capability is None else alternative.capability.bad
        return bad is not None and least <= bad <= most

    steps = problem.scenario.step
    own = column([step.capability for step in steps], "bad")
    found = (own >= least) & (own <= most)
    for i in _with_alternatives(problem):
        found[i] |= any(map(offered, steps[i].alternative))
    return _named(problem, found)


def _with_alternatives(problem: Problem) -> list[int]:
    return [i for i, step in enumerate(problem.scenario.step) if step.alternative]


def _named(problem: Problem, where: Flags) -> list[str]:
    """Return the names of some steps, given as flags of shape (n_steps,)."""
    return [problem.scenario.step[i].name for i in np.flatnonzero(where).tolist()]


def _one_opportunity(problem: Problem) -> Iterator[Caution]:
    steps = problem.scenario.step
    if len(steps) > 2 and all(step.opportunities == 1.0 for step in steps):
        reason = (
            "every step counts one opportunity per item; a step with ten characteristics fails about ten times as often"
        )
        yield Caution("one_opportunity", (), reason, "set `opportunities` to the number of ways each item can go wrong")


def _long_term(problem: Problem) -> Iterator[Caution]:
    long_term = _given(problem, *LONG_TERM)
    steps = problem.scenario.step
    on_top = [steps[i].name for i in np.flatnonzero(long_term).tolist() if any(a.shift for a in steps[i].alternative)]
    yield from _about(
        "long_term_with_shift", on_top, "an alternative puts a shift on a long-term figure (pp, ppk), which holds the drift already",
        "give the short-term figure (cp, cpk) where a shift applies, or drop the shift",
    )  # fmt: skip
    if problem.scenario.default.shift:
        yield from _about(
            "long_term_keeps_no_shift", _named(problem, long_term),
            f"the line's shift of {problem.scenario.default.shift:g} is not put on a long-term figure (pp, ppk): it would count twice",
            "nothing to do if the figure really is long-term; else give cp, cpk",
        )  # fmt: skip


def _small_sample(problem: Problem) -> Iterator[Caution]:
    for i, step in enumerate(problem.scenario.step):
        sample = step.capability.sample
        if sample is None or sample > SMALL_SAMPLE:
            continue
        level = problem.options.today[i].level
        if level.attribute:
            continue
        cpk = float(study_index(level.sigma_level, level.k))
        reason = f"Cpk {cpk:.2f} from {sample} parts is taken as exact; its 95 % lower limit is about {lower_cpk(cpk, sample):.2f}"
        yield Caution("small_sample", (step.name,), reason, "measure 100 parts or more, or plan on the lower limit")


def _beyond_the_data(problem: Problem) -> Iterator[Caution]:
    today = problem.options.today
    sample = column([step.capability for step in problem.scenario.step], "sample")
    p = np.exp(today.log_p_at(today.levels.sigma_level))
    yield from _about(
        "beyond_the_data", _named(problem, ~today.levels.attribute & (p < 1.0 / (3.0 * sample))),
        "the defect rate lies below one in three times the sample: it is the normal model speaking, not the data",
        "treat these ppm as a model; confirm with counts before money is committed",
    )  # fmt: skip


def _inspection(problem: Problem) -> Iterator[Caution]:
    stated = problem.options.today.inspection
    if not inspection_stated(problem.scenario):
        yield Caution(
            "inspection_assumed", (), "no step states an inspection, so every gate is assumed perfect and the shipped yield is unknown",
            "state `inspection = {finds = …}` where parts are checked; a check rarely finds more than a part of what is wrong",
        )  # fmt: skip
        return
    bought = _steps(problem, lambda s, i: s.supplier is not None and stated[i] is None)
    yield from _about(
        "bought_part_without_inspection", bought,
        "a bought part without a stated inspection is assumed to be checked perfectly before it is used",
        "state the incoming inspection, or finds = 0 where parts go straight to the line",
    )  # fmt: skip
    own = _steps(problem, lambda s, i: s.supplier is None and stated[i] is None)
    yield from _about(
        "gate_assumed_perfect", own, "no inspection is stated here while others state one: this gate is assumed to find all its own defects",
        "state what the check at this step finds",
    )  # fmt: skip
    perfect = _steps(problem, lambda _, i: _finds_all(stated[i]))
    yield from _about(
        "inspection_stated_perfect", perfect, "an inspection that finds everything is rare: 100 % inspected is not 0 ppm",
        "enter the share found in an attribute study of the check",
    )  # fmt: skip
    if all(seen is None or seen.rejects_good == 0.0 for seen in stated):
        yield Caution(
            "no_false_rejects", (), "no inspection rejects good items; real checks do, and the rejects cost starts and scrap",
            "enter `rejects_good` from a repeat test of rejected items",
        )  # fmt: skip
    repeated = _steps(problem, lambda _, i: stated[i] is not None and stated[i].earlier > 0.0)
    if len(repeated) > 1:
        yield Caution(
            "repeated_inspection", tuple(repeated), "several gates look for the same hidden defects and are taken as independent; "
            "with common misses two 80 % checks leak far more than 4 %", "lower `earlier` at the later gates for what all checks miss",
        )  # fmt: skip
    if problem.line.escape_cost == 0.0 and "shipped_yield" not in problem.budgets:
        yield Caution(
            "escapes_cost_nothing", (), "defects can escape, but no escape_cost and no shipped_yield target is set: leaks are free",
            "set target.escape_cost, or a shipped_yield target",
        )  # fmt: skip


def _finds_all(inspection: Inspection | None) -> bool:
    return inspection is not None and inspection.finds * inspection.share_inspected == 1.0


def _counts(problem: Problem) -> Iterator[Caution]:
    yield from _about(
        "zero_bad", _counting(problem, 0, 0), "0 bad found is not 0 ppm; the rate is taken at which none had an even chance, 1 − 0.5^(1/n)",
        "count on a larger lot until a few bad ones are seen",
    )  # fmt: skip
    yield from _about(
        "few_bad", _counting(problem, 1, FEW_BAD - 1), "a rate from fewer than five bad items is uncertain by a factor of two or more",
        "pool more lots, or plan on an upper limit of the count",
    )  # fmt: skip


def _near_tail(problem: Problem) -> Iterator[Caution]:
    near = (_given(problem, "cpk") & ~_given(problem, "cp")) | (_given(problem, "ppk") & ~_given(problem, "pp"))
    yield from _about(
        "near_tail_only", _named(problem, near & (problem.options.today.levels.sides == 1)), "Cpk (Ppk) alone tells only the nearer tail; the far one is left out and recentring cannot be weighed",
        "give cp beside cpk, or the limits with mean and std",
    )  # fmt: skip


def _copies(problem: Problem) -> Iterator[Caution]:
    independent = _offering(problem, lambda a: a.copies is not None and a.copies.common_cause == 0.0)
    yield from _about(
        "copies_without_common_cause", independent,
        "copies are taken to fail independently; a common cause of 2 to 10 % limits the gain to 10 to 50 times",
        "set copies.common_cause from the applicable standard or field data",
    )  # fmt: skip


def _laws(problem: Problem) -> Iterator[Caution]:
    steps = problem.scenario.step
    open_ended = [s.name for s in steps if (i := s.improve) is not None and i.up_to is None and i.law != "quotes"]
    yield from _about(
        "no_up_to", open_ended, "the law states no `up_to`; nothing is extrapolated past one tenth of the starting defects",
        "set up_to to the best level demonstrated or quoted",
    )  # fmt: skip
    yield from _about(
        "at_beyond_cap", _at_out_of_reach(problem), "the level named in `at` lies beyond the law's cap, so the plan cannot go where the price was quoted",
        "set up_to to that level or higher",
    )  # fmt: skip


def _at_out_of_reach(problem: Problem) -> list[str]:
    """Return the steps whose law, with nothing else chosen, ends below the level that its price was stated for."""
    steps, ways = problem.scenario.step, problem.options.ways
    priced = {i: step.improve.at for i, step in enumerate(steps) if step.improve is not None and step.improve.at}
    if not priced:
        return []
    highest, those = ways.highest_unchanged(len(steps)), np.array(list(priced), dtype=np.int64)
    at = sigmas_meant(list(priced.values()), problem.options.today.take(those))
    beyond = (highest[those] > -np.inf) & (at > highest[those] * (1.0 + 1e-9))
    return [steps[i].name for i in those[beyond].tolist()]


def _judged(problem: Problem) -> Iterator[Caution]:
    yield from _about(
        "judged", [s.name for s in problem.scenario.step if is_judged(s)], "figures here are judged, not measured or quoted; the answer rests on them",
        "replace them by quotations or trials before money is committed",
    )  # fmt: skip


def is_judged(table: object) -> bool:
    """Return whether a table, or any table inside it, is marked as judged; a figure never is."""
    if not isinstance(table, BaseModel):
        return False
    given = table.model_fields_set
    if "evidence" in given and getattr(table, "evidence", None) == "judged":
        return True
    for name in given & _tables_in(type(table)):  # What was not given holds nothing that was judged.
        value = table.__dict__[name]
        if any(map(is_judged, value)) if type(value) is tuple else is_judged(value):
            return True
    return False


@cache
def _tables_in(kind: type[BaseModel]) -> frozenset[str]:
    """Return the keys of a kind of table that can hold further tables; looked up once, since lines are long."""
    return frozenset(name for name, field in kind.model_fields.items() if _holds_table(field.annotation))


def _holds_table(annotation: object) -> bool:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return True
    return any(map(_holds_table, get_args(annotation)))


def _safety(problem: Problem) -> Iterator[Caution]:
    yield from _about(
        "safety", [step.name for step in problem.scenario.step if step.safety],
        "a safety characteristic is a floor that money never trades away; the floor itself is not set by this program",
        "follow the governing code and let a qualified, where required licensed, practitioner decide",
    )  # fmt: skip


def _widening(problem: Problem) -> Iterator[Caution]:
    yield from _about(
        "wider_spec", _offering(problem, lambda a: bool(a.widen)), "widening a specification changes the product",
        "record the functional evidence and the design authority's approval first",
    )  # fmt: skip


def _rework(problem: Problem) -> Iterator[Caution]:
    rework = problem.options.today.rework
    free = _steps(problem, lambda _, i: bool((r := rework[i]) and r.share > 0.0 and r.cost == 0.0))
    yield from _about(
        "free_rework", free, "rework is entered as costing nothing; hidden rework is what a good final yield hides",
        "enter rework.cost: labour, parts and the second check",
    )  # fmt: skip


def _shifts(problem: Problem) -> Iterator[Caution]:
    levels = problem.options.today.levels
    measured = levels.shift[~levels.attribute].tolist()
    if measured and max(measured) == 0.0 and not _given(problem, *LONG_TERM).any():
        yield Caution(
            "no_drift_allowance", (), "all measured capabilities are taken to hold all year (shift 0)",
            "set default.shift (1.5 is the trade's usual allowance, unproven) or give long-term pp, ppk",
        )  # fmt: skip
    if len(set(measured)) > 1:
        yield Caution(
            "mixed_shifts", (), f"shifts between {min(measured):g} and {max(measured):g} are mixed: the same Cpk means different ppm",
            "make sure that each step's shift is meant",
        )  # fmt: skip


def _three_sigma(problem: Problem) -> Iterator[Caution]:
    levels = problem.options.today.levels
    weak = _named(problem, study_index(levels.sigma_level, levels.k) <= 1.0)
    if len(weak) > 1:
        lost = 1.0 - (1.0 - 0.0026998) ** len(weak)
        yield Caution(
            "three_sigma_each", tuple(weak), f"{len(weak)} steps stand at Cpk 1.00 or less; as many at exactly 1.00 centred would lose "
            f"{lost:.1%} of units between them", "judge steps by their share of the defect budget, not one by one",
        )  # fmt: skip


def _false_rejects(problem: Problem) -> Iterator[Caution]:
    """Good items thrown away count in the final yield: where they eat much of its budget, no capability buys it back."""
    budget = problem.budgets.get("final_yield")
    if budget is None:
        return
    used = problem.line.per_finished * flow_today(problem).gates.scrap_of_good
    share = float(used.sum()) / budget
    if share >= LARGE_SHARE:
        yield from _about(
            "false_rejects", _named(problem, used >= LARGE_SHARE * used.max()),
            f"good items rejected by today's gates alone use {100.0 * share:.0f} % of the defect budget of the final yield",
            "re-check what is rejected (rejects_lost), or offer a gate that rejects fewer good items",
        )  # fmt: skip


def _clustering(problem: Problem) -> Iterator[Caution]:
    yield from cautions_of_clusters(problem, problem.options.today.intensity())


def _loose_ends(problem: Problem) -> Iterator[Caution]:
    if all(s.improve is None and not s.alternative and not s.fixed for s in problem.scenario.step):
        yield Caution(
            "nothing_to_choose", (), "no step has an alternative or a law of improvement, so there is nothing to decide",
            "enter quotes or `improve` for the steps that could get better",
        )  # fmt: skip


def _mostly_bad(problem: Problem) -> Iterator[Caution]:
    today = problem.options.today
    worst = np.flatnonzero(today.intensity() > -math.log(1.0 - MOSTLY))
    names = [problem.scenario.step[i].name for i in worst.tolist()]
    yield from _about(
        "mostly_bad", names, "more than half of the items are bad as the capability is stated",
        "check that the spread, the limits and the mean are in the same unit, and that a rate is a share and not in per cent",
    )  # fmt: skip


LOOKS: tuple[Callable[[Problem], Iterator[Caution]], ...] = (
    cautions_of_floors, _safety, _inspection, _long_term, _shifts, _small_sample, _beyond_the_data, _counts, _mostly_bad, _near_tail, _one_opportunity,
    _three_sigma, _copies, _laws, _judged, _widening, _rework, _false_rejects,
    _clustering, _loose_ends, cautions_of_quotes, cautions_of_alternatives, cautions_of_purchases,
)  # fmt: skip
