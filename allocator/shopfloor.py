"""What happens to the items themselves: made, spoilt, found, mended, scrapped, put together and shipped, one by one.

Nothing here is worked out; it is drawn and counted. Defects are kept as a list with one entry per defect, the number of
the item that it sits in, so an item may hold several, and items without any cost nothing. Spreading a Poisson number
of defects over the items evenly is the same law as a Poisson count for each item.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Items = NDArray[np.int64]
BEYOND_DOUBT = 6.0
"""Standard errors; what is started that safely is left over once in a thousand million times, and then not counted."""
WHOLE = 1e-12
"""Share by which a number of items may miss a whole one and still be it: the rounding of a per_unit such as 0.1."""


@dataclass(frozen=True)
class Shop:
    """The line as the shop floor sees it, arrays of shape (n_steps,), each step before the one that it feeds.

    Parameters
    ----------
    feeds : array of int
        Index of the step fed, −1 for the last.
    per_unit : [items of this step per item fed]
        Where it is not whole, a defect sits at one place of its item and goes along with what is made from there.
    intensity : [defects per item]
        Expected number of defects that the step makes.
    clustering : α
        Defects of an item are negative binomial with this α, inf where they are Poisson.
    finds, earlier : [share]
        Of the step's own defects, and of hidden earlier ones, that its gate finds.
    falsely_lost : [share of all items]
        Rejected though nothing is wrong, and really lost.
    mended : [share of the defects found]
        The others cost the item.
    """

    feeds: Items
    per_unit: Array
    intensity: Array
    clustering: Array
    finds: Array
    earlier: Array
    falsely_lost: Array
    mended: Array

    @property
    def n_steps(self) -> int:
        return len(self.feeds)


@dataclass(frozen=True)
class Shipped:
    """What was counted until so many units were shipped; arrays of shape (n_steps,).

    Whole numbers, but where only a part of the last item made was used: it then counts for that part.
    """

    units: int
    started: Array
    lost: Array
    mended: Array
    """Defects mended, on items that then passed the gate."""
    escaped: int
    """Defects in the units shipped."""


@dataclass(frozen=True)
class FirstTries:
    """How many of the units started came through at the first try, nothing replaced."""

    units: int
    spotless: int
    """No defect anywhere."""
    came_out: int
    """No item of the unit was lost."""
    good: int
    """Came out, and without a hidden defect."""


@dataclass(frozen=True)
class _Met:
    """What a gate made of the items that it met; every entry the number of an item, from 0, sorted only in `lost`."""

    own: Items
    hidden: Items
    lost: Items
    mended: Items


NONE: Items = np.empty(0, dtype=np.int64)


def ship(rng: np.random.Generator, shop: Shop, units: int) -> Shipped:
    """Make items until so many units are shipped; what is lost is made anew, and never more than is needed.

    Parameters
    ----------
    rng : Generator
        Where all chance comes from.
    shop : Shop
    units : int
        Units to ship, 1 or more.
    """
    run = _Run(rng, shop)
    while run.good[-1] < units:
        planned = run.planned(units)
        for j in range(shop.n_steps):
            run.make(j, min([planned[j], *(run.enough_for(child) - run.started[j] for child in run.fed_by[j])]))
    used = run.used()
    started, lost, mended = (np.array(count) * used for count in (run.started, run.lost, run.mended))
    return Shipped(units, started, lost, mended, run.escaped)


class _Run:
    """The shop while it works: what was started, lost and passed so far, and the hidden defects that wait with it."""

    def __init__(self, rng: np.random.Generator, shop: Shop):
        n = shop.n_steps
        self.rng, self.shop = rng, shop
        self.started, self.good, self.lost, self.mended = [0] * n, [0] * n, [0] * n, [0] * n
        self.escaped = 0
        self.waiting = [NONE] * n
        """Per step, the hidden defects in what was delivered to it, by the number of the item that will hold them."""
        self.fed_by = [np.flatnonzero(shop.feeds == j).tolist() for j in range(n)]

    def planned(self, units: int) -> list[int]:
        """Return how many items each step is to start next: as many as will be needed beyond all doubt."""
        planned = [0] * self.shop.n_steps
        planned[-1] = self._safe_start(-1, units - self.good[-1])
        for c in range(self.shop.n_steps - 2, -1, -1):
            fed = int(self.shop.feeds[c])
            goes_in = float(self.shop.per_unit[c]) * (self.started[fed] + planned[fed])
            planned[c] = self._safe_start(c, math.ceil(goes_in * (1.0 - WHOLE)) - self.good[c])
        return planned

    def _safe_start(self, j: int, wanted: int) -> int:
        """Return how many items of a step to start for so many good ones: never so many that some are left over.

        As many as are wanted are always needed. How many more follows from the share that has passed so far, taken
        `BEYOND_DOUBT` standard errors too high, and from as many standard errors of what will pass.
        """
        if wanted <= 0 or self.started[j] == 0:
            return max(wanted, 0)
        seen, room = self.started[j], BEYOND_DOUBT**2 / self.started[j]
        share = self.good[j] / seen
        half = BEYOND_DOUBT * math.sqrt(share * (1.0 - share) / seen + room / (4.0 * seen))
        high = min((share + 0.5 * room + half) / (1.0 + room), 1.0)
        spread = BEYOND_DOUBT * math.sqrt(high * (1.0 - high))
        root = (math.sqrt(spread**2 + 4.0 * high * wanted) - spread) / (2.0 * high)
        return max(wanted, math.floor(root**2))

    def enough_for(self, c: int) -> int:
        """Return how many items of the step that `c` feeds all the good items of `c` so far are enough for."""
        return math.floor(self.good[c] / float(self.shop.per_unit[c]) * (1.0 + 2.0 * WHOLE))

    def used(self) -> Array:
        """Return the share of each step's good items that went into the units shipped or into what was lost after it.

        It is 1, or just below where per_unit is not whole.
        """
        used = np.ones(self.shop.n_steps)
        for c in range(self.shop.n_steps - 2, -1, -1):
            fed = int(self.shop.feeds[c])
            used[c] = used[fed] * self.shop.per_unit[c] * self.started[fed] / self.good[c]
        return used

    def make(self, j: int, items: int) -> None:
        """Make so many items at step j out of what was delivered, and deliver those that pass its gate."""
        if items <= 0:
            return
        now = self.waiting[j] < self.started[j] + items
        met = _meet(self.rng, self.shop, j, items, self.waiting[j][now] - self.started[j])
        self.waiting[j] = self.waiting[j][~now]
        hidden = _numbered_anew(met.hidden, met.lost) + self.good[j]
        fed = int(self.shop.feeds[j])
        if fed < 0:
            self.escaped += len(hidden)
        else:
            delivered = _put_into(self.rng, hidden, float(self.shop.per_unit[j]))
            self.waiting[fed] = np.concatenate([self.waiting[fed], delivered])
        self.started[j] += items
        self.good[j] += items - len(met.lost)
        self.lost[j] += len(met.lost)
        self.mended[j] += len(_numbered_anew(met.mended, met.lost))


def start(rng: np.random.Generator, shop: Shop, units: int) -> FirstTries:
    """Start so many units with all that goes into them, replace nothing, and count those that come through.

    A unit that has lost an item is followed to the end all the same, but does not come out. Parameters as in `ship`.
    """
    items = [units] * shop.n_steps
    for c in range(shop.n_steps - 2, -1, -1):
        items[c] = math.ceil(items[shop.feeds[c]] * float(shop.per_unit[c]) * (1.0 - WHOLE))
    kinds = ("hidden", "lost", "own")
    inside = [dict.fromkeys(kinds, NONE) for _ in items]
    for j, made in enumerate(items):
        met = _meet(rng, shop, j, made, inside[j]["hidden"])
        inside[j]["hidden"] = met.hidden
        inside[j]["lost"] = np.concatenate([inside[j]["lost"], met.lost])
        inside[j]["own"] = np.concatenate([inside[j]["own"], met.own])
        fed = int(shop.feeds[j])
        for kind in kinds if fed >= 0 else ():
            went = _put_into(rng, inside[j][kind], float(shop.per_unit[j]))
            inside[fed][kind] = np.concatenate([inside[fed][kind], went[went < items[fed]]])
    unit = inside[-1]
    lost = np.unique(unit["lost"])
    not_good = np.union1d(lost, unit["hidden"])
    return FirstTries(units, units - len(np.unique(unit["own"])), units - len(lost), units - len(not_good))


def _meet(rng: np.random.Generator, shop: Shop, j: int, items: int, inherited: Items) -> _Met:
    """Spoil so many items in step j and look at them at its gate; `inherited` lists the hidden defects in them."""
    own = _spoilt(rng, items, float(shop.intensity[j]), float(shop.clustering[j]))
    seen_own = rng.random(len(own)) < shop.finds[j]
    seen_earlier = rng.random(len(inherited)) < shop.earlier[j]
    found = np.concatenate([own[seen_own], inherited[seen_earlier]])
    can_mend = rng.random(len(found)) < shop.mended[j]
    falsely = rng.choice(items, rng.binomial(items, shop.falsely_lost[j]), replace=False, shuffle=False)
    return _Met(
        own=own,
        hidden=np.concatenate([own[~seen_own], inherited[~seen_earlier]]),
        lost=np.unique(np.concatenate([found[~can_mend], falsely])),
        mended=found[can_mend],
    )


def _spoilt(rng: np.random.Generator, items: int, intensity: float, clustering: float) -> Items:
    """Return the defects that a step makes, each as the number of its item."""
    if math.isinf(clustering):
        return rng.integers(0, items, rng.poisson(items * intensity))
    return np.repeat(np.arange(items), rng.negative_binomial(clustering, clustering / (clustering + intensity), items))


def _numbered_anew(defects: Items, lost: Items) -> Items:
    """Return the defects on items that were not lost, by the number of the item among those that passed."""
    gone_before = np.searchsorted(lost, defects)
    passed = ~np.isin(defects, lost)
    return defects[passed] - gone_before[passed]


def _put_into(rng: np.random.Generator, items: Items, per_unit: float) -> Items:
    """Return for items, by number, the number of the item that they (or the place of a defect in them) go into."""
    if per_unit == 1.0:
        return items
    if per_unit.is_integer():
        return items // int(per_unit)
    return np.floor((items + rng.random(len(items))) / per_unit).astype(np.int64)
