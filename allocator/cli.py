"""The commands: each parses its arguments, makes one call and renders the answer.

Imports inside the functions below are there for one reason: `--help` must answer at once and so must not load the
numerical libraries behind `allocator.api` and the renderers.
"""

from __future__ import annotations

import io
import os
import shutil
import sys
from decimal import Decimal, InvalidOperation
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer
from typer.core import TyperGroup

from allocator.errors import AllocatorError, Fault, InputError, RangeError

if TYPE_CHECKING:
    from allocator.scenario.model import Scenario

OUT_OF_REACH = 1
FAILED = 1
WRONG_INPUT = 2
PIPE_CLOSED = 141  # What a shell reports for a program that a closed pipe ended (128 + SIGPIPE).
COMMAND_LINE = "command line"


class Boundary(TyperGroup):
    """The one place where an error turns into lines on stderr and an exit code."""

    def invoke(self, ctx: Any) -> Any:
        for stream in (sys.stdout, sys.stderr):
            if isinstance(stream, io.TextIOWrapper):  # A name the terminal cannot show must not end the run.
                stream.reconfigure(errors="backslashreplace")
        try:
            answer = super().invoke(ctx)
            sys.stdout.flush()
            return answer
        except BrokenPipeError:
            # Whoever read our output has seen enough; Python would still complain when it flushes at exit.
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            raise typer.Exit(PIPE_CLOSED) from None
        except InputError as error:
            raise _said([str(fault) for fault in error.faults] or [str(error)], WRONG_INPUT) from None
        except AllocatorError as error:
            raise _said([str(error)], WRONG_INPUT if isinstance(error, RangeError) else FAILED) from None
        except OSError as error:
            place = f"{error.filename}: " if error.filename else ""
            raise _said([f"{place}{error.strerror or error}"], WRONG_INPUT) from None


def _said(lines: list[str], code: int) -> typer.Exit:
    from allocator.report.words import clean

    for line in lines:
        typer.echo(f"allocator: {clean(line)}", err=True)
    return typer.Exit(code)


app = typer.Typer(
    cls=Boundary, rich_markup_mode=None, pretty_exceptions_enable=False, add_completion=False, no_args_is_help=True
)


class Which(StrEnum):
    """Which of the three yields; in the order in which the first one set is split."""

    final = "final"
    rolled = "rolled"
    shipped = "shipped"

    @property
    def yield_name(self) -> str:
        return f"{self.value}_yield"


File = Annotated[Path, typer.Argument(metavar="FILE", help="Scenario file (TOML).", show_default=False)]
AsJson = Annotated[bool, typer.Option("--json", help="Print the answer as JSON, at full precision.")]
AsCsv = Annotated[bool, typer.Option("--csv", help="Print the table as CSV, at full precision.")]
Of = Annotated[Which | None, typer.Option("--of", help="The yield whose budget is split and whose nines are priced.")]


def _yield_option(which: Which) -> Any:
    text = f"Target for the {which} yield, as a number below 1; overrides the file."
    return typer.Option(f"--{which}-yield", metavar="YIELD", help=text)


def _show_version(asked: bool) -> None:
    if asked:
        from importlib.metadata import PackageNotFoundError, version

        try:
            typer.echo(f"allocator {version('allocator')}")
        except PackageNotFoundError:
            typer.echo("allocator (version not known: run from a copy that is not installed)")
        raise typer.Exit


