"""What a search over choices knows so far: the best answer, the proven bound, what was tried."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from allocator.problem import COST, Problem
from allocator.solve.fixed import FixedAnswer, solve_fixed
from allocator.solve.price import Near

CLOSED = 0.3
"""Share of the gap aimed at within which a branch is closed: the rest is for the tolerances of what comes after."""


@dataclass
class Search:
    """What is known so far: the best answer, the best proven bound, and the ways not yet excluded."""

    problem: Problem
    best: FixedAnswer | None
    bound: float
    tried: dict[bytes, FixedAnswer | None]
    enough: float | None = None

    def done(self, gap: float) -> bool:
        """Return whether the gap is closed, or what was asked (`enough`) is decided either way."""
        if self.best is None:
            return False
        if self.enough is not None and (
            self.value(self.best) <= self.enough or self.bound > self.enough * (1.0 + 1e-9)
        ):
            return True
        return self.gap <= gap

    def offer(self, rows: NDArray[np.int64]) -> FixedAnswer | None:
        """Solve for one way per step (once) and keep it if it is the best so far."""
        key = rows.tobytes()
        if key not in self.tried:
            best = self.best
            hopeless = None if best is None else self.value(best)
            near = None if best is None else Near(best.outcome.flow.intensity, best.price or {})
            self.tried[key] = solve_fixed(self.problem, rows, hopeless, near)
        answer = self.tried[key]
        if answer is not None and (self.best is None or self.value(answer) < self.value(self.best)):
            self.best = answer
        return answer

    def value(self, answer: FixedAnswer) -> float:
        return answer.outcome.value(self.problem.objective)

    @property
    def value_of_best(self) -> float:
        assert self.best is not None
        return self.value(self.best)

    def hopeless(self, bound: float, gap: float) -> bool:
        """Return whether nothing at or above a bound could still matter, a small part of the gap aimed at aside."""
        if self.enough is not None and bound > self.enough * (1.0 + 1e-9):
            return True
        return self.best is not None and bound >= self.value(self.best) - CLOSED * gap * self._size

    @property
    def gap(self) -> float:
        """The relative gap, on the scale that the objective is promised on."""
        if self.best is None:
            return np.inf
        return (self.value(self.best) - self.bound) / self._size

    @property
    def _size(self) -> float:
        assert self.best is not None
        return max(abs(self.value(self.best)), 1.0 if self.problem.objective == COST else 1e-300)
