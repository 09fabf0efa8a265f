"""Does it matter that defects come in clusters: the yield with them beside the Poisson yield of every figure."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from allocator.clustering import rolled_yield
from allocator.problem import Problem
from allocator.results import Caution
from allocator.scenario.levels import column

Array = NDArray[np.float64]
CLUSTERED = "clustered_defects"
HALF_A_POINT = 0.005


def cautions_of_clusters(problem: Problem, intensity: Array) -> Iterator[Caution]:
    """Caution where the clustering stated moves the rolled yield by more than half a point.

    Parameters
    ----------
    problem : Problem
    intensity : shape (n_steps,) [defects per item]
        Today's or the plan's.
    """
    alpha = column(problem.scenario.step, "clustering")
    if np.isnan(alpha).all():
        return
    alpha = np.where(np.isnan(alpha), np.inf, alpha)
    poisson, clustered = (rolled_yield(intensity, a, problem.line.per_finished) for a in (np.inf, alpha))
    gain = clustered - poisson
    if gain > HALF_A_POINT:
        names = tuple(step.name for step in problem.scenario.step if step.clustering is not None)
        yield Caution(
            CLUSTERED, names,
            f"with the clustering stated {100.0 * gain:.2g} points more units are free of defects than the Poisson yields say: "
            "the same defects sit on fewer items",
            "rehearse the plan, and read its simulated yields and money instead of the computed ones",
        )  # fmt: skip
