"""What every command shares: the program, its boundary to errors, its common options and how an answer is shown.

Imports inside the functions below are there for one reason: `--help` must answer at once and so must not load the
numerical libraries behind `allocator.api` and the renderers.
"""

from __future__ import annotations

import gc
import io
import os
import shutil
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, NoReturn

import typer
from typer.core import TyperGroup

from allocator.errors import AllocatorError, Fault, InputError, RangeError

if TYPE_CHECKING:
    from allocator.scenario.model import Scenario

OUT_OF_REACH = 1
FAILED = 1
WRONG_INPUT = 2
COMMAND_LINE = "command line"
UsageError: Any = typer.BadParameter.__mro__[1]
"""The library exports only its kind for bad values; every misuse of a command is of this, the kind above it."""
HELP_ASKED = "NoArgsIsHelpError"
"""The kind raised where there is no argument at all, which is answered with the help."""
PIPE_CLOSED = 141  # What a shell reports for a program that a closed pipe ended (128 + SIGPIPE).


ORDER = (
    "new", "check", "today", "plan", "nines", "weigh", "case", "review", "compare", "suppliers", "measure", "rehearse",
    "report",
)  # fmt: skip
"""The commands in the order of the work, as `--help` lists them."""


class Boundary(TyperGroup):
    """The one place where an error turns into lines on stderr and an exit code."""

    typed: tuple[str, ...] = ()
    """The arguments of this call."""

    def list_commands(self, ctx: Any) -> list[str]:
        return sorted(super().list_commands(ctx), key=ORDER.index)

    def make_context(self, info_name: Any, args: list[str], parent: Any = None, **extra: Any) -> Any:
        self.typed = tuple(args)
        try:
            return super().make_context(info_name, args, parent, **extra)
        except UsageError as error:
            self._refused(error)

    def _refused(self, error: Exception) -> NoReturn:
        if type(error).__name__ == HELP_ASKED:
            raise error
        from allocator.cli.misuse import misuse

        commands = {name: self.commands[name] for name in self.list_commands(None)}
        raise _said([str(misuse(error, self.typed, commands))], WRONG_INPUT) from None

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
        except UsageError as error:
            self._refused(error)


def _said(lines: list[str], code: int) -> typer.Exit:
    from allocator.report.words import clean

    for line in lines:
        typer.echo(f"allocator: {clean(line)}", err=True)
    return typer.Exit(code)


app = typer.Typer(
    cls=Boundary, rich_markup_mode=None, pretty_exceptions_enable=False, add_completion=False, no_args_is_help=True
)


File = Annotated[
    Path, typer.Argument(metavar="FILE", help="Scenario file (TOML, or a workbook .xlsx).", show_default=False)
]
AsJson = Annotated[bool, typer.Option("--json", help="Print the answer as JSON, at full precision.")]
Figures = Annotated[
    Path | None,
    typer.Option("--figures", metavar="DIR", help="Draw its figures into a folder as well, as SVG and PNG."),
]
AsCsv = Annotated[bool, typer.Option("--csv", help="Print the table as CSV, at full precision.")]


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


def load(file: Path) -> Scenario:
    from allocator.scenario.read import read_scenario

    scenario = read_scenario(file)
    gc.disable()  # A command ends soon; what a long line makes until then is not worth searching for cycles.
    return scenario


def form_of(as_json: bool, as_csv: bool) -> Any:
    if as_json and as_csv:
        raise refused("--json", "--csv beside it", "ask for one of the two")
    return "json" if as_json else "csv" if as_csv else "text"


def refuse_unfit_outputs(figures: Path | None = None, xlsx: Path | None = None) -> None:
    """Find before any work is done what could not be written after it."""
    from allocator.files import refuse_unfit_file, refuse_unfit_folder

    if figures is not None:
        refuse_unfit_folder(figures)
    if xlsx is not None:
        if xlsx.suffix.lower() != ".xlsx":
            raise refused("--xlsx", str(xlsx), "name a workbook, as plan.xlsx")
        refuse_unfit_file(xlsx)


def show(answer: object, form: Any) -> None:
    from allocator.report.paper import LOG_WIDTH
    from allocator.report.render import render

    width = shutil.get_terminal_size().columns if sys.stdout.isatty() else LOG_WIDTH
    sys.stdout.write(render(answer, form, width))


def draw(answer: object, folder: Path | None) -> None:
    """Write the figures of an answer, if they are asked for."""
    if folder is None:
        return
    from allocator.figures import save_figures

    for path in save_figures(answer, folder):
        typer.echo(f"Wrote {path}", err=True)


def refused(option: str, found: str, allowed: str) -> InputError:
    return InputError([Fault(COMMAND_LINE, option, found, allowed)])


def main() -> None:
    # The matrices are small: threads that wait for each other cost more than they save, above all on a busy machine.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    app(prog_name="allocator")
