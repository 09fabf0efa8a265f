"""The line as it stands, as text: its yields, its defects, and where the money goes."""

from __future__ import annotations

from allocator.report import blocks, words
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import StepToday, Today


def today_text(today: Today, width: int = LOG_WIDTH) -> str:
    paper = Paper(width)
    blocks.write_title(paper, today.title, today.shipped_per_year)
    paper.heading(_standing(today))
    blocks.write_yields(paper, today.target_losses, [("today", today.line.yields)])
    _write_lots(paper, today)
    blocks.write_money(paper, today.currency, [("today", today.line.money)])
    blocks.write_money_reason(paper, today.line)
    _write_steps(paper, today)
    paper.heading("Where defects arise and where money is lost (the largest ten)")
    blocks.write_shares(
        paper,
        [(step.step, step.defect_share) for step in today.rows],
        [(step.step, step.money_share) for step in today.rows],
    )
    paper.say(blocks.LOST_NOTE)
    blocks.write_assumed(paper, today.assumed)
    blocks.write_cautions(paper, today.cautions)
    blocks.write_last_word(paper, blocks.safety_steps(today.cautions))
    return paper.text()


def _standing(today: Today) -> str:
    yields, money = today.line.yields, today.line.money
    final = words.yield_in_full(yields.final_yield, yields.final_loss)
    cost = "" if money is None else f"; it costs {words.per_year(money.total, today.currency)} in all"
    return f"Today the final yield is {final}; {words.number(today.line.dpu)} defects per unit{cost}."


def _write_lots(paper: Paper, today: Today) -> None:
    for lots, of, which in (
        (today.line.bad_per_lot, "started", "that do not come out good (final yield)"),
        (today.line.escaped_per_lot, "shipped", "with a defect that escaped (shipped yield)"),
    ):
        if lots:
            said = ", ".join(f"of {size:,} {of} about {words.number(bad)}" for size, bad in lots)
            paper.say(f"Units to expect {which}: {said}.")


def _write_steps(paper: Paper, today: Today) -> None:
    paper.heading("Steps: where each stands")
    heads = columns(["step"], ["sigma\nlevel", "Cpk", "Cpk after\nshift", "first-pass\nyield", "DPU", "ppm"])
    paper.table(heads, (level_row(step) for step in today.rows), len(today.rows))
    paper.say(blocks.INDEX_NOTE)
    paper.heading(f"Steps: what each costs ({words.clean(today.currency)}/year)")
    heads = columns(["step"], ["starts\nper year", "scrap", "rework", "inspection"])
    paper.table(heads, (_money_row(step) for step in today.rows), len(today.rows))


def level_row(step: StepToday) -> list[str]:
    level = step.level
    loss = 1.0 - step.first_pass_yield
    # A gate that finds and rejects nothing says nothing of quality.
    first_pass = "finds none" if loss == 0.0 else words.percent(step.first_pass_yield, loss)
    return [
        step.step, words.fixed(level.sigma_level), words.fixed(level.cpk), words.fixed(level.cpk_after_shift),
        first_pass, words.number(level.dpu), words.number(level.ppm),
    ]  # fmt: skip


def _money_row(step: StepToday) -> list[str]:
    spent = (step.scrap, step.rework, step.inspection)
    return [step.step, words.number(step.starts_per_year), *(words.money(amount) for amount in spent)]
