"""Which steps share a row where there are too many to show one by one, and in which order the tree reads well."""

from __future__ import annotations

from collections.abc import Sequence

MOST_ROWS = 200
"""Up to this many steps are shown one by one."""
GROUPED_ROWS = 60
"""Beyond it, at most this many rows."""


def rows_of(feeds: Sequence[int], most: int = MOST_ROWS, grouped: int = GROUPED_ROWS) -> list[list[int]]:
    """Return the steps of each row, in file order; the rows form a tree again.

    Parameters
    ----------
    feeds : sequence of int
        The step each step feeds, always a later one; −1 for the last.

    >>> rows_of([1, 2, 3, -1], most=3, grouped=2)
    [[0, 1], [2, 3]]
    """
    if len(feeds) <= most:
        return [[i] for i in range(len(feeds))]
    size = -(-len(feeds) // grouped)
    while len(rows := _chunks(feeds, size)) > grouped:
        size += 1 + size // 4
    return sorted(rows)


def _chunks(feeds: Sequence[int], size: int) -> list[list[int]]:
    """Return connected runs of steps, and parts that feed the same step together, of at most `size` steps each."""
    closed: list[list[int]] = []
    waiting: list[list[list[int]]] = [[] for _ in feeds]
    for i, following in enumerate(feeds):
        *others, trunk = sorted(waiting[i], key=len) or [[]]
        if len(trunk) + sum(map(len, others)) < size:
            mine = [*(step for chunk in (*others, trunk) for step in chunk), i]
        elif len(trunk) < size:
            mine = [*trunk, i]
            closed += _packed(others, size)
        else:
            mine = [i]
            closed += _packed([*others, trunk], size)
        mine.sort()
        if following < 0:
            closed.append(mine)
        else:
            waiting[following].append(mine)
    return closed


def _packed(chunks: list[list[int]], size: int) -> list[list[int]]:
    packed: list[list[int]] = []
    for chunk in sorted(chunks):
        if packed and len(packed[-1]) + len(chunk) <= size:
            packed[-1] = sorted(packed[-1] + chunk)
        else:
            packed.append(chunk)
    return packed


def feeds_of_rows(feeds: Sequence[int], rows: Sequence[Sequence[int]]) -> list[int]:
    """Return the row that each row feeds, −1 for the last."""
    row_of = {step: r for r, steps in enumerate(rows) for step in steps}
    onward = [{row_of[feeds[i]] for i in steps if feeds[i] >= 0} - {r} for r, steps in enumerate(rows)]
    assert all(len(rows_fed) <= 1 for rows_fed in onward), "rows of a tree form a tree"
    return [next(iter(rows_fed), -1) for rows_fed in onward]


def reading_order(feeds: Sequence[int]) -> list[int]:
    """Return the rows so that whatever feeds a row stands just above it, its longest branch first.

    >>> reading_order([2, 3, 3, -1])
    [0, 2, 1, 3]
    """
    feeding: list[list[int]] = [[] for _ in feeds]
    weight = [1] * len(feeds)
    for i in _towards_end(feeds):
        if feeds[i] >= 0:
            feeding[feeds[i]].append(i)
            weight[feeds[i]] += weight[i]
    order: list[int] = []
    todo = [i for i, following in enumerate(feeds) if following < 0]
    while todo:
        row = todo.pop()
        order.append(row)
        todo += sorted(feeding[row], key=lambda i: (-weight[i], i))
    return order[::-1]


def _towards_end(feeds: Sequence[int]) -> list[int]:
    """Return the rows, each before the one that it feeds (rows of groups need not come in that order)."""
    depth = [0] * len(feeds)
    for start in range(len(feeds)):
        row, steps = start, 0
        while feeds[row] >= 0:
            row, steps = feeds[row], steps + 1
        depth[start] = steps
    return sorted(range(len(feeds)), key=lambda i: -depth[i])
