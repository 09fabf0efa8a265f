"""Several scenarios as text: side by side, what they cost, what each buys, and the steps where they part."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from allocator.report import blocks, words
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import Compared, Comparison, StepAcross, StepTarget, TakenAcross

AT_ONCE = 4
"""Scenarios that stand side by side at 80 columns; more follow below."""
NO_FIGURE = "-"


def compare_text(answer: Comparison, width: int = LOG_WIDTH) -> str:
    paper = Paper(width)
    paper.say(f"{len(answer.cases)} scenarios side by side, each with the plan that is best for it")
    paper.heading(_verdict(answer))
    if answer.unlike:
        paper.say(f"Read with care: {'; '.join(answer.unlike)}.")
    paper.bullets([_named(case) for case in answer.cases], most=len(answer.cases))
    for first in range(0, len(answer.cases), AT_ONCE):
        _write_some(paper, answer, slice(first, first + AT_ONCE))
    _write_out_of_reach(paper, answer.cases)
    paper.heading("What each scenario assumes and its cautions: allocator plan FILE.")
    blocks.write_last_word(paper, blocks.safety_steps(answer.cautions))
    return paper.text()


def _verdict(answer: Comparison) -> str:
    if answer.cheapest is None:
        kept = [case.label for case in answer.cases if case.plan.reached]
        return "None of them keeps its promise." if not kept else "No common measure of cost: see each column."
    best = next(case for case in answer.cases if case.label == answer.cheapest)
    unit = f"{words.unit_cost(best.plan.cost_per_unit)} {words.clean(best.plan.currency)} a shipped unit"
    missed = [words.quoted(case.label) for case in answer.cases if not case.plan.reached]
    rest = f" {words.listed(missed)} cannot keep the promise." if missed else ""
    return f"{words.quoted(best.label)} keeps its promise at the least cost per shipped unit: {unit}.{rest}"


def _named(case: Compared) -> str:
    plan = case.plan
    wanted = words.targets_in_full(plan.targets, plan.target_losses, plan.split) or "no target (economic optimum)"
    return f"{words.clean(case.label)}: {words.clean(plan.title) or words.clean(case.file)}; {wanted}"


def _write_some(paper: Paper, answer: Comparison, some: slice) -> None:
    cases = answer.cases[some]
    labels = [words.clean(case.label) for case in cases]
    _write_line(paper, cases, labels)
    _write_money(paper, cases, labels)
    _write_taken(paper, answer.taken, some, labels)
    _write_steps(paper, answer.rows, some, labels)


def _write_taken(paper: Paper, things: Sequence[TakenAcross], some: slice, labels: Sequence[str]) -> None:
    apart = [row for row in things if len(set(row.states[some])) > 1]
    if apart:
        paper.heading("What is bought or done here and not there")
        rows = [[row.step or "(shared)", row.what, *row.states[some]] for row in apart]
        paper.table(columns(["step", "what", *labels], []), rows, len(rows))
    alike = [row for row in things if set(row.states[some]) == {"taken"}]
    if alike:
        said = [f"{words.quoted(row.what)} at {words.quoted(row.step or '(shared)')}" for row in alike]
        paper.say(f"Taken in all: {words.listed(said, more='more (--csv gives all)')}.")


Figure = tuple[str, Callable[[Compared], str]]


def _write_line(paper: Paper, cases: Sequence[Compared], labels: Sequence[str]) -> None:
    paper.heading("Yields")
    paper.say(blocks.YIELDS_NOTE)
    figures: list[Figure] = [
        ("shipped per year", lambda c: words.number(c.plan.shipped_per_year)),
        ("promise", lambda c: "kept" if c.plan.reached else "out of reach" if c.plan.targets else "none"),
    ]
    for name in words.YIELDS:
        figures += _yield_figures(name, any(_loss(case, name) is not None for case in cases))
    _table(paper, cases, labels, "figure", figures)


def _yield_figures(name: str, known: bool) -> list[Figure]:
    """One yield's rows: today's and the plan's, the latter as per cent, ppm and nines where anybody knows it."""
    said = words.yield_name(name)
    in_percent: list[Figure] = [
        (f"{said}, today", lambda c: _yield(c, name, today=True)),
        (f"{said}, plan", lambda c: _yield(c, name)),
    ]
    if not known:
        return in_percent
    return [
        *in_percent,
        (f"{said}, plan, ppm", lambda c: words.ppm(_loss(c, name))),
        (f"{said}, plan, nines", lambda c: words.nines(_loss(c, name))),
    ]


