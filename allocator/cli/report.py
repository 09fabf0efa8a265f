"""The command that puts everything on one page for the design review."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from allocator.cli.app import OUT_OF_REACH, File, app, load
from allocator.cli.progress import progress

if TYPE_CHECKING:
    from allocator.results import Plan


@app.command()
def report(
    file: File,
    output: Annotated[
        Path | None,
        typer.Option("-o", "--output", metavar="PAGE", help="The page to write (default: FILE's name with .html)."),
    ] = None,
) -> None:
    """Write the page for the design review. As in: allocator report line.toml -o review.html"""
    target = output if output is not None else Path(f"{file.stem}.html")
    from allocator.files import refuse_unfit_file

    refuse_unfit_file(target)
    from allocator import api
    from allocator.report.page import page_html, write_page

    scenario = load(file)
    with progress("working out the stops") as watch:
        review = api.review_page(scenario, watch=watch)
    write_page(page_html(review), target)
    typer.echo(f"Wrote {target}. Open it in a browser; it needs no network.")
    if not review.plan.reached:
        typer.echo(_out_of_reach(review.plan), err=True)
        raise typer.Exit(OUT_OF_REACH)


def _out_of_reach(plan: Plan) -> str:
    if plan.yields is None:
        return "No choice keeps the floors and the limits: the page shows the line of today, and what holds it."
    if plan.best_reachable is None:
        return "No plan keeps the limits: the page shows the one that comes nearest, and how much would do."
    return "The target cannot be met: the page shows the best within reach, and what holds it."
