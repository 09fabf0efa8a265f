"""The figures of an answer as files: which ones it has, each as SVG and as PNG."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from allocator.figures.division import division
from allocator.figures.frontier import frontier
from allocator.figures.levers import sensitivities
from allocator.figures.tree import line
from allocator.figures.worth import worth
from allocator.files import written_aside
from allocator.results import CapitalCase, Nines, Plan, Today, Weighed

Draw = Callable[[Any], Any]
FORMS = (".svg", ".png")
DOTS_PER_INCH = 200

# Kind of answer -> name of the file and what draws it.
FIGURES: dict[type, tuple[tuple[str, Draw], ...]] = {
    Plan: (("division", division), ("line", line)),
    Nines: (("frontier", frontier),),
    Today: (("line", line),),
    CapitalCase: (("sensitivities", sensitivities),),
    Weighed: (("worth", worth),),
}


def has_something(answer: object) -> bool:
    """Return whether there is anything to draw: an answer out of reach may have no line, and no comparison."""
    return bool(answer.cases) if isinstance(answer, CapitalCase) else bool(getattr(answer, "rows", ()))


def save_figures(answer: object, folder: str | Path) -> list[Path]:
    """Draw every figure of an answer into a folder, which is made if need be; return the files written.

    Existing files of these names are replaced; an answer without a plan has none.
    """
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    figures: Sequence[tuple[str, Draw]] = FIGURES[type(answer)] if has_something(answer) else ()
    return [path for name, draw in figures for path in _save(draw, answer, folder / name)]


def _save(draw: Draw, answer: object, stem: Path) -> list[Path]:
    import matplotlib

    # No window and no choice of a display: files only, whatever the machine.
    with matplotlib.rc_context({"backend": "agg", "svg.hashsalt": "allocator"}), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing")  # A box for a sign that the font lacks.
        from matplotlib import pyplot

        axes = draw(answer)
        figure = (axes[0] if isinstance(axes, tuple) else axes).figure
        paths = [stem.with_suffix(form) for form in FORMS]
        for path in paths:
            with written_aside(path) as aside:
                metadata = {"Date": None} if path.suffix == ".svg" else {}
                figure.savefig(aside, dpi=DOTS_PER_INCH, metadata=metadata)
        pyplot.close(figure)
    return paths