@app.callback()
def allocator(
    version: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    """Turn one promised yield into the cheapest quality target for every step and supplier.

    Exit codes: 0 done, 1 the target cannot be met, 2 the input is wrong.
    """


@app.command()
def new(file: File) -> None:
    """Write a small commented scenario to start from, as in: allocator new line.toml"""
    if file.exists():
        raise InputError([Fault(str(file), "", "a file of that name", "name a new file; nothing was overwritten")])
    from allocator.scenario.starter import write_starter

    write_starter(file)
    typer.echo(f"Wrote {file}. Next: allocator check {file}")


@app.command()
def check(file: File, as_json: AsJson = False, as_csv: AsCsv = False) -> None:
    """Say whether a scenario is sound, what was understood and which cautions apply."""
    form = _form(as_json, as_csv)
    from allocator import api

    _print(api.check_scenario(_scenario(file)), form)


@app.command()
def today(file: File, as_json: AsJson = False, as_csv: AsCsv = False) -> None:
    """Show where the line stands: its yields, its defects and where the money goes."""
    form = _form(as_json, as_csv)
    from allocator import api

    _print(api.see_today(_scenario(file)), form)


@app.command()
def plan(
    file: File,
    final_yield: Annotated[str | None, _yield_option(Which.final)] = None,
    rolled_yield: Annotated[str | None, _yield_option(Which.rolled)] = None,
    shipped_yield: Annotated[str | None, _yield_option(Which.shipped)] = None,
    nines: Annotated[float | None, typer.Option(help="Target in nines for the yield split: 3 is 0.999.")] = None,
    ppm: Annotated[float | None, typer.Option(help="Target in defective units per million, same yield.")] = None,
    of: Of = None,
    spend: Annotated[float | None, typer.Option(help="The best yield for at most this total cost per year.")] = None,
    capital: Annotated[float | None, typer.Option(help="The best yield for at most this much capital.")] = None,
    as_json: AsJson = False,
    as_csv: AsCsv = False,
) -> None:
    """Find the cheapest plan that meets the target, as in: allocator plan line.toml --nines 3"""
    form = _form(as_json, as_csv)
    yields = {Which.final: final_yield, Which.rolled: rolled_yield, Which.shipped: shipped_yield}
    losses = _losses({which: text for which, text in yields.items() if text is not None}, nines, ppm)
    _refuse_unfit_money(spend, capital)
    from allocator import api

    scenario = _scenario(file)
    targets = _named(losses, of or _split_of(scenario, losses))
    answer = api.make_plan(scenario, of=_name(of), targets=targets, spend=spend, capital=capital)
    _print(answer, form)
    if not answer.reached:
        raise typer.Exit(OUT_OF_REACH)


@app.command()
def nines(
    file: File,
    points: Annotated[int | None, typer.Option(min=2, help="Add an even grid of this many points.")] = None,
    of: Of = None,
    as_json: AsJson = False,
    as_csv: AsCsv = False,
) -> None:
    """Price each extra nine, up to the highest yield within reach."""
    form = _form(as_json, as_csv)
    from allocator import api

    answer = api.price_nines(_scenario(file), of=_name(of), points=points)
    _print(answer, form)
    if answer.highest is None:
        raise typer.Exit(OUT_OF_REACH)


def _scenario(file: Path) -> Scenario:
    from allocator.scenario.read import read_scenario

    return read_scenario(file)


def _form(as_json: bool, as_csv: bool) -> Any:
    if as_json and as_csv:
        raise _refused("--json", "--csv beside it", "ask for one of the two")
    return "json" if as_json else "csv" if as_csv else "text"


def _print(answer: object, form: Any) -> None:
    from allocator.report.paper import LOG_WIDTH
    from allocator.report.render import render

    width = shutil.get_terminal_size().columns if sys.stdout.isatty() else LOG_WIDTH
    sys.stdout.write(render(answer, form, width))


def _refused(option: str, found: str, allowed: str) -> InputError:
    return InputError([Fault(COMMAND_LINE, option, found, allowed)])


def _name(of: Which | None) -> str | None:
    return None if of is None else of.yield_name


def _losses(yields: dict[Which, str], nines: float | None, ppm: float | None) -> dict[Which | None, float]:
    """Losses asked for on the command line; the key None stands for the yield that is split."""
    faults: list[Fault] = []
    losses: dict[Which | None, float] = {}
    allowed = "a yield lies between 0 and 1 (99.5 % is 0.995)"
    for which, text in yields.items():
        loss = _loss(text)
        if loss is None:
            faults.append(Fault(COMMAND_LINE, f"--{which}-yield", text, allowed))
        else:
            losses[which] = loss
    if nines is not None and not 0.0 < nines <= 300.0:
        faults.append(Fault(COMMAND_LINE, "--nines", f"{nines:g}", "give a number above 0, as 3 for a yield of 0.999"))
    if ppm is not None and not 0.0 < ppm < 1e6:
        faults.append(Fault(COMMAND_LINE, "--ppm", f"{ppm:g}", "give defective units per million, above 0, below 1e6"))
    if nines is not None and ppm is not None:
        faults.append(Fault(COMMAND_LINE, "--nines", "--ppm beside it", "both set the same yield; give one of the two"))
    if faults:
        raise InputError(faults)
    if nines is not None or ppm is not None:
        losses[None] = 10.0**-nines if nines is not None else (ppm or 0.0) / 1e6
    return losses


def _loss(text: str) -> float | None:
    """1 - yield, from the digits as typed: a float of 0.99999999999999999 would already be 1."""
    try:
        loss = float(1 - Decimal(text))
    except (InvalidOperation, ValueError):
        return None
    return loss if 0.0 < loss < 1.0 else None


def _split_of(scenario: Scenario, losses: dict[Which | None, float]) -> Which:
    """The first yield that is set, in the file or on the command line."""
    is_set = (which for which in Which if which in losses or which.yield_name in scenario.target.losses)
    return next(is_set, Which.final)


def _named(losses: dict[Which | None, float], split: Which) -> dict[str, float] | None:
    if None in losses and split in losses:
        given = f"--nines or --ppm, and --{split}-yield"
        raise _refused(f"--{split}-yield", given, "both set the same yield; give one of the two")
    return {(which or split).yield_name: loss for which, loss in losses.items()} or None


def _refuse_unfit_money(spend: float | None, capital: float | None) -> None:
    if spend is not None and capital is not None:
        raise _refused("--spend", "--capital beside it", "ask for one of the two")
    for option, amount in (("--spend", spend), ("--capital", capital)):
        if amount is not None and not 0.0 <= amount < float("inf"):
            raise _refused(option, f"{amount:g}", "give an amount of money, 0 or more")


def main() -> None:
    # The matrices are small: threads that wait for each other cost more than they save, above all on a busy machine.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    app(prog_name="allocator")
