"""The plan as text: what to buy and reach, for how much, and why that can be believed."""

from __future__ import annotations

from collections.abc import Iterator

from allocator.report import blocks, words
from allocator.report.confidence_text import write_confidence
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import LeastNeeded, Plan, Restraint, RuleOutcome, StepTarget

SAME_LOSS = 1e-8
"""A loss within this share of the target's is the target's: rules split the budget to the last digit."""
NO_COST = 1e-6
"""A restraint that costs less than this share of the total costs nothing: it is the gap of the solve."""


def plan_text(plan: Plan, width: int = LOG_WIDTH) -> str:
    """The whole sheet, from the answer in a sentence to the last word of caution."""
    paper = Paper(width)
    blocks.write_title(paper, plan.title, plan.shipped_per_year)
    _write_answer(paper, plan)
    if plan.yields is not None:
        _write_tables(paper, plan)
    if plan.confidence is not None:
        write_confidence(paper, plan, plan.confidence)
    _write_rules(paper, plan)
    _write_next_nine(paper, plan)
    _write_proof(paper, plan)
    blocks.write_assumed(paper, plan.assumed)
    blocks.write_cautions(paper, plan.cautions)
    blocks.write_last_word(paper, [step.step for step in plan.rows if step.safety])
    return paper.text()


def _write_answer(paper: Paper, plan: Plan) -> None:
    paper.heading(answer(plan))
    if not plan.reached:
        _write_out_of_reach(paper, plan)
    if plan.capital is not None:
        unit = words.unit_cost(plan.cost_per_unit)
        dpu = f"{words.number(plan.dpu)} defects per unit (today {words.number(plan.today.dpu)})"
        currency = words.clean(plan.currency)
        paper.say(f"Capital {words.money(plan.capital)} {currency}; in all {unit} {currency} a shipped unit; {dpu}.")
    blocks.write_money_reason(paper, plan.today)
    if plan.restraint is not None:
        paper.heading(_restraint(plan, plan.restraint))


def _restraint(plan: Plan, kept: Restraint) -> str:
    """What the plan was told to keep to, and what the refusal costs against the plan that is free of it."""
    told = f"Told to keep: {words.listed(kept.what)}."
    if kept.total_unrestrained is None:
        return f"{told} Without that the target cannot be met either."
    free = words.per_year(kept.total_unrestrained, plan.currency)
    if plan.question == "best yield" or not plan.targets:
        best = words.yield_in_full(1.0 - (kept.loss_unrestrained or 0.0), kept.loss_unrestrained)
        return f"{told} Free of it the best is {best}, at {free}."
    if plan.cost_of_restraint is None:
        return f"{told} Free of it the target can be met, at {free}."
    extra = max(plan.cost_of_restraint, 0.0)
    if extra < NO_COST * abs(kept.total_unrestrained):
        return f"{told} That costs nothing: the free plan costs {free} too."
    return f"{told} That costs {words.per_year(extra, plan.currency)} more than the free plan ({free})."


def answer(plan: Plan) -> str:
    """The answer in one sentence, or for a target out of reach, that it is out of reach."""
    wanted = words.targets_in_full(plan.targets, plan.target_losses, plan.split)
    needed = plan.least_needed
    if not plan.reached and needed is not None and needed.without_targets is not None:
        return too_little_money(plan, needed)
    if not plan.reached and plan.confidence is not None:
        return f"No plan was found that is {_percent(plan.confidence.confidence)} sure of {wanted}."
    if not plan.reached:
        return f"The target cannot be met: {wanted or 'what was asked'} is out of reach."
    opening = {
        "cheapest": f"For {wanted}",
        "confident": f"To be {_sureness(plan)} sure of {wanted}",
        "best yield": f"The best {words.yield_name(plan.split)} for {_money_given(plan)} is {_reached(plan)}",
        "optimum": f"No target is set; the least cost is at a {words.yield_name(plan.split)} of {_reached(plan)}",
    }.get(plan.question, f"For {wanted}")
    return f"{opening}: {_actions(plan)}; it costs {_cost(plan)}."


def _money_given(plan: Plan) -> str:
    if plan.spend_limit is not None:
        return f"at most {words.per_year(plan.spend_limit, plan.currency)} in all"
    return f"at most {words.money(plan.capital_limit)} {words.clean(plan.currency)} of capital"


def too_little_money(plan: Plan, needed: LeastNeeded) -> str:
    """That no plan at all can be had for the money, and how much would do."""
    currency = words.clean(plan.currency)
    least, limit = words.money(needed.without_targets), words.money(needed.limit)
    if needed.of == "total":
        return f"No plan costs as little as {limit} {currency}/year: the least is {least} {currency}/year."
    kept = "the floors" if plan.restraint is None else "the floors and what it is told to keep"
    said = f"No plan keeps {kept} with {limit} {currency} of capital: the least is {least} {currency}"
    if needed.with_targets is not None:
        return f"{said}, and {words.money(needed.with_targets)} {currency} to meet the target as well."
    return f"{said}." if not plan.targets else f"{said}; the target is out of reach with any capital."


