"""What does a price paid once cost per year."""

from __future__ import annotations

import math

from allocator.errors import RangeError


def capital_recovery(rate: float, years: float) -> float:
    """Return CRF(r, n) = r/(1 − (1+r)^−n), the yearly cost of one unit of money spent today (1/n at r = 0).

    Parameters
    ----------
    rate : float [1/year]
        Discount rate, 0 or more.
    years : float [year]
        Life, above 0.

    Raises
    ------
    RangeError
        When the life is not above 0 or the rate is below 0.

    >>> round(capital_recovery(0.10, 5), 5)
    0.2638
    """
    if years <= 0.0 or rate < 0.0:
        raise RangeError(f"capital recovery needs years > 0 and rate >= 0, got years = {years}, rate = {rate}")
    if rate == 0.0:
        return 1.0 / years
    # expm1/log1p keep the small-rate limit 1/n, which 1 − (1+r)^−n loses to cancellation.
    return rate / -math.expm1(-years * math.log1p(rate))


def annual_cost(price: float, trade_in: float, resale: float, rate: float, years: float) -> float:
    """Return (price − trade_in)·CRF − resale·(CRF − rate), the equal yearly cost of owning for `years`.

    Parameters
    ----------
    price, trade_in, resale : float [currency]
        Paid now, received now for what is replaced, received at the end of the life.
    rate : float [1/year]
    years : float [year]

    >>> round(annual_cost(30_000, 0, 7_000, 0.12, 4) + 18_000)
    26412
    """
    crf = capital_recovery(rate, years)
    return (price - trade_in) * crf - resale * (crf - rate)
