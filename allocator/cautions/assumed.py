"""Which assumptions does every figure of a scenario rest on."""

from __future__ import annotations

from allocator.problem import Problem


def what_is_assumed(problem: Problem) -> tuple[str, ...]:
    """Return the assumptions behind every figure of this scenario, one sentence each."""
    scenario = problem.scenario
    texts = [
        "Defects are independent and Poisson; measured characteristics are normal in both tails.",
        "Final yield here means: a unit started comes out, and comes out good (reworked counts as good, escapes do not).",
        "One product at one volume; reworked items are good, and their own later scrap is neglected.",
        "Rework and inspection are charged on shipped quantity, scrap on the items started and lost.",
        *_clustering(problem),
        *_inspection(problem),
        *_shift(problem),
    ]
    if scenario.demand.years is not None and scenario.demand.discount_rate is not None:
        texts.append(
            f"A price counts as an equal yearly cost at {scenario.demand.discount_rate:.1%} over its life "
            f"({scenario.demand.years:g} years unless stated); amounts are pre-tax planning figures."
        )
    return (*texts, *problem.options.notes)


def _clustering(problem: Problem) -> list[str]:
    names = [step.name for step in problem.scenario.step if step.clustering is not None]
    if not names:
        return []
    shown = ", ".join(names[:4]) + (f" and {len(names) - 4} more" if len(names) > 4 else "")
    return [f"Clustering is stated ({shown}): computed figures stay Poisson, a rehearsal draws the clusters."]


def _inspection(problem: Problem) -> list[str]:
    assumed = [i for i, inspection in enumerate(problem.options.today.inspection) if inspection is None]
    if not assumed:
        return []
    if len(assumed) == len(problem.options.today):
        return ["No inspection is stated: every gate is assumed to find all of its own defects, so nothing escapes."]
    names = [problem.scenario.step[i].name for i in assumed]
    shown = ", ".join(names[:4]) + (f" and {len(names) - 4} more" if len(names) > 4 else "")
    return [
        f"Without a stated inspection a gate is assumed to find all of its own defects and no earlier ones: {shown}."
    ]


def _shift(problem: Problem) -> list[str]:
    shifts = sorted(set(problem.options.today.levels.shift.tolist()))
    if shifts == [0.0]:
        return ["No drift allowance is made (shift 0): short-term capability is taken to hold all year."]
    if len(shifts) == 1:
        return [f"Every step carries a drift allowance of {shifts[0]:g} sigma (shift)."]
    return [f"Drift allowances (shift) differ between steps: {', '.join(f'{s:g}' for s in shifts)} sigma."]
