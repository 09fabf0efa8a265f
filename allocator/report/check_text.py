"""The check as text: what was understood of each step, what is risky, and whether the scenario is sound."""

from __future__ import annotations

from allocator.report import blocks, words
from allocator.report.paper import LOG_WIDTH, Paper, columns
from allocator.results import Check, Understood

ASSUMED = "assumed"
NO_PLAN = "floor_out_of_reach"


def check_text(check: Check, width: int = LOG_WIDTH) -> str:
    paper = Paper(width)
    blocks.write_title(paper, check.title, check.shipped_per_year)
    paper.say(f"File: {check.file}")
    paper.say(f"Target: {words.targets_in_full(check.targets, check.target_losses, '') or 'none set'}")
    _write_levels(paper, check.rows)
    _write_flow(paper, check)
    _write_choices(paper, check.rows)
    blocks.write_assumed(paper, check.assumed)
    blocks.write_cautions(paper, check.cautions)
    paper.heading(_verdict(check))
    return paper.text()


def _verdict(check: Check) -> str:
    ways = sum(step.ways for step in check.rows)
    no_plan = any(caution.code == NO_PLAN for caution in check.cautions)
    sound = "sound as written, but no plan can keep its floors" if no_plan else "sound"
    return f"{sound}: {len(check.rows):,} steps, {ways:,} ways in all, {len(check.cautions):,} cautions"


def _write_levels(paper: Paper, steps: tuple[Understood, ...]) -> None:
    paper.heading("Capability as understood")
    figures = ["sigma\nlevel", "shift", "k", "sides", "Cpk", "Cpk after\nshift", "ppm"]
    paper.table(columns(["step", "given as"], figures), (_level_row(step) for step in steps), len(steps))
    paper.say(blocks.INDEX_NOTE)


def _level_row(step: Understood) -> list[str]:
    level = step.level
    return [
        step.step, step.given, words.fixed(level.sigma_level), words.fixed(level.shift), words.fixed(level.k),
        str(level.sides), words.fixed(level.cpk), words.fixed(level.cpk_after_shift), words.number(level.ppm),
    ]  # fmt: skip


def _write_flow(paper: Paper, check: Check) -> None:
    paper.heading(f"Flow and cost as understood (money in {words.clean(check.currency)} per item)")
    figures = ["items\nper unit", "opportu-\nnities", "lost when\nscrapped", "net cost\nadded", "ways"]
    paper.table(columns(["step", "feeds"], figures), (_flow_row(step) for step in check.rows), len(check.rows))


def _flow_row(step: Understood) -> list[str]:
    return [
        step.step, step.feeds or "(customer)", words.count(step.items_per_unit), words.count(step.opportunities),
        words.money(step.lost_when_scrapped), words.money(step.net_cost_added), f"{step.ways:,}",
    ]  # fmt: skip


def _write_choices(paper: Paper, steps: tuple[Understood, ...]) -> None:
    told = [step for step in steps if step.supplier or step.improves or step.inspection != ASSUMED]
    if told:
        paper.heading("Suppliers, improvement and inspection as understood")
        heads = columns(["step", "supplier", "can be improved", "inspection"], [])
        rows = ([step.step, step.supplier or "-", step.improves or "-", step.inspection] for step in told)
        paper.table(heads, rows, len(told))
    silent = sum(step.inspection == ASSUMED for step in steps)
    if silent:
        count = f"{silent:,} of {len(steps):,}"
        paper.say(f"{count} steps state no inspection: each is assumed to find all of its own defects.")
