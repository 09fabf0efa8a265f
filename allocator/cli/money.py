"""The commands of those who answer for the money: compare, case, review, weigh."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from allocator.cli.app import (
    OUT_OF_REACH,
    AsCsv,
    AsJson,
    Figures,
    File,
    app,
    draw,
    form_of,
    load,
    refuse_unfit_outputs,
    refused,
    show,
)
from allocator.cli.progress import progress

Files = Annotated[list[Path], typer.Argument(metavar="FILE FILE...", help="Scenario files.", show_default=False)]


@app.command()
def compare(files: Files, as_json: AsJson = False, as_csv: AsCsv = False) -> None:
    """Set the plans of several scenarios side by side. As in: allocator compare now.toml other_supplier.toml"""
    form = form_of(as_json, as_csv)
    if len(files) < 2:
        raise refused("FILE", str(files[0]), "name two scenario files or more")
    from allocator import api

    scenarios = [load(file) for file in files]
    with progress("planning each") as watch:
        answer = api.compare_scenarios(scenarios, watch=watch)
    show(answer, form)
    if not all(case.plan.reached for case in answer.cases):
        raise typer.Exit(OUT_OF_REACH)


@app.command()
def case(
    file: File,
    name: Annotated[
        str | None,
        typer.Argument(metavar="[NAME]", help="An alternative, purchase or law (STEP: NAME); without it, the plan."),
    ] = None,
    figures: Figures = None,
    as_json: AsJson = False,
    as_csv: AsCsv = False,
) -> None:
    """Make the capital case of the plan, or of one purchase. As in: allocator case line.toml 'new press'"""
    form = form_of(as_json, as_csv)
    refuse_unfit_outputs(figures)
    from allocator import api

    answer = api.capital_case(load(file), name)
    show(answer, form)
    draw(answer, figures)
    if not answer.reached:
        raise typer.Exit(OUT_OF_REACH)


@app.command()
def review(
    file: File,
    step: Annotated[
        list[str] | None, typer.Option(metavar="NAME", help="One step alone, and later checks for it.")
    ] = None,
    as_json: AsJson = False,
    as_csv: AsCsv = False,
) -> None:
    """Set all options in one table for a design review. As in: allocator review line.toml --step weld"""
    form = form_of(as_json, as_csv)
    if step is not None and len(step) > 1:
        raise refused("--step", f"{len(step)} steps", "name one step, or leave it out for all the steps that matter")
    from allocator import api

    scenario = load(file)
    with progress("weighing the options") as watch:
        answer = api.review_table(scenario, step[0] if step else None, watch=watch)
    show(answer, form)
    if not answer.reached:
        raise typer.Exit(OUT_OF_REACH)


@app.command()
def weigh(file: File, figures: Figures = None, as_json: AsJson = False, as_csv: AsCsv = False) -> None:
    """Say what to buy and what to leave. As in: allocator weigh line.toml"""
    form = form_of(as_json, as_csv)
    refuse_unfit_outputs(figures)
    from allocator import api

    scenario = load(file)
    with progress("weighing") as watch:
        answer = api.weigh_purchases(scenario, watch=watch)
    show(answer, form)
    draw(answer, figures)
    if not answer.reached:
        raise typer.Exit(OUT_OF_REACH)
