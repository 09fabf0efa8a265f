"""The command that puts everything on one page for the design review."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from allocator.cli.app import OUT_OF_REACH, File, app, load
from allocator.cli.progress import progress


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
        typer.echo("The target cannot be met: the page shows the best within reach, and what holds it.", err=True)
        raise typer.Exit(OUT_OF_REACH)
