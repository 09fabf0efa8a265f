"""The page as one file: template, style and script joined with what the record says, every text escaped."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path
from typing import Any

from allocator.files import refuse_unfit_file, written_aside
from allocator.report.page.case import case_said
from allocator.report.page.certainty import played_said, proof_said
from allocator.report.page.choices import choices_said
from allocator.report.page.control import control
from allocator.report.page.cost import cost_drawing
from allocator.report.page.rails import line_drawing
from allocator.report.page.said import said
from allocator.report.page.sheets import sheets_said
from allocator.report.page.sure import sure_said
from allocator.results import ReviewPage

TEMPLATES = "allocator.report.page"


def page_html(review: ReviewPage) -> str:
    """The page as text: no address outside it, nothing loaded."""
    from jinja2 import Environment, FunctionLoader, StrictUndefined  # here: other reports should not wait for it

    environment = Environment(
        loader=FunctionLoader(_read), autoescape=True, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True,
        finalize=_kept_together,
    )  # fmt: skip
    parts: dict[str, Any] = {
        "review": review,
        "said": said(review),
        "control": control(review),
        "cost": cost_drawing(review),
        "line": line_drawing(review),
        "choices": choices_said(review.weighed),
        "sure": sure_said(review.confidence, review.plan),
        "case": case_said(review.case),
        "proof": proof_said(review.plan),
        "played": played_said(review.rehearsal),
        "sheets": sheets_said(review.sheets),
        "style": _read("page.css"),
        "script": _read("page.js"),
    }
    return environment.get_template("page.html").render(parts)


def _kept_together(value: Any) -> Any:
    """A figure and its per cent sign stay on one line."""
    return value.replace(" %", "\u00a0%") if type(value) is str else value


def _read(name: str) -> str:
    return files(TEMPLATES).joinpath("templates", name).read_text(encoding="utf-8")


def write_page(text: str, file: Path) -> None:
    """Write the page aside and move it into place, so that no half page is ever there."""
    refuse_unfit_file(file)
    with written_aside(file) as aside:
        aside.write_text(text, encoding="utf-8", newline="\n")
