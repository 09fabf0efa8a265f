"""What does one price leave open: branch on the step whose way changes at the balancing price, until the gap closes.

At the price that balances the budget some steps stand between two ways. Each branch forbids one of the two and is
priced anew, with a bound of its own; levels that move are balanced again in every branch, which whole lists of
combinations could not do.
"""

from __future__ import annotations

import heapq
import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from allocator.solve.choose import Index, Menu, Priced, balance_menu
from allocator.solve.duty import Duty

Array = NDArray[np.float64]
Offer = Callable[[Index], float]
"""Takes one way per step, evaluates it, and returns the least total known so far."""
LIFT = 1e-7
"""Share of its bound by which a branch's next tangent of scrap must lift it for another to be drawn."""


@dataclass(frozen=True)
class Tangent:
    """Scrap and the rest of the flow's money as a straight line in δ: `rest` + slope·δ, never above the truth."""

    slope: Array
    rest: float


Touch = Callable[[Array], Tangent]
"""Takes the steps' intensities and returns the tangent there."""


def tangent_at(duty: Duty, here: Array) -> Tangent:
    """Return the tangent of the flow's money at δ = `here`, shape (n_steps,)."""
    money, slope = duty.money(here)
    return Tangent(slope, money - float(slope @ here))


@dataclass(frozen=True, order=True)
class _Node:
    """Ways forbidden so far, the bound without them, the balancing price and tangent, and the step to branch on."""

    bound: float
    number: int
    forbidden: Index = field(compare=False)
    price: float = field(compare=False)
    tangent: Tangent = field(compare=False)
    step: int = field(compare=False)
    taken: int = field(compare=False)


class _Branching:
    """The branches still open, and the least bound of those closed."""

    def __init__(self, menu: Menu, weight: Array, free: float, touch: Touch, offer: Offer, gap: float) -> None:
        self.menu, self.weight, self.free = menu, weight, free
        self.touch, self.offer, self.gap = touch, offer, gap
        self.open: list[_Node] = []
        self.closed, self.total, self.count = np.inf, np.inf, 0

    def enough(self, bound: float) -> bool:
        """Return whether no plan of this bound is worth looking for."""
        return bound >= self.total - self.gap * abs(self.total)

    def look(self, forbidden: Index, price: float, tangent: Tangent, least: float) -> None:
        """Price a branch, offer both sides of its price, and keep it open unless that settles it.

        Scrap's tangent moves to the branch's own ways for as long as that lifts its bound.
        """
        fixed = self.menu.fixed.copy()
        fixed[forbidden] = np.inf
        menu = replace(self.menu, fixed=fixed)
        bound, lifted = -np.inf, True
        while lifted and not self.enough(bound):
            under, over = balance_menu(menu, tangent.slope, self.weight, self.free, max(price, 1e-9))
            sides = [side for side in (under, over) if side is not None]
            priced = max(float(np.sum(side.value[side.best])) - side.price * self.free for side in sides) + tangent.rest
            lifted, bound = priced > bound + LIFT * abs(priced), max(bound, priced)
            if not self.enough(bound):
                self._offer(sides, tangent)
            price, at = under.price, tangent
            tangent = self.touch(under.answers.delta[under.best])
        bound = max(bound, least)
        step = -1 if self.enough(bound) else _changing(self.weight, under, over)
        if step < 0:
            self.closed = min(self.closed, bound)
            return
        self.count += 1
        heapq.heappush(self.open, _Node(bound, self.count, forbidden, price, at, step, int(under.best[step])))

    def _offer(self, sides: list[Priced], tangent: Tangent) -> None:
        """Offer what answers: where no way moves only what keeps the budget, if the tangent below its cost allows."""
        for side in sides[:1] if self.menu.pinned else sides:
            if not self.menu.pinned or tangent.rest + side.cost < self.total:
                self.total = min(self.offer(side.best), self.total)

    def split(self, node: _Node) -> None:
        """Look at both ways out: the step takes its way under the budget, or must not."""
        others = np.setdiff1d(np.flatnonzero(self.menu.step == node.step), [node.taken])
        for forbidden in (others, np.array([node.taken])):
            self.look(np.union1d(node.forbidden, forbidden), node.price, node.tangent, node.bound)


def branch(
    menu: Menu,
    weight: Array,
    free: float,
    touch: Touch,
    here: Array,
    price: float,
    offer: Offer,
    gap: float,
    seconds: float,
) -> float:
    """Offer choices until their best is within `gap` of what is proven; return the lower bound proven by then.

    Parameters
    ----------
    menu : Menu
        The ways that a better plan can take.
    weight : shape (n_steps,)
        What the steps' defects use of the budget.
    free : float
        The budget.
    touch : callable
    here : shape (n_steps,) [defects per item]
        Where the first tangent is drawn.
    price : float
        Where the search for the balancing price starts.
    offer : callable
    gap : float
        Share of the least total.
    seconds : float
        Time after which the open branches set the bound.
    """
    ends = time.monotonic() + seconds
    branches = _Branching(menu, weight, free, touch, offer, gap)
    branches.look(np.zeros(0, dtype=np.int64), price, touch(here), -np.inf)
    while branches.open:
        node = heapq.heappop(branches.open)
        if branches.enough(node.bound) or time.monotonic() > ends:
            return min(node.bound, branches.closed)
        branches.split(node)
    return branches.closed


def _changing(weight: Array, under: Priced, over: Priced | None) -> int:
    """Return the step whose way changes the load most between both sides of the price, −1 where none changes."""
    if over is None:
        return -1
    change = weight * np.abs(over.answers.delta[over.best] - under.answers.delta[under.best])
    change[over.best == under.best] = -1.0
    step = int(np.argmax(change))
    return step if change[step] >= 0.0 else -1
