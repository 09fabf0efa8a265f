"""The answer about nines: what each costs, up to the highest within reach."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from allocator.results.line import Caution
from allocator.results.plan import BestReachable
from allocator.results.table import as_table
from allocator.shown import shown

if TYPE_CHECKING:
    import pandas


@dataclass(frozen=True)
class NinesPoint:
    """One point of the price of nines."""

    label: str
    """today's yield, 'whole nine', 'target', 'highest reachable', 'grid' or 'economic optimum'."""
    nines: float
    target_yield: float
    target_loss: float
    yield_: float
    loss: float
    total: float
    extra: float | None
    price_of_defect_budget: float | None
    changes: tuple[str, ...]
    gap: float

    @property
    def price_per_nine(self) -> float | None:
        """Rise of the least total per nine, near this point and with the choices kept; None without a local price."""
        if self.price_of_defect_budget is None:
            return None
        # The budget is -ln(1 - loss) and a nine is ln 10 of ln(loss), so a nine takes ln 10 * loss / (1 - loss) of it.
        return self.price_of_defect_budget * math.log(10.0) * self.target_loss / self.target_yield


@shown
@dataclass(frozen=True)
class Nines:
    """Total cost and cost of each extra nine, up to the highest reachable."""

    title: str
    currency: str
    split: str
    today_nines: float
    rows: tuple[NinesPoint, ...]
    highest: BestReachable | None
    missed_target_loss: float | None
    """1 − the target of this yield, where it is out of reach."""
    optimum_yield: float | None
    optimum_loss: float | None
    optimum_total: float | None
    assumed: tuple[str, ...]
    cautions: tuple[Caution, ...]

    @cached_property
    def points(self) -> pandas.DataFrame:
        """The points as a table, from today's nines to the highest reachable."""
        return as_table(NinesPoint, self.rows)
