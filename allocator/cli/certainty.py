"""The commands about how sure a plan is, and what is asked of suppliers: rehearse, suppliers."""

from __future__ import annotations

from typing import Annotated

import typer

from allocator.cli.app import AsCsv, AsJson, File, app, form_of, load, show
from allocator.cli.asked import Of, name_of
from allocator.cli.progress import progress


@app.command()
def rehearse(
    file: File,
    units: Annotated[
        int | None, typer.Option(help="Units to ship in all (1,000,000; with --uncertain 10,000,000).")
    ] = None,
    seed: Annotated[int, typer.Option(help="The same seed gives the same rehearsal.")] = 1,
    uncertain: Annotated[
        bool, typer.Option("--uncertain", help="Draw the capabilities too, where a `sample` or counts are stated.")
    ] = False,
    today: Annotated[bool, typer.Option("--today", help="The line as it stands, instead of the plan.")] = False,
    as_json: AsJson = False,
    as_csv: AsCsv = False,
) -> None:
    """Play the plan through, unit by unit. As in: allocator rehearse line.toml --seed 7"""
    form = form_of(as_json, as_csv)
    from allocator import api

    scenario = load(file)
    with progress("rehearsing") as watch:
        answer = api.rehearse(scenario, units=units, seed=seed, uncertain=uncertain, today=today, watch=watch)
    show(answer, form)


@app.command()
def suppliers(file: File, of: Of = None, as_json: AsJson = False, as_csv: AsCsv = False) -> None:
    """Write a target sheet per supplier, with what shows it."""
    form = form_of(as_json, as_csv)
    from allocator import api

    scenario = load(file)
    with progress("asking what each refusal costs") as watch:
        answer = api.supplier_sheets(scenario, of=name_of(of), watch=watch)
    show(answer, form)
