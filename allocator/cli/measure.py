"""The command that turns measurements into a capability: measure."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from allocator.cli.app import AsCsv, AsJson, app, form_of, show

Data = Annotated[Path, typer.Argument(metavar="CSV", help="Measurements, one row a part.", show_default=False)]


@app.command()
def measure(
    csv: Data,
    column: Annotated[str | None, typer.Option(help="Column of the measurements.")] = None,
    lsl: Annotated[float | None, typer.Option(help="Lower limit; one limit alone is one-sided.")] = None,
    usl: Annotated[float | None, typer.Option(help="Upper limit.")] = None,
    subgroup: Annotated[str | None, typer.Option(help="Column that names each part's subgroup.")] = None,
    gauge_share: Annotated[
        float | None, typer.Option(help="Share of the variance that is the gauge's, shown beside the raw figures.")
    ] = None,
    bounded_at_zero: Annotated[
        bool, typer.Option("--bounded-at-zero", help="Nothing can fall below zero: fit a skewed family.")
    ] = False,
    as_json: AsJson = False,
    as_csv: AsCsv = False,
) -> None:
    """Find the capability in measurements. As in: allocator measure bores.csv --column bore_mm --lsl 20 --usl 20.033"""
    form = form_of(as_json, as_csv)
    from allocator import api

    answer = api.measure_capability(
        csv,
        column=column,
        lsl=lsl,
        usl=usl,
        subgroup=subgroup,
        gauge_share=gauge_share,
        bounded_at_zero=bounded_at_zero,
    )
    show(answer, form)