def _percent(share: float) -> str:
    return f"{share * 100:g} %"


def _sureness(plan: Plan) -> str:
    return "" if plan.confidence is None else _percent(plan.confidence.confidence)


def _reached(plan: Plan) -> str:
    if plan.yields is None:
        return words.UNKNOWN
    loss = getattr(plan.yields, plan.split.replace("_yield", "_loss"))
    return words.yield_in_full(getattr(plan.yields, plan.split), loss)


def _cost(plan: Plan) -> str:
    now = None if plan.today.money is None else plan.today.money.total
    total = None if plan.money is None else plan.money.total
    return f"{words.per_year(total, plan.currency)} in all (today {words.money(now)})"


def _actions(plan: Plan) -> str:
    """What to do, the dearest first."""
    shared = [(bought.per_year_cost, f"buy {words.quoted(bought.name)} (shared)") for bought in plan.purchases]
    dearest_first = sorted([*shared, *_step_actions(plan.rows)], key=lambda act: -act[0])
    acts = [said for _, said in dearest_first]
    return words.listed(acts, more="cheaper changes (in the table)") if acts else "buy nothing and change nothing"


def _step_actions(steps: tuple[StepTarget, ...]) -> Iterator[tuple[float, str]]:
    """What is done at each step, with its yearly cost."""
    for step in steps:
        at, level = words.quoted(step.step), words.fixed(step.target.sigma_level)
        if step.alternatives:
            names = words.listed([words.quoted(name) for name in step.alternatives], joint=" and ")
            further = f" and improve it to {level} sigma" if step.law else ""
            yield step.improvement, f"{'buy' if step.capital > 0.0 else 'take'} {names} at {at}{further}"
        elif step.law:
            yield step.improvement, f"raise {at} from {words.fixed(step.today.sigma_level)} to {level} sigma"


def _write_out_of_reach(paper: Paper, plan: Plan) -> None:
    needed, which = plan.least_needed, "best reachable" if plan.confidence is None else "surest"
    if needed is not None and needed.without_targets is not None:
        which = "nearest"  # The answer has said already what holds it: the money.
    else:
        _write_what_holds(paper, plan)
    if plan.yields is not None:
        paper.heading(f"The {which} plan: {_actions(plan)}; it costs {_cost(plan)}. The tables show this plan.")


def _write_what_holds(paper: Paper, plan: Plan) -> None:
    if plan.yields is None:
        paper.say("No choice at all keeps the floors and the limits.")
    if plan.best_reachable is not None:
        best = blocks.best_in_words(plan.best_reachable, plan.currency)
        paper.say(f"The best reachable {words.yield_name(plan.best_reachable.of)} is {best}.")
    if plan.least_needed is not None:
        paper.say(capital_that_would_do(plan, plan.least_needed))
    if plan.binding:
        paper.heading("What holds it out of reach (the fewest steps whose defects alone do so)")
        blocks.write_binding(paper, plan.binding)


def capital_that_would_do(plan: Plan, needed: LeastNeeded) -> str:
    """With how much capital a target out of reach can be met."""
    currency = words.clean(plan.currency)
    limit = f"the limit of {words.money(needed.limit)} {currency}"
    if needed.with_targets is None:
        return f"No capital would do: beyond {limit} too the target stays out of reach."
    return f"With {words.money(needed.with_targets)} {currency} of capital, above {limit}, it can be met."


def _write_tables(paper: Paper, plan: Plan) -> None:
    blocks.write_yields(paper, plan.target_losses, [("plan", plan.yields), ("today", plan.today.yields)])
    _write_steps(paper, plan)
    _write_purchases(paper, plan)
    blocks.write_money(paper, plan.currency, [("plan", plan.money), ("today", plan.today.money)])


def choice(step: StepTarget) -> str:
    parts = [words.clean(name) for name in step.alternatives]
    if step.law:
        parts.append(f"improve ({words.clean(step.law)})")
    return " + ".join(parts) or "as today"


def _write_steps(paper: Paper, plan: Plan) -> None:
    steps = plan.rows
    paper.heading(f"Steps: what to choose (money in {words.clean(plan.currency)}/year)")
    heads = columns(["step", "choice"], ["improve-\nment", "scrap", "share of\ndefect\nbudget", "starts\nper year"])
    rows = (
        [step.step, choice(step), words.money(step.improvement), words.money(step.scrap),
         words.share(step.budget_share), words.number(step.starts_per_year)]
        for step in steps
    )  # fmt: skip
    paper.table(heads, rows, len(steps))
    paper.heading("Steps: levels to reach")
    figures = (
        "sigma\ntoday",
        "sigma\ntarget",
        "Cpk\ntoday",
        "Cpk\ntarget",
        "Cpk after\nshift",
        "ppm\ntoday",
        "ppm\ntarget",
    )
    paper.table(columns(["step"], figures), (level_row(step) for step in steps), len(steps))
    paper.say(blocks.INDEX_NOTE)
    _write_limits(paper, plan)


