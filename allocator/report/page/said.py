"""What the page says in sentences and plain tables, figures already in words."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from allocator.report import blocks, words
from allocator.report.page.control import against_today
from allocator.report.page.scale import Scale, widest
from allocator.report.plan_text import capital_that_would_do, too_little_money
from allocator.results import LeftOut, Money, Plan, ReviewPage, Share, Yields

MOST_NAMED = 6


@dataclass(frozen=True)
class Said:
    """The page's words, from top to bottom."""

    title: str
    currency: str
    volume: str
    file: str
    split: str
    answer: str
    after: list[str]
    held: list[tuple[str, str]]
    """Steps that hold the target out of reach, and what holds each."""
    figures: list[tuple[str, str, str]]
    """Name, figure, remark."""
    yields: list[list[str]]
    money: list[list[str]]
    shares: list[dict[str, Any]]
    halves: list[str]
    rules: list[list[str]]
    rules_note: str
    next_nine: str
    floors: list[str]
    caps: list[str]
    highest: str
    ends: list[tuple[str, str]]
    """The steps that hold the highest reachable, and what holds each."""
    more_ends: str
    sources: list[list[str]]
    evidence: str
    left_out: int
    elsewhere: list[tuple[str, str]]
    """Questions that this page leaves to a command, and why."""
    cautions: list[tuple[str, str, str]]
    assumed: list[str]
    last_word: str
    index_note: str
    yields_note: str


def said(review: ReviewPage) -> Said:
    """All sentences of the page."""
    plan = review.plan
    currency = words.clean(plan.currency)
    return Said(
        title=words.clean(plan.title) or "Untitled scenario",
        currency=currency,
        volume=words.number(plan.shipped_per_year),
        file=words.clean(review.file.replace("\\", "/").rsplit("/", 1)[-1]),
        split=words.yield_name(plan.split),
        answer=_answer(review, currency),
        after=_after(review, currency),
        held=[(words.clean(b.step), words.clean(b.reason)) for b in plan.binding],
        figures=_figures(review, currency),
        yields=_yields(plan),
        money=_money(plan),
        shares=_shares(review),
        halves=_halves(review),
        rules=[_rule(rule) for rule in plan.rules],
        rules_note=words.clean(plan.rules_note),
        next_nine=_next_nine(plan, currency),
        floors=_floors(plan),
        caps=[
            f"{words.clean(s.step)}: {words.clean(s.cap or 'the most that was quoted')}" for s in plan.rows if s.at_cap
        ],
        highest=_highest(review, currency),
        ends=_held(review)[:MOST_NAMED],
        more_ends=_more(len(_held(review))),
        sources=[_stated(s) for s in review.sources.stated],
        evidence=_evidence(review),
        left_out=review.sources.left_out,
        elsewhere=[_elsewhere(left) for left in review.left_out],
        cautions=[_caution(c) for c in plan.cautions],
        assumed=[words.clean(text) for text in plan.assumed],
        last_word=_last_word(plan),
        index_note=blocks.INDEX_NOTE,
        yields_note=blocks.YIELDS_NOTE.strip("()"),
    )


def _elsewhere(left: LeftOut) -> tuple[str, str]:
    if left.command == "weigh":
        return "Buy, or leave?", (
            f"{left.count:,} things could be bought, changed or improved; a page takes {left.most:,}, so they are left "
            "out here. `allocator weigh` weighs them all."
        )
    return "What is asked of suppliers, and what is it worth?", (
        f"{left.count:,} bought parts have a target sheet; a page takes {left.most:,}, so all of them are left out "
        "here. `allocator suppliers` writes them."
    )


def _promise(plan: Plan) -> str:
    names = sorted(plan.targets, key=lambda name: (name != plan.split, name))
    parts = [f"a {words.yield_name(n)} of {words.percent(plan.targets[n], plan.target_losses[n])}" for n in names]
    return " and ".join(parts)


def _reached(plan: Plan) -> str:
    if plan.yields is None:
        return words.UNKNOWN
    loss = getattr(plan.yields, plan.split.replace("yield", "loss"))
    return f"{words.yield_name(plan.split)} of {words.percent(getattr(plan.yields, plan.split), loss)}"


def _answer(review: ReviewPage, currency: str) -> str:
    plan = review.plan
    promise = _promise(plan)
    if not plan.reached:
        return f"{_opened(promise)} cannot be kept with what the scenario offers."
    assert plan.money is not None
    cost = f"{words.money(plan.money.total)} {currency} a year, {_against(review, currency)}"
    if not promise:
        return f"Nothing is promised; the line then costs least at a {_reached(plan)}: {cost}."
    return f"{_opened(promise)} can be kept for {cost}."


