"""The drawing of the line, read from top to bottom: its tree as pipes as wide as the hidden defects they carry."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from allocator.report import words
from allocator.report.page.control import row_name
from allocator.report.page.scale import Scale, widest
from allocator.results import Carried, LinePart, ReviewPage

LANE = 22.0
"""Distance between two pipes, in pixels."""
WIDEST = 15.0
NARROWEST = 1.2
MOST_LANES = 8


@dataclass(frozen=True)
class Pipe:
    """One stretch of pipe beside a row, in a box as wide as the lanes and 100 high."""

    path: str
    today: float
    """Width in pixels."""
    plan: float


@dataclass(frozen=True)
class Bar:
    """One figure of a row: its length today and under the plan, in per cent of the longest, and in words."""

    today: float
    plan: float
    figure: str
    was: str


@dataclass(frozen=True)
class LineRow:
    name: str
    supplier: str
    safety: bool
    pipes: list[Pipe]
    node: float
    """Where the step sits, in pixels from the left."""
    arises: Bar
    found: Bar
    lost: Bar
    last: bool


@dataclass(frozen=True)
class LineDrawing:
    rows: list[LineRow]
    width: float
    has_plan: bool
    carries: bool
    """Whether any defect travels on hidden; without a stated inspection none does."""


def line_drawing(review: ReviewPage) -> LineDrawing:
    """The picture of the review's line."""
    parts = review.line
    lanes = lanes_of(parts)
    has_plan = any(part.plan is not None for part in parts)
    flows = {False: _flows(parts, False), True: _flows(parts, has_plan)}
    thick = Scale(0.0, widest([*flows[False], *flows[True]]))
    pipes = _pipes(parts, lanes, thick, has_plan)
    bars = {kind: _bars(parts, kind) for kind in ("arises", "found", "lost")}
    return LineDrawing(
        rows=[
            LineRow(
                name=row_name(review.rows[part.row]),
                supplier=words.clean(review.rows[part.row].supplier or ""),
                safety=review.rows[part.row].safety,
                pipes=pipes[p],
                node=_x(lanes[p]),
                arises=bars["arises"][p],
                found=bars["found"][p],
                lost=bars["lost"][p],
                last=part.feeds is None,
            )
            for p, part in enumerate(parts)
        ],
        width=_x(max(lanes)) + LANE / 2.0,
        has_plan=has_plan,
        carries=any(part.today.hidden > 0.0 for part in parts),
    )


def lanes_of(parts: Sequence[LinePart]) -> list[int]:
    """The lane of each part: the first that feeds a part keeps its lane, every further one takes the next."""
    lanes = [0] * len(parts)
    first = _first_feeder(parts)
    for p in range(len(parts) - 1, -1, -1):
        onward = parts[p].feeds
        if onward is not None:
            lanes[p] = min(lanes[onward] + (first[onward] != p), MOST_LANES - 1)
    return lanes


def _first_feeder(parts: Sequence[LinePart]) -> list[int | None]:
    first: list[int | None] = [None] * len(parts)
    for p, part in enumerate(parts):
        if part.feeds is not None and first[part.feeds] is None:
            first[part.feeds] = p
    return first


def _state(part: LinePart, plan: bool) -> Carried:
    return part.plan if plan and part.plan is not None else part.today


def _flows(parts: Sequence[LinePart], plan: bool) -> list[float]:
    """What each part receives from all that feed it, and what it hands on."""
    received = [0.0] * len(parts)
    for part in parts:
        if part.feeds is not None:
            received[part.feeds] += _state(part, plan).hidden
    return [*received, *(_state(part, plan).hidden for part in parts)]


def _x(lane: int) -> float:
    return WIDEST / 2.0 + 2.0 + LANE * lane


def _pipes(parts: Sequence[LinePart], lanes: list[int], thick: Scale, has_plan: bool) -> list[list[Pipe]]:
    """The stretches beside each row: what comes in, what goes on, what passes by."""
    gathered = [[0.0, 0.0] for _ in parts]
    """What has joined the pipe towards each part so far, today and under the plan."""
    first = _first_feeder(parts)
    drawn: list[list[Pipe]] = []
    waiting: list[int] = []
    for p, part in enumerate(parts):
        if p in waiting:
            waiting.remove(p)
        mine = [_pipe(f"M{_x(lanes[q]):g} -1V101", gathered[q], thick) for q in waiting]
        if first[p] is not None:
            mine.append(_pipe(f"M{_x(lanes[p]):g} -1V50", gathered[p], thick))
        leaving = [part.today.hidden, _state(part, has_plan).hidden]
        mine.append(_pipe(_onward(parts, lanes, p), leaving, thick))
        if part.feeds is not None:
            gathered[part.feeds] = [a + b for a, b in zip(gathered[part.feeds], leaving, strict=True)]
            if part.feeds not in waiting:
                waiting.append(part.feeds)
        drawn.append(mine)
    return drawn


def _onward(parts: Sequence[LinePart], lanes: list[int], p: int) -> str:
    onward, x = parts[p].feeds, _x(lanes[p])
    if onward is None or lanes[onward] == lanes[p]:
        return f"M{x:g} 50V101"
    return f"M{x:g} 50C{x:g} 85 {_x(lanes[onward]):g} 65 {_x(lanes[onward]):g} 101"


def _pipe(path: str, carried: Sequence[float], thick: Scale) -> Pipe:
    today, plan = (max(NARROWEST, WIDEST * thick.at(c) / 100.0) for c in carried)
    return Pipe(path, round(today, 1), round(plan, 1))


def _bars(parts: Sequence[LinePart], kind: str) -> list[Bar]:
    now = [getattr(part.today, kind) for part in parts]
    then = [getattr(_state(part, True), kind) for part in parts]
    scale = Scale(0.0, widest([*now, *then]))
    say = words.money if kind == "lost" else words.ppm
    return [Bar(scale.at(a), scale.at(b), say(b), say(a)) for a, b in zip(now, then, strict=True)]