def _yield(case: Compared, name: str, today: bool = False) -> str:
    yields = case.plan.today.yields if today else case.plan.yields
    if yields is None:
        return words.UNKNOWN
    return words.percent(getattr(yields, name), getattr(yields, name.replace("_yield", "_loss")))


def _loss(case: Compared, name: str) -> float | None:
    yields = case.plan.yields
    return None if yields is None else getattr(yields, name.replace("_yield", "_loss"))


def _write_money(paper: Paper, cases: Sequence[Compared], labels: Sequence[str]) -> None:
    currencies = list(dict.fromkeys(words.clean(case.plan.currency) for case in cases))
    paper.heading(f"Money ({' or '.join(currencies)}, per year unless said)")
    figures: list[Figure] = [
        *(_spent(kind) for kind in (*blocks.MONEY_KINDS, "total")),
        ("total over the first", lambda c: _signed(c.total_over_first)),
        ("per shipped unit", lambda c: words.unit_cost(c.plan.cost_per_unit)),
        ("total today", lambda c: words.money(None if c.plan.today.money is None else c.plan.today.money.total)),
        ("capital, once", lambda c: words.money(c.plan.capital)),
        ("capital over the first", lambda c: _signed(c.capital_over_first)),
    ]
    _table(paper, cases, labels, "kind", figures)


def _spent(kind: str) -> Figure:
    return kind, lambda c: words.money(None if c.plan.money is None else getattr(c.plan.money, kind))


def _signed(value: float | None) -> str:
    if value is None:
        return NO_FIGURE
    return f"+{words.money(value)}" if value > 0.0 else words.money(value)


def _table(paper: Paper, cases: Sequence[Compared], labels: Sequence[str], head: str, figures: list[Figure]) -> None:
    rows = [[name, *(figure(case) for case in cases)] for name, figure in figures]
    paper.table(columns([head], labels), rows, len(rows))


def _write_steps(paper: Paper, steps: Sequence[StepAcross], some: slice, labels: Sequence[str]) -> None:
    apart = [step for step in steps if step.differs]
    if not apart:
        paper.heading("No step differs in choice, supplier or level.")
        return
    paper.heading("Steps that differ: sigma level to reach, and ppm of items")
    rows = [[step.step, *(_level(target) for target in step.targets[some])] for step in apart]
    paper.table(columns(["step"], labels), rows, len(rows))
    if len(apart) < len(steps):
        paper.say(f"The other {len(steps) - len(apart)} steps are alike (--csv gives all).")


def _level(target: StepTarget | None) -> str:
    if target is None:
        return NO_FIGURE
    return f"{words.fixed(target.target.sigma_level)} ({words.number(target.target.ppm)} ppm)"


def _write_out_of_reach(paper: Paper, cases: Sequence[Compared]) -> None:
    missed = [case for case in cases if not case.plan.reached]
    if not missed:
        return
    paper.heading("Out of reach (the columns above show the best plan that can be reached)")
    said = []
    for case in missed:
        plan, name = case.plan, words.quoted(case.label)
        if plan.best_reachable is not None:
            best = blocks.best_in_words(plan.best_reachable, plan.currency)
            said.append(f"{name}: the best reachable {words.yield_name(plan.best_reachable.of)} is {best}")
        said += [f"{name}, {words.quoted(held.step)}: {words.clean(held.reason)}" for held in plan.binding]
    paper.bullets(said)
