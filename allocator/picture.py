"""Where on the line do defects arise, where are they found, where is money lost; and who shares what of the plan."""

from __future__ import annotations

from collections.abc import Sequence

from allocator.flow import Flow, rework_cost, scrap_lost_at
from allocator.grouping import feeds_of_rows, reading_order
from allocator.problem import Problem
from allocator.results import Carried, Division, LinePart, Plan, Share
from allocator.standing import flow_today

MOST_SHARES = 14
"""Rows shown with their share; the others are added up."""


def picture(problem: Problem, rows: Sequence[Sequence[int]], plan: Flow | None) -> tuple[LinePart, ...]:
    """Return the rows in reading order, with what happens at each today and under the plan."""
    feeds = feeds_of_rows(problem.line.feeds.tolist(), rows)
    order = reading_order(feeds)
    place = {row: p for p, row in enumerate(order)}
    now = _carried(problem, rows, flow_today(problem))
    then = None if plan is None else _carried(problem, rows, plan)
    return tuple(
        LinePart(row, place[feeds[row]] if feeds[row] >= 0 else None, now[row], None if then is None else then[row])
        for row in order
    )


def _carried(problem: Problem, rows: Sequence[Sequence[int]], flow: Flow) -> list[Carried]:
    line = problem.line
    arises, found = (line.per_finished * flow.intensity).tolist(), (line.per_finished * flow.found).tolist()
    hidden, feeds = (line.per_finished * flow.hidden).tolist(), line.feeds.tolist()
    lost = (scrap_lost_at(line, flow) + rework_cost(line, flow)).tolist()
    carried = []
    for steps in rows:
        inside = set(steps)
        carried.append(
            Carried(
                arises=sum(arises[i] for i in steps),
                found=sum(found[i] for i in steps),
                hidden=sum(hidden[i] for i in steps if feeds[i] not in inside),
                lost=sum(lost[i] for i in steps),
            )
        )
    return carried


def divide(plan: Plan, rows: Sequence[Sequence[int]], names: Sequence[str]) -> Division | None:
    """Return how the plan's defect budget and money divide over the rows and its shared purchases."""
    if not plan.rows:
        return None
    shares = [
        Share(
            name,
            sum(plan.rows[i].budget_share for i in steps),
            sum(plan.rows[i].improvement for i in steps),
            sum(plan.rows[i].scrap + plan.rows[i].rework for i in steps),
        )
        for name, steps in zip(names, rows, strict=True)
    ]
    shares += [Share(f"{bought.name} (shared)", 0.0, bought.per_year_cost, 0.0) for bought in plan.purchases]
    ranked = sorted(shares, key=lambda share: -share.budget_share)
    shown = _most_telling(ranked)
    others = [share for share in ranked if share not in shown]
    rest = Share(
        "all others",
        sum(share.budget_share for share in others),
        sum(share.improvement for share in others),
        sum(share.lost for share in others),
    )
    return Division(
        shares=tuple(shown),
        rest=rest if others else None,
        rest_count=len(others),
        half_of_budget=_half([(share.name, share.budget_share) for share in shares]),
        half_of_spending=_half([(share.name, share.improvement) for share in shares]),
    )


def _most_telling(ranked: list[Share]) -> list[Share]:
    """Return the shares to show, in order: the largest parts of the budget, of the spending or of the loss."""
    if len(ranked) <= MOST_SHARES + 1:
        return ranked
    whole = [
        max(sum(part), 1e-300) for part in zip(*((s.budget_share, s.improvement, s.lost) for s in ranked), strict=True)
    ]
    telling = sorted(
        ranked,
        key=lambda s: -max(s.budget_share / whole[0], max(s.improvement, 0.0) / whole[1], s.lost / whole[2]),
    )[:MOST_SHARES]
    return [share for share in ranked if share in telling]


def _half(parts: list[tuple[str, float]]) -> tuple[str, ...]:
    """Return the fewest names that hold half or more of what is positive; none where nothing is."""
    positive = sorted(((name, part) for name, part in parts if part > 0.0), key=lambda pair: -pair[1])
    left, names = sum(part for _, part in positive) / 2.0, []
    for name, part in positive:
        if left <= 0.0:
            break
        names.append(name)
        left -= part
    return tuple(names)
