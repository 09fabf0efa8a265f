"""Where a figure stands on a drawing: positions in per cent of its width or height, and round marks of a scale."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True)
class Scale:
    """A straight scale from `low` to `high`."""

    low: float
    high: float

    def at(self, value: float) -> float:
        """Where a value stands, in per cent, kept on the drawing."""
        span = self.high - self.low
        part = (value - self.low) / span if span > 0.0 else 0.5
        return round(100.0 * min(max(part, 0.0), 1.0), 2)

    def marks(self, most: int = 6) -> list[float]:
        """Round values between the ends, at most so many.

        >>> Scale(1.07, 1.9).marks(5)
        [1.2, 1.4, 1.6, 1.8]
        """
        span = self.high - self.low
        if span <= 0.0:
            return [self.low]
        power = 10.0 ** math.floor(math.log10(span / most))
        step = next(size for m in (1.0, 2.0, 5.0, 10.0, 20.0) if span / (size := m * power) <= most)
        first, last = math.ceil(self.low / step - 1e-9), math.floor(self.high / step + 1e-9)
        return [round(i * step, 10) for i in range(first, last + 1)]


def widest(values: list[float]) -> float:
    """The largest of some sizes, never 0, so that it can be divided by."""
    return max((v for v in values if math.isfinite(v)), default=0.0) or 1.0