def _against(review: ReviewPage, currency: str) -> str:
    return against_today(review.stops[review.shown], currency)


def _after(review: ReviewPage, currency: str) -> list[str]:
    plan = review.plan
    texts = []
    if not plan.reached:
        if plan.best_reachable is not None:
            best = blocks.best_in_words(plan.best_reachable, plan.currency)
            texts.append(f"The best reachable {words.yield_name(plan.best_reachable.of)} is {best}.")
        needed = plan.least_needed
        if needed is not None:
            texts.append((capital_that_would_do if needed.without_targets is None else too_little_money)(plan, needed))
        if plan.yields is None:
            texts.append("No choice at all keeps the floors and the limits.")
        else:
            which = (
                "the plan that comes nearest" if plan.best_reachable is None else "the best plan that can be reached"
            )
            texts.append(f"Everything below shows {which}.")
    if plan.rows:
        texts.append(_takes(plan, currency))
    if plan.today.money is None:
        texts.append(f"Today's cost is not known: {words.clean(plan.today.money_reason or 'no reason given')}.")
    return texts


def _takes(plan: Plan, currency: str) -> str:
    bought = [f"{words.clean(item.name)} (shared)" for item in plan.purchases]
    bought += [words.clean(name) for row in plan.rows for name in row.alternatives]
    raised = [row for row in plan.rows if row.law]
    parts = []
    if bought:
        parts.append(f"takes {words.listed(bought, MOST_NAMED)}")
    if raised:
        steps = "1 step" if len(raised) == 1 else f"{len(raised):,} of {len(plan.rows):,} steps"
        parts.append(f"raises {steps} by steady improvement")
    if not parts:
        return "The plan buys nothing and changes nothing."
    capital = f", with {words.money(plan.capital)} {currency} of capital" if plan.capital else ", without capital"
    return f"The plan {' and '.join(parts)}{capital}."


def _figures(review: ReviewPage, currency: str) -> list[tuple[str, str, str]]:
    plan = review.plan
    if plan.money is None or plan.yields is None:
        return []
    now = plan.today.money
    loss = getattr(plan.yields, plan.split.replace("yield", "loss"))
    was = getattr(plan.today.yields, plan.split), getattr(plan.today.yields, plan.split.replace("yield", "loss"))
    today = "not known" if now is None else words.money(now.total)
    return [
        (f"{currency} a year", words.money(plan.money.total), f"today {today}"),
        (words.yield_name(plan.split), words.percent(getattr(plan.yields, plan.split), loss),
         f"today {words.percent(*was)}"),
        (f"{currency} of capital", words.money(plan.capital), "price less trade-in, paid once"),
        (f"{currency} a shipped unit", words.unit_cost(plan.cost_per_unit), "of it for quality"),
    ]  # fmt: skip


def _yields(plan: Plan) -> list[list[str]]:
    rows = []
    for name in words.YIELDS:
        target = (
            words.percent(1.0 - plan.target_losses[name], plan.target_losses[name]) if name in plan.targets else "–"
        )
        rows.append([words.yield_name(name), *_cells(plan.today.yields, name), *_cells(plan.yields, name), target])
    return rows


def _cells(yields: Yields | None, name: str) -> list[str]:
    yield_ = None if yields is None else getattr(yields, name)
    loss = None if yields is None else getattr(yields, name.replace("_yield", "_loss"))
    return [words.percent(yield_, loss), "" if loss is None else f"{words.ppm(loss)} ppm"]


def _money(plan: Plan) -> list[list[str]]:
    def cell(money: Money | None, kind: str) -> str:
        return words.UNKNOWN if money is None else words.money(getattr(money, kind))

    kinds = (*blocks.MONEY_KINDS, "total")
    return [[kind, cell(plan.today.money, kind), cell(plan.money, kind)] for kind in kinds]


def _shares(review: ReviewPage) -> list[dict[str, Any]]:
    division = review.division
    if division is None:
        return []
    shares = [*division.shares, *([division.rest] if division.rest else [])]
    budget = Scale(0.0, widest([s.budget_share for s in shares]))
    money = Scale(0.0, widest([max(s.improvement, 0.0) + s.lost for s in shares]))
    return [_share(s, s is division.rest, division.rest_count, budget, money) for s in shares]