def level_row(step: StepTarget) -> list[str]:
    now, then = step.today, step.target
    return [
        step.step, words.fixed(now.sigma_level), words.fixed(then.sigma_level), words.fixed(now.cpk),
        words.fixed(then.cpk), words.fixed(then.cpk_after_shift), words.number(now.ppm), words.number(then.ppm),
    ]  # fmt: skip


def _write_limits(paper: Paper, plan: Plan) -> None:
    """Floors with where the plan stands, then the steps that sit at what was quoted or demonstrated."""
    said = []
    for step in plan.rows:
        if step.floor is not None:
            stands = f"the floor {'binds' if step.floor_binds else 'does not bind'} ({step.floor_distance})"
            level = f"Cpk {words.fixed(step.target.cpk)}, {words.fixed(step.target.sigma_level)} sigma"
            said.append(f"{words.quoted(step.step)}: floor {words.clean(step.floor)}; plan {level}; {stands}")
    for step in plan.rows:
        if step.at_cap:
            cap = words.clean(step.cap or "the most that was quoted or demonstrated")
            said.append(f"{words.quoted(step.step)} sits at its cap: {cap}")
    if said:
        paper.heading("Floors and caps")
        paper.bullets(said)


def _write_purchases(paper: Paper, plan: Plan) -> None:
    if plan.purchases:
        paper.heading(f"Shared purchases ({words.clean(plan.currency)})")
        rows = [[item.name, words.money(item.price), words.money(item.per_year_cost)] for item in plan.purchases]
        paper.table(columns(["purchase"], ["price", "cost per year"]), rows, len(rows))


def _write_rules(paper: Paper, plan: Plan) -> None:
    if not plan.rules:
        if plan.rules_note:
            paper.heading(f"Simpler rules: {plan.rules_note}")
        return
    paper.heading(f"What simpler rules would cost ({words.clean(plan.currency)}/year)")
    name = words.yield_name(plan.split)
    heads = columns(["rule"], ["total", name, f"ppm lost of\n{name}", "target", "the plan\nsaves"])
    paper.table(heads, [_rule_row(rule, plan.target_losses.get(plan.split)) for rule in plan.rules], len(plan.rules))
    broken = [
        f"{rule.rule} is not kept everywhere: {words.listed(rule.broken, joint='; ')}"
        for rule in plan.rules
        if rule.broken
    ]
    if broken:
        paper.bullets(broken)


def _rule_row(rule: RuleOutcome, target_loss: float | None) -> list[str]:
    reached = words.percent(rule.yield_reached, rule.loss_reached)
    saving = "-" if rule.saving is None else words.money(rule.saving)
    return [
        rule.rule, words.money(rule.total), reached, words.ppm(rule.loss_reached), _against_target(rule, target_loss),
        saving,
    ]  # fmt: skip


def _against_target(rule: RuleOutcome, target_loss: float | None) -> str:
    """Met or missed, and by how much: a difference that the digits of the yield may hide."""
    word = "met" if rule.meets_target else "missed"
    if target_loss is None or abs(rule.loss_reached - target_loss) <= SAME_LOSS * target_loss:
        return word
    return f"{word} by {words.ppm(abs(rule.loss_reached - target_loss))} ppm"


def _write_next_nine(paper: Paper, plan: Plan) -> None:
    if not (plan.reached and plan.targets) or plan.confidence is not None:
        return
    if plan.cost_of_next_nine is None:
        said = "out of reach with what the scenario offers."
    else:
        loss = plan.target_losses.get(plan.split, 0.0)
        step = f" (from {words.ppm(loss)} to {words.ppm(loss / 10.0)} ppm)" if loss > 0.0 else ""
        said = f"{words.per_year(plan.cost_of_next_nine, plan.currency)} on top{step}."
    paper.heading(f"The next nine of {words.yield_name(plan.split)}, ten times fewer losses: {said}")
    if plan.best_reachable is not None:
        paper.say(f"Highest reachable: {blocks.best_in_words(plan.best_reachable, plan.currency)}.")


def _write_proof(paper: Paper, plan: Plan) -> None:
    proof = plan.proof
    if proof is None:
        return
    took = f"{words.found_by(proof.method) or 'method not named'}; {words.number(proof.seconds)} s"
    if proof.lower_bound is None:
        paper.heading(f"Proof: total {words.per_year(proof.total, plan.currency)}; no lower bound is proven; {took}.")
    else:
        bound = words.money(proof.lower_bound)
        gap = words.UNKNOWN if proof.gap is None else f"{proof.gap:.1e}"
        total = words.per_year(proof.total, plan.currency)
        paper.heading(f"Proof: total {total}; proven lower bound {bound}; gap {gap} of the total; {took}.")
    if proof.note:
        paper.say(proof.note)
