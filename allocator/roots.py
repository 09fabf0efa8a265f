"""Where does a function cross zero between two ends?"""

from __future__ import annotations

from collections.abc import Callable

TIGHTEST = 8.9e-16
"""The least relative tolerance that floating point allows."""


def root_between(
    function: Callable[[float], float], low: float, high: float, absolute: float = 1e-12, relative: float = TIGHTEST
) -> float:
    """Return a root of a continuous function by Brent's method.

    Parameters
    ----------
    function : callable
        Of different signs at both ends, or 0 at one.
    low, high : float
    absolute, relative : float
        The root lies within `absolute` + `relative`·|root| of what is returned.

    Raises
    ------
    ValueError
        When both ends have the same sign.
    """
    from scipy.optimize import brentq  # here, because its import costs 0.2 s and few questions need it

    return float(brentq(function, low, high, xtol=absolute, rtol=relative))
