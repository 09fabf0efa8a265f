"""The commands of the main job: new, check, today, plan, nines."""

from __future__ import annotations

from contextlib import nullcontext
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
from allocator.cli.asked import (
    Hold,
    Of,
    Which,
    With,
    Without,
    levels_held,
    losses_asked,
    name_of,
    named,
    refuse_target_beside_money,
    refuse_unfit_confidence,
    refuse_unfit_money,
    split_of,
    yield_option,
)
from allocator.cli.progress import progress
from allocator.errors import Fault, InputError


@app.command()
def new(
    file: File,
    xlsx: Annotated[
        bool, typer.Option("--xlsx", help="Write a workbook to be filled in, with a sheet per table.")
    ] = False,
) -> None:
    """Write a small commented scenario to start from. As in: allocator new line.toml"""
    from allocator.files import refuse_unfit_file

    refuse_unfit_file(file)
    if file.exists():
        raise InputError([Fault(str(file), "", "a file of that name", "name a new file; nothing was overwritten")])
    from allocator.scenario.starter import write_starter

    write_starter(file, as_workbook=xlsx)
    typer.echo(f"Wrote {file}. Next: allocator check {file}")


@app.command()
def check(file: File, as_json: AsJson = False, as_csv: AsCsv = False) -> None:
    """Say whether a scenario is sound, and what to be careful of."""
    form = form_of(as_json, as_csv)
    from allocator import api

    show(api.check_scenario(load(file)), form)


@app.command()
def today(file: File, figures: Figures = None, as_json: AsJson = False, as_csv: AsCsv = False) -> None:
    """Show where the line stands and where its money goes."""
    form = form_of(as_json, as_csv)
    refuse_unfit_outputs(figures)
    from allocator import api

    answer = api.see_today(load(file))
    show(answer, form)
    draw(answer, figures)


@app.command()
def plan(
    file: File,
    final_yield: Annotated[str | None, yield_option(Which.final)] = None,
    rolled_yield: Annotated[str | None, yield_option(Which.rolled)] = None,
    shipped_yield: Annotated[str | None, yield_option(Which.shipped)] = None,
    nines: Annotated[float | None, typer.Option(help="Target in nines for the yield split: 3 is 0.999.")] = None,
    ppm: Annotated[float | None, typer.Option(help="Target in defective units per million, same yield.")] = None,
    of: Of = None,
    spend: Annotated[float | None, typer.Option(help="The best yield for at most this total cost per year.")] = None,
    capital: Annotated[float | None, typer.Option(help="The best yield for at most this much capital.")] = None,
    confidence: Annotated[
        float | None, typer.Option(help="Meet the targets with this probability under the error of the estimates.")
    ] = None,
    hold: Hold = None,
    without: Without = None,
    with_: With = None,
    xlsx: Annotated[Path | None, typer.Option(metavar="FILE", help="Write the plan to a workbook as well.")] = None,
    figures: Figures = None,
    as_json: AsJson = False,
    as_csv: AsCsv = False,
) -> None:
    """Find the cheapest plan that meets the target. As in: allocator plan line.toml --nines 3"""
    form = form_of(as_json, as_csv)
    refuse_unfit_outputs(figures, xlsx)
    yields = {Which.final: final_yield, Which.rolled: rolled_yield, Which.shipped: shipped_yield}
    losses = losses_asked({which: text for which, text in yields.items() if text is not None}, nines, ppm)
    refuse_unfit_money(spend, capital)
    refuse_target_beside_money(bool(losses), spend, capital)
    refuse_unfit_confidence(confidence, spend, capital)
    levels = levels_held(hold or [])
    from allocator import api

    scenario = load(file)
    targets = named(losses, of or split_of(scenario, losses))
    with progress("looking for a plan that holds") if confidence is not None else nullcontext():
        answer = api.make_plan(
            scenario, of=name_of(of), targets=targets, spend=spend, capital=capital, hold=levels,
            without=without or (), with_=with_ or (), confidence=confidence,
        )  # fmt: skip
    show(answer, form)
    if xlsx is not None:
        from allocator.report.plan_book import write_plan_book

        write_plan_book(answer, xlsx)
        typer.echo(f"Wrote {xlsx}", err=True)
    draw(answer, figures)
    if not answer.reached:
        raise typer.Exit(OUT_OF_REACH)


@app.command()
def nines(
    file: File,
    points: Annotated[int | None, typer.Option(help="Add an even grid of this many points.")] = None,
    of: Of = None,
    figures: Figures = None,
    as_json: AsJson = False,
    as_csv: AsCsv = False,
) -> None:
    """Price each extra nine, up to the highest yield within reach."""
    form = form_of(as_json, as_csv)
    if points is not None and points < 2:
        raise refused("--points", str(points), "give 2 or more: an even grid has two ends")
    refuse_unfit_outputs(figures)
    from allocator import api

    answer = api.price_nines(load(file), of=name_of(of), points=points)
    show(answer, form)
    draw(answer, figures)
    if answer.highest is None:
        raise typer.Exit(OUT_OF_REACH)
