"""Figures of the answers, for slides and notebooks: each takes a result and returns matplotlib axes."""

from allocator.figures.division import division
from allocator.figures.frontier import frontier
from allocator.figures.levers import sensitivities
from allocator.figures.save import save_figures
from allocator.figures.tree import line
from allocator.figures.worth import worth

__all__ = ["division", "frontier", "line", "save_figures", "sensitivities", "worth"]