def _share(share: Share, is_rest: bool, count: int, budget: Scale, money: Scale) -> dict[str, Any]:
    return {
        "name": f"all other {count:,}" if is_rest else words.clean(share.name),
        "rest": is_rest,
        "budget": budget.at(share.budget_share),
        "budget_words": words.share(share.budget_share),
        "spent": money.at(max(share.improvement, 0.0)),
        "spent_words": words.money(share.improvement),
        "lost": money.at(share.lost),
        "lost_words": words.money(share.lost),
    }


def _halves(review: ReviewPage) -> list[str]:
    division = review.division
    if division is None:
        return []
    count = f"{len(review.rows):,} {'rows' if review.grouped else 'steps'}"
    texts = []
    for names, verb in (
        (division.half_of_budget, "use half of the defect budget"),
        (division.half_of_spending, "take half of the improvement money"),
    ):
        if names:
            shown = words.listed([words.clean(name) for name in names], MOST_NAMED)
            verb = verb if len(names) > 1 else verb.replace("use", "uses").replace("take", "takes")
            texts.append(f"{len(names):,} of {count} {verb}: {shown}.")
    return texts


def _rule(rule: Any) -> list[str]:
    saving = "–" if rule.saving is None else words.money(rule.saving)
    met = "kept" if rule.meets_target else "missed"
    reached = words.percent(rule.yield_reached, rule.loss_reached)
    broken = _broken([words.clean(text) for text in rule.broken])
    return [rule.rule, words.money(rule.total), reached, met, saving, broken]


def _broken(broken: list[str]) -> str:
    if len(broken) < 2:
        return "".join(broken)
    return f"{len(broken):,} floors, caps or limits are in its way, as: {broken[0]}"


def _next_nine(plan: Plan, currency: str) -> str:
    if not (plan.reached and plan.targets):
        return ""
    if plan.cost_of_next_nine is None:
        return "Ten times fewer losses than promised are out of reach with what the scenario offers."
    return (
        f"Ten times fewer losses than promised would cost {words.money(plan.cost_of_next_nine)} {currency} a year more."
    )


def _floors(plan: Plan) -> list[str]:
    texts = []
    for row in plan.rows:
        if row.floor is not None:
            stands = words.clean(row.floor_distance or "")
            safety = " A safety step: cost lowers no floor here." if row.safety else ""
            binds = " The floor decides this level, not the money." if row.floor_binds else ""
            level = f"Cpk {words.fixed(row.target.cpk)}, {words.fixed(row.target.sigma_level)} sigma"
            texts.append(f"{words.clean(row.step)}: {stands} of {words.clean(row.floor)} ({level}).{binds}{safety}")
    return texts


def _highest(review: ReviewPage, currency: str) -> str:
    highest = review.highest
    if highest is None:
        return ""
    reached = words.yield_in_full(highest.yield_, highest.loss)
    cost = f"{words.money(highest.total)} {currency} a year"
    return f"The highest reachable {words.yield_name(highest.of)} is {reached}, for {cost}."


def _held(review: ReviewPage) -> list[tuple[str, str]]:
    held = () if review.highest is None else review.highest.binding
    return [(words.clean(b.step), words.clean(b.reason)) for b in held]


def _more(count: int) -> str:
    return f"and {count - MOST_NAMED:,} more steps" if count > MOST_NAMED else ""


def _stated(stated: Any) -> list[str]:
    return [words.clean(text or "") for text in
            (stated.where, stated.what, stated.given, stated.evidence, stated.source, stated.note)]  # fmt: skip


def _evidence(review: ReviewPage) -> str:
    counts = review.sources.by_evidence
    order = ("measured", "quoted", "judged", "not stated")
    parts = [f"{counts[kind]:,} {'do not say' if kind == 'not stated' else kind}" for kind in order if kind in counts]
    total = sum(counts.values())
    return f"Of {total:,} tables with figures, {words.listed(parts)}."


def _caution(caution: Any) -> tuple[str, str, str]:
    where = words.listed([words.clean(step) for step in caution.steps], more="more steps")
    head = words.clean(caution.code.replace("_", " "))
    return (_opened(head) + (f" ({where})" if where else ""),
            _opened(blocks.sentence(caution.reason)), blocks.sentence(caution.fix))  # fmt: skip


def _opened(text: str) -> str:
    return text[:1].upper() + text[1:]


def _last_word(plan: Plan) -> str:
    safety = [words.quoted(row.step) for row in plan.rows if row.safety]
    if not safety:
        return blocks.LAST_WORD
    return blocks.SAFETY_WORD.format(steps=words.listed(safety, more="more steps"))
