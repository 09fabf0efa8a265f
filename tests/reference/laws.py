"""What does it cost to go from the level at hand to a better one, and how far may one go?"""

from __future__ import annotations

import bisect
import math
from dataclasses import dataclass, field

from scipy.optimize import brentq

from tests.reference.line import recovery
from tests.reference.states import State, level_of, today_state

SCALES = ("price", "per_year", "per_item")


@dataclass(frozen=True)
class Law:
    """A continuous improvement of one step in one state: shape(z) in its own unit, money per unit of shape."""

    kind: str
    parameter: float
    state: State
    z_cap: float
    yearly: float
    capital: float
    hull: tuple[tuple[float, float], ...] = field(default=())
    """Quotes only: (intensity, price) from the last quote to today, prices falling."""

    @property
    def z0(self) -> float:
        """The level from which the improvement starts."""
        return self.state.z

    def shape(self, z: float) -> float:
        """Cost of reaching z in units of the scale, 0 at the start."""
        return _shape(self.kind, self.parameter, z, self.state, self.hull)

    def shape_slope(self, z: float) -> float:
        """Change of the shape with the intensity δ (negative); at a quote, the slope towards today."""
        z0, a, per_z = self.state.z, self.parameter, self.state.delta_slope(z)
        if self.kind == "power":
            return a * (z / z0) ** (a - 1) / z0 / per_z
        if self.kind == "exponential":
            return a * math.exp(a * (z - z0)) / per_z
        if self.kind == "decade":
            p = self.state.p(z)
            return -(1 - p) / (self.state.n * p * math.log(10))
        return _hull_slope(self.hull, self.state.delta(z))

    def z_at_delta(self, delta: float) -> float:
        """Level at which an item has this intensity, between start and cap."""
        low, high = self.z0, self.z_cap
        goal = math.log(delta)
        if goal >= math.log(self.state.delta(low)):
            return low
        if goal <= math.log(self.state.delta(high)):
            return high
        miss = lambda z: math.log(self.state.delta(z)) - goal  # noqa: E731
        return float(brentq(miss, low, high, xtol=1e-15, rtol=8.9e-16))


def _shape(kind: str, a: float, z: float, state: State, hull: tuple[tuple[float, float], ...]) -> float:
    if kind == "power":
        return math.expm1(a * math.log(z / state.z))
    if kind == "exponential":
        return math.expm1(a * (z - state.z))
    if kind == "decade":
        return math.log10(state.p(state.z) / state.p(z))
    start = _on_hull(hull, state.delta(state.z))
    return max(0.0, _on_hull(hull, state.delta(z)) - start)


def law_of(scenario: dict, step: dict, state: State, q: float) -> Law | None:
    """The step's law from the state at hand; None without one, or where the cap leaves nothing to improve."""
    table = step.get("improve")
    if not table:
        return None
    kind = table["law"]
    today = today_state(scenario, step)
    hull = quote_hull(table, today, state) if kind == "quotes" else ()
    cap = _cap(table, state, today)
    if cap <= state.z:
        return None
    yearly, capital = _scale(scenario, table, today, q)
    parameter = table.get("exponent", table.get("rate", math.nan))
    return Law(kind, parameter, state, cap, yearly, capital, hull)


def _cap(table: dict, state: State, today: State) -> float:
    caps = []
    if table["law"] == "quotes":
        caps.append(max(level_of(_capability_part(point), today) for point in table["points"]))
    if "up_to" in table:
        caps.append(level_of(table["up_to"], state))
    return min(caps) if caps else state.z_at_p(state.p(state.z) / 10)


def _scale(scenario: dict, table: dict, today: State, q: float) -> tuple[float, float]:
    """Money per year, and capital, per unit of shape."""
    demand = scenario["demand"]
    if table["law"] == "quotes":
        name, amount = "price", 1.0
    else:
        name = next(key for key in SCALES if key in table)
        amount = table[name]
    if "at" in table:
        parameter = table.get("exponent", table.get("rate", math.nan))
        amount /= _shape(table["law"], parameter, level_of(table["at"], today), today, ())
    if name == "per_year":
        return amount, 0.0
    if name == "per_item":
        return amount * q * demand["shipped_per_year"], 0.0
    return amount * recovery(demand["discount_rate"], table.get("life_years", demand["years"])), amount


def _capability_part(point: dict) -> dict:
    return {key: value for key, value in point.items() if key != "price"}


def quote_hull(table: dict, today: State, state: State) -> tuple[tuple[float, float], ...]:
    """Lower convex envelope of (intensity in `state`, price) from today's level through the quotes."""
    points = [(state.delta(today.z), 0.0)]
    points += [(state.delta(level_of(_capability_part(p), today)), float(p["price"])) for p in table["points"]]
    points.sort()
    hull: list[tuple[float, float]] = []
    for point in points:
        while len(hull) >= 2 and _not_below(hull[-2], hull[-1], point):
            hull.pop()
        hull.append(point)
    return tuple(hull)


def _not_below(a: tuple[float, float], b: tuple[float, float], c: tuple[float, float]) -> bool:
    return (b[1] - a[1]) * (c[0] - a[0]) >= (c[1] - a[1]) * (b[0] - a[0])


def _on_hull(hull: tuple[tuple[float, float], ...], delta: float) -> float:
    if delta <= hull[0][0]:
        return hull[0][1]
    if delta >= hull[-1][0]:
        return hull[-1][1]
    i = bisect.bisect_right([x for x, _ in hull], delta)
    (x0, y0), (x1, y1) = hull[i - 1], hull[i]
    return y0 + (y1 - y0) * (delta - x0) / (x1 - x0)


def _hull_slope(hull: tuple[tuple[float, float], ...], delta: float) -> float:
    if delta >= hull[-1][0]:
        return 0.0
    i = max(1, bisect.bisect_right([x for x, _ in hull], delta))
    (x0, y0), (x1, y1) = hull[i - 1], hull[i]
    return (y1 - y0) / (x1 - x0)
