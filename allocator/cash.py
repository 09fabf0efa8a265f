"""What does money paid and saved year by year amount to: present value, rate of return, payback, replacement.

All cash of a year is booked at its end, today's in year 0; a replacement falls due at the end of the year in which the
old one has run its life. Prices stay as they are today (no inflation), and nothing is taxed.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from allocator.errors import RangeError
from allocator.money import annual_cost, capital_recovery
from allocator.results import Asset, CashYear

Array = NDArray[np.float64]
LONGEST = 200
"""Years over which cash is listed; a longer horizon is a perpetuity, for which the yearly figures are enough."""
MOST_REPLACEMENTS = 100_000
EXACT = 1e-9
"""Years closer than this share are the same year: 3 lives of 0.1 end with year 0.3."""
ONE_RATE, NO_OUTLAY, NO_RETURN = "", "nothing is paid first", "it never earns back what is paid"
SEVERAL = "the cash changes sign more than once, so that several rates fit"


def last_year(years: float) -> int:
    """Return the number of the last year of a horizon [year]; a part of a year counts as one with part of its money.

    Raises
    ------
    RangeError
        Beyond 200 years.
    """
    if years > LONGEST:
        raise RangeError(
            f"cash is listed for at most {LONGEST} years, got a horizon of {years:g}; shorten demand.years, or "
            "read the yearly figures of the plan"
        )
    return max(math.ceil(years * (1.0 - EXACT)), 1)


def each_year(amount: float, years: float) -> Array:
    """Return an equal amount in every year of the horizon, shape (last year + 1,), the last one in part."""
    last = last_year(years)
    flow = np.full(last + 1, amount)
    flow[0] = 0.0
    flow[last] = amount * (years - (last - 1))
    return flow


def paid_and_resold(asset: Asset, years: float) -> tuple[Array, Array]:
    """Return what is paid (price less trade-in, then the price at each replacement) and what resales bring, by year.

    Nothing is counted for the life left at the end of the horizon (see `life_left`).
    """
    paid, resold = np.zeros((2, last_year(years) + 1))
    if not _is_owned(asset):
        return paid, resold
    paid[0] = asset.price - asset.trade_in
    ends = _life_ends(asset, years)
    at = np.ceil(ends * (1.0 - EXACT)).astype(np.int64)
    np.add.at(resold, at, asset.resale)
    again = ends < years * (1.0 - EXACT)
    np.add.at(paid, at[again], asset.price)
    return paid, resold


def _is_owned(asset: Asset) -> bool:
    return asset.price != 0.0 or asset.trade_in != 0.0 or asset.resale != 0.0


def _life_ends(asset: Asset, years: float) -> Array:
    """Return when one after the other has run its life, within the horizon."""
    count = math.floor(years / asset.life_years * (1.0 + EXACT))
    if count > MOST_REPLACEMENTS:
        raise RangeError(
            f"'{asset.name}' would be replaced {count:,} times in {years:g} years; give its life_years in years"
        )
    return np.asarray(asset.life_years * np.arange(1, count + 1), dtype=float)


def life_left(asset: Asset, rate: float, years: float) -> float:
    """Return the present value of the life that is left in an asset at the end of the horizon [currency].

    It is what the remaining equal yearly costs are worth then, and the later resale: with it the present value over
    the horizon is that of the equal yearly cost, whatever the life (the implied salvage value of engineering economy).
    """
    if not _is_owned(asset):
        return 0.0
    bought = len(_life_ends(asset, years))
    left = (bought + 1) * asset.life_years - years
    if left <= EXACT * years or left >= asset.life_years * (1.0 - EXACT):
        return 0.0
    trade_in = asset.trade_in if bought == 0 else 0.0
    yearly = annual_cost(asset.price, trade_in, asset.resale, rate, asset.life_years)
    then = yearly / capital_recovery(rate, left) + asset.resale * (1.0 + rate) ** -left
    return float(then * (1.0 + rate) ** -last_year(years))


def npv(rate: float, net: Array) -> float:
    """Return the present value of yearly cash, year 0 first, at a discount rate [1/year]."""
    import numpy_financial  # here, because only a capital case needs it

    return float(numpy_financial.npv(rate, net))


def irr(net: Array) -> tuple[float | None, str]:
    """Return the internal rate of return of yearly cash, or None with the reason why there is no such rate.

    Raised is the question only for money paid first and earned back later. The rate is the only one above 0 when the
    running sum changes sign once (Norstrøm 1972); otherwise several may fit, and none is given.
    """
    import numpy_financial  # here, because only a capital case needs it

    moves = net[net != 0.0]
    if len(moves) == 0 or moves[0] > 0.0:
        return None, NO_OUTLAY
    if not (moves > 0.0).any():
        return None, NO_RETURN
    if _sign_changes(net) > 1 and (_sign_changes(np.cumsum(net)) != 1 or net.sum() < 0.0):
        return None, SEVERAL
    rate = float(numpy_financial.irr(net))
    return (rate, ONE_RATE) if math.isfinite(rate) else (None, NO_RETURN)


def _sign_changes(values: Array) -> int:
    signs = np.sign(values[values != 0.0])
    return int(np.count_nonzero(np.diff(signs)))


def payback(net: Array) -> float | None:
    """Return the years after which the running sum first reaches 0, within a year in proportion; None if never.

    0 where nothing is paid first.
    """
    running = np.cumsum(net)
    if running[0] >= 0.0:
        return 0.0
    enough = np.flatnonzero(running >= -EXACT * abs(running[0]))
    if len(enough) == 0:
        return None
    year = int(enough[0])
    return year - 1 + float(-running[year - 1] / net[year])


def discounted(rate: float, net: Array) -> Array:
    """Return the cash of every year as it is worth today."""
    return np.asarray(net * (1.0 + rate) ** -np.arange(len(net), dtype=float))


def by_year(rate: float, paid: Array, resold: Array, saving: Array) -> tuple[CashYear, ...]:
    """Return the table of cash by year."""
    net = resold + saving - paid
    today = discounted(rate, net)
    columns = (paid, resold, saving, net, today, np.cumsum(net), np.cumsum(today))
    return tuple(CashYear(year, *row) for year, row in enumerate(np.array(columns).T.tolist()))
