"""What did the batches of a rehearsal count, and within which limits do its figures lie."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator.intervals import FEW, count_interval, mean_interval, share_interval, spread_interval
from allocator.results import Rehearsed
from allocator.shopfloor import FirstTries, Shipped, Shop, ship, start

Array = NDArray[np.float64]
BATCHES, LINES = 30, 200
LARGEST_BATCH = 50_000
"""Units; keeps the lists of defects of a batch within a few dozen megabytes, even on a poor line."""


@dataclass(frozen=True)
class Played:
    """The batches; with `uncertain` two of equal size for every line drawn, one after the other."""

    shop: Shop
    shipped: tuple[Shipped, ...]
    tries: tuple[FirstTries, ...]
    uncertain: bool

    @property
    def sizes(self) -> Array:
        """Units of each batch, shape (n_batches,)."""
        return np.array([batch.units for batch in self.shipped], dtype=float)

    def per_unit(self, counts: str) -> Array:
        """Return the items counted as `counts` per unit shipped, shape (n_batches, n_steps)."""
        return np.array([getattr(batch, counts) / batch.units for batch in self.shipped])

    def mended_per_good(self) -> Array:
        """Return the defects mended per item that passed, shape (n_batches, n_steps)."""
        return np.array([batch.mended / (batch.started - batch.lost) for batch in self.shipped])

    def events(self, counts: str) -> NDArray[np.int64]:
        """Return how many of `counts` the whole rehearsal saw, shape (n_steps,)."""
        return np.asarray(np.sum([getattr(batch, counts) for batch in self.shipped], axis=0).round(), dtype=np.int64)

    def figure(self, values: Array, computed: float | None, events: int, base: float, largest: float) -> Rehearsed:
        """Return a figure from its value in each batch, with its interval.

        Parameters
        ----------
        values : shape (n_batches,)
        events : int
            Chance events (items lost, mended, escaped) behind the figure.
        base : float
            What the figure is without any event.
        largest : float
            The most that one event adds to it.
        """
        sizes = self.sizes
        middle = float(values @ sizes / sizes.sum())
        if self.uncertain:
            low, high = spread_interval(values.reshape(-1, 2))
        elif events >= FEW:
            low, high = mean_interval(values, sizes)
        else:
            each = (middle - base) / events if events else largest
            low, high = (base + each * count for count in count_interval(events))
        return Rehearsed(computed, middle, low, high)

    def loss(self, computed: float | None, good: str, of: str) -> Rehearsed:
        """Return the share of the units counted as `of` (all of them, say) that were not counted as `good`."""
        of_each = np.array([getattr(batch, of) for batch in self.tries])
        bad_each = of_each - np.array([getattr(batch, good) for batch in self.tries])
        bad, all_ = int(bad_each.sum()), int(of_each.sum())
        if self.uncertain:
            low, high = spread_interval((bad_each / np.maximum(of_each, 1)).reshape(-1, 2))
            low, high = max(low, 0.0), min(high, 1.0)
        else:
            low, high = share_interval(bad, all_)
        return Rehearsed(computed, bad / max(all_, 1), low, high)


def play(
    shop: Shop,
    redrawn: Callable[[np.random.Generator], Shop] | None,
    units: int,
    rng: np.random.Generator,
    watch: Callable[[int, int], None] | None,
) -> Played:
    """Return the counts of a rehearsal of so many units.

    Parameters
    ----------
    shop : Shop
    redrawn : callable or None
        Draws another shop that the samples behind this one allow; None where there is only this one.
    watch : callable or None
        Told how many batches of how many are done.
    """
    if redrawn is None:
        count = max(BATCHES, -(-units // LARGEST_BATCH))
        sizes = [units // count + (b < units % count) for b in range(count)]
    else:
        count = 2 * LINES * max(1, -(-units // (2 * LINES * LARGEST_BATCH)))
        sizes = [max(units // count, 1)] * count
    shipped, tries, now = [], [], shop
    for b, size in enumerate(sizes):
        if redrawn is not None and b % 2 == 0:
            now = redrawn(rng)
        shipped.append(ship(rng, now, size))
        tries.append(start(rng, now, size))
        if watch is not None:
            watch(b + 1, count)
    return Played(shop, tuple(shipped), tuple(tries), redrawn is not None)
